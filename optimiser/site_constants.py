"""Own constants of a site: reading them, and the system with them in place of the catalog's.

Owns the keys ``constants``, ``solids_on`` and ``solids_off`` of a site file; what the catalog holds
is `catalogs.constants`.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace

from catalogs.constants import COMPONENTS, load_system, solid_table, species_table
from catalogs.entries import Entry, Range
from catalogs.problems import Spot, did_you_mean, echo
from chemistry.errors import FormulaError
from chemistry.formula import check_balance, read_reaction
from chemistry.system import Solid, Species, System
from optimiser.site import OwnConstant, SolidSwitch

SPECIES, SOLID = "species", "solid"
_LOG10_K = Range(low=-300.0, high=300.0)
_ENTHALPY = Range(low=-5000.0, high=5000.0)
_EXAMPLE = "a formation reaction such as Cu+2 + 2 H2O = Cu(OH)2(s) + 2 H+"


@dataclass(frozen=True, slots=True, kw_only=True)
class OwnBlock:
    """What a site says about constants and solids."""

    constants: tuple[OwnConstant, ...] = ()
    switches: tuple[SolidSwitch, ...] = ()

    def applied_to(self, system: System) -> System:
        """Return the system with the own constants and switches, as far as they concern it."""
        if not self.constants and not self.switches:
            return system
        species = {s.name: s for s in system.species}
        solids = {s.name: s for s in system.solids}
        solids |= {s.name: s for s in _switched_on(system, self.switches)}
        for own in self.constants:
            if not _concerns(own.reaction, own.name, system):
                continue
            if own.kind == SPECIES:
                species[own.name] = _own_species(own, species.get(own.name))
            else:
                solids[own.name] = _own_solid(own, solids.get(own.name))
        gone = {switch.solid for switch in self.switches if not switch.on}
        return System(
            system.components, species.values(), [s for s in solids.values() if s.name not in gone],
            temperature_degc=system.temperature_degc, activity=system.activity,
            interactions=system.interactions,
        )  # fmt: skip

    def notes(self, system: System) -> tuple[str, ...]:
        """Say what stands in place of the catalog in a site's system."""
        texts = [_constant_note(own, system) for own in self.constants]
        return (*texts, *(_switch_note(switch, system) for switch in self.switches))


def read_own(entry: Entry) -> OwnBlock:
    """Read the keys of a site file that change constants and candidate solids.

    Parameters
    ----------
    entry
        Top of the site file; its log takes the problems.
    """
    before = len(entry.spot.log.problems)
    reader = _Reader()
    for block in entry.blocks("constants"):
        reader.constant(block)
    for key, on in (("solids_on", True), ("solids_off", False)):
        for block in entry.blocks(key):
            reader.switch(block, on=on)
    if len(entry.spot.log.problems) > before:
        return OwnBlock()  # no system can be built with what was refused
    return OwnBlock(constants=tuple(reader.constants), switches=tuple(reader.switches))


@dataclass(slots=True)
class _Reader:
    """Entries read so far, so that repeated ones are seen."""

    constants: list[OwnConstant] = field(default_factory=list)
    switches: list[SolidSwitch] = field(default_factory=list)
    lines: dict[str, int] = field(default_factory=dict)

    def constant(self, entry: Entry) -> None:
        """Read one own constant."""
        own = OwnConstant(
            name=entry.text("name"),
            kind=entry.choice("kind", (SPECIES, SOLID), "kinds of constant"),
            reaction=entry.text("reaction"),
            log10_k=entry.number("log10_k", _LOG10_K),
            enthalpy_kj_per_mol=entry.number_or("enthalpy_kj_per_mol", None, _ENTHALPY),
            mineral=entry.text_or("mineral"),
            scale_former=entry.flag_or("scale_former", default=False)
            if entry.has("scale_former")
            else None,
            source=entry.text("source"),
            replace=entry.flag_or("replace", default=False),
        )
        entry.finish()
        self._once(own.name, entry.at("name"))
        if own.kind and own.name:
            _check_name(own, entry)
        if own.name and own.reaction:
            _check_reaction(own.name, own.reaction, entry.at("reaction"))
        self.constants.append(own)

    def switch(self, entry: Entry, *, on: bool) -> None:
        """Read one solid to switch on or off."""
        table = solid_table()
        own = {c.name for c in self.constants if c.kind == SOLID}
        solid = entry.choice("solid", table, "solids of the catalog")
        switch = SolidSwitch(solid=solid, on=on, reason=entry.text("reason"))
        entry.finish()
        if not solid:
            return
        spot = entry.at("solid")
        self._once(solid, spot, own)
        if solid not in own and table[solid].by_default == on:
            spot.problem(
                f"{solid}, which is {'on' if on else 'off'} already",
                f"a solid that is {'off' if on else 'on'}",
                "Delete the entry." if on else f"Delete the entry: {table[solid].reason}.",
            )
        self.switches.append(switch)

    def _once(self, name: str, spot: Spot, own: Sequence[str] | set[str] = ()) -> None:
        if not name:
            return
        if name in self.lines:
            remedy = f"It already stands in line {self.lines[name]}: keep one of them."
            if name in own:
                remedy += " A solid with an own constant is on."
            spot.problem(f"{echo(name)} twice", "each name once", remedy)
        self.lines.setdefault(name, spot.line)


def _check_name(own: OwnConstant, entry: Entry) -> None:
    """The name fits its kind, and is new or meant to replace what the catalog has."""
    spot = entry.at("name")
    is_solid = own.name.endswith(")") and "(s" in own.name
    if is_solid != (own.kind == SOLID):
        spot.problem(
            f"{own.kind} {echo(own.name)}",
            "a solid named with (s) and a species without",
            f"Write {own.name}(s)." if own.kind == SOLID else "Set `kind: solid`, or drop the (s).",
        )
        return
    table = solid_table() if own.kind == SOLID else species_table()
    if own.name in COMPONENTS:
        spot.problem(
            f"the component {own.name}", "something formed from components",
            "Components have no constant; give that of what they form.",
        )  # fmt: skip
    elif own.name in table and not own.replace:
        known = table[own.name]
        spot.problem(
            f"{echo(own.name)}, which the catalog has (log10 K {known.log10_k:g}, {known.source})",
            "a new name, or `replace: true`",
            "Set `replace: true` to override it.",
        )
    elif own.name not in table and own.replace:
        what = "solids" if own.kind == SOLID else "species"
        spot.problem(
            f"{echo(own.name)}, which the catalog does not have",
            "a name to replace",
            f"Drop `replace`, or correct the name. {_near(own.name, table, what)}",
        )
    if own.scale_former is not None and own.kind == SPECIES:
        entry.at("scale_former").problem(
            "scale_former on a dissolved species", "it on solids alone", "Delete it."
        )


def _check_reaction(name: str, reaction: str, spot: Spot) -> None:
    """The reaction forms one mole of the name from components, and balances."""
    try:
        signed = read_reaction(reaction)
        uneven = check_balance(reaction)
    except FormulaError as error:
        spot.problem(echo(reaction), _EXAMPLE, f"Correct it: {error}.")
        return
    if signed.get(name) != 1.0:
        spot.problem(
            f"{echo(reaction)}, which does not form 1 mol of {name}",
            _EXAMPLE,
            f"Write the reaction that has {name} once on the right.",
        )
        return
    unknown = [part for part in signed if part not in (name, "H2O", *COMPONENTS)]
    for part in unknown:
        spot.problem(f"{echo(part)}, which is no component", _EXAMPLE, _component_remedy(part))
    if uneven and not unknown:
        spot.problem(
            f"a reaction that does not balance ({', '.join(uneven)})",
            "the same atoms and charge on both sides",
            "Correct the coefficients; H2O and H+ close oxygen and charge.",
        )


def _component_remedy(part: str) -> str:
    """How to write a reaction that names something else than components."""
    known = species_table().get(part)
    if known is not None:
        return f"Write it with components: {known.reaction} has log10 K {known.log10_k:g}."
    return _near(part, COMPONENTS, "components")


def _near(name: str, options: Sequence[str] | Mapping[str, object], what: str) -> str:
    hint = did_you_mean(name, options, what=what)
    return hint.split(" The ")[0] if hint.startswith("Did") else hint


def _concerns(reaction: str, name: str, system: System) -> bool:
    return set(read_reaction(reaction)) <= {name, "H2O", *system.components}


def _own_species(own: OwnConstant, known: Species | None) -> Species:
    made = Species.from_reaction(
        own.reaction, own.log10_k, name=own.name, source=own.source,
        enthalpy_kj_per_mol=own.enthalpy_kj_per_mol,
    )  # fmt: skip
    if known is None or own.enthalpy_kj_per_mol is not None:
        return made
    return replace(made, enthalpy_kj_per_mol=known.enthalpy_kj_per_mol)


def _own_solid(own: OwnConstant, known: Solid | None) -> Solid:
    """The own solid; what it does not say of a catalogued one stays the catalog's."""
    row = solid_table().get(own.name)
    enthalpy, mineral, scale = own.enthalpy_kj_per_mol, own.mineral, own.scale_former
    if row is not None:
        enthalpy = row.enthalpy_kj_per_mol if enthalpy is None else enthalpy
        mineral = mineral or row.mineral
        scale = row.scale_former if scale is None else scale
    elif known is not None:
        scale = known.scale_former if scale is None else scale
    return Solid.from_reaction(
        own.reaction, own.log10_k, name=own.name, mineral=mineral, source=own.source,
        enthalpy_kj_per_mol=enthalpy, scale_former=bool(scale),
    )  # fmt: skip


def _switched_on(system: System, switches: Sequence[SolidSwitch]) -> list[Solid]:
    """Solids switched on that the water's components can form."""
    table = solid_table()
    wanted = [
        s.solid for s in switches if s.on and _concerns(table[s.solid].reaction, s.solid, system)
    ]
    if not wanted:
        return []
    made = load_system(system.temperature_degc, components=system.components, solids=wanted)
    return list(made.solids)


def _constant_note(own: OwnConstant, system: System) -> str:
    source = f"source: {own.source.rstrip('.')}"
    what = f"own constant of the {own.kind} {own.name}"
    if not _concerns(own.reaction, own.name, system):
        missing = sorted(set(read_reaction(own.reaction)) - {own.name, "H2O", *system.components})
        return f"{what}: takes no part, the water has no {', '.join(missing)}; {source}"
    table = solid_table() if own.kind == SOLID else species_table(system.activity)
    row = table.get(own.name)
    place = "added to the catalog" if row is None else f"in place of {row.log10_k:g}"
    enthalpy = (
        f", enthalpy {own.enthalpy_kj_per_mol:g} kJ/mol"
        if own.enthalpy_kj_per_mol is not None
        else ""
    )
    return f"{what}: log10 K {own.log10_k:g}{enthalpy}, {place}, for {own.reaction}; {source}"


def _switch_note(switch: SolidSwitch, system: System) -> str:
    row = solid_table()[switch.solid]
    mineral = f" ({row.mineral})" if row.mineral and row.mineral != switch.solid else ""
    text = f"solid switched {'on' if switch.on else 'off'}: {switch.solid}{mineral}"
    if not _concerns(row.reaction, switch.solid, system):
        text += ", which this water cannot form"
    return f"{text}; reason: {switch.reason.rstrip('.')}"

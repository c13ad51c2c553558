"""Systems: the components, dissolved species and candidate solids of an equilibrium problem.

Owns the frozen types and the arrays built from them; finds no equilibrium itself.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from chemistry.activity import ActivityModel, Interactions, build_activity
from chemistry.errors import SystemDefinitionError
from chemistry.formula import charge_of, molar_mass_g_per_mol, read_reaction

FloatArray = NDArray[np.float64]

GAS_CONSTANT_KJ_PER_MOL_K = 8.314462618e-3  # CODATA 2018
REFERENCE_TEMPERATURE_K = 298.15
LOWEST_TEMPERATURE_DEGC, HIGHEST_TEMPERATURE_DEGC = 0.0, 60.0
LN10 = float(np.log(10.0))


@dataclass(frozen=True, slots=True, kw_only=True)
class Species:
    """A dissolved species formed from the components.

    ``log10_k`` belongs to the formation reaction at 25 C and zero ionic strength;
    ``stoichiometry`` counts components per mole of species (H+ may be negative), without water,
    ``water`` the moles of water consumed.
    """

    name: str
    stoichiometry: Mapping[str, float]
    log10_k: float
    water: float = 0.0
    charge: int = 0
    enthalpy_kj_per_mol: float | None = None
    source: str = ""
    note: str = ""

    @classmethod
    def from_reaction(
        cls,
        reaction: str,
        log10_k: float,
        *,
        name: str | None = None,
        enthalpy_kj_per_mol: float | None = None,
        source: str = "",
        note: str = "",
    ) -> Species:
        """Build a species from its formation reaction, e.g. ``Ag+ + 2 Cl- = AgCl2-``.

        Raises
        ------
        FormulaError
            The reaction cannot be read.
        SystemDefinitionError
            No product can be told to be the species.
        """
        product, parts, water = _formation(reaction, name)
        return cls(
            name=product, stoichiometry=parts, log10_k=log10_k, water=water,
            charge=charge_of(product), enthalpy_kj_per_mol=enthalpy_kj_per_mol,
            source=source, note=note,
        )  # fmt: skip


@dataclass(frozen=True, slots=True, kw_only=True)
class Solid:
    """A candidate solid, ``log10_k`` for its formation from the components (minus log Ks).

    ``scale_former`` marks gypsum and calcite, which form slowly enough that a limit must hold
    with and without them.
    """

    name: str
    stoichiometry: Mapping[str, float]
    log10_k: float
    water: float = 0.0
    mineral: str = ""
    molar_mass_g_per_mol: float = 0.0
    enthalpy_kj_per_mol: float | None = None
    scale_former: bool = False
    source: str = ""
    note: str = ""

    @classmethod
    def from_reaction(
        cls,
        reaction: str,
        log10_k: float,
        *,
        name: str | None = None,
        mineral: str = "",
        enthalpy_kj_per_mol: float | None = None,
        scale_former: bool = False,
        source: str = "",
        note: str = "",
    ) -> Solid:
        """Build a solid from its formation reaction, e.g. ``Ag+ + Cl- = AgCl(s)``.

        Raises
        ------
        FormulaError
            The reaction cannot be read.
        SystemDefinitionError
            No product can be told to be the solid.
        """
        product, parts, water = _formation(reaction, name)
        return cls(
            name=product, stoichiometry=parts, log10_k=log10_k, water=water, mineral=mineral,
            molar_mass_g_per_mol=molar_mass_g_per_mol(product.split("(s")[0] or product),
            enthalpy_kj_per_mol=enthalpy_kj_per_mol, scale_former=scale_former,
            source=source, note=note,
        )  # fmt: skip


def _formation(reaction: str, name: str | None) -> tuple[str, dict[str, float], float]:
    signed = read_reaction(reaction)
    if name is None:
        products = [n for n, c in signed.items() if c > 0 and n not in ("H+", "H2O")]
        if len(products) != 1:
            raise SystemDefinitionError(
                f"name the product of {reaction!r}: found {', '.join(products) or 'none'}"
            )
        name = products[0]
    if signed.get(name) != 1.0:
        raise SystemDefinitionError(f"{name!r} must appear once as a product of {reaction!r}")
    parts = {n: -c for n, c in signed.items() if n not in (name, "H2O")}
    return name, parts, -signed.get("H2O", 0.0)


@dataclass(frozen=True, eq=False)
class System:
    """Components, species and candidate solids with their constants at one temperature.

    Parameters
    ----------
    components
        Names with their charge (``Cu+2``); ``H+`` carries the signed proton total.
    species, solids
        Formation reactions; species with a component outside ``components`` are an error.
    temperature_degc
        Constants move by van 't Hoff with the enthalpies given, constant where none is. [C]
    activity
        ``davies``, ``sit``, ``ideal`` (or ``auto``, which is Davies).
    interactions
        Coefficients of specific ion interaction, for ``sit``.

    Raises
    ------
    SystemDefinitionError
        Unknown components, repeated names, or nothing to solve.
    """

    components: tuple[str, ...]
    species: tuple[Species, ...] = ()
    solids: tuple[Solid, ...] = ()
    temperature_degc: float = 25.0
    activity: str = "auto"
    interactions: Interactions | None = None

    def __init__(
        self,
        components: Iterable[str],
        species: Iterable[Species] = (),
        solids: Iterable[Solid] = (),
        *,
        temperature_degc: float = 25.0,
        activity: str = "auto",
        interactions: Interactions | None = None,
    ) -> None:
        put = object.__setattr__
        put(self, "components", tuple(components))
        put(self, "species", tuple(species))
        put(self, "solids", tuple(solids))
        put(self, "temperature_degc", float(temperature_degc))
        put(self, "activity", activity)
        put(self, "interactions", interactions)
        self._check()

    def _check(self) -> None:
        problems: list[str] = []
        if not self.components:
            problems.append("a system needs at least one component")
        names = [*self.components, *(s.name for s in self.species), *(s.name for s in self.solids)]
        repeated = sorted({n for n in names if names.count(n) > 1})
        if repeated:
            problems.append(f"repeated names: {', '.join(repeated)}")
        known = set(self.components)
        formed: tuple[Species | Solid, ...] = (*self.species, *self.solids)
        for item in formed:
            missing = sorted(set(item.stoichiometry) - known)
            if missing:
                problems.append(f"{item.name} needs components not given: {', '.join(missing)}")
        if not LOWEST_TEMPERATURE_DEGC <= self.temperature_degc <= HIGHEST_TEMPERATURE_DEGC:
            problems.append(
                f"temperature {self.temperature_degc} C is outside {LOWEST_TEMPERATURE_DEGC:g} to "
                f"{HIGHEST_TEMPERATURE_DEGC:g} C, where the constants hold"
            )
        if problems:
            raise SystemDefinitionError("; ".join(problems))

    @cached_property
    def index(self) -> dict[str, int]:
        """Position of each component."""
        return {name: i for i, name in enumerate(self.components)}

    @cached_property
    def species_names(self) -> tuple[str, ...]:
        """Components as free ions first, then the formed species."""
        return (*self.components, *(s.name for s in self.species))

    @cached_property
    def solid_names(self) -> tuple[str, ...]:
        """Names of the candidate solids."""
        return tuple(s.name for s in self.solids)

    @cached_property
    def formation(self) -> FloatArray:
        """Stoichiometry of species, shape (species, components); free components first."""
        rows = [np.eye(len(self.components))]
        if self.species:
            rows.append(np.array([self._row(s.stoichiometry) for s in self.species]))
        return np.vstack(rows)

    @cached_property
    def solid_formation(self) -> FloatArray:
        """Stoichiometry of solids, shape (solids, components)."""
        if not self.solids:
            return np.zeros((0, len(self.components)))
        return np.array([self._row(s.stoichiometry) for s in self.solids])

    @cached_property
    def ln_k(self) -> FloatArray:
        """Natural log of the formation constants at the system's temperature, (species,)."""
        formed = [self._ln_k(s) for s in self.species]
        return np.concatenate([np.zeros(len(self.components)), np.array(formed, dtype=float)])

    @cached_property
    def solid_ln_k(self) -> FloatArray:
        """Natural log of the solids' formation constants at temperature, (solids,)."""
        return np.array([self._ln_k(s) for s in self.solids], dtype=float)

    @cached_property
    def water(self) -> FloatArray:
        """Moles of water per mole of species, (species,)."""
        return np.array([0.0] * len(self.components) + [s.water for s in self.species])

    @cached_property
    def solid_water(self) -> FloatArray:
        """Moles of water per mole of solid, (solids,)."""
        return np.array([s.water for s in self.solids], dtype=float)

    @cached_property
    def charges(self) -> FloatArray:
        """Charge number of each species, (species,)."""
        free = [float(charge_of(c)) for c in self.components]
        return np.array(free + [float(s.charge) for s in self.species])

    @cached_property
    def component_charges(self) -> FloatArray:
        """Charge number of each component, (components,)."""
        return self.charges[: len(self.components)]

    @cached_property
    def solid_molar_masses_g_per_mol(self) -> FloatArray:
        """Molar mass of each solid, (solids,). [g/mol]"""
        return np.array([s.molar_mass_g_per_mol for s in self.solids], dtype=float)

    @cached_property
    def activity_model(self) -> ActivityModel:
        """The activity model for this system's species and temperature."""
        return build_activity(
            self.activity, self.charges, self.temperature_degc, names=self.species_names,
            water=self.water, interactions=self.interactions,
        )  # fmt: skip

    @cached_property
    def liquid(self) -> System:
        """The same system without candidate solids."""
        return self.narrowed(solids=())

    def _row(self, stoichiometry: Mapping[str, float]) -> FloatArray:
        row = np.zeros(len(self.components))
        for name, count in stoichiometry.items():
            row[self.index[name]] = count
        return row

    def _ln_k(self, item: Species | Solid) -> float:
        ln_k = LN10 * item.log10_k
        if item.enthalpy_kj_per_mol is not None:
            kelvin = self.temperature_degc + 273.15
            shift = 1.0 / kelvin - 1.0 / REFERENCE_TEMPERATURE_K
            ln_k -= item.enthalpy_kj_per_mol / GAS_CONSTANT_KJ_PER_MOL_K * shift
        return ln_k

    def narrowed(
        self, components: Iterable[str] | None = None, solids: Iterable[str] | None = None
    ) -> System:
        """Return the system with only these components (and what forms from them) and solids.

        Raises
        ------
        SystemDefinitionError
            A name is not in this system.
        """
        keep = list(self.components if components is None else components)
        unknown = [c for c in keep if c not in self.index]
        wanted = set(self.solid_names if solids is None else solids)
        unknown += sorted(wanted - set(self.solid_names))
        if unknown:
            raise SystemDefinitionError(f"not in the system: {', '.join(unknown)}")
        inside = set(keep)
        return System(
            [c for c in self.components if c in inside],
            [s for s in self.species if set(s.stoichiometry) <= inside],
            [s for s in self.solids if set(s.stoichiometry) <= inside and s.name in wanted],
            temperature_degc=self.temperature_degc,
            activity=self.activity,
            interactions=self.interactions,
        )

    def shifted_solids(self, shift_log10: Mapping[str, float]) -> System:
        """Return the system with some solids made more soluble by these log10 units.

        A solid held back to a supersaturation SI counts as more soluble by SI.
        """
        return self.moved_constants({name: -shift for name, shift in shift_log10.items()})

    def moved_constants(self, move_log10: Mapping[str, float]) -> System:
        """Return the system with formation constants raised by these log10 units.

        ``move_log10`` is keyed by the names of species and solids; the others stay.
        """
        species = tuple(
            replace(s, log10_k=s.log10_k + move_log10.get(s.name, 0.0)) for s in self.species
        )
        solids = tuple(
            replace(s, log10_k=s.log10_k + move_log10.get(s.name, 0.0)) for s in self.solids
        )
        return System(
            self.components, species, solids,
            temperature_degc=self.temperature_degc, activity=self.activity,
            interactions=self.interactions,
        )  # fmt: skip

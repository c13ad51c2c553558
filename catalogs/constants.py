"""Equilibrium constants: the shipped species and solids, and the systems built from them.

Owns the choice of solids that form by default and of the rows that go with an activity model; the
arrays and the equilibrium belong to `chemistry`, interaction coefficients to
`catalogs.interactions`.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from functools import lru_cache
from types import MappingProxyType

from catalogs.interactions import interactions
from catalogs.packaged import number_or_none, read_rows
from catalogs.problems import closest, did_you_mean
from chemistry.errors import SystemDefinitionError
from chemistry.system import Solid, Species, System

COMPONENTS: tuple[str, ...] = (
    "H+", "Na+", "K+", "Ca+2", "Mg+2", "Sr+2", "Ba+2", "NH4+",
    "Cl-", "SO4-2", "CO3-2", "HS-", "F-", "PO4-3", "CH3COO-",
    "Ag+", "Pb+2", "Cd+2", "Cu+2", "Zn+2", "Ni+2", "Co+2", "Mn+2",
    "Fe+2", "Fe+3", "Al+3", "Cr+3", "Hg+2",
    "(EDTA)-4", "(NTA)-3", "(Cit)-3", "(Tart)-2", "(Ox)-2", "(Gluc)-",
)  # fmt: skip
"""Every component of the catalog, in the order that systems keep."""

CHELATES: tuple[str, ...] = COMPONENTS[-6:]
"""Chelating ligands: a system holds them only where they are named."""

SPECIES_FILES = ("aqueous_species.csv", "chelate_species.csv")
SOLID_FILES = ("solids.csv", "chelate_solids.csv")

REFERENCE_TEMPERATURE_DEGC = 25.0


@dataclass(frozen=True, slots=True, kw_only=True)
class SpeciesInfo:
    """One row of the table of dissolved species.

    ``log10_k`` belongs to ``reaction`` (formation from the components) at 25 C and zero ionic
    strength, ``low`` and ``high`` are the range of published values; ``enthalpy_kj_per_mol`` is
    that of the same reaction, None where none is known. ``models`` tells the activity models that
    the row belongs to: ``davies``, ``sit`` or ``both``.
    """

    name: str
    reaction: str
    log10_k: float
    low: float
    high: float
    confidence: str
    enthalpy_kj_per_mol: float | None
    enthalpy_confidence: str
    enthalpy_source: str
    models: str
    source: str
    note: str


@dataclass(frozen=True, slots=True, kw_only=True)
class SolidInfo:
    """One row of the table of solids; the columns shared with species mean the same.

    ``forms`` is fresh (minutes to about an hour), slow (hours, or special conditions), aged (what
    a fresh solid turns into) or never (not at ambient temperature within hours). ``by_default``
    tells whether a system holds it without being asked, ``reason`` why.
    """

    name: str
    mineral: str
    reaction: str
    log10_k: float
    low: float
    high: float
    confidence: str
    enthalpy_kj_per_mol: float | None
    enthalpy_confidence: str
    enthalpy_source: str
    forms: str
    by_default: bool
    scale_former: bool
    kinetics: str
    reason: str
    source: str
    note: str


@lru_cache(maxsize=1)
def species_rows() -> tuple[SpeciesInfo, ...]:
    """Every row of the tables of dissolved species; a name has one row or one per model."""
    return tuple(
        SpeciesInfo(
            name=row["name"],
            reaction=row["reaction"],
            log10_k=float(row["log10_k"]),
            low=float(row["low"]),
            high=float(row["high"]),
            confidence=row["confidence"],
            enthalpy_kj_per_mol=number_or_none(row["enthalpy_kj_per_mol"]),
            enthalpy_confidence=row["enthalpy_confidence"],
            enthalpy_source=row["enthalpy_source"],
            models=row["models"],
            source=row["source"],
            note=row["note"],
        )
        for file in SPECIES_FILES
        for row in read_rows(file)
    )


@lru_cache(maxsize=8)
def species_table(activity: str = "davies") -> Mapping[str, SpeciesInfo]:
    """Dissolved species that go with an activity model by name, in the order of the files.

    Specific ion interaction leaves out ion pairs that its coefficients already contain and takes
    some constants that were reduced with it; every other model takes the rows of Davies.
    """
    kept = ("both", "sit" if activity == "sit" else "davies")
    return MappingProxyType({row.name: row for row in species_rows() if row.models in kept})


@lru_cache(maxsize=1)
def solid_table() -> Mapping[str, SolidInfo]:
    """Every solid of the catalog by name, those that are off by default too."""
    rows = (
        SolidInfo(
            name=row["name"],
            mineral=row["mineral"],
            reaction=row["reaction"],
            log10_k=float(row["log10_k"]),
            low=float(row["low"]),
            high=float(row["high"]),
            confidence=row["confidence"],
            enthalpy_kj_per_mol=number_or_none(row["enthalpy_kj_per_mol"]),
            enthalpy_confidence=row["enthalpy_confidence"],
            enthalpy_source=row["enthalpy_source"],
            forms=row["forms"],
            by_default=row["by_default"] == "on",
            scale_former=row["scale_former"] == "yes",
            kinetics=row["kinetics"],
            reason=row["reason"],
            source=row["source"],
            note=row["note"],
        )
        for file in SOLID_FILES
        for row in read_rows(file)
    )
    return MappingProxyType({row.name: row for row in rows})


def species_info(name: str, activity: str = "davies") -> SpeciesInfo:
    """Constant, range and source of a dissolved species with an activity model.

    Raises
    ------
    SystemDefinitionError
        The catalog has no such species.

    Examples
    --------
    >>> species_info("AgCl2-").log10_k
    5.25
    """
    table = species_table(activity)
    _require_known([name], table, "species")
    return table[name]


def solid_info(name: str) -> SolidInfo:
    """Constant, range, kinetics and source of a solid.

    Raises
    ------
    SystemDefinitionError
        The catalog has no such solid.

    Examples
    --------
    >>> solid_info("CuO(s)").forms
    'aged'
    """
    _require_known([name], solid_table(), "solids")
    return solid_table()[name]


def load_system(
    temperature_degc: float = 25.0,
    components: Iterable[str] | None = None,
    solids: Iterable[str] | None = None,
    activity: str = "auto",
) -> System:
    """Build the system of the shipped constants.

    Parameters
    ----------
    temperature_degc
        Temperature of the constants, 0 to 60. Where no enthalpy is known the 25 C value is kept:
        see `enthalpy_unknown`. [C]
    components
        Names to narrow the system to (``Cu+2``); ``H+`` is always kept, the order is the
        catalog's. None keeps all but the chelating ligands (`CHELATES`).
    solids
        Candidate solids by name, slow and aged ones too. None takes those that are on by default,
        as far as their components are kept.
    activity
        Activity model: ``auto`` (Davies), ``davies``, ``sit`` or ``ideal``. With ``sit`` the system
        carries the catalog's interaction coefficients and the species that go with them, see
        `species_table`; `chemistry.activity.choose_activity` tells which of the two suits a water.

    Raises
    ------
    SystemDefinitionError
        Unknown component, solid or activity model, a named solid with a component that was left
        out, or a temperature out of range.

    Examples
    --------
    >>> system = load_system(components=["Ag+", "Cl-"])
    >>> system.solid_names
    ('Ag2O(s)', 'AgCl(s)')
    """
    kept = _kept_components(components)
    if solids is None:
        chosen = [s for s in _solids().values() if s.name in _defaults() and _fits(s, kept)]
    else:
        chosen = _named_solids(solids, kept)
    return System(
        [name for name in COMPONENTS if name in kept],
        [s for s in _species(activity).values() if _fits(s, kept)],
        chosen,
        temperature_degc=temperature_degc,
        activity=activity,
        interactions=interactions() if activity == "sit" else None,
    )


def enthalpy_unknown(system: System) -> tuple[str, ...]:
    """Species and solids of a system whose constant was kept at its 25 C value.

    Empty at 25 C, where nothing has to be moved.
    """
    if system.temperature_degc == REFERENCE_TEMPERATURE_DEGC:
        return ()
    items: tuple[Species | Solid, ...] = (*system.species, *system.solids)
    return tuple(item.name for item in items if item.enthalpy_kj_per_mol is None)


@lru_cache(maxsize=8)
def _species(activity: str) -> Mapping[str, Species]:
    return MappingProxyType(
        {
            row.name: Species.from_reaction(
                row.reaction,
                row.log10_k,
                name=row.name,
                enthalpy_kj_per_mol=row.enthalpy_kj_per_mol,
                source=row.source,
                note=row.note,
            )
            for row in species_table(activity).values()
        }
    )


@lru_cache(maxsize=1)
def _solids() -> Mapping[str, Solid]:
    return MappingProxyType(
        {
            row.name: Solid.from_reaction(
                row.reaction,
                row.log10_k,
                name=row.name,
                mineral=row.mineral,
                enthalpy_kj_per_mol=row.enthalpy_kj_per_mol,
                scale_former=row.scale_former,
                source=row.source,
                note=row.note,
            )
            for row in solid_table().values()
        }
    )


@lru_cache(maxsize=1)
def _defaults() -> frozenset[str]:
    return frozenset(row.name for row in solid_table().values() if row.by_default)


def _kept_components(components: Iterable[str] | None) -> frozenset[str]:
    if components is None:
        return frozenset(COMPONENTS) - frozenset(CHELATES)
    wanted = _as_names(components)
    _require_known(wanted, COMPONENTS, "components")
    return frozenset({"H+", *wanted})


def _named_solids(solids: Iterable[str], kept: frozenset[str]) -> list[Solid]:
    wanted = _as_names(solids)
    _require_known(wanted, _solids(), "solids")
    chosen = [solid for solid in _solids().values() if solid.name in set(wanted)]
    for solid in chosen:
        missing = [c for c in solid.stoichiometry if c not in kept]
        if missing:
            raise SystemDefinitionError(
                f"{solid.name} needs {', '.join(missing)}, which the components leave out: "
                "add it to the components or drop the solid"
            )
    return chosen


def _as_names(names: Iterable[str]) -> list[str]:
    """Take one name for a list of one: a string would fall apart into its letters."""
    return [names] if isinstance(names, str) else list(names)


def _fits(item: Species | Solid, kept: frozenset[str]) -> bool:
    return kept.issuperset(item.stoichiometry)


def _require_known(names: Iterable[str], known: Iterable[str], what: str) -> None:
    options = list(known)
    problems = [
        f"{name!r} is not among the catalog's {what}. {_suggestion(name, options, what)}"
        for name in names
        if name not in options
    ]
    if problems:
        raise SystemDefinitionError(" ".join(problems))


def _suggestion(name: str, options: list[str], what: str) -> str:
    near = closest(name, options)
    if near is not None and len(options) > len(COMPONENTS):
        return f"Did you mean `{near}`?"
    return did_you_mean(name, options, what=what)

"""Interaction coefficients of the salty-water model: the shipped table and which pairs lack a row.

Owns the table and what it says of its own origin; the equation, and the rule that stands in for
pairs without a row, belong to `chemistry.activity`.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from functools import lru_cache
from itertools import combinations
from types import MappingProxyType
from typing import TYPE_CHECKING

from catalogs.packaged import read_rows
from chemistry.activity import Interactions, interaction_by_rule

if TYPE_CHECKING:
    from chemistry.system import System

TABLE = "interactions.csv"


@dataclass(frozen=True, slots=True, kw_only=True)
class InteractionInfo:
    """One pair of species and its coefficient in ``log10 g_i = -z^2 D + sum eps(i,k) m_k``.

    ``status`` is ``published`` (a value for this very pair), ``estimated`` (a fit, a stand-in or an
    analogy) or ``rule`` (no row in the table: `chemistry.activity.interaction_by_rule`).
    """

    one: str
    other: str
    coefficient_kg_per_mol: float
    status: str
    confidence: str
    source: str
    note: str


@dataclass(frozen=True, slots=True, kw_only=True)
class InteractionParameter:
    """A constant of the equation, or a line of the rule; ``value`` as written in the table."""

    parameter: str
    value: str
    unit: str
    status: str
    confidence: str
    source: str
    note: str


@lru_cache(maxsize=1)
def interaction_table() -> Mapping[tuple[str, str], InteractionInfo]:
    """Every pair of the table by its two names in the order of the file.

    Examples
    --------
    >>> interaction_table()["Na+", "Cl-"].coefficient_kg_per_mol
    0.03
    """
    rows = (
        InteractionInfo(
            one=row["one"], other=row["other"], coefficient_kg_per_mol=float(row["value"]),
            status=row["status"], confidence=row["confidence"], source=row["source"],
            note=row["note"],
        )
        for row in read_rows(TABLE)
        if row["kind"] == "pair"
    )  # fmt: skip
    return MappingProxyType({(row.one, row.other): row for row in rows})


@lru_cache(maxsize=1)
def interaction_parameters() -> Mapping[str, InteractionParameter]:
    """Constants of the equation and lines of the rule by name, with their sources."""
    rows = (
        InteractionParameter(
            parameter=row["one"], value=row["value"], unit=row["unit"], status=row["status"],
            confidence=row["confidence"], source=row["source"], note=row["note"],
        )
        for row in read_rows(TABLE)
        if row["kind"] != "pair"
    )  # fmt: skip
    return MappingProxyType({row.parameter: row for row in rows})


@lru_cache(maxsize=1)
def interactions() -> Interactions:
    """The table as the activity model takes it."""
    return Interactions(
        MappingProxyType(
            {pair: row.coefficient_kg_per_mol for pair, row in interaction_table().items()}
        )
    )


def missing_pairs(
    system: System, species: Iterable[str] | None = None
) -> tuple[InteractionInfo, ...]:
    """Pairs of opposite charge whose coefficient follows the rule, with the value it gives.

    Parameters
    ----------
    system
        A system with interaction coefficients.
    species
        Names of the ions that matter, as a rule those above some concentration. None takes the
        free ions of the components, hydroxide among them.

    Returns
    -------
    tuple of InteractionInfo
        Empty for a system without coefficients: its model has none.

    Examples
    --------
    >>> from catalogs import load_system
    >>> salty = load_system(components=["Na+", "Cu+2", "Cl-", "CO3-2"], activity="sit")
    >>> [(pair.one, pair.other) for pair in missing_pairs(salty)]
    [('H+', 'CO3-2'), ('Cu+2', 'CO3-2'), ('Cu+2', 'OH-')]
    """
    known = system.interactions
    if known is None:
        return ()
    charges = dict(zip(system.species_names, system.charges, strict=True))
    names = [*system.components, "OH-"] if species is None else list(species)
    kept = [name for name in dict.fromkeys(names) if name in charges]
    return tuple(
        InteractionInfo(
            one=one, other=other, status="rule", confidence="estimated", note="",
            coefficient_kg_per_mol=float(
                interaction_by_rule(one, other, charges[one], charges[other])
            ),
            source=interaction_parameters()["cation_with_anion_of_charge_1"].source,
        )
        for a, b in combinations(kept, 2)
        for one, other in [(a, b) if charges[a] > charges[b] else (b, a)]
        if charges[one] * charges[other] < 0.0 and not known.has(one, other)
    )  # fmt: skip

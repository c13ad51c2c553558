"""How far published constants lie apart, as spreads that move the rows of one review together.

Owns the grouping: a solid and the complexes that were derived from its solubility share a shift,
because with one of them the others would have been found elsewhere too.
"""

from __future__ import annotations

import re
from dataclasses import dataclass

from catalogs.constants import SolidInfo, SpeciesInfo, solid_table, species_table
from chemistry.analysis import ANALYTES, METALS
from chemistry.system import Solid, Species, System

# A published range is read as the middle 90 % of a normal distribution: common practice, no source.
STANDARD_DEVIATIONS_TO_90_PERCENT = 1.645
# No constant of a metal is known better than this, whatever the range printed. [log10 units]
# Common practice, no source: compilations round to 0.05 to 0.1.
LEAST_HALF_RANGE = 0.05

_REVIEW = re.compile(
    r"[A-Z][\w'-]+(?:(?:, | & | and )[A-Z][\w'-]+)*(?: et al\.?)?,? (?:1[89]|20)\d\d"
)
_METAL_COMPONENTS = {ANALYTES[m].component for m in METALS if ANALYTES[m].is_modelled}


@dataclass(frozen=True, slots=True, kw_only=True)
class ConstantSpread:
    """Spread of one formation constant.

    ``group`` names the metal (or ligand) and the review; all rows of a group move with one standard
    normal number: upwards by ``up_log10`` of it, downwards by ``down_log10`` of it.
    """

    name: str
    group: str
    up_log10: float
    down_log10: float


def constant_spreads(system: System) -> tuple[ConstantSpread, ...]:
    """Spreads of the species and solids of a system that the catalog knows.

    Constants that are not the catalog's (a site's own) have no spread here, nor has the ion product
    of water, with which all hydrolysis constants were reduced.

    Examples
    --------
    >>> from catalogs import load_system
    >>> system = load_system(components=["Cu+2"])
    >>> {s.group for s in constant_spreads(system) if s.name == "CuOH+"}
    {'Cu+2, Powell et al. 2007'}
    """
    aqueous = species_table(system.activity_model.name)
    found = []
    rows: list[tuple[Species | Solid, SpeciesInfo | SolidInfo | None]] = [
        *((s, aqueous.get(s.name)) for s in system.species),
        *((s, solid_table().get(s.name)) for s in system.solids),
    ]
    for item, info in rows:
        if info is None or info.log10_k != item.log10_k or item.name == "OH-":
            continue
        group = f"{_carrier(item)}, {_review(info.source)}"
        least = LEAST_HALF_RANGE if set(item.stoichiometry) & _METAL_COMPONENTS else 0.0
        up = max(info.high - info.log10_k, least) / STANDARD_DEVIATIONS_TO_90_PERCENT
        down = max(info.log10_k - info.low, least) / STANDARD_DEVIATIONS_TO_90_PERCENT
        if up > 0.0 or down > 0.0:
            found.append(ConstantSpread(name=item.name, group=group, up_log10=up, down_log10=down))
    return tuple(found)


def _carrier(item: Species | Solid) -> str:
    """The metal that a row belongs to, else its first component beside the proton."""
    parts = [c for c in item.stoichiometry if c != "H+"]
    metals = [c for c in parts if c in _METAL_COMPONENTS]
    return (metals or parts or ["H+"])[0]


def _review(source: str) -> str:
    """The work that a source names first, as authors and year; else its text up to a comma."""
    hit = _REVIEW.search(source)
    return hit.group(0) if hit else re.split(r"[,;(]", source)[0].strip()

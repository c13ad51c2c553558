"""The choice of separator: clarifier, filter, more polymer, whichever makes the cheapest plan.

Owns the sites that differ in their separator alone, and the comparison of their plans.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Any

from optimiser.errors import NoPlan
from optimiser.evaluation import Evaluator
from optimiser.recipes import recipe_of
from optimiser.search import Findings
from optimiser.site import Separator, Site

Data = dict[str, Any]
Searched = tuple[Evaluator, Findings]


@dataclass(frozen=True, eq=False, kw_only=True)
class SeparatorChoice:
    """The best of several separators: its search, and what became of each."""

    evaluator: Evaluator
    findings: Findings
    rows: tuple[Data, ...]


def separator_sites(site: Site) -> tuple[Site, ...]:
    """The site with each separator that it may choose from, the one named first first.

    A site that names one separator gives itself.
    """
    options = site.treatment.separator_options
    return tuple(_with(site, option) for option in options) if options else (site,)


def _with(site: Site, separator: Separator) -> Site:
    polymer = separator.polymer_g_per_kg_solids
    treatment = replace(
        site.treatment,
        separator=separator,
        separator_options=(),
        polymer_g_per_kg_solids=(
            site.treatment.polymer_g_per_kg_solids if polymer is None else polymer
        ),
    )
    return replace(site, treatment=treatment)


def choose_separator(site: Site, search: Callable[[Site], Searched]) -> SeparatorChoice:
    """Search the site with each separator and keep the cheapest plan.

    Parameters
    ----------
    site
        A site with several separators to choose from.
    search
        Searches a site with one separator.

    Raises
    ------
    NoPlan
        No separator opens a plan; the reasons are those of the one that lets least pass.
    """
    best: Searched | None = None
    refused: tuple[float, NoPlan] | None = None
    rows: list[Data] = []
    for option in separator_sites(site):
        separator = option.treatment.separator
        try:
            found = search(option)
        except NoPlan as none:
            if refused is None or separator.tss_mg_per_l < refused[0]:
                refused = (separator.tss_mg_per_l, none)
            rows.append(_row(separator, None))
            continue
        rows.append(_row(separator, found))
        if best is None or _total(found) < _total(best):
            best = found
    if best is None:
        assert refused is not None, "without a plan every separator was refused"
        raise refused[1]
    return SeparatorChoice(evaluator=best[0], findings=best[1], rows=tuple(rows))


def _total(found: Searched) -> float:
    return found[1].feasible[0][1].total


def _row(separator: Separator, found: Searched | None) -> Data:
    row: Data = {
        "separator": separator.name, "cost_per_year": separator.cost_per_year,
        "tss_mg_per_l": separator.tss_mg_per_l, "total": None, "reagents": [], "ph_set_point": None,
    }  # fmt: skip
    if found is not None:
        evaluator, findings = found
        _, track = findings.feasible[0]
        row["total"] = track.total
        row["reagents"] = list(recipe_of(evaluator.plant, track.point, 0))
        if int(track.point.controller[0]) >= 0:
            row["ph_set_point"] = float(track.point.ph[0])
    return row

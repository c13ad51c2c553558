"""Doses and volumes typed on the command line, held against the site.

Owns the refusals of reagents that a site does not know; options are in `optimiser.cli_options`.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from optimiser.site import Site


def given_doses(pairs: Sequence[tuple[str, float]]) -> dict[str, float]:
    """Add up doses (or volumes) given on the command line."""
    doses: dict[str, float] = {}
    for key, value in pairs:
        doses[key] = doses.get(key, 0.0) + value
    return doses


def dose_problem(doses: Mapping[str, float], site: Site) -> str:
    """Say what is wrong with doses; empty where nothing is."""
    for key in doses:
        reagent, at, stage = key.partition("@")
        if reagent not in site.reagents:
            return f"--dose {key}: {unknown_reagent(reagent, site)}"
        if at and stage != "trim":
            return f"--dose {key}: unknown stage {stage!r}; a dose is REAGENT or REAGENT@trim"
    trims = [key for key in doses if "@" in key]
    return f"--dose {' '.join(trims)}: name one trim reagent" if len(trims) > 1 else ""


def unknown_reagent(reagent: str, site: Site) -> str:
    """Say why a reagent is none of the site's, with the nearest that is known."""
    from catalogs import load_reagents
    from catalogs.problems import closest

    known = load_reagents()
    if reagent in known:
        return (
            f"this site does not list {reagent}; add it under treatment.reagents or "
            "treatment.trim_reagents, with an offer in the price book"
        )
    near = closest(reagent, known)
    hint = f"did you mean `{near}`? " if near else ""
    return f"unknown reagent; {hint}This site lists {', '.join(site.reagents)}"

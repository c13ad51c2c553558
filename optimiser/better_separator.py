"""How little may slip past the separator for a plan to open where there is none.

Owns the search for the largest suspended solids at which some near recipe complies.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any

from optimiser.evaluation import Evaluator, Place
from optimiser.nearby import changed, point_data
from optimiser.points import Points
from optimiser.polish import Track, polish
from optimiser.recipes import set_point_bounds
from optimiser.relaxations import written_down
from optimiser.search import Findings
from optimiser.solver import SolverPort
from optimiser.wider_site import with_separator

Data = dict[str, Any]

LEAST_TSS_MG_PER_L = 0.05
PLACES = 4
HALVINGS = 9
STEPS = 8
PRACTICE = (
    "common practice, no source: sand or cloth filters leave 2 to 5 mg/L, membranes less than 1"
)


def better_separator(evaluator: Evaluator, findings: Findings, solver: SolverPort) -> Data | None:
    """Find the suspended solids at which a plan opens; None where the separator has none to spare.

    Notes
    -----
    Less carry-over never makes a limit harder to meet, so complying is monotone in the suspended
    solids of each point, and bisection in their logarithm closes in on the largest that some point
    complies with. Each trial polishes to the nearest miss from the best points before.
    """
    now = evaluator.plant.treatment.separator
    if now.tss_mg_per_l <= LEAST_TSS_MG_PER_L or not findings.best:
        return None
    low, high = LEAST_TSS_MG_PER_L, now.tss_mg_per_l
    places = _places(evaluator, findings, math.sqrt(low * high))
    tracks = _reached(evaluator, low, places, solver)
    best = tracks[0]
    row: Data = {
        "what": f"a separator that lets less pass than {now.tss_mg_per_l:g} mg/L of solids",
        "opens": best.feasible, "plan": None, "tss_mg_per_l": None, "how": "polished",
        "miss_percent": 0.0 if best.feasible else 100.0 * math.expm1(min(best.violation, 7.0)),
        "note": "" if best.feasible else f"not even at {LEAST_TSS_MG_PER_L:g} mg/L",
    }  # fmt: skip
    if not best.feasible:
        return row
    for _ in range(HALVINGS):
        middle = math.sqrt(low * high)
        tracks = _reached(evaluator, middle, places, solver)
        if tracks[0].feasible:
            low, best = middle, tracks[0]
            places = [track.place for track in tracks]
        else:
            high = middle
    place = best.place
    tss = written_down(low)
    wide = changed(evaluator, with_separator(evaluator.site, tss))
    cheapest = polish(
        wide, place.seen.points.take([place.point]), solver, bounds=set_point_bounds(wide),
        radius=0.2, near=[place],
    )[0]  # fmt: skip
    plan = point_data(wide, cheapest.place)
    row |= {
        "what": f"a separator that lets at most {tss:g} mg/L of solids pass, "
        f"not {now.tss_mg_per_l:g}",
        "tss_mg_per_l": tss, "opens": cheapest.feasible,
        "plan": {**plan, "total_without": plan["total"], "total": None},
        "note": f"its own cost is not known; {PRACTICE}",
    }  # fmt: skip
    return row


def _places(evaluator: Evaluator, findings: Findings, tss_mg_per_l: float) -> list[Place]:
    """The recipes that miss least with this much slipping past."""
    wide = changed(evaluator, with_separator(evaluator.site, tss_mg_per_l))
    tracks = list(findings.best.values())
    seen = wide.evaluate(
        Points.join([track.point for track in tracks]), near=[track.place for track in tracks]
    )
    order = seen.violation.argsort(kind="stable")[:PLACES]
    return [tracks[int(row)].place for row in order]


def _reached(
    evaluator: Evaluator, tss_mg_per_l: float, places: Sequence[Place], solver: SolverPort
) -> list[Track]:
    """The nearest misses or plans with this much slipping past, the best first."""
    wide = changed(evaluator, with_separator(evaluator.site, tss_mg_per_l))
    points = Points.join([place.seen.points.take([place.point]) for place in places])
    tracks = polish(
        wide, points, solver, bounds=set_point_bounds(wide), steps=STEPS, radius=0.2, rival=None,
        near=places,
    )  # fmt: skip
    return sorted(tracks, key=lambda track: track.violation)

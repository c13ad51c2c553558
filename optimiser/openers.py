"""What the site does not allow and would open a plan: a reagent, a longer recipe, a wider window.

Owns how each try is judged and in what order they are told. What opens is verified like any plan;
what did not open may still do so at points that were not tried.
"""

from __future__ import annotations

import math
import time
from typing import Any

import numpy as np

from optimiser.better_separator import better_separator
from optimiser.evaluation import Evaluator
from optimiser.nearby import point_data
from optimiser.opener_tries import REAGENT, Try, all_tries, narrowed
from optimiser.points import Points
from optimiser.polish import Track, polish
from optimiser.recipes import recipe_of, set_point_bounds
from optimiser.search import Findings
from optimiser.solver import SolverPort
from optimiser.wider_site import is_unpriced

Data = dict[str, Any]

SEPARATOR = "separator"
STARTS_PER_TRY = 3
ALWAYS_POLISHED, MOST_POLISHED = 2, 7
NEARER = 0.8  # of the nearest miss: what comes no nearer than this at nominal states is left
LARGEST_RATIO = 7.0
UNUSUAL = {"Ba": "Ba+2", "Fe": "Fe+3"}  # metals that a reagent may bring into the water
SCREENED, NO_TIME = "screened at nominal states only", "screened, then the time limit came"
NO_OFFER = "no offer in the price book: chemistry only, cost unknown"


def openers(evaluator: Evaluator, findings: Findings, solver: SolverPort) -> list[Data]:
    """Try what the site does not allow, most useful first.

    Returns
    -------
    list of dict
        ``kind`` and ``what``, ``opens``, the verified ``plan`` (its ``total`` None where a price is
        unknown, ``total_without`` what the rest costs), ``miss_percent`` of the nearest point where
        none opens, ``how`` it was tried, ``note``.

    Notes
    -----
    Every try is screened at nominal states; those that come markedly nearer than what the site
    allows are polished from their best `STARTS_PER_TRY` points, the least miss first: two at
    least, `MOST_POLISHED` at most, and none after the site's time limit.
    """
    deadline = time.perf_counter() + evaluator.site.solver.time_limit_s
    least = min((track.violation for track in findings.best.values()), default=np.inf)
    screened = [(*_screen(one), one) for one in all_tries(evaluator, findings)]
    screened.sort(key=lambda item: item[0])
    rows = []
    for number, (miss, starts, one) in enumerate(screened):
        worth = number < ALWAYS_POLISHED or miss <= NEARER * least
        worth &= number < MOST_POLISHED
        late = worth and time.perf_counter() > deadline
        if late or not worth:
            rows.append({**_row(one, None, miss), **({"how": NO_TIME} if late else {})})
            continue
        alone = narrowed(one, evaluator, starts)
        rows.append(_row(alone, _polished(alone, solver, least), miss))
    separator = better_separator(evaluator, findings, solver)
    if separator is not None:
        rows.append({"kind": SEPARATOR, **separator})
    return sorted(rows, key=_usefulness)


def _usefulness(row: Data) -> tuple[bool, bool, float]:
    """What opens first; there known costs first, the cheapest first; then the nearest miss."""
    plan = row["plan"]
    if plan is None:
        return True, True, float(row["miss_percent"])
    known = plan["total"] is not None
    return False, not known, float(plan["total"] if known else plan["total_without"])


def _screen(one: Try) -> tuple[float, Points]:
    """The least miss at nominal states, and the best points of different recipes and set points."""
    seen = one.evaluator.evaluate(one.points, full=False)
    order = np.argsort(seen.violation, kind="stable")
    picked: dict[tuple[tuple[str, ...], int], int] = {}
    for row in order:
        recipe = recipe_of(one.evaluator.plant, seen.points, int(row))
        picked.setdefault((recipe, round(float(seen.points.ph[row]))), int(row))
        if len(picked) == STARTS_PER_TRY:
            break
    return float(seen.violation[order[0]]), one.points.take(list(picked.values()))


def _polished(one: Try, solver: SolverPort, least: float) -> Track:
    """The cheapest point that complies, else the nearest miss."""
    bounds = set_point_bounds(one.evaluator)
    tracks = polish(one.evaluator, one.points, solver, bounds=bounds)
    nearest = min(tracks, key=lambda track: track.violation)
    if not nearest.feasible and nearest.violation < NEARER * least:
        tracks = polish(
            one.evaluator, nearest.point, solver, bounds=bounds, rival=None, near=[nearest.place]
        )
        if tracks[0].feasible:
            places = [track.place for track in tracks]
            tracks += polish(
                one.evaluator, tracks[0].point, solver, bounds=bounds, radius=0.2, near=places
            )
    return min(
        tracks,
        key=lambda track: (not track.feasible, track.total if track.feasible else track.violation),
    )


def _row(one: Try, track: Track | None, screened: float) -> Data:
    opens = track is not None and track.feasible
    ratio = screened if track is None else track.violation
    unpriced = bool(one.reagent) and is_unpriced(one.evaluator.site, one.reagent)
    plan = None
    if opens and track is not None:
        plan = {**point_data(one.evaluator, track.place), "total_without": None}
        if unpriced:
            goods = track.place.seen.priced.by_cause.get(one.reagent)
            spent = 0.0 if goods is None else float(goods[track.place.point])
            plan |= {"total": None, "total_without": plan["total"] - spent}
    return {
        "kind": one.kind, "what": one.what, "opens": opens, "plan": plan,
        "miss_percent": 0.0 if opens else 100.0 * math.expm1(np.clip(ratio, 0.0, LARGEST_RATIO)),
        "how": SCREENED if track is None else "polished",
        "note": "; ".join(_notes(one, unpriced=unpriced)),
    }  # fmt: skip


def _notes(one: Try, *, unpriced: bool) -> list[str]:
    """What is not known of a reagent, and what it brings that nobody limits."""
    texts = [NO_OFFER] if unpriced else []
    if one.kind == REAGENT:
        site = one.evaluator.site
        limited = {part for limit in site.limits for part in (limit.of or (limit.parameter,))}
        brought = site.reagents[one.reagent].components
        texts += [
            f"brings {element}, on which the site has no limit"
            for element, component in UNUSUAL.items()
            if component in brought and not any(part.startswith(element) for part in limited)
        ]
    return texts

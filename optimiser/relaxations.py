"""The least that a limit has to be loosened by before a plan opens, and the plan that it opens.

Owns which limits are loosened, alone and together, and the value that a permit could name; which
limits clash is for `optimiser.diagnosis`.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import Any

from optimiser.evaluation import FEASIBLE_RATIO, Evaluator, Place
from optimiser.marginal import with_limits
from optimiser.nearby import changed, point_data
from optimiser.points import Points
from optimiser.polish import polish
from optimiser.pressing import Press, press_down, worst_of_checks
from optimiser.quality_slopes import RULE
from optimiser.recipes import set_point_bounds
from optimiser.relaxation_starts import pool, sweep
from optimiser.search import Findings
from optimiser.solver import SolverPort

Data = dict[str, Any]

LOOSEST_ROUNDING = 0.02  # two digits where they loosen by less than this, otherwise three


def relaxations(
    evaluator: Evaluator, findings: Findings, solver: SolverPort, clashing: Sequence[int]
) -> list[Data]:
    """The least loosening of each clashing limit alone, and of all of them where one is not enough.

    A parameter limited over several periods is loosened in all of them that need it.

    Returns
    -------
    list of dict
        ``limits`` (each with ``limit``, ``least`` and the ``written`` value a permit could name),
        ``alone``, ``opens``, ``factor`` and the ``plan`` found under the written values.
    """
    checks = evaluator.judge.checks
    labels = list(dict.fromkeys(checks[n].label for n in clashing if checks[n].averaging != RULE))
    if not labels:
        return []
    swept = sweep(evaluator, findings)

    def loosen(numbers: Sequence[int], *, alone: bool) -> Data:
        starts = pool(evaluator, findings, swept, numbers)
        return _relaxation(evaluator, solver, starts, numbers, alone=alone)

    found = [loosen(_periods(evaluator, [label]), alone=True) for label in labels]
    if len(labels) > 1 and not all(row["opens"] for row in found):
        found.append(loosen(_periods(evaluator, labels), alone=False))
    if not any(row["opens"] for row in found):
        every = [n for n, check in enumerate(checks) if check.averaging != RULE]
        if len({checks[n].label for n in every}) > len(labels):
            found.append(loosen(every, alone=False))
    return found


def _periods(evaluator: Evaluator, labels: Sequence[str]) -> list[int]:
    """Checks of limits on some parameters, in every period."""
    return [
        n
        for n, check in enumerate(evaluator.judge.checks)
        if check.label in labels and check.averaging != RULE
    ]


def _relaxation(
    evaluator: Evaluator, solver: SolverPort, starts: Sequence[Place], checks: Sequence[int], *,
    alone: bool,
) -> Data:  # fmt: skip
    tracks = press_down(evaluator, starts, solver, checks)
    opening = [track for track in tracks if track.opens]
    names = list(dict.fromkeys(evaluator.judge.checks[n].label for n in checks))
    row: Data = {
        "parameters": names, "alone": alone, "opens": bool(opening), "factor": None, "limits": [],
        "plan": None,
    }  # fmt: skip
    if not opening:
        return row
    best = min(opening, key=lambda track: track.worst)
    ratios = worst_of_checks(best.place, checks)
    factors = {
        n: math.exp(ratio if alone else best.worst)
        for n, ratio in ratios.items()
        if ratio > FEASIBLE_RATIO
    }
    written = {n: written_up(evaluator.judge.checks[n].limit * f) for n, f in factors.items()}
    row["factor"] = max(factors.values(), default=1.0)
    row["limits"] = [_limit_data(evaluator, n, f, written[n]) for n, f in factors.items()]
    row["plan"] = _plan_under(evaluator, solver, opening, best, written)
    return row


def _limit_data(evaluator: Evaluator, number: int, factor: float, written: float) -> Data:
    check = evaluator.judge.checks[number]
    return {
        "parameter": check.label, "averaging": check.averaging, "unit": check.unit,
        "limit": check.limit, "least": check.limit * factor, "written": written,
    }  # fmt: skip


def _plan_under(
    evaluator: Evaluator, solver: SolverPort, opening: Sequence[Press], best: Press,
    written: Mapping[int, float],
) -> Data | None:  # fmt: skip
    """The cheapest plan near by under limits as they would be written."""
    checks = evaluator.judge.checks
    factors = {n: value / checks[n].limit for n, value in written.items()}
    loosened = changed(evaluator, with_limits(evaluator.site, factors))
    starts = [best.place, *(track.place for track in opening if track is not best)]
    tracks = polish(
        loosened, Points.join([p.seen.points.take([p.point]) for p in starts]), solver,
        bounds=set_point_bounds(loosened), radius=0.05, near=starts,
    )  # fmt: skip
    complying = [track for track in tracks if track.feasible]
    if not complying:
        return None
    return point_data(loosened, min(complying, key=lambda track: track.total).place)


def written_up(value: float) -> float:
    """A limit as a permit would write it: rounded up to two digits, or three.

    Examples
    --------
    >>> [written_up(x) for x in (0.3712, 0.8751, 1.0, 1234.5)]
    [0.372, 0.88, 1.0, 1240.0]
    """
    return _rounded(value, up=True)


def written_down(value: float) -> float:
    """A figure rounded down to two digits, or three where two would take off too much.

    Examples
    --------
    >>> [written_down(x) for x in (1.059, 3.459, 0.0871)]
    [1.05, 3.4, 0.087]
    """
    return _rounded(value, up=False)


def _rounded(value: float, *, up: bool) -> float:
    if value <= 0.0:
        return 0.0
    result = value
    for digits in (2, 3):
        step = 10.0 ** (math.floor(math.log10(value)) - digits + 1)
        steps = value / step
        whole = math.ceil(steps - 1e-9) if up else math.floor(steps + 1e-9)
        result = float(f"{whole * step:.12g}")
        if abs(result / value - 1.0) <= LOOSEST_ROUNDING:
            break
    return result

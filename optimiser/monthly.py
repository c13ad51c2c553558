"""Monthly averages over many samples: the mean of each calendar month's volume at one corner.

Owns the rules that monthly limits make where a feed is many samples. Each sample counts with its
worst end, the worst month and corner decide; with one water a monthly limit is a check of every
state instead (`optimiser.quality`).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from optimiser.quality import MONTHLIES, MONTHLY_LOAD
from optimiser.quality_slopes import SMALLEST_MG_PER_L

if TYPE_CHECKING:
    from optimiser.evaluation import Evaluation, Evaluator
    from optimiser.quality import Check

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
MonthlyRule = tuple[str, FloatArray, FloatArray]


@dataclass(frozen=True, eq=False)
class MonthlyMeans:
    """Means of one check: ``value`` (points, corners, months), ``shift`` (points, corners).

    ``row`` (points, corners) is the first sample's row of a corner, -1 where a point has fewer
    corners; ``block`` and ``at`` (points, corners, samples) say where each sample is worst.
    """

    value: FloatArray
    shift: FloatArray
    row: IntArray
    block: IntArray
    at: IntArray


def monthly_means(evaluator: Evaluator, seen: Evaluation, number: int) -> MonthlyMeans:
    """Means of every calendar month under one check, in the unit of its values."""
    rows, feeds = seen.rows, evaluator.plant.feeds
    order = np.arange(len(rows))
    corner = order - np.maximum.accumulate(np.where(rows.nominal, order, 0))
    shape = (len(seen.points), int(corner.max()) + 1, len(feeds))
    value, found = np.full(shape, -np.inf), np.full((2, *shape), -1, dtype=np.int64)
    for place, part in enumerate(seen.judged):
        mine = part.block.rows
        where = (rows.point[mine], corner[mine], rows.sample[mine])
        here = part.value[:, number]
        better = np.flatnonzero(here > value[where])
        some = tuple(axis[better] for axis in where)
        value[some], found[0][some], found[1][some] = here[better], place, better
    assert feeds.month_share is not None
    known = np.where(feeds.counted & np.isfinite(value), value, 0.0)
    first = int(np.flatnonzero(feeds.counted)[0])
    row = np.full(shape[:2], -1, dtype=np.int64)
    mine = np.flatnonzero(rows.sample == first)
    row[rows.point[mine], corner[mine]] = mine
    shift = np.where(row >= 0, rows.shift[row], np.nan)
    means = known @ feeds.month_share.T
    scale = [_scale(evaluator, number, month) for month in range(len(feeds.months))]
    means = means * np.array(scale)
    return MonthlyMeans(means, shift, row, found[0], found[1])


def monthly_label(check: Check) -> str:
    """What the rule of a monthly limit is called."""
    kind = "monthly mean load" if check.averaging == MONTHLY_LOAD else "monthly average"
    return f"{check.label}, {kind}"


def monthly_rules(evaluator: Evaluator, seen: Evaluation) -> list[MonthlyRule]:
    """Rules of monthly limits: label, ``ln(mean / target)`` (points,) and its slopes.

    Corners below, at and above the set point make a rule each, so that a step of a polish knows
    what lies on either side.
    """
    feeds = evaluator.plant.feeds
    if not feeds.many:
        return []
    rules: list[MonthlyRule] = []
    for number, check in enumerate(evaluator.judge.checks):
        if check.averaging not in MONTHLIES:
            continue
        means = monthly_means(evaluator, seen, number)
        hidden = feeds.hidden[number] if feeds.hidden else 0.0
        for side in (-1.0, 0.0, 1.0):
            ratio, slope = _worst(evaluator, seen, means, number, side)
            rules.append((monthly_label(check), ratio + hidden, slope))
    return rules


def _worst(
    evaluator: Evaluator, seen: Evaluation, means: MonthlyMeans, number: int, side: float
) -> tuple[FloatArray, FloatArray]:
    """Worst month among a point's corners on one side of the set point, and its slope."""
    target = evaluator.judge.checks[number].target
    share = evaluator.plant.feeds.month_share
    assert share is not None
    n = len(seen.points)
    ratio, slope = np.full(n, -np.inf), np.zeros((n, 1 + len(evaluator.plant.names)))
    for point in range(n):
        corners = np.flatnonzero(np.sign(means.shift[point]) == side)
        if not corners.size:
            continue
        here = means.value[point, corners]
        k, month = np.unravel_index(int(np.argmax(here)), here.shape)
        mean = max(float(here[k, month]), SMALLEST_MG_PER_L)
        ratio[point] = np.log(mean / target)
        corner = int(corners[k])
        for sample in np.flatnonzero(share[month]):
            part = seen.judged[means.block[point, corner, sample]]
            at = means.at[point, corner, sample]
            if part.slope.shape[2]:
                moved = part.value[at, number] * part.slope[at, number]
                slope[point] += share[month, sample] * moved
        slope[point] /= max(
            float(here[k, month]) / _scale(evaluator, number, int(month)), SMALLEST_MG_PER_L
        )
    return ratio, slope


def _scale(evaluator: Evaluator, number: int, month: int) -> float:
    """What a month's mean is multiplied by: its flow over the site's under a load."""
    ratios = evaluator.plant.feeds.month_flow_ratio
    if evaluator.judge.checks[number].averaging != MONTHLY_LOAD or ratios is None:
        return 1.0
    return float(ratios[month])


def worst_month(
    evaluator: Evaluator, seen: Evaluation, point: int, number: int
) -> tuple[float, str, int, list[tuple[float, int, int]]]:
    """The worst monthly mean of a point.

    Returns
    -------
    tuple
        Its value, the month, the row of its corner, and the share, block and row in the block of
        each of its samples.
    """
    feeds = evaluator.plant.feeds
    means = monthly_means(evaluator, seen, number)
    here = np.where(means.row[point][:, None] >= 0, means.value[point], -np.inf)
    corner, month = np.unravel_index(int(np.argmax(here)), here.shape)
    assert feeds.month_share is not None
    share = feeds.month_share[month]
    parts = [
        (float(share[s]), int(means.block[point, corner, s]), int(means.at[point, corner, s]))
        for s in np.flatnonzero(share)
    ]
    return float(here[corner, month]), feeds.months[month], int(means.row[point, corner]), parts

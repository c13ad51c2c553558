"""What a plan is on many samples, as plain data: worst months, ranges of the controller."""

from __future__ import annotations

from typing import Any

import numpy as np

from optimiser.evaluation import FEASIBLE_RATIO, Evaluation, Evaluator
from optimiser.monthly import worst_month
from optimiser.quality import LOADS
from optimiser.quality_slopes import SMALLEST_MG_PER_L

Data = dict[str, Any]

COUNTS_FROM = 1e-3  # a factor that the samples shrink by less than this is left as it is


def sample_figures(evaluator: Evaluator, seen: Evaluation, point: int) -> Data:
    """Count, period, states and doses over the samples; empty for a feed of one analysis."""
    site, feeds = evaluator.site, evaluator.plant.feeds
    if not feeds.many or site.samples is None:
        return {}
    samples = site.samples.samples
    states = sum(
        int((seen.rows.counts & (seen.rows.point == point))[part.block.rows].sum())
        for part in seen.judged
    )
    controller = int(seen.points.controller[point])
    doses = seen.priced.fed[point][feeds.counted][:, max(controller, 0)]
    labels = [label for label, counts in zip(feeds.labels, feeds.counted, strict=True) if counts]
    fed: Data = {}
    if controller >= 0:
        fed = {
            "reagent": evaluator.plant.names[controller],
            "lowest_mg_per_l": float(doses.min()), "lowest_on": labels[int(np.argmin(doses))],
            "mean_mg_per_l": float(seen.priced.doses[point, controller]),
            "highest_mg_per_l": float(doses.max()), "highest_on": labels[int(np.argmax(doses))],
        }  # fmt: skip
    return {
        "count": len(samples), "distinct": int(feeds.counted.sum()),
        "first": samples[0].day.isoformat(), "last": samples[-1].day.isoformat(),
        "months": list(feeds.months), "states_certified": states, "controller": fed,
    }  # fmt: skip


def monthly_limit(evaluator: Evaluator, seen: Evaluation, point: int, number: int) -> Data:
    """A monthly limit's row: the mean of its worst month at the corner where it is worst."""
    check = evaluator.judge.checks[number]
    value, month, row, parts = worst_month(evaluator, seen, point, number)
    metals = list(check.metals)
    mean = dict.fromkeys(("residual", "theory", "carried", "floor"), 0.0)
    for share, block, at in parts:
        part = seen.judged[block]
        for name in mean:
            mean[name] += share * float(getattr(part, name)[at, metals].sum())
    day = evaluator.site.flow_m3_per_d / 1000.0 if check.averaging in LOADS else 1.0
    month_mean = sum(share * float(seen.judged[b].value[at, number]) for share, b, at in parts)
    scale = day * value / max(month_mean, SMALLEST_MG_PER_L)
    mean = {name: part * scale for name, part in mean.items()}
    predicted = value * day * check.variability
    if not metals:
        mean["residual"] = value * day
    shift, factor = seen.rows.shift[row], seen.rows.factor[row]
    words = [f"mean of {len(parts)} samples of {month}"]
    words += [f"set point {shift:+.2f}"] if shift else []
    words += [
        f"{evaluator.plant.names[i]} {100.0 * (factor[i] - 1.0):+.0f} %"
        for i in np.flatnonzero(factor != 1.0)
    ]
    target = check.margin * check.limit
    return {
        "parameter": check.label, "averaging": check.averaging, "unit": check.unit,
        "limit": check.limit, "source": check.source, "residual": mean["residual"],
        "residual_by_theory": mean["theory"] if metals else mean["residual"],
        "carry_over": mean["carried"], "floor": mean["floor"],
        "variability_factor": check.variability, "predicted": predicted, "target": target,
        "margin_percent": 100.0 * (1.0 - predicted / check.limit),
        "meets": bool(np.log(max(predicted, 1e-12) / target) <= FEASIBLE_RATIO),
        "worst_state": f"{', '.join(words)}; each sample's worst end", "held_up_by": None,
    }  # fmt: skip


def shrunk_factors(evaluator: Evaluator) -> list[str]:
    """Sentences on what many samples change in how limits are judged."""
    feeds = evaluator.plant.feeds
    if not feeds.many:
        return []
    texts = [
        "paced doses follow the flow: the same dose per litre for every sample; the controller "
        "holds its set point in each, and purchases, sludge and charges are means weighted by "
        "volume",
        "daily limits hold on every sample at every corner; monthly limits on the mean of each "
        "calendar month's volume, each sample at its worst end",
    ]
    shown = [
        f"{check.label} {check.averaging} {check.variability:.3g}"
        for check in evaluator.judge.checks
        if check.metals and check.variability > 1.0 + COUNTS_FROM
    ]
    text = "variability factors are divided by what the samples show (highest sample, or highest "
    text += "monthly mean, over the mean of the feed), 1 at the least"
    texts.append(f"{text}: {', '.join(shown)}" if shown else f"{text}: none is left above 1")
    return texts

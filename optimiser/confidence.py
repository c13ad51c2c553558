"""Plan until the limits are met with a wanted chance, and tell what that confidence costs.

Targets of limits that the draws miss too often are tightened to the quantile that the draws ask
for; where a limit falls off a cliff (the paced dose is used up by something else) no target helps,
and the tolerance on paced doses is widened instead. The chance reported comes from fresh draws.
"""

from __future__ import annotations

import time
from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from optimiser.chances import DRAWS, Chances, chances_of
from optimiser.errors import NoPlan
from optimiser.evaluation import Evaluator, Place
from optimiser.outcome import Plan
from optimiser.planning import find, finished, plan_of
from optimiser.site import Site

ROUNDS = 6
STEEPEST_TIGHTENING = 0.2  # no target is pushed below this share of its limit
TOLERANCE_STEP = 0.05  # widening of the tolerance on paced doses in a round
Data = dict[str, Any]


@dataclass(frozen=True, eq=False, kw_only=True)
class ConfidentPlan:
    """A plan with the chance that it holds, beside the plan without that demand.

    ``reached`` tells whether the estimate is at least the ``wanted`` chance; ``site`` is the
    problem with the targets and the tolerance that the plan was made for.
    """

    wanted: float
    reached: bool
    plan: Plan
    chances: Chances
    site: Site
    base_total: float
    base_chances: Chances
    stopped_by: str

    def to_dict(self) -> Data:
        """Plain data of the plan, with a block ``confidence``."""
        margins = [
            {"limit": new.label, "design_margin": new.design_margin}
            for new in self.site.limits
            if new.design_margin is not None
        ]
        total = self.plan.cost["total"]
        return {
            **self.plan.to_dict(),
            "confidence": {
                "wanted": self.wanted, "reached": self.reached, "stopped_by": self.stopped_by,
                "chances": self.chances.to_dict(), "without": self.base_chances.to_dict(),
                "total_without": self.base_total, "extra_cost": total - self.base_total,
                "targets": margins,
                "dose_tolerance_fraction": self.site.treatment.dose_tolerance_fraction,
            },
        }  # fmt: skip


def plan_with_confidence(
    site: Site, wanted: float, *, draws: int = DRAWS, seed: int = 1,
    progress: Callable[[str], None] | None = None,
) -> ConfidentPlan:  # fmt: skip
    """Find a plan that meets every limit in at least a share ``wanted`` of the draws.

    Parameters
    ----------
    site
        A problem from `optimiser.load_site`.
    wanted
        Chance from 0.5 to below 1 that all limits hold together.
    draws, seed
        Draws per estimate; targets are tightened on the draws of ``seed``, the chance reported is
        that of ``seed + 1``.

    Raises
    ------
    ValueError
        ``wanted`` is no such chance.
    NoPlan, FeedRefused, Interrupted
        As `optimiser.plan` does, for the site as it stands.
    """
    if not 0.5 <= wanted < 1.0:
        raise ValueError(f"confidence is {wanted!r}: use a chance from 0.5 to below 1")

    def judged(evaluator: Evaluator, place: Place, start: int) -> Chances:
        return chances_of(evaluator, place, draws=draws, seed=start, progress=progress)

    begun = time.perf_counter()
    trial, stopped_by = site, ""
    plain = evaluator, findings = find(trial, progress)
    finished(evaluator, findings)
    best = findings.feasible[0][1]
    base_total, base = best.total, judged(evaluator, best.place, seed)
    found, kept = base, plain
    level = wanted
    for _ in range(ROUNDS):
        if found.probability[0] >= wanted:
            break
        level = 1.0 - 0.6 * (1.0 - level)
        trial = _tightened(trial, found, level)
        try:
            evaluator, findings = find(trial, progress)
        except NoPlan as none:
            stopped_by = f"tighter targets leave no plan: {none}"
            break
        kept = (evaluator, findings)
        found = judged(evaluator, findings.feasible[0][1].place, seed)
    if kept is not plain:
        finished(*kept)
    evaluator, findings = kept
    fresh = judged(evaluator, findings.feasible[0][1].place, seed + 1)
    reached = fresh.probability[0] >= wanted
    if not reached and not stopped_by:
        stopped_by = f"{ROUNDS} rounds of tightening were not enough"
    return ConfidentPlan(
        wanted=wanted, reached=reached, plan=plan_of(evaluator, findings, begun), chances=fresh,
        site=evaluator.site, base_total=base_total, base_chances=base,
        stopped_by="" if reached else stopped_by,
    )  # fmt: skip


def _tightened(site: Site, found: Chances, level: float) -> Site:
    """Tighten the targets of limits that miss too often, or widen the tolerance on doses.

    A limit's new margin leaves room for the ``level`` quantile of what the draws add to its nominal
    value; where the nominal value is already below that margin the limit falls off a cliff.
    """
    margins: dict[int, float] = {}
    cliff = False
    for column, number in enumerate(found.limit_numbers):
        ratio, nominal = found.ratio[:, column], found.nominal[column]
        if float(np.mean(ratio <= 0.0)) >= level:
            continue
        room = float(np.quantile(ratio, level) - nominal)
        margin = max(float(np.exp(-room)), STEEPEST_TIGHTENING)
        cliff |= nominal < np.log(margin) or margin == STEEPEST_TIGHTENING
        margins[number] = min(margin, margins.get(number, 1.0))
    limits = list(site.limits)
    for number, margin in margins.items():
        known = limits[number].design_margin
        before = site.design_margin if known is None else known
        if not cliff or margin > STEEPEST_TIGHTENING:
            limits[number] = replace(limits[number], design_margin=min(margin, before))
    treatment = site.treatment
    if cliff or not margins:
        wider = treatment.dose_tolerance_fraction + TOLERANCE_STEP
        treatment = replace(treatment, dose_tolerance_fraction=wider)
    return replace(site, limits=tuple(limits), treatment=treatment)

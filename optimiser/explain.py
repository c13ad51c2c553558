"""Why the plan is what it is: binding limits and their cost, the dose ledger, and what lost.

Owns the order of the explanation and the reasons why reagents lost; the numbers come from
`optimiser.marginal`, `optimiser.ledger` and `optimiser.entry_prices`.
"""

from __future__ import annotations

import math
import time
from collections.abc import Callable
from dataclasses import dataclass, field
from functools import cached_property
from typing import TYPE_CHECKING, Any

from optimiser.costing import (
    BURDEN,
    DISPOSAL,
    EQUIPMENT,
    FEES,
    FREIGHT,
    POLYMER,
    SEPARATOR,
    SURCHARGES,
)
from optimiser.entry_prices import entry_prices
from optimiser.evaluation import FEASIBLE_RATIO, Evaluator, Place
from optimiser.ledger import dose_ledger
from optimiser.marginal import binding_otherwise, marginal_costs, slack_limits
from optimiser.nearby import NEAR_STEPS, RESOLUTION, Standing, repolish, stand, worst_ratios
from optimiser.planning import find
from optimiser.polish import Track
from optimiser.purchasing import best_deal
from optimiser.quality import UNREACHED_RATIO
from optimiser.quality_slopes import RULE
from optimiser.recipes import recipe_of
from optimiser.runners_up import token_of
from optimiser.search import Findings
from optimiser.site import Site
from optimiser.solver import solver_from

if TYPE_CHECKING:
    import pandas as pd

Data = dict[str, Any]

LOCAL = (
    "local: another recipe is not looked for under the change, and every figure but the first "
    "order comes from a plan that the equilibrium confirmed"
)
NEAR_MISS = 0.05  # largest ratio of a recipe that may come to comply with some more steps
NEAR_MISSES = 6
PH_WINDOW = "pH window"
_CAUSES = {
    FREIGHT: "price of reagents", DISPOSAL: "sludge", FEES: "sludge", POLYMER: "sludge",
    EQUIPMENT: "equipment", SEPARATOR: "equipment", BURDEN: "burden charges",
    SURCHARGES: "surcharges",
}  # fmt: skip


@dataclass(frozen=True, eq=False, kw_only=True)
class Explanation:
    """Why a plan is what it is.

    Attributes
    ----------
    total
        Cost of the plan explained. [currency/year]
    data
        The plain data of `to_dict`.
    """

    total: float
    data: Data = field(repr=False)

    @cached_property
    def marginal_costs(self) -> pd.DataFrame:
        """Binding limits, margin and tariff with what a little more of each costs."""
        return self._frame("marginal_costs")

    @cached_property
    def ledger(self) -> pd.DataFrame:
        """Every part of every dose as one row."""
        import pandas as pd

        rows = [
            {"key": one["key"], "counted_as": one["counted_as"], **part}
            for one in self.data["ledger"]
            for part in one["parts"]
        ]
        return pd.DataFrame(rows)

    @cached_property
    def entry_prices(self) -> pd.DataFrame:
        """Offers that the plan does not buy, with the price at which it would."""
        return self._frame("offers")

    @cached_property
    def reagents(self) -> pd.DataFrame:
        """Reagents that are not in the plan, and why."""
        return self._frame("reagents")

    def to_dict(self) -> Data:
        """Everything as plain data, what ``--json`` prints."""
        return self.data

    def _frame(self, name: str) -> pd.DataFrame:
        import pandas as pd

        return pd.DataFrame(self.data[name])


def explain_plan(site: Site, progress: Callable[[str], None] | None = None) -> Explanation:
    """Find the cheapest plan of a site and say why it is what it is.

    Parameters
    ----------
    site
        A problem from `optimiser.load_site`.
    progress
        Called with a line of text now and then.

    Raises
    ------
    NoPlan, FeedRefused, Interrupted
        As `optimiser.plan` does.
    """
    begun = time.perf_counter()
    say = progress or (lambda _text: None)
    evaluator, findings = find(site, progress)
    plan = stand(evaluator, solver_from(site.solver), findings.feasible[0][1])
    say("what binds and what it costs")
    marginal = marginal_costs(plan)
    say("why reagents lost")
    _finish_near_misses(plan, findings)
    lost, polished = _reagents(plan, findings)
    say("entry prices")
    known = [*polished, *[track for _, track in findings.feasible[1:]]]
    purchases = _purchases(plan)
    offers = entry_prices(plan, known, [row["offer"] for row in purchases])
    data = {
        "site": {"name": site.name, "currency": site.currency},
        "plan": {
            "reagents": list(plan.recipe), "total": plan.total, "doses": _doses(plan),
            "compliant": plan.track.feasible, "purchases": purchases,
        },
        "scope": LOCAL, "resolution_per_year": RESOLUTION * plan.total,
        "marginal_costs": marginal, "also_at_its_end": binding_otherwise(plan),
        "not_binding": slack_limits(plan),
        "ledger": [
            one.to_dict() for one in dose_ledger(evaluator, plan.place.seen, plan.place.point)
        ],
        "reagents": lost, "offers": offers,
        "seconds": {**findings.seconds, "total": time.perf_counter() - begun},
    }  # fmt: skip
    return Explanation(total=plan.total, data=data)


def _doses(plan: Standing) -> dict[str, float]:
    priced, row, names = plan.place.seen.priced, plan.place.point, plan.evaluator.plant.names
    found = {n: float(priced.doses[row, i]) for i, n in enumerate(names)}
    found |= {f"{n}@trim": float(priced.trim_doses[row, i]) for i, n in enumerate(names)}
    return {key: dose for key, dose in found.items() if dose > 0.0}


def _purchases(plan: Standing) -> list[Data]:
    pricing = plan.evaluator.pricing
    demand = {key: dose * pricing.kg_per_mg_per_l for key, dose in _doses(plan).items()}
    return [
        {
            "offer": buy.offer, "supplier": buy.supplier, "reagent": buy.reagent,
            "bought_t_per_year": buy.bought_t_per_year,
        }
        for buy in best_deal(demand, pricing.book).buys
    ]  # fmt: skip


# -- why reagents lost ----------------------------------------------------------------------------


def _reagents(plan: Standing, findings: Findings) -> tuple[list[Data], list[Track]]:
    """Why each allowed reagent is not in the plan; and the recipes polished to tell."""
    rows: list[Data] = []
    polished: list[Track] = []
    for name in plan.evaluator.plant.treatment.reagents:
        if name in plan.recipe:
            continue
        track = _best_with(plan, findings, name)
        row = {"reagent": name, "alone": _alone(plan.evaluator, findings, name)}
        if track is None:
            rows.append({**row, **_NEVER})
        elif track.feasible:
            polished.append(track)
            rows.append({**row, **_dearer(plan, findings, name, track)})
        else:
            rows.append({**row, **_missing(plan, track)})
    return rows, polished


def _finish_near_misses(plan: Standing, findings: Findings) -> None:
    """Polish recipes to the end that the search left, as too dear, just short of complying."""
    near = [
        (recipe, track)
        for recipe, track in findings.best.items()
        if not track.feasible and track.violation < NEAR_MISS
    ]
    near.sort(key=lambda item: item[1].total)
    for recipe, track in near[:NEAR_MISSES]:
        findings.keep(recipe, repolish(plan.evaluator, track.place, plan.solver, steps=NEAR_STEPS))


_NEVER: Data = {
    "kind": "far dearer", "verified": False, "recipe": None, "difference_per_year": None,
    "difference_by_cause": {},
    "why": "no recipe with it was polished: on the grids all stood far above the plan's cost",
}  # fmt: skip


def _best_with(plan: Standing, findings: Findings, name: str) -> Track | None:
    """The best recipe of the search that holds a reagent, polished to the end."""
    mine = [track for recipe, track in findings.best.items() if name in recipe]
    if not mine:
        return None
    feasible = [track for track in mine if track.feasible]
    if feasible:
        best = min(feasible, key=lambda track: track.total)
        again = repolish(plan.evaluator, best.place, plan.solver, steps=NEAR_STEPS)
        return again if again.feasible and again.total <= best.total else best
    nearest = min(mine, key=lambda track: track.violation)
    again = repolish(plan.evaluator, nearest.place, plan.solver, steps=NEAR_STEPS, radius=0.2)
    return again if again.feasible or again.violation < nearest.violation else nearest


def _dearer(plan: Standing, findings: Findings, name: str, track: Track) -> Data:
    difference = track.total - plan.total
    by_cause = _by_cause(plan.evaluator, plan.place, track.place)
    leading = max(by_cause, key=lambda cause: by_cause[cause], default="")
    names = recipe_of(plan.evaluator.plant, track.point, 0)
    recipe, part = list(names), token_of(plan.evaluator, findings, names, track)
    if part is not None and name not in part:
        leading = "no use"
        why = f"gains nothing: {' + '.join(part)} complies for less without it".replace("_", " ")
    elif difference < 0.0:
        why = "cheaper than the plan once polished on its own: plan again with this recipe"
    else:
        why = f"complies but is dearer, most of all by {leading}"
    return {
        "kind": leading, "verified": True, "recipe": recipe, "difference_per_year": difference,
        "difference_by_cause": by_cause, "why": why,
    }  # fmt: skip


def _by_cause(evaluator: Evaluator, plan: Place, other: Place) -> dict[str, float]:
    """What another point costs more than the plan, by group of causes. [currency/year]"""
    found: dict[str, float] = {}
    for sign, place in ((-1.0, plan), (1.0, other)):
        for cause, values in place.seen.priced.by_cause.items():
            group = _CAUSES.get(cause, "price of reagents")
            found[group] = found.get(group, 0.0) + sign * float(values[place.point])
    return {group: value for group, value in found.items() if abs(value) > 1e-6}


def _missing(plan: Standing, track: Track) -> Data:
    label, ratio, is_rule = _worst_miss(plan.evaluator, track.place)
    recipe = list(recipe_of(plan.evaluator.plant, track.point, 0))
    return {
        "kind": "safety rule" if is_rule else "cannot meet", "verified": True, "recipe": recipe,
        "difference_per_year": None, "difference_by_cause": {},
        "why": "no recipe with it was found to comply; the nearest "
        + _missed(label, ratio, is_rule),
    }  # fmt: skip


def _alone(evaluator: Evaluator, findings: Findings, name: str) -> str:
    """What the reagent does alone, as far as the search saw."""
    track = findings.best.get((name,))
    if track is None:
        return "not tried alone"
    if track.feasible:
        return "complies alone"
    label, ratio, is_rule = _worst_miss(evaluator, track.place)
    return f"alone it {_missed(label, ratio, is_rule)}"


def _missed(label: str, ratio: float, is_rule: bool) -> str:
    if ratio >= UNREACHED_RATIO - 1e-6:
        return "does not reach its set point"
    if is_rule:
        return f"breaks the rule on {label}"
    if label == PH_WINDOW:
        return "leaves the pH window and nothing trims it back"
    times = math.exp(ratio)
    if ratio <= math.log(2.0):
        return f"misses {label} by {100.0 * (times - 1.0):.2g} %"
    if ratio > math.log(1000.0):
        return f"misses {label} by more than 1,000 times its target"
    return f"misses {label}, at {times:.3g} times its target"


def _worst_miss(evaluator: Evaluator, place: Place) -> tuple[str, float, bool]:
    """The check or rule that a point misses most: its name, ratio, and whether it is a rule."""
    checks, rules = worst_ratios(evaluator, place)
    found: list[tuple[float, str, bool]] = [
        (float(ratio), _name(check.label, check.averaging), check.averaging == RULE)
        for check, ratio in zip(evaluator.judge.checks, checks, strict=True)
    ]
    found += [
        (float(ratio), rule.label, True)
        for ratio, rule in zip(rules, place.seen.rules, strict=True)
    ]
    ratio, label, is_rule = max(found, default=(-math.inf, "", False))
    if ratio <= FEASIBLE_RATIO:
        # checks and rules hold, so what is missed is a pH that no trim brings into the window
        return PH_WINDOW, ratio, True
    return label, ratio, is_rule


def _name(label: str, averaging: str) -> str:
    return label if averaging == RULE else f"{label} ({averaging})"

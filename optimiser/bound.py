"""A lower bound on the yearly cost of every plan that a site allows: what is proven, and why.

Owns the derivation and the result. The run is `optimiser.bound_tree.prove`; cells begin in
`bound_roots` and are split in `bound_branch`; their relaxation is built in `bound_model` from
states (`bound_rows`), intervals (`bound_cells`, `bound_intervals`) and money (`bound_money`), and
shrunk in `bound_shrink` with ends proven in `bound_tighten`.

Notes
-----
**What is bounded.** A plan is a recipe that `recipes` lists (the required reagents in it, no more
than the site allows), with the controller that `make_recipe` names, doses and a set point within
the site's ranges, that `Evaluation.feasible` accepts at every corner and end. A *cell* is one
recipe, an interval of pH and a box of doses. The cells that the run begins with hold every plan
that costs no more than the one in question, because what a cell leaves out is dearer or not
feasible:

1. Doses lie between the least real dose and the ceiling (rule `_least_rule`). The purchase of a
   reagent never gets cheaper as its dose rises, since surplus may be bought; so a dose whose own
   purchase, with separator, equipment and the least doses of the recipe's other reagents, exceeds
   the plan's cost belongs to a dearer plan.
2. Where the controller holds the pH, the set point lies in the site's interval, below a practical
   ceiling of the controller (`_ceiling_rules`), and inside the discharge window by a tolerance
   unless a trim reagent moves the pH back (`needs_trim`, or else `trim_missing`).
3. Where paced reagents overshoot, the controller rests: its dose is 0 in that state and the pH lies
   beyond the set point (`Plant._solve`). The nominal state may rest with gas kept and scale formed
   only if another end needs a dose, because the controller's dose at the dearest end is at least
   its least dose; such plans are cells of their own (`rests`), with the water's pH as interval.
   Without carbonate in the recipe the other end is scale held back, which differs from this one
   only where a scale former is present.
4. Without a controller the interval is that of the water's pH (`free`).

**What every plan of a cell satisfies.** `Plant.blocks` solves the nominal state and every corner
with gas kept and scale formed, and the same with scale held back wherever scale forms; where none
forms, the one state is also the other. Where paced reagents bring carbonate, the same holds with
carbon dioxide vented, on totals that `bound_vent` brackets. Each is an equilibrium on ``T = feed +
sum dose x reacting + control x reacting`` with ``control >= 0`` and meets every check of `Judge`.
The relaxation takes the nominal state and a few of these corners, with the conditions derived in
`bound_rows`; leaving other corners and ends, floors and some rules out only adds plans. The states
share the paced doses (times 1 -+ tolerance), and their pH differ by the tolerance exactly where
both are held; a corner whose controller may rest is split into the two cases. In each state:

- a check of metals: ``residual + share x held <= target`` with the least share of the cell,
  ``min(tss / largest mass of floc, 1 - capture)``, since the share falls as the mass rises;
- a burden: dissolved totals plus what soluble reagents leave unreacted; trim only adds to it;
- hydrogen sulfide over the tank: linear in log activities; the pH after sulfide: an interval;
- the controller's dose in the nominal state is at most what is fed and paid for.

The cost is that of `Pricing.price` from below (`bound_money`): the same purchasing block as the
search, the fixed costs of the recipe, and disposal, polymer and charges at the nominal state with
gas kept and scale formed, which the dearest end costs at least.

**Why the run proves something.** A relaxation's least cost is a lower bound for its cell; a cell
without solution holds no plan. Splitting the pH or a dose, adding a corner, and shrinking a cell to
plans no dearer than the plan in question lose no such plan. The bound is the least over all cells,
closed for their cost or still open. Mixed-integer bounds and claims of infeasibility are the
solver's: rows are loosened by ten times its tolerance and bounds lowered by `bound_tree.ALLOWANCE`.
``gap = 1 - bound / cost``.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

PROVEN_GAP = 0.01
"""Gap up to which a plan is called proven."""


@dataclass(frozen=True, kw_only=True)
class Bound:
    """What a run proves.

    ``lower_per_year`` is a cost that no plan of the site undercuts; ``closed`` counts cells by the
    reason that closed them, ``open_cells`` those that time did not suffice for. ``reason`` says why
    nothing could be bounded, where that is so.
    """

    lower_per_year: float
    plan_per_year: float
    recipes: int = 0
    cells: int = 0
    closed: Mapping[str, int] = field(default_factory=dict)
    open_cells: int = 0
    seconds: float = 0.0
    reason: str = ""

    @property
    def gap(self) -> float:
        """Share of the plan's cost that the bound leaves open, ``1 - bound / cost``."""
        return 1.0 - self.lower_per_year / self.plan_per_year

    @property
    def proven(self) -> bool:
        """Whether the gap is small enough to call the plan proven."""
        return not self.reason and self.gap <= PROVEN_GAP

    def to_dict(self) -> dict[str, Any]:
        """Fields of the plan's proof."""
        if self.reason:
            return {"not_bounded_because": self.reason}
        found: dict[str, Any] = {
            "lower_bound_per_year": self.lower_per_year,
            "bound_recipes": self.recipes,
            "bound_cells": self.cells,
            "bound_cells_closed": dict(self.closed),
            "bound_cells_open": self.open_cells,
        }
        if self.proven:
            found |= {
                "kind": "proven",
                "gap": self.gap,
                "statement": "no plan that the site allows costs less than the lower bound",
            }
        return found


def joined(bounds: Sequence[Bound]) -> Bound:
    """One bound for sites that between them allow every plan: the least of their bounds.

    A site that could not be bounded leaves nothing proven.
    """
    unbounded = next((bound for bound in bounds if bound.reason), None)
    if unbounded is not None:
        return unbounded
    closed: dict[str, int] = {}
    for bound in bounds:
        for reason, count in bound.closed.items():
            closed[reason] = closed.get(reason, 0) + count
    return Bound(
        lower_per_year=min(bound.lower_per_year for bound in bounds),
        plan_per_year=bounds[0].plan_per_year,
        recipes=sum(bound.recipes for bound in bounds),
        cells=sum(bound.cells for bound in bounds),
        closed=closed,
        open_cells=sum(bound.open_cells for bound in bounds),
        seconds=sum(bound.seconds for bound in bounds),
    )

"""`trade_off`: verified plans of least cost under caps that are drawn ever tighter.

Owns the order of the work and the data of the result. A cap makes another site, which is planned
as any other; what cost is traded against is `optimiser.trade_axes`.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass, field
from itertools import pairwise
from typing import TYPE_CHECKING, Any

import numpy as np

from optimiser.cli_options import MOST_POINTS
from optimiser.describe import Describer
from optimiser.errors import TradeOffError
from optimiser.evaluation import Evaluator, Place
from optimiser.nearby import changed, repolish
from optimiser.planning import find, too_salty
from optimiser.polish import Track
from optimiser.recipes import recipe_of
from optimiser.search import Findings, Search
from optimiser.site import Site
from optimiser.solver import SolverPort, solver_from
from optimiser.trade_axes import AXES, MARGIN, PH, Axis, measures
from optimiser.trade_pool import Pool

if TYPE_CHECKING:
    import pandas as pd

Data = dict[str, Any]

POINTS = 7

LEAST_SLACK = 1e-4  # share above the least value at which the cheapest plan is looked for
SAME = 1e-6  # shares within which two plans are one
LEAST_MARGIN = 0.05
MARGIN_SHRINKS_BY = 0.8
MARGIN_RESOLUTION = 0.01
LEAST_GAP = 0.03  # of the range between the ends; narrower gaps get no more points
SEARCH, POOL = "fresh search", "known recipes polished again"
SCOPE = (
    "ends come from fresh searches over all recipes; between them the recipes that these searches "
    "saw were polished again under each cap. Every point was verified in every state. A search, "
    "not a bound: cheaper points are not excluded"
)


@dataclass(frozen=True, eq=False, kw_only=True)
class TradeOff:
    """Verified plans along a trade-off, the cheapest first, from loose caps to tight ones.

    Attributes
    ----------
    against
        What cost is traded against.
    data
        The plain data of `to_dict`.
    """

    against: str
    data: Data = field(repr=False)

    @property
    def points(self) -> list[Data]:
        """Every verified point: values, yearly cost, recipe, doses and set point."""
        return list(self.data["points"])

    def frame(self) -> pd.DataFrame:
        """Every verified point as one row, doses in columns ``dose REAGENT`` (mg/L pure fed)."""
        import pandas as pd

        rows = []
        for point in self.data["points"]:
            row = {key: value for key, value in point.items() if key != "doses"}
            row["reagents"] = ", ".join(point["reagents"])
            rows.append(row | {f"dose {key}": dose for key, dose in point["doses"].items()})
        return pd.DataFrame(rows)

    def to_dict(self) -> Data:
        """Everything as plain data, what ``--json`` prints."""
        return self.data


def trade_off(
    site: Site, against: str, points: int = POINTS, *, caps: Sequence[float] = (),
    progress: Callable[[str], None] | None = None,
) -> TradeOff:  # fmt: skip
    """Trade the yearly cost against TDS, sludge, design margin or pH set point.

    Parameters
    ----------
    site
        A problem from `optimiser.load_site`.
    against
        ``TDS`` (mean of the discharge, mg/L), ``sludge`` (wet t/year), ``margin`` (share of every
        limit that plans aim at) or ``ph`` (set point of the tank).
    points
        How many caps from the loosest to the tightest, at least 2; the site's own plan comes on
        top where it is not one of them.
    caps
        Values to look at instead, in the unit of ``against``.
    progress
        Called with a line of text now and then.

    Raises
    ------
    NoPlan, FeedRefused, Interrupted
        As `optimiser.plan` does, for the site as it is.
    TradeOffError
        An unknown ``against``, or points and caps that make no curve.

    Notes
    -----
    The epsilon-constraint method: each point is the cheapest plan found of the same problem with
    one more cap. Plans at a tight cap meet the looser ones too, so each is also polished under the
    next looser cap, and cost cannot fall as the cap tightens. The least of TDS or sludge is what a
    fresh search finds when each unit of it costs 10,000 times its share of all else.
    """
    axis = _checked(against, points, caps)
    run = _Run(site, axis, progress or (lambda _text: None))
    return TradeOff(against=axis.key, data=run.data(points, [float(cap) for cap in caps]))


def _checked(against: str, points: int, caps: Sequence[float]) -> Axis:
    if against not in AXES:
        raise TradeOffError(f"against is {against!r}: choose one of {', '.join(AXES)}")
    if not 2 <= points <= MOST_POINTS:
        raise TradeOffError(f"points is {points}: from 2 to {MOST_POINTS} make a curve")
    if against == MARGIN and any(not 0.0 < cap <= 1.0 for cap in caps):
        raise TradeOffError("a design margin lies above 0 and is at most 1")
    if any(not (np.isfinite(cap) and cap > 0.0) for cap in caps):
        raise TradeOffError("caps are numbers above 0")
    return AXES[against]


class _Run:
    """One trade-off under way: the pool, the plans by cap, and the searches made."""

    def __init__(self, site: Site, axis: Axis, say: Callable[[str], None]) -> None:
        self.begun = time.perf_counter()
        self.site, self.axis, self.say = site, axis, say
        self.solver: SolverPort = solver_from(site.solver)
        self.pool = Pool(self.solver)
        self.found: dict[float, Track | None] = {}
        self.evaluators: dict[float, Evaluator] = {}
        self.fresh: list[float] = []
        self.searches = 0
        self.examined: set[tuple[str, ...]] = set()
        self.evaluator, findings = find(site, say)
        self._learn(findings)
        self.plan = findings.feasible[0][1]
        self.least: float | None = None
        self.asked: list[float] = []

    # -- the work ----------------------------------------------------------------------------------

    def data(self, count: int, caps: list[float]) -> Data:
        """Solve every cap and put the result together."""
        if np.isfinite(self._value(self.plan)):
            self._put(self._value(self.plan), self.plan)
        ends = self._ends()
        self._solve_all(caps or self._spread(*ends, count))
        if self.axis.costly is not None and not caps:
            self._fill_gaps(count)
        if self.axis.key == PH and not caps:
            self._search_outermost()
        if self.axis.key != PH:
            self._carry_back()
        return self._result()

    def _ends(self) -> tuple[float, float]:
        """The loosest and the tightest value that make sense."""
        if self.axis.key == PH:
            window = self.site.treatment.ph_set_point
            return window.low, window.high
        if self.axis.key == MARGIN:
            self._search(1.0)
            return 1.0, self._least_margin()
        loosest = self._value(self.plan)
        return loosest, self._least_value(loosest)

    def _spread(self, loosest: float, tightest: float, count: int) -> list[float]:
        own = self._value(self.plan) if self.axis.costly is None else None
        if abs(loosest - tightest) <= 2.0 * LEAST_SLACK * abs(loosest):
            return [loosest]
        wanted = [float(cap) for cap in np.linspace(loosest, tightest, count)]
        if own is not None and np.isfinite(own) and min(abs(c - own) for c in wanted) > 1e-9:
            wanted.append(own)
        return sorted(wanted, reverse=self.axis.key != PH)

    def _least_value(self, loosest: float) -> float:
        """Least TDS or sludge of any plan: a fresh search in which it costs more than all else."""
        assert self.axis.costly is not None, "axes without one are handled before"
        self.say(f"looking for the least {self.axis.what}")
        costly = Evaluator(self.axis.costly(self.site, self.plan.total, loosest))
        findings = self._search_on(costly)
        ranked = [track for _, track in findings.feasible]
        self.least = min([self._value(track) for track in ranked], default=loosest)
        self.least = min(self.least, loosest)
        cap = self.least * (1.0 + LEAST_SLACK)
        self.fresh.append(cap)
        return cap

    def _least_margin(self) -> float:
        """Least design margin with a plan: halve the gap, then search anew just below it."""
        good, bad = min(1.0, self.site.design_margin), 0.0
        while good - bad > MARGIN_RESOLUTION and good > LEAST_MARGIN:
            middle = good * MARGIN_SHRINKS_BY if bad == 0.0 else 0.5 * (good + bad)
            self.say(f"trying a margin of {middle:.3f}")
            if self._solve(middle) is not None:
                good = middle
            else:
                bad = middle
            if good - bad <= MARGIN_RESOLUTION and self._search(bad) is not None:
                good, bad = bad, 0.0
        self.least = good
        return good

    def _search_outermost(self) -> None:
        """Search anew at the lowest and the highest set point that have a plan."""
        held = sorted(cap for cap, track in self.found.items() if track is not None)
        for cap in dict.fromkeys(held[:1] + held[-1:]):
            self._search(cap)

    # -- solving one cap ---------------------------------------------------------------------------

    def _solve_all(self, caps: Iterable[float]) -> None:
        """Solve caps outward from the plan's, so that each starts from a near one."""
        here = self._value(self.plan)
        self.asked = list(caps)
        if not np.isfinite(here):
            here = float(np.mean(self.asked))
        order = sorted(self.asked, key=lambda cap: (cap > here, abs(cap - here)))
        for cap in order:
            if cap not in self.found:
                self.say(self.axis.named(cap))
                self._put(cap, self._looser_plan(cap))
                if self.found[cap] is None:
                    self._solve(cap)

    def _looser_plan(self, cap: float) -> Track | None:
        """The plan of the next looser cap: if it meets this one, it is the cheapest here too."""
        if self.axis.key == PH:
            return None
        looser = [c for c, track in self.found.items() if c >= cap and track is not None]
        return self.found[min(looser)] if looser else None

    def _fill_gaps(self, count: int) -> None:
        """Spend the points that fell together on the widest gaps between those that are left."""
        for _ in range(2 * count):
            values = [point[self.axis.column] for point in self._kept()]
            gaps = [(self._floor_of_gap(low, high), high) for high, low in pairwise(values)]
            wide = [(low, high) for low, high in gaps if high - low > LEAST_GAP * (
                values[0] - values[-1])]  # fmt: skip
            if len(values) >= count or not wide:
                return
            low, high = max(wide, key=lambda gap: gap[1] - gap[0])
            self._solve_all([*self.asked, 0.5 * (low + high)])

    def _floor_of_gap(self, low: float, high: float) -> float:
        """Caps between two plans down to the lowest tried are known to give the lower one."""
        tried = [cap for cap in self.found if low < cap < high * (1.0 - SAME)]
        return max(tried, default=low)

    def _solve(self, cap: float) -> Track | None:
        set_point = cap if self.axis.key == PH else None
        track = self.pool.solve(self._evaluator(cap), set_point)
        self._put(cap, track)
        return self.found[cap]

    def _search(self, cap: float) -> Track | None:
        """Search a capped site anew."""
        self.say(f"searching at {self.axis.what} {cap:.4g} {self.axis.unit}")
        findings = self._search_on(self._evaluator(cap))
        tracks = [track for _, track in findings.feasible]
        if self.axis.key == PH:
            tracks = [t for t in tracks if t.point.controller[0] >= 0]
        self.fresh.append(cap)
        self._put(cap, tracks[0] if tracks else None)
        return self.found[cap]

    def _search_on(self, evaluator: Evaluator) -> Findings:
        findings = Search(evaluator, self.solver, time_limit_s=self.site.solver.time_limit_s).run()
        self._learn(findings)
        return findings

    def _learn(self, findings: Findings) -> None:
        self.pool.add(findings.best.items())
        self.examined |= findings.recipes_examined
        self.searches += 1

    def _evaluator(self, cap: float) -> Evaluator:
        if cap not in self.evaluators:
            self.evaluators[cap] = changed(self.evaluator, self.axis.capped(self.site, cap))
        return self.evaluators[cap]

    def _put(self, cap: float, track: Track | None) -> None:
        """Keep the cheapest plan of a cap, verified from a cold start."""
        known = self.found.setdefault(cap, None)
        if track is None or (known is not None and known.total <= track.total):
            return
        seen = self._evaluator(cap).evaluate(track.point)
        strength = max(float(block.state.ionic_strength.max()) for block in seen.blocks)
        if bool(seen.feasible[0]) and not too_salty(self.site, strength):
            self.found[cap] = track

    def _carry_back(self) -> None:
        """Polish each plan under the next looser cap: it meets that cap too."""
        caps = sorted(self.found)
        for tighter, looser in pairwise(caps):
            track = self.found[tighter]
            if track is not None:
                moved = repolish(self._evaluator(looser), track.place, self.solver)
                self._put(looser, moved)
                self._put(looser, track)

    # -- the result --------------------------------------------------------------------------------

    def _value(self, track: Track) -> float:
        return measures(self.evaluator, track.place).get(self.axis.column, float("nan"))

    def _result(self) -> Data:
        asked = sorted(dict.fromkeys(self.asked), reverse=self.axis.key != PH)
        kept = self._kept()
        without = [cap for cap in asked if self.found[cap] is None]
        cheapest = min((row["total"] for row in kept), default=self.plan.total)
        for row in kept:
            row["dearer_percent"] = 100.0 * (row["total"] / cheapest - 1.0)
        return {
            "site": {"name": self.site.name, "currency": self.site.currency},
            "against": {
                "key": self.axis.key, "what": self.axis.what, "unit": self.axis.unit,
                "column": self.axis.column, "digits": self.axis.digits,
            },
            "points": kept, "caps_tried": len(asked), "without_plan": without,
            "least_reached": self.least, "statements": self._statements(without),
            "plan": {"total": self.plan.total,
                     "value": measures(self.evaluator, self.plan.place).get(self.axis.column),
                     "reagents": list(recipe_of(self.evaluator.plant, self.plan.point, 0))},
            "scope": SCOPE, "searches": self.searches, "searched_at": sorted(set(self.fresh)),
            "recipes_examined": len(self.examined),
            "seconds": time.perf_counter() - self.begun,
        }  # fmt: skip

    def _kept(self) -> list[Data]:
        """Plans of the caps asked for; on TDS and sludge without those that another one beats."""
        asked = sorted(dict.fromkeys(self.asked), reverse=self.axis.key != PH)
        plans = [(cap, track) for cap in asked if (track := self.found[cap]) is not None]
        points = [self._point(cap, track) for cap, track in plans]
        return undominated(points, self.axis.column) if self.axis.costly is not None else points

    def _point(self, cap: float, track: Track) -> Data:
        """One plan as plain data."""
        evaluator = self._evaluator(cap)
        seen = evaluator.evaluate(track.point)
        return {
            "cap": cap, **measures(evaluator, Place(seen, 0)), "total": float(seen.total[0]),
            "reagents": list(recipe_of(evaluator.plant, track.point, 0)),
            "doses": Describer(evaluator, seen, 0).dose_map(),
            "is_plan": cap == self._value(self.plan)
            or abs(track.total - self.plan.total) <= SAME * self.plan.total,
            "found_by": SEARCH if cap in self.fresh or track is self.plan else POOL,
        }  # fmt: skip

    def _statements(self, without: Sequence[float]) -> list[str]:
        """What was found to have no plan."""
        axis, texts = self.axis, []
        if self.least is not None:
            texts.append(f"no plan was found below {axis.named(self.least)}")
        if without:
            listed = ", ".join(f"{cap:.{axis.digits}g}" for cap in without)
            unit = f" {axis.unit}" if axis.unit else ""
            texts.append(f"no plan was found at {axis.what} {listed}{unit}")
        return texts


def undominated(points: Sequence[Data], column: str) -> list[Data]:
    """Points that no other equals or beats on both cost and value; of equals the first."""
    kept: list[Data] = []
    for number, one in enumerate(points):
        beaten = False
        for other_number, other in enumerate(points):
            value = other[column] <= one[column] * (1.0 + SAME)
            total = other["total"] <= one["total"] * (1.0 + SAME)
            less = (
                other[column] < one[column] * (1.0 - SAME)
                or other["total"] < one["total"] * (1.0 - SAME)
            )  # fmt: skip
            beaten |= value and total and (less or other_number < number)
        if not beaten:
            kept.append(one)
    return kept

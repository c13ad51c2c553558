"""Evaluation of operating points: states, checks, safety rules and cost in one call.

Owns the bundle that search and assessment share, so that a plan and its assessment cannot differ.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from chemistry.state import EquilibriumState, equilibrate
from chemistry.titration import StartValues
from optimiser.costing import Priced, Pricing
from optimiser.feeds import Feeds
from optimiser.monthly import monthly_rules
from optimiser.plant import Plant
from optimiser.points import Block, Points, Rows
from optimiser.quality import LN10, Judge, Judged
from optimiser.site import Site
from optimiser.yearly_caps import cap_rules

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]
IntArray = NDArray[np.int64]

FEASIBLE_RATIO = 1e-9  # a limit is met when ln(value/target) does not exceed this
DOSE_RULE = "least real dose and dose ceiling"
LEAST_DOSE_MG_PER_L = 1.0  # least real dose of a reagent in a recipe, unless the site says


@dataclass(frozen=True, slots=True)
class Rule:
    """A safety or practice rule at points: ``ratio`` (points,) must not exceed 0.

    ``slope`` (points, 1 + reagents) is its change with the set point and the paced doses.
    """

    label: str
    ratio: FloatArray
    slope: FloatArray


@dataclass(frozen=True, eq=False)
class Evaluation:
    """Everything known of a set of points."""

    points: Points
    rows: Rows
    blocks: list[Block]
    judged: list[Judged]
    priced: Priced
    rules: list[Rule] = field(default_factory=list)
    before: dict[str, tuple[IntArray, EquilibriumState]] = field(default_factory=dict)

    @cached_property
    def violation(self) -> FloatArray:
        """Largest ratio of any check or rule of each point, (points,); feasible if <= 0."""
        worst = np.full(len(self.points), -np.inf)
        for part in self.judged:
            if part.ratio.shape[1]:
                point = self.rows.point[part.block.rows]
                np.maximum.at(worst, point, part.ratio.max(axis=1))
            missing = part.block.trim_missing | ~part.block.reached
            missing &= self.rows.counts[part.block.rows]
            np.maximum.at(worst, self.rows.point[part.block.rows[missing]], 5.0)
        for rule in self.rules:
            worst = np.maximum(worst, rule.ratio)
        return worst

    @cached_property
    def feasible(self) -> BoolArray:
        """Which points meet every check and rule, (points,)."""
        return (self.violation <= FEASIBLE_RATIO) & np.isfinite(self.priced.total)

    @property
    def total(self) -> FloatArray:
        """Yearly cost of each point."""
        return self.priced.total

    def nominal_row(self, block: Block, point: int, sample: int = 0) -> int | None:
        """Position in a block of a sample's nominal row; the first of many is their mean."""
        rows = self.rows
        shown = rows.nominal & (rows.sample == sample) & (rows.point == point)
        hit = np.flatnonzero(shown[block.rows])
        return int(hit[0]) if hit.size else None


@dataclass(frozen=True, slots=True)
class Place:
    """One point of an evaluation."""

    seen: Evaluation
    point: int


class _Neighbours:
    """Warm starts of points from evaluated points with the same corners."""

    def __init__(self, rows: Rows, near: Sequence[Place]) -> None:
        self.rows = rows
        self.near = near
        self.first = np.searchsorted(rows.point, np.arange(len(near)))

    def start(self, end: int, rows: IntArray) -> StartValues | None:
        """Iterates of the neighbours at the same corner and end, else at the nearest known."""
        parts = []
        for point in np.unique(self.rows.point[rows]):
            place = self.near[int(point)]
            corner = rows[self.rows.point[rows] == point] - self.first[point]
            known = np.flatnonzero(place.seen.rows.point == place.point)
            # a neighbour known at its nominal state alone lends that to every corner
            picked = known[corner] if corner.max() < known.size else known[np.zeros_like(corner)]
            parts.append(_iterates(place.seen, end, picked))
        return StartValues.join(parts) if parts else None


def _iterates(seen: Evaluation, end: int, rows: IntArray) -> StartValues:
    for block in seen.blocks:
        if block.end == end and np.isin(rows, block.rows).all():
            return _start_of(block, np.searchsorted(block.rows, rows))
    return _start_of(seen.blocks[0], rows)


def _start_of(block: Block, picked: IntArray) -> StartValues:
    return StartValues.of(block.state, block.reached & ~block.held).rows(picked)


class _Before:
    """The feed with some of its doses left out: what it is where a reagent meets it.

    ``moved`` (points, samples, 1 + reagents) is the change of the controller's dose; None where no
    slopes are wanted.
    """

    def __init__(
        self, plant: Plant, seen: Evaluation, near: Sequence[Place] | None,
        moved: FloatArray | None,
    ) -> None:  # fmt: skip
        self.plant, self.seen, self.near, self.moved = plant, seen, near, moved

    def lowest(
        self, label: str, some: IntArray, without: BoolArray
    ) -> tuple[FloatArray, FloatArray]:
        """Lowest pH of any sample with every dose but those of ``without``, and its slope."""
        return self._extreme(*self._ph(label, some, without), np.argmin)

    def highest(
        self, label: str, some: IntArray, without: BoolArray
    ) -> tuple[FloatArray, FloatArray]:
        """Highest pH of any sample with every dose but those of ``without``, and its slope."""
        return self._extreme(*self._ph(label, some, without), np.argmax)

    def _extreme(
        self, ph: FloatArray, slope: FloatArray, pick: Callable[..., IntArray]
    ) -> tuple[FloatArray, FloatArray]:
        samples = np.flatnonzero(self.plant.feeds.counted)
        ph = ph.reshape(-1, len(self.plant.feeds))[:, samples]
        slope = slope.reshape(ph.shape[0], -1, slope.shape[1])[:, samples]
        points = np.arange(ph.shape[0])
        chosen = pick(ph, axis=1)  # a sample without an answer counts before any other
        return ph[points, chosen], slope[points, chosen]

    def _ph(
        self, label: str, points: IntArray, without: BoolArray
    ) -> tuple[FloatArray, FloatArray]:
        plant, samples = self.plant, len(self.plant.feeds)
        some, sample = np.repeat(points, samples), np.tile(np.arange(samples), points.size)
        kept = np.where(without, 0.0, self.seen.priced.fed[some, sample])
        mixed = plant.feeds.totals_mol_per_l[sample] + kept @ plant.reacting
        start = self._start(label, points)
        state = equilibrate(plant.system, mixed, on_failure="flag", start=start)
        self.seen.before[label] = (points, state)
        plant.states_solved += some.size
        plant.states_failed += int(np.count_nonzero(~state.converged))
        ph = np.where(state.converged, state.ph, np.nan)
        slope = np.zeros((some.size, 1 + len(plant.names)))
        used = np.flatnonzero((kept > 0.0).any(axis=0))
        if self.moved is None or not used.size:
            return ph, slope
        dosed = kept[:, used] > 0.0
        sens = state.sensitivity(plant.reacting[used] * dosed[:, :, None])
        for k, reagent in enumerate(used):
            slope[:, 1 + reagent] += sens.ph[:, k]
            own = self.seen.points.controller[some] == reagent
            slope[own] += sens.ph[own, k][:, None] * self.moved[some[own], sample[own]]
        return ph, slope

    def _start(self, label: str, some: IntArray) -> StartValues:
        """The same mixture at the neighbours, else the water that all doses make."""
        samples = len(self.plant.feeds)
        nominal = np.flatnonzero(self.seen.rows.nominal).reshape(-1, samples)
        parts = []
        for point in some:
            place = self.near[int(point)] if self.near is not None else None
            known = place.seen.before.get(label) if place is not None else None
            alike = known is not None and known[1].ph.size == known[0].size * samples
            if alike and known is not None and place is not None and place.point in known[0]:
                first = int(np.flatnonzero(known[0] == place.point)[0]) * samples
                row = np.arange(first, first + samples)
                parts.append(StartValues.of(known[1]).rows(row))
            else:
                row = nominal[int(point)]
                parts.append(StartValues.of(self.seen.blocks[0].state).rows(row))
        return StartValues.join(parts)


class Evaluator:
    """A site ready to be evaluated: plant, judge and pricing."""

    def __init__(self, site: Site, feeds: Feeds | None = None) -> None:
        self.site = site
        self.plant = Plant(site, feeds)
        self.judge = Judge(self.plant)
        self.pricing = Pricing(self.plant, self.judge.surcharges)
        treatment = site.treatment
        names = self.plant.names
        self.least = np.array(
            [treatment.least_doses_mg_per_l.get(n, LEAST_DOSE_MG_PER_L) for n in names]
        )
        self.ceiling = np.array([treatment.dose_ceilings_mg_per_l.get(n, np.inf) for n in names])

    def evaluate(
        self, points: Points, *, full: bool = True, all_ends: bool = True, slopes: bool = False,
        near: Sequence[Place] | None = None,
    ) -> Evaluation:  # fmt: skip
        """Solve, judge and price points.

        ``full`` adds every corner, ``all_ends`` every end, ``slopes`` the derivatives; ``near``
        names for each point an evaluated one of the same recipe to start from.
        """
        rows = self.plant.corners(points, full=full)
        start = _Neighbours(rows, near) if near is not None else None
        blocks = self.plant.blocks(points, rows, all_ends=all_ends, warm=start)
        judged = [self.judge.judge(points, rows, b, slopes=slopes) for b in blocks]
        priced = self.pricing.price(points, rows, blocks, judged)
        seen = Evaluation(points, rows, blocks, judged, priced)
        self._rules(seen, near, slopes=slopes)
        return seen

    # -- rules ------------------------------------------------------------------------------------

    def _rules(self, seen: Evaluation, near: Sequence[Place] | None, *, slopes: bool) -> None:
        seen.rules.append(self._least_rule(seen))
        feed = _Before(self.plant, seen, near, self._dose_slopes(seen) if slopes else None)
        seen.rules.extend(self._sulfide_rules(seen, feed))
        seen.rules.extend(self._ceiling_rules(seen, feed))
        seen.rules.extend(Rule(*one) for one in cap_rules(self, seen))
        seen.rules.extend(Rule(*one) for one in monthly_rules(self, seen))

    def _dose_slopes(self, seen: Evaluation) -> FloatArray:
        """Change of controllers' nominal doses with set point and paced doses.

        (points, samples, 1 + reagents)
        """
        shape = (len(seen.points), len(self.plant.feeds), 1 + len(self.plant.names))
        slope = np.zeros(shape)
        first = seen.judged[0]
        some = first.block.rows[seen.rows.nominal[first.block.rows]]
        nominal = seen.rows.nominal[first.block.rows]
        slope[seen.rows.point[some], seen.rows.sample[some]] = first.dose_slope[nominal]
        return slope

    def _least_rule(self, seen: Evaluation) -> Rule:
        """The controller's mean dose is a real one, and none of its doses is above its ceiling."""
        points, doses = seen.points, seen.priced.doses
        n = len(points)
        slope = np.zeros((n, 1 + len(self.plant.names)))
        ratio = np.full(n, -np.inf)
        held = points.controller >= 0
        if held.any():
            own = points.controller[held]
            dose = np.maximum(doses[held, own], 1e-9)
            low = np.log(self.least[own] / dose)
            by_sample = seen.priced.fed[np.flatnonzero(held), :, own] * self.plant.feeds.counted
            top = np.argmax(by_sample, axis=1)
            most = np.maximum(by_sample.max(axis=1), 1e-9)
            high = np.log(most / np.minimum(self.ceiling[own], 1e12))
            ratio[held] = np.maximum(low, high)
            moved = self._dose_slopes(seen)[held]
            slope[held] = np.where(
                (low > high)[:, None], -self.pricing.mean(moved) / dose[:, None],
                moved[np.arange(top.size), top] / most[:, None],
            )  # fmt: skip
        paced = (points.doses > 0.0) & (points.doses < self.least * (1.0 - 1e-9))
        over = points.doses > self.ceiling * (1.0 + 1e-9)
        ratio = np.where((paced | over).any(axis=1), np.maximum(ratio, 1.0), ratio)
        return Rule(DOSE_RULE, ratio, slope)

    def _sulfide_rules(self, seen: Evaluation, feed: _Before) -> list[Rule]:
        plant = self.plant
        some = np.flatnonzero((seen.priced.doses[:, plant.is_sulfide] > 0.0).any(axis=1))
        if not some.size:
            return []
        least = plant.treatment.sulfide_least_ph
        n, width = len(seen.points), 1 + len(plant.names)
        label = "pH before the sulfide dose"
        ph, moved = feed.lowest(label, some, plant.is_sulfide)
        before = np.full(n, -np.inf)
        before[some] = np.where(np.isnan(ph), 5.0, LN10 * (least - ph))
        slope = np.zeros((n, width))
        slope[some] = -LN10 * moved
        rules = [Rule(label, before, slope)]
        lowest = np.full(n, np.inf)
        for part in seen.judged:
            mine = seen.rows.counts[part.block.rows]
            point = seen.rows.point[part.block.rows[mine]]
            np.minimum.at(lowest, point, part.block.state.ph[mine])
        after = np.full(n, -np.inf)
        after[some] = LN10 * (least - lowest[some])
        slope = np.zeros((n, width))
        slope[some, 0] = -LN10
        rules.append(Rule("pH after the sulfide dose", after, slope))
        return rules

    def _ceiling_rules(self, seen: Evaluation, feed: _Before) -> list[Rule]:
        """A reagent with a practical pH ceiling has all dissolved at or below it."""
        plant, points = self.plant, seen.points
        rules = []
        for i, reagent in enumerate(plant.reagents):
            ceiling = self.ceiling_of(i)
            some = np.flatnonzero(seen.priced.doses[:, i] > 0.0)
            if ceiling is None or not some.size:
                continue
            n, width = len(points), 1 + len(plant.names)
            ratio, slope = np.full(n, -np.inf), np.zeros((n, width))
            label = f"practical pH ceiling of {reagent.name}"
            own = points.controller[some] == i
            ratio[some[own]] = LN10 * (points.ph[some[own]] - ceiling)
            slope[some[own], 0] = LN10
            paced = some[~own]
            if paced.size:
                ph, moved = feed.highest(label, paced, self.stronger)
                ratio[paced] = np.where(np.isnan(ph), 5.0, LN10 * (ph - ceiling))
                slope[paced] = LN10 * moved
            rules.append(Rule(label, ratio, slope))
        return rules

    @cached_property
    def stronger(self) -> BoolArray:
        """Alkalis that take the pH above the ceiling of those that have one, (reagents,)."""
        return np.array(
            [
                r.ph_control == "up" and self.ceiling_of(i) is None
                for i, r in enumerate(self.plant.reagents)
            ]
        )

    def ceiling_of(self, reagent: int) -> float | None:
        """Practical pH ceiling of a reagent: the site's for magnesia, else the catalog's."""
        known = self.plant.reagents[reagent]
        own = self.plant.treatment.magnesia_ph_ceiling
        if known.ph_ceiling is not None and own is not None:
            return own
        return known.ph_ceiling

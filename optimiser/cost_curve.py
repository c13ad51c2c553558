"""The least yearly cost of one reagent as a function of its demand, without a solver.

Owns the exact lower envelope over every way of splitting a demand between offers. Terms that tie
offers together (bundles, shares of suppliers) and whole packs are left out, so that with them the
curve is a lower value; `optimiser.purchasing` then decides.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, replace
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from optimiser.offer import Offer
from optimiser.offer_cost import FREIGHT, GOODS, REBATE, Amount, Piece, pieces_of

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

_TIE = 1e-12
"""Costs that differ by less than this fraction are equal."""

MOST_SPLIT = 40
"""Splits between more offers of one reagent than this are left to a solver."""

Amounts = tuple[tuple[int, float], ...]
"""Offers (positions in the curve's list) with the kg pure bought of each."""


@dataclass(frozen=True, slots=True)
class Way:
    """How a stretch of demand is bought: fixed amounts, and the offer that takes the rest.

    ``free`` is -1 where the amounts alone cover the whole stretch.
    """

    fixed: Amounts
    free: int

    def at(self, demand_kg: float) -> Amounts:
        """Amounts bought for a demand."""
        if self.free < 0:
            return self.fixed
        rest = demand_kg - math.fsum(kg for _, kg in self.fixed)
        return (*self.fixed, (self.free, max(rest, 0.0)))

    def and_also(self, more: Amounts) -> Way:
        """Return the way with further fixed amounts."""
        return Way((*self.fixed, *more), self.free)


@dataclass(frozen=True, eq=False)
class CostCurve:
    """A rising function of demand in straight pieces; piece ``i`` covers ``(high[i-1], high[i]]``.

    ``high_kg``, ``fixed``, ``slope`` (total cost), ``freight_fixed``, ``freight_slope`` and
    ``surplus_kg`` (bought on a level piece, 0 elsewhere) are arrays (pieces,); beyond the last end
    nothing covers the demand. ``at_zero`` is what no demand at all costs.
    """

    high_kg: FloatArray
    fixed: FloatArray
    slope: FloatArray
    freight_fixed: FloatArray
    freight_slope: FloatArray
    surplus_kg: FloatArray
    ways: tuple[Way, ...]
    at_zero: float = 0.0

    def piece(self, demand_kg: FloatArray) -> IntArray:
        """Position of the piece that a demand lies on; the number of pieces where none does."""
        return np.searchsorted(self.high_kg, demand_kg, side="left")

    def costs(self, demand_kg: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Cost without freight, and freight, of demands above 0; infinite where none is covered."""
        k = self.piece(demand_kg)
        held = k < self.high_kg.size
        k = np.minimum(k, self.high_kg.size - 1)
        freight = self.freight_fixed[k] + self.freight_slope[k] * demand_kg
        total = self.fixed[k] + self.slope[k] * demand_kg
        return np.where(held, total - freight, np.inf), np.where(held, freight, 0.0)

    @property
    def first(self) -> int:
        """Position of the piece that the first gram lies on."""
        return int(np.searchsorted(self.high_kg, 0.0, side="right"))

    def _bends_down(self) -> NDArray[np.bool_]:
        """Ends of pieces where the cost goes on without a jump at a lower slope."""
        at = self.high_kg[:-1]
        left = self.fixed[:-1] + self.slope[:-1] * at
        right = self.fixed[1:] + self.slope[1:] * at
        even = np.abs(right - left) <= _TIE * (np.abs(left) + 1.0)
        return np.append(even & (self.slope[1:] <= self.slope[:-1]), False)

    def vertices(self, *, with_origin: bool) -> Iterable[tuple[float, float, float, Amounts]]:
        """Finite ends: kg, cost, freight, amounts; with what the first gram costs if asked.

        Ends where the slope falls without a jump are left out: a purchase that stands there
        together with others costs no more after a move one way or the other.
        """
        if with_origin and self.surplus_kg[0] == 0.0:
            yield 0.0, float(self.fixed[0]), float(self.freight_fixed[0]), self.ways[0].at(0.0)
        for k in np.flatnonzero(np.isfinite(self.high_kg) & ~self._bends_down()):
            kg = float(self.high_kg[k])
            cost = float(self.fixed[k] + self.slope[k] * kg)
            freight = float(self.freight_fixed[k] + self.freight_slope[k] * kg)
            yield kg, cost, freight, self.ways[k].at(kg)

    def take(self, keep: IntArray | NDArray[np.bool_], high_kg: FloatArray) -> CostCurve:
        """Return pieces with new ends."""
        positions = np.arange(self.high_kg.size)[keep]
        return CostCurve(
            high_kg, self.fixed[positions], self.slope[positions], self.freight_fixed[positions],
            self.freight_slope[positions], self.surplus_kg[positions],
            tuple(self.ways[k] for k in positions), self.at_zero,
        )  # fmt: skip

    def shifted(self, kg: float, cost: float, freight: float, amounts: Amounts) -> CostCurve:
        """Return the curve of demands that are first met by fixed amounts, then by this curve."""
        ways = tuple(way.and_also(amounts) for way in self.ways)
        fixed = self.fixed + cost - self.slope * kg
        freight_fixed = self.freight_fixed + freight - self.freight_slope * kg
        level = self.surplus_kg > 0.0
        surplus = np.where(level, self.surplus_kg + kg, 0.0)
        shifted = CostCurve(
            self.high_kg + kg, fixed, self.slope, freight_fixed, self.freight_slope, surplus, ways
        )
        if level[0] or kg <= 0.0:
            return shifted
        first = _level(
            kg, cost + float(self.fixed[0]), freight + float(self.freight_fixed[0]),
            Way((*amounts, *self.ways[0].at(0.0)), -1),
        )  # fmt: skip
        return _joined(first, shifted)


def _level(kg: float, cost: float, freight: float, way: Way) -> CostCurve:
    """The curve of one fixed purchase."""
    one = np.ones(1)
    zero = np.zeros(1)
    return CostCurve(kg * one, cost * one, zero, freight * one, zero, kg * one, (way,))


def _joined(first: CostCurve, second: CostCurve) -> CostCurve:
    def both(name: str) -> FloatArray:
        return np.concatenate([getattr(first, name), getattr(second, name)])

    return CostCurve(
        both("high_kg"), both("fixed"), both("slope"), both("freight_fixed"),
        both("freight_slope"), both("surplus_kg"), (*first.ways, *second.ways),
    )  # fmt: skip


def _straight(piece: Piece, position: int, offer: Offer) -> CostCurve:
    """The curve of one piece of one offer, level below its least amount."""
    total, freight = piece.total, piece.costs.get(FREIGHT, Amount())
    if offer.framework is not None:  # a lower value: as if its rebate were reached
        goods = piece.costs[GOODS].plus(piece.costs.get(REBATE, Amount()))
        total = total.plus(goods.times(-offer.framework.rebate_fraction))
    kg_per_t = offer.kg_pure_per_t
    low, high = piece.low_t * kg_per_t, piece.high_t * kg_per_t
    line = CostCurve(
        np.array([high]), np.array([total.fixed]), np.array([total.per_t / kg_per_t]),
        np.array([freight.fixed]), np.array([freight.per_t / kg_per_t]), np.zeros(1),
        (Way((), position),),
    )  # fmt: skip
    if low <= 0.0:
        return line
    level = _level(low, total.at(piece.low_t), freight.at(piece.low_t), Way(((position, low),), -1))
    return level if high <= low else _joined(level, line)


def cheaper(one: CostCurve, other: CostCurve) -> CostCurve:
    """The lower envelope of two curves; of equal costs the smaller surplus, then the first."""
    ends = np.union1d(one.high_kg, other.high_kg)
    starts = np.concatenate([[0.0], ends[:-1]])
    i, j = one.piece(ends), other.piece(ends)
    has_one, has_other = i < one.high_kg.size, j < other.high_kg.size
    i, j = np.minimum(i, one.high_kg.size - 1), np.minimum(j, other.high_kg.size - 1)
    fixed, slope = one.fixed[i] - other.fixed[j], one.slope[i] - other.slope[j]
    i_slope, j_slope = np.abs(one.slope[i]), np.abs(other.slope[j])
    open_ended = np.isinf(ends)
    far = np.where(open_ended, 2.0 * starts + 1.0, ends)
    left, right = (_settled(fixed + slope * at, one.fixed[i], i_slope * at) for at in (starts, far))
    steeper = np.where(np.abs(slope) > _TIE * (i_slope + j_slope), slope, 0.0)
    right = np.where(open_ended, np.where(steeper == 0.0, left, steeper), right)
    with np.errstate(invalid="ignore", divide="ignore"):
        crossing = np.where(left * right < 0.0, -fixed / slope, np.nan)
    split = has_one & has_other & (crossing > starts) & (crossing < ends)
    tie = (left == 0.0) & (right == 0.0)
    fewer = other.surplus_kg[j] < one.surplus_kg[i]
    other_first = np.where(tie, fewer, np.where(left == 0.0, right > 0.0, left > 0.0))
    other_first = np.where(has_one & has_other, other_first, ~has_one)
    pick_end = np.concatenate([ends, crossing[split]])
    pick_other = np.concatenate([other_first ^ split, other_first[split]])
    source = np.concatenate([np.arange(ends.size), np.flatnonzero(split)])
    order = np.argsort(pick_end, kind="stable")
    return _picked(one, other, i, j, pick_end[order], pick_other[order], source[order])


def _settled(difference: FloatArray, fixed: FloatArray, sloped: FloatArray) -> FloatArray:
    """Differences of cost, those of a rounding's size made 0."""
    return np.where(np.abs(difference) <= _TIE * (np.abs(fixed) + sloped), 0.0, difference)


def _picked(
    one: CostCurve, other: CostCurve, i: IntArray, j: IntArray, ends: FloatArray,
    from_other: NDArray[np.bool_], source: IntArray,
) -> CostCurve:  # fmt: skip
    """Put an envelope together from pieces of two curves, neighbours of one piece joined."""
    joined = _joined(one, other)
    piece = np.where(from_other, one.high_kg.size + j[source], i[source])
    last = np.append(piece[1:] != piece[:-1], True)
    return joined.take(piece[last], ends[last])


def _sums(one: CostCurve, other: CostCurve, *, forced: bool) -> list[CostCurve]:
    """Curves whose least is that of buying on both, all but one offer at an end of a piece.

    Where the first curve is forced (contracts signed already), buying nothing on it is an end too.
    """
    first = [other.shifted(*vertex) for vertex in one.vertices(with_origin=forced)]
    second = [one.shifted(*vertex) for vertex in other.vertices(with_origin=forced)]
    return [*first, *second]


def _least_of(curves: Sequence[CostCurve]) -> CostCurve:
    """Lower envelope of many curves, pairwise."""
    left = list(curves)
    while len(left) > 1:
        pairs = [cheaper(a, b) for a, b in zip(left[::2], left[1::2], strict=False)]
        left = [*pairs, left[-1]] if len(left) % 2 else pairs
    return left[0]


def _alone(offer: Offer, position: int) -> CostCurve | None:
    pieces = pieces_of(offer)
    if not pieces:
        return None
    return _least_of([_straight(piece, position, offer) for piece in pieces])


@lru_cache(maxsize=4096)
def curve_of(offers: tuple[Offer, ...]) -> CostCurve | None:
    """Least cost of a reagent's demand over every split between its offers.

    Parameters
    ----------
    offers
        All offers of one reagent; ways name them by their position.

    Returns
    -------
    CostCurve or None
        None where nothing can be bought at all.

    Notes
    -----
    Once the offers used and their pieces are chosen, the cheapest amounts solve a linear program
    with one covering row, so at an optimum all but one offer stand at an end of their piece. The
    curve of two groups of offers together is therefore the least of one group's ends followed by
    the other's curve, both ways, and of either group alone. Where every offer is one straight line
    without upper end or fixed cost, all of the demand goes to one of them: with ``k`` the least
    unit cost among those used, ``c_k sum q <= sum c_i q_i``, and ``k`` alone covers the demand and
    keeps its least order.
    """
    every = [(offer, _alone(offer, k)) for k, offer in enumerate(offers)]
    curves = [(offer, curve) for offer, curve in every if curve is not None]
    if not curves:
        return None
    if all(_never_split(offer) for offer, _ in curves):
        return _least_of([curve for _, curve in curves])
    if len(curves) > MOST_SPLIT:
        return _lower_line(curves, [k for k, (_, curve) in enumerate(every) if curve is not None])
    signed = [curve for offer, curve in curves if offer.signed]
    both: CostCurve | None = None
    for curve in signed:
        both = curve if both is None else _least_of(_sums(both, curve, forced=True))
    at_zero = 0.0 if both is None else float(both.fixed[0])
    for curve in (curve for offer, curve in curves if not offer.signed):
        if both is None:
            both = curve
            continue
        alone = [] if signed else [curve]
        both = _least_of([both, *_sums(both, curve, forced=bool(signed)), *alone])
    assert both is not None, "some offer has a curve"
    return replace(both, at_zero=at_zero)


def is_exact(offers: Sequence[Offer]) -> bool:
    """Whether the curve of these offers is the least cost and no lower value."""
    some = [offer for offer in offers if pieces_of(offer)]
    return len(some) <= MOST_SPLIT or all(_never_split(offer) for offer in some)


def _lower_line(curves: Sequence[tuple[Offer, CostCurve]], positions: Sequence[int]) -> CostCurve:
    """A lower value for very many offers: every kg at the least average cost of any offer."""
    sunk = math.fsum(curve.fixed[0] for offer, curve in curves if offer.signed)
    best, free, most = math.inf, 0, 0.0
    for (offer, curve), position in zip(curves, positions, strict=True):
        paid = float(curve.fixed[0]) if offer.signed else 0.0
        slopes = [(cost - paid) / kg for kg, cost, *_ in curve.vertices(with_origin=False) if kg]
        if math.isinf(curve.high_kg[-1]):
            slopes.append(float(curve.slope[-1]))
        most += float(curve.high_kg[-1])
        if min(slopes) < best:
            best, free = min(slopes), position
    zero = np.zeros(1)
    return CostCurve(
        np.array([most]), np.array([sunk]), np.array([best]), zero, zero, zero,
        (Way((), free),), at_zero=sunk,
    )  # fmt: skip


def _never_split(offer: Offer) -> bool:
    (first, *others) = pieces_of(offer)
    return not others and not offer.signed and math.isinf(first.high_t) and not first.total.fixed

"""What a year on one offer costs: straight pieces over the tonnes bought.

Owns the way from an offer's terms to its yearly cost, by cause; the terms themselves are explained
in `optimiser.offer`. Choosing between offers is `optimiser.purchasing`.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from functools import lru_cache

from optimiser.offer import ALL_UNITS, Offer

GOODS, FREIGHT, SHORTFALL, FEES, REBATE = "goods", "freight", "not taken", "fees", "rebate"
CAUSES = (GOODS, FREIGHT, SHORTFALL, FEES, REBATE)
"""Causes of purchasing cost, in the order they are printed."""


@dataclass(frozen=True, slots=True)
class Amount:
    """A straight cost: ``fixed + per_t * tonnes``."""

    fixed: float = 0.0
    per_t: float = 0.0

    def at(self, tonnes: float) -> float:
        """Cost of so many tonnes."""
        return self.fixed + self.per_t * tonnes

    def plus(self, other: Amount) -> Amount:
        """Return the sum."""
        return Amount(self.fixed + other.fixed, self.per_t + other.per_t)

    def times(self, factor: float) -> Amount:
        """Return the multiple."""
        return Amount(factor * self.fixed, factor * self.per_t)


@dataclass(frozen=True, slots=True, kw_only=True)
class Piece:
    """A range of tonnes over which every cause is straight; ``tier`` counts from 1."""

    low_t: float
    high_t: float
    costs: Mapping[str, Amount] = field(hash=False)
    tier: int

    @property
    def total(self) -> Amount:
        """All causes together."""
        total = Amount()
        for amount in self.costs.values():
            total = total.plus(amount)
        return total


@lru_cache(maxsize=4096)
def pieces_of(offer: Offer) -> tuple[Piece, ...]:
    """Cost of a year on an offer that is used, over the tonnes bought.

    Parameters
    ----------
    offer
        Terms that were checked.

    Returns
    -------
    tuple of Piece
        In order of tonnes, without gaps from the least to the most that can be bought; empty where
        nothing can be. The pieces are closed: where the cost falls at an edge (a tier reached,
        freight that becomes free) the edge belongs to both and the cheaper one counts. Whole packs
        are left out here.

    Notes
    -----
    With ``G`` the goods by the tiers, less rebate, and ``c`` the tonnes of take-or-pay, goods cost
    ``G(max(Q, c))``. Freight is ``f_t Q + f_d max(1, Q / load)`` or ``f_t Q + f_d n``.
    """
    low = _least(offer)
    high = offer.most_t
    if low > high:
        return ()
    cuts = sorted({low, *(cut for cut in _cuts(offer) if low < cut < high), high})
    if len(cuts) == 1:
        cuts *= 2
    pieces: list[Piece] = []
    for left, right in itertools.pairwise(cuts):
        piece = _piece(offer, left, right)
        if pieces and pieces[-1].costs == piece.costs and pieces[-1].tier == piece.tier:
            piece = replace(piece, low_t=pieces.pop().low_t)
        pieces.append(piece)
    return (*_nothing_drawn(offer, pieces[0]), *pieces)


def _nothing_drawn(offer: Offer, first: Piece) -> list[Piece]:
    """What is signed (already, or in a bundle) may stay idle unless it obliges to a yearly amount.

    Nothing is delivered then; take-or-pay and fees are due all the same.
    """
    obliges = offer.least_order_t > 0.0 and offer.least_order_per == "year"
    if not (offer.signed or offer.bundle) or obliges:
        return []
    costs = {
        cause: Amount(amount.fixed)
        for cause, amount in _piece(offer, 0.0, min(_cuts_above_0(offer))).costs.items()
        if cause != FREIGHT
    }
    idle = replace(first, low_t=0.0, high_t=0.0, costs={**costs, FREIGHT: Amount()}, tier=1)
    is_there = first.low_t <= 0.0 and first.total.fixed == idle.total.fixed
    return [] if is_there else [idle]


def _cuts_above_0(offer: Offer) -> list[float]:
    return [cut for cut in _cuts(offer) if cut > 0.0] or [math.inf]


def orders_in_a_year(offer: Offer, tonnes: float) -> float | None:
    """Orders a year at so many tonnes; None where the offer does not say how it is ordered."""
    if tonnes <= 0.0:
        return 0.0
    if offer.orders_per_year > 0.0:
        return offer.orders_per_year
    return max(1.0, tonnes / offer.order_size_t) if offer.order_size_t > 0.0 else None


def costs_at(offer: Offer, tonnes: float) -> tuple[dict[str, float], int]:
    """Cost by cause of a year on an offer that is used, and the tier reached.

    Tonnes outside the offer's range count as its nearest end.
    """
    pieces = pieces_of(offer)
    tonnes = min(max(tonnes, pieces[0].low_t), pieces[-1].high_t)
    holding = [piece for piece in pieces if piece.low_t <= tonnes <= piece.high_t]
    best = min(holding, key=lambda piece: piece.total.at(tonnes))
    return {cause: amount.at(tonnes) for cause, amount in best.costs.items()}, best.tier


def least_bought_t(offer: Offer) -> float:
    """Least that is bought where an offer is used, in whole packs. [t/year]"""
    return whole_packs_t(offer, _least(offer)) if offer.pack_t > 0.0 else _least(offer)


def whole_packs_t(offer: Offer, tonnes: float) -> float:
    """Round tonnes up to whole packs, one at least where the offer comes in packs."""
    if offer.pack_t <= 0.0:
        return tonnes
    return offer.pack_t * max(1.0, math.ceil(tonnes / offer.pack_t * (1.0 - 1e-12)))


def _least(offer: Offer) -> float:
    low = offer.least_order_t
    if offer.least_order_per == "order" and offer.orders_per_year > 0.0:
        low *= offer.orders_per_year
    return max(low, offer.pack_t)


def _orders_scale(offer: Offer) -> float:
    """Yearly tonnes at which an order has a size, per tonne of that size."""
    return offer.orders_per_year if offer.orders_per_year > 0.0 else 1.0


def _free_from(offer: Offer) -> float:
    """Yearly tonnes from which freight is free."""
    size = offer.freight_free_from_t
    out_of_reach = 0.0 < offer.order_size_t < size
    return size * _orders_scale(offer) if size > 0.0 and not out_of_reach else math.inf


def _tier_starts(offer: Offer) -> list[tuple[float, float, int]]:
    """Yearly tonnes from which each tier that can be reached counts, its price, its number."""
    starts = [(0.0, offer.price_per_t, 1)]
    by_order = offer.tier_per == "order"
    for number, tier in enumerate(offer.tiers, start=2):
        if by_order and 0.0 < offer.order_size_t < tier.from_t:
            break
        start = tier.from_t * (_orders_scale(offer) if by_order else 1.0)
        starts.append((start, offer.to_price_per_t(tier.price), number))
    return starts


def _cuts(offer: Offer) -> list[float]:
    cuts = [start for start, _, _ in _tier_starts(offer)]
    cuts += [offer.order_size_t, _free_from(offer), offer.take_or_pay_t]
    if offer.rebate is not None:
        cuts.append(offer.rebate.above_t)
    return cuts


def _piece(offer: Offer, left: float, right: float) -> Piece:
    """The piece between two neighbouring cuts."""
    inside = left + 1.0 if math.isinf(right) else 0.5 * (left + right)
    goods, tier = _goods(offer, max(inside, offer.take_or_pay_t))
    rebate = _rebate(offer, max(inside, offer.take_or_pay_t))
    costs = {GOODS: goods, FREIGHT: _freight(offer, inside)}
    if inside < offer.take_or_pay_t:
        paid = goods.at(offer.take_or_pay_t)
        taken = Amount(0.0, paid / offer.take_or_pay_t)
        costs[GOODS] = taken
        costs[SHORTFALL] = Amount(paid).plus(taken.times(-1.0))
        rebate = Amount(rebate.at(offer.take_or_pay_t))
    if rebate != Amount():
        costs[REBATE] = rebate
    if offer.mobilisation_fee > 0.0 and not offer.signed:
        costs[FEES] = Amount(offer.mobilisation_fee * offer.currency_rate / offer.term_years)
    return Piece(low_t=left, high_t=right, costs=costs, tier=tier)


def _goods(offer: Offer, tonnes: float) -> tuple[Amount, int]:
    """Goods around so many tonnes (not at an edge), and the tier."""
    starts = _tier_starts(offer)
    reached = max(k for k, (start, _, _) in enumerate(starts) if start <= tonnes)
    price, tier = starts[reached][1:]
    if offer.tier_kind == ALL_UNITS or reached == 0:
        return Amount(0.0, price), tier
    paid = 0.0
    for (start, one, _), (end, _, _) in itertools.pairwise(starts[: reached + 1]):
        paid += one * (end - start)
    fixed = paid - price * starts[reached][0]
    load = offer.order_size_t
    if offer.tier_per == "order" and 0.0 < load < tonnes:
        return Amount(0.0, price + fixed / load), tier
    return Amount(fixed, price), tier


def _rebate(offer: Offer, tonnes: float) -> Amount:
    """What comes back on the goods paid for so many tonnes (not at an edge)."""
    rebate = offer.rebate
    if rebate is None or tonnes < rebate.above_t:
        return Amount()
    goods, _ = _goods(offer, tonnes)
    if rebate.on == "all":
        return goods.times(-rebate.fraction)
    if offer.tier_kind == ALL_UNITS:
        excess = Amount(-goods.per_t * rebate.above_t, goods.per_t)
    else:
        before, _ = _goods(offer, rebate.above_t)
        excess = Amount(goods.fixed - before.at(rebate.above_t), goods.per_t)
    return excess.times(-rebate.fraction)


def _freight(offer: Offer, tonnes: float) -> Amount:
    if tonnes >= _free_from(offer):
        return Amount()
    rate, load = offer.currency_rate, offer.order_size_t
    amount = Amount(0.0, offer.freight_per_t * rate)
    if offer.freight_per_drop > 0.0:
        drop = offer.freight_per_drop * rate
        if offer.orders_per_year > 0.0:
            amount = amount.plus(Amount(drop * offer.orders_per_year))
        elif tonnes > load:
            amount = amount.plus(Amount(0.0, drop / load))
        else:
            amount = amount.plus(Amount(drop))
    return amount

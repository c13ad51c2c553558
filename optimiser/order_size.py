"""How much to order at a time where a product is used steadily.

Owns what one order costs in straight pieces, and the size at which fees, goods and holding together
cost least. Orders of a year whose use changes are `optimiser.order_plan`.

Ford W. Harris (How many parts to make at once, Factory, The Magazine of Management 10, 1913,
135-136) balances the fee of an order against the holding of what it brings:
``Q = sqrt(2 D K / (i p))``. With price breaks the formula holds on each straight piece of the cost
of an order; outside its piece it gives way to the piece's nearest end, and the cheapest candidate
of all pieces is the answer. On a piece that costs ``a + b Q`` the fixed part ``a`` acts like a fee,
so the same formula serves all-units prices (``a = 0``), incremental ones (``a`` is what the dearer
slices before it cost more) and several loads an order.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass

from optimiser.offer import ALL_UNITS, INCREMENTAL, Offer, Tier

_MOST_LOADS = 100_000
_NEAR = 1e-9


@dataclass(frozen=True, slots=True, kw_only=True)
class OrderTerms:
    """What decides the size of an order; money in one currency, tonnes of product.

    ``tiers`` are by the tonnes of one order, the first from 0. ``order_fee`` falls due with every
    order and ``drop_fee`` with every load of at most ``load_t``. ``freight_free_from_t`` frees an
    order of that size from ``freight_per_t`` and ``drop_fee``. Holding costs
    ``holding_fraction`` of the goods' price a year. ``pack_t`` 0: any amount.
    """

    tiers: tuple[Tier, ...]
    tier_kind: str = ALL_UNITS
    order_fee: float = 0.0
    drop_fee: float = 0.0
    load_t: float = math.inf
    freight_per_t: float = 0.0
    freight_free_from_t: float = math.inf
    holding_fraction: float = 0.0
    least_t: float = 0.0
    most_t: float = math.inf
    pack_t: float = 0.0


@dataclass(frozen=True, slots=True, kw_only=True)
class OrderPiece:
    """Sizes over which an order costs ``goods + freight`` on a straight line, fees apart.

    Goods cost ``goods_fixed + goods_per_t * Q``, freight ``freight_fixed + freight_per_t * Q``.
    """

    low_t: float
    high_t: float
    goods_fixed: float
    goods_per_t: float
    freight_fixed: float
    freight_per_t: float

    def goods(self, tonnes: float) -> float:
        """Goods of an order."""
        return self.goods_fixed + self.goods_per_t * tonnes

    def freight(self, tonnes: float) -> float:
        """Freight of an order."""
        return self.freight_fixed + self.freight_per_t * tonnes


@dataclass(frozen=True, slots=True, kw_only=True)
class OrderSize:
    """The cheapest order and what a year of such orders costs by cause."""

    size_t: float
    orders_per_year: float
    goods_per_year: float
    freight_per_year: float
    fees_per_year: float
    holding_per_year: float

    @property
    def total_per_year(self) -> float:
        """All causes."""
        return math.fsum(
            (self.goods_per_year, self.freight_per_year, self.fees_per_year, self.holding_per_year)
        )


def terms_of_offer(offer: Offer, *, order_fee: float, holding_fraction: float) -> OrderTerms:
    """The terms of an order on an offer: an order is one delivery, of one load at most.

    Prices by the tonnes of a year do not depend on the order; the first tier stands for them.
    """
    tiers = [Tier(from_t=0.0, price=offer.price_per_t)]
    load = offer.order_size_t or math.inf
    if offer.tier_per == "order":
        tiers += [
            Tier(from_t=tier.from_t, price=offer.to_price_per_t(tier.price))
            for tier in offer.tiers
            if tier.from_t <= load
        ]
    rate = offer.currency_rate
    return OrderTerms(
        tiers=tuple(tiers), tier_kind=offer.tier_kind or ALL_UNITS, order_fee=order_fee,
        drop_fee=offer.freight_per_drop * rate, freight_per_t=offer.freight_per_t * rate,
        freight_free_from_t=offer.freight_free_from_t or math.inf, load_t=load, most_t=load,
        holding_fraction=holding_fraction, pack_t=offer.pack_t,
        least_t=offer.least_order_t if offer.least_order_per == "order" else 0.0,
    )  # fmt: skip


def order_pieces(terms: OrderTerms) -> tuple[OrderPiece, ...]:
    """Cost of an order of one load over its size, without gaps from the least to the most.

    Where the cost falls at an edge, the edge belongs to both pieces and the cheaper one counts.
    Empty where no order fits.
    """
    low, high = _ends(terms)
    high = min(high, terms.load_t)
    return tuple(_pieces(terms, low, high, loads=1))


def steady_order(use_t_per_year: float, terms: OrderTerms) -> OrderSize | None:
    """The order size that costs least where a product is used steadily.

    Parameters
    ----------
    use_t_per_year
        Product used in a year. [t/year]
    terms
        Prices, fees, and the sizes that are possible.

    Returns
    -------
    OrderSize or None
        None where no order is possible. Without any holding cost the largest order is best, and
        that needs a greatest size.

    Raises
    ------
    ValueError
        The use is no positive number, or the best order has no end.

    Notes
    -----
    A year costs ``D C(Q)/Q + i G(Q)/2`` with ``C`` the cost of an order, fees included, and ``G``
    its goods. Loads are tried in rising number as long as one more may still pay.

    Examples
    --------
    >>> terms = OrderTerms(tiers=(Tier(from_t=0.0, price=500.0),), order_fee=80.0,
    ...                    holding_fraction=0.2)
    >>> best = steady_order(50.0, terms)
    >>> round(best.size_t, 3), round(best.holding_per_year, 2), round(best.fees_per_year, 2)
    (8.944, 447.21, 447.21)
    """
    if not 0.0 < use_t_per_year < math.inf:
        raise ValueError(f"a use of {use_t_per_year!r} t a year")
    if terms.holding_fraction <= 0.0 and math.isinf(terms.most_t):
        raise ValueError("without a holding cost or a greatest order the best order has no end")
    best: OrderSize | None = None
    for loads in range(1, _MOST_LOADS):
        low, high = _ends(terms)
        first = (loads - 1) * terms.load_t if loads > 1 else 0.0
        low, high = max(low, first), min(high, loads * terms.load_t)
        if first >= _ends(terms)[1] or (best is not None and _cannot_pay(first, terms, best)):
            break
        for piece in _pieces(terms, low, high, loads):
            for size in _candidates(use_t_per_year, terms, piece):
                found = _year(use_t_per_year, terms, size)
                if best is None or found.total_per_year < best.total_per_year:
                    best = found
    return best


def _ends(terms: OrderTerms) -> tuple[float, float]:
    """Least and greatest order, in whole packs where there are packs."""
    low, high, pack = terms.least_t, terms.most_t, terms.pack_t
    if pack > 0.0:
        low = pack * max(1.0, math.ceil(low / pack * (1.0 - _NEAR)))
        high = high if math.isinf(high) else pack * math.floor(high / pack * (1.0 + _NEAR))
    return low, high


def _pieces(terms: OrderTerms, low: float, high: float, loads: int) -> Iterator[OrderPiece]:
    if low > high or high <= 0.0:
        return
    edges = [*(tier.from_t for tier in terms.tiers), terms.freight_free_from_t]
    cuts = [low, *sorted({edge for edge in edges if low < edge < high}), high]
    for left, right in itertools.pairwise(cuts):
        inside = 0.5 * (left + right) if math.isfinite(right) else left + 1.0
        yield _piece(terms, left, right, inside, loads)
    if high in edges and math.isfinite(high):  # the edge itself has what it opens
        yield _piece(terms, high, high, high, loads)


def _piece(
    terms: OrderTerms, left: float, right: float, inside: float, loads: int
) -> OrderPiece:  # fmt: skip
    reached = [tier for tier in terms.tiers if tier.from_t <= inside]
    price, fixed = reached[-1].price, 0.0
    if terms.tier_kind == INCREMENTAL:
        fixed = math.fsum(
            (before.price - after.price) * after.from_t
            for before, after in itertools.pairwise(reached)
        )
    free = inside >= terms.freight_free_from_t
    return OrderPiece(
        low_t=left, high_t=right, goods_fixed=fixed, goods_per_t=price,
        freight_fixed=0.0 if free else loads * terms.drop_fee,
        freight_per_t=0.0 if free else terms.freight_per_t,
    )  # fmt: skip


def _candidates(use: float, terms: OrderTerms, piece: OrderPiece) -> Iterator[float]:
    """Harris' size of a piece, its ends, and the whole packs around them."""
    fixed = terms.order_fee + piece.goods_fixed + piece.freight_fixed
    holding = 0.5 * terms.holding_fraction * piece.goods_per_t
    sizes = [piece.low_t, piece.high_t]
    if holding > 0.0 and fixed > 0.0:
        sizes.append(math.sqrt(use * fixed / holding))
    for size in sizes:
        inside = min(max(size, piece.low_t), piece.high_t)
        if terms.pack_t <= 0.0:
            tried: Sequence[float] = (inside,)
        elif math.isfinite(inside):
            below = terms.pack_t * math.floor(inside / terms.pack_t * (1.0 + _NEAR))
            tried = (below, below + terms.pack_t)
        else:
            tried = ()
        for one in tried:
            if 0.0 < one < math.inf and _within(one, piece):
                yield one


def _within(size: float, piece: OrderPiece) -> bool:
    return piece.low_t * (1.0 - _NEAR) <= size <= piece.high_t * (1.0 + _NEAR)


def _year(use: float, terms: OrderTerms, size: float) -> OrderSize:
    loads = max(1, math.ceil(size / terms.load_t * (1.0 - _NEAR)))
    piece = _piece(terms, size, size, size * (1.0 + _NEAR), loads)
    orders = use / size
    return OrderSize(
        size_t=size, orders_per_year=orders, goods_per_year=orders * piece.goods(size),
        freight_per_year=orders * piece.freight(size), fees_per_year=orders * terms.order_fee,
        holding_per_year=0.5 * terms.holding_fraction * piece.goods(size),
    )  # fmt: skip


def _cannot_pay(from_t: float, terms: OrderTerms, best: OrderSize) -> bool:
    """Whether every order above so many tonnes costs more: its holding alone eats the gain.

    Goods and freight cost at least the lowest price; what is left to gain is what the best pays
    above that.
    """
    lowest = min(tier.price for tier in terms.tiers)
    least_goods = best.size_t * best.orders_per_year * lowest
    return 0.5 * terms.holding_fraction * lowest * from_t + least_goods >= best.total_per_year

"""One offer's part in a store over the weeks of a year, and the orders that are found for it.

Owns the types that `optimiser.lot_sizing` works on, and what follows from them without a solver.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

from optimiser.order_size import OrderPiece

SLACK = 1e-7
"""Share of a pack or an order that is rounding, no amount."""

_NOTHING_T = 1e-6


@dataclass(frozen=True, slots=True, kw_only=True)
class LotOffer:
    """One offer's part in a store, by week; tonnes of product.

    Attributes
    ----------
    use_t, floor_t, fees
        By week: what is used, the least stock at its end, what an order costs beside goods and
        freight.
    pieces
        What one order costs over its size.
    least_total_t
        At least so much is ordered in all.
    shelf_weeks
        Weeks from the start of the one it is delivered in, by whose end it must be used.
    deliveries_per_week
        Most orders in a week.
    volume_per_t
        What a tonne takes up of the store, in its unit.
    value_per_t
        What a tonne written off is worth.
    """

    key: str
    use_t: tuple[float, ...]
    floor_t: tuple[float, ...]
    fees: tuple[float, ...]
    pieces: tuple[OrderPiece, ...]
    holding_per_t_and_week: float
    opening_t: float = 0.0
    least_total_t: float = 0.0
    pack_t: float = 0.0
    orders: int | None = None
    shelf_weeks: int | None = None
    deliveries_per_week: int = 1
    volume_per_t: float = 1.0
    value_per_t: float = 0.0

    @property
    def held_floor_t(self) -> tuple[float, ...]:
        """Least stock at the end of each week.

        It falls no faster than it is used; where nothing is wasted, what was delivered so far is a
        whole number of packs.
        """
        held, last, used = [], self.opening_t, 0.0
        in_packs = self.pack_t > 0.0 and not self.may_waste
        for use, floor in zip(self.use_t, self._floors, strict=True):
            last, used = max(floor, last - use), used + use
            if in_packs:
                packs = math.ceil((last + used - self.opening_t) / self.pack_t - SLACK)
                last = max(last, packs * self.pack_t + self.opening_t - used)
            held.append(last)
        return tuple(held)

    def reach_t(self, week: int) -> float:
        """What is used before something delivered in a week is past its shelf life."""
        if self.shelf_weeks is None:
            return math.inf
        count = len(self.use_t)
        last = week + self.shelf_weeks
        return math.fsum(self.use_t[k % count] for k in range(week, last))

    @property
    def may_waste(self) -> bool:
        """Whether anything may be thrown away: more is bought than used, or orders outlast it."""
        least = min((piece.low_t for piece in self.pieces), default=0.0)
        shortest = min(map(self.reach_t, range(len(self.use_t))))
        surplus = self.least_total_t - math.fsum(self.use_t)
        return surplus > self.pack_t + _NOTHING_T or least > shortest

    def in_packs(self, tonnes: float) -> float:
        """The whole packs in an amount."""
        if self.pack_t <= 0.0 or math.isinf(tonnes):
            return tonnes
        return self.pack_t * math.floor(tonnes / self.pack_t + SLACK)

    @property
    def _floors(self) -> tuple[float, ...]:
        return (*self.floor_t[:-1], max(self.floor_t[-1], self.opening_t))


@dataclass(frozen=True, slots=True, kw_only=True)
class Delivery:
    """One order: the week it comes in (from 0), its size and cost without fees."""

    week: int
    tonnes: float
    goods: float
    freight: float


@dataclass(frozen=True, slots=True, kw_only=True)
class LotPlan:
    """The orders of one offer and its stock at the end of each week. [t]"""

    deliveries: tuple[Delivery, ...]
    stock_t: tuple[float, ...]
    written_off_t: tuple[float, ...]

"""One supplier's terms for one product of one reagent.

Owns the terms as frozen types and the prices that follow from them. What each term means is written
here, in one place; what a year on an offer costs is worked out in `optimiser.offer_cost`.

The terms and how each is costed, for ``Q`` tonnes of product bought in a year:

- **price**: per tonne, short ton, litre or pack, of the product or of its dry active part; turned
  into a price per tonne of product by strength, density and pack.
- **index**: the price moves by ``pass_through * (now / base - 1)``, kept between the greatest fall
  and the greatest rise agreed.
- **strength deduction**: per cent of the price, for every full point of strength below the one
  certified; nothing for better.
- **currency**: every amount of the offer times a dated rate; costs are in the site's currency.
- **orders**: a fixed number of equal orders a year, or full loads of a given size. Loads are a
  yearly average, ``max(1, Q / load)``, because what the last load leaves over is next year's first.
- **tiers**: the price by the tonnes bought in a year or by the tonnes of an order. With
  ``all_units`` the price reached holds for everything, with ``incremental`` each slice has its own.
- **least order**: where the offer is used, ``Q`` is at least that much (per year), or at least
  that much times the orders a year (per order).
- **packs**: ``Q`` is a whole number of packs.
- **freight**: per tonne, plus per delivery; nothing of either for an order at or above the size
  that travels free.
- **take-or-pay**: where the offer is signed the goods of at least that many tonnes are paid, taken
  or not; what is not taken has no freight.
- **volume cap**: ``Q`` is at most that much; of a contract already signed, what is left of it.
- **rebate**: at the year's end, per cent of the goods paid, once the volume paid reaches a
  threshold; on all of them or on the excess over the threshold.
- **mobilisation**: a one-off fee where the offer is used, spread over the contract's term.
- **signed already**: what the contract commits to is paid whatever is bought (sunk), and its
  mobilisation is past.
- **bundle**: offers of one bundle are signed together or not at all; where they are, each of their
  reagents is bought on the bundle and on contracts signed already, and nowhere else.
- **framework agreement**: offers of one framework share a yearly fee where any of them is used, a
  cap on their tonnes together, and a rebate on the goods taken on all of them once their tonnes
  together reach a threshold.
- **supplier's share**: of the amount of the reagent bought in a year, at most so much from one
  supplier; at least so much where anything is bought there. A greatest share below 100 % on every
  supplier is dual sourcing.

Lead time, deposit and terms of payment are kept as they were written and cost nothing here.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

from chemistry.units import price_per_short_ton_to_price_per_t

KG_PER_T = 1000.0

PRICE_UNITS = ("t", "short_ton", "L", "pack")
PRICE_BASES = ("product", "active")
LEAST_ORDER_PERIODS = ("order", "year")
TIER_PERIODS = ("order", "year")
ALL_UNITS, INCREMENTAL = "all_units", "incremental"
TIER_KINDS = (ALL_UNITS, INCREMENTAL)
REBATE_KINDS = ("all", "excess")


@dataclass(frozen=True, slots=True, kw_only=True)
class Tier:
    """A price from so many tonnes of product on; it is for what the offer's price is for."""

    from_t: float
    price: float


@dataclass(frozen=True, slots=True, kw_only=True)
class IndexClause:
    """How a price follows an index: shares and the index at its base and now."""

    name: str = ""
    base: float
    now: float
    pass_through_fraction: float = 1.0
    most_fall_fraction: float = 1.0
    most_rise_fraction: float = math.inf

    @property
    def factor(self) -> float:
        """What the price is multiplied by."""
        change = self.pass_through_fraction * (self.now / self.base - 1.0)
        return 1.0 + min(max(change, -self.most_fall_fraction), self.most_rise_fraction)


@dataclass(frozen=True, slots=True, kw_only=True)
class Rebate:
    """A share of the goods paid back at the year's end, on ``all`` of them or on the ``excess``."""

    fraction: float
    above_t: float
    on: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Framework:
    """What the offers of one framework agreement share; tonnes are of all of them in a year."""

    name: str
    fee_per_year: float = 0.0
    most_t: float = math.inf
    rebate_fraction: float = 0.0
    rebate_above_t: float = 0.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Offer:
    """One supplier's terms for one product of one reagent; what they mean stands above.

    ``price`` is for what ``price_per`` and ``price_for`` say; ``strength_fraction`` is kg of pure
    compound per kg of product, and ``active_fraction`` the strength in the words of the trade (as
    CaO, as Na2O) where the price is for the active part. ``tiers`` are those after the first, which
    starts at 0 with ``price``. Tonnes are product as delivered; 0 stands for a term that the offer
    does not have.
    """

    offer: str
    supplier: str
    reagent: str
    product: str
    form: str
    strength_fraction: float
    density_kg_per_l: float
    price: float
    price_per: str
    freight_per_t: float = 0.0
    least_order_t: float = 0.0
    valid_until: str = ""
    note: str = ""
    price_for: str = "product"
    active_fraction: float | None = None
    pack_t: float = 0.0
    least_order_per: str = "order"
    orders_per_year: float = 0.0
    order_size_t: float = 0.0
    freight_per_drop: float = 0.0
    freight_free_from_t: float = 0.0
    tiers: tuple[Tier, ...] = ()
    tier_kind: str = ""
    tier_per: str = ""
    take_or_pay_t: float = 0.0
    most_t_per_year: float = math.inf
    rebate: Rebate | None = None
    mobilisation_fee: float = 0.0
    term_years: float = 1.0
    index: IndexClause | None = None
    strength_deduction_fraction: float = 0.0
    currency: str = ""
    currency_rate: float = 1.0
    currency_rate_date: str = ""
    bundle: str = ""
    framework: Framework | None = None
    least_share_fraction: float = 0.0
    most_share_fraction: float = 1.0
    signed: bool = False
    left_t: float = math.inf
    ends_on: str = ""
    valid_from: str = ""
    lead_time_d: float = 0.0
    shelf_life_d: float = 0.0
    deposit: str = ""
    payment: str = ""

    @property
    def kg_pure_per_t(self) -> float:
        """Pure compound in a tonne of product. [kg/t]"""
        return KG_PER_T * self.strength_fraction

    @property
    def price_per_t(self) -> float:
        """Price of the first tier per tonne of product, without freight. [site's currency/t]"""
        return self.to_price_per_t(self.price)

    @property
    def most_t(self) -> float:
        """Most that can be bought in a year. [t]"""
        return min(self.most_t_per_year, self.left_t)

    def to_price_per_t(self, price: float) -> float:
        """Turn a price in the offer's words into one per tonne of product, as it is paid."""
        per_t = 1.0
        if self.price_per == "short_ton":
            per_t = price_per_short_ton_to_price_per_t(per_t)
        elif self.price_per == "L":
            per_t = KG_PER_T / self.density_kg_per_l
        elif self.price_per == "pack":
            per_t = 1.0 / self.pack_t
        if self.price_for == "active":
            per_t *= (
                self.strength_fraction if self.active_fraction is None else self.active_fraction
            )
        index = 1.0 if self.index is None else self.index.factor
        deduction = 1.0 - self.strength_deduction_fraction
        return price * per_t * index * deduction * self.currency_rate

    def priced_at(self, price_per_t: float) -> Offer:
        """Return the offer with its first tier at this price per tonne, all tiers in proportion."""
        now = self.price_per_t
        factor = price_per_t / now if now > 0.0 else 0.0
        plain = replace(
            self, price=price_per_t, price_per="t", price_for="product", index=None,
            strength_deduction_fraction=0.0, tiers=(), currency_rate=1.0,
        )  # fmt: skip
        return replace(
            plain,
            tiers=tuple(
                Tier(from_t=t.from_t, price=factor * self.to_price_per_t(t.price))
                for t in self.tiers
            ),
            freight_per_t=self.freight_per_t * self.currency_rate,
            freight_per_drop=self.freight_per_drop * self.currency_rate,
            mobilisation_fee=self.mobilisation_fee * self.currency_rate,
        )

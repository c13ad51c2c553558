"""Purchases agree with plain enumeration that reads the terms in its own way."""

from __future__ import annotations

import itertools
import math
import random
from collections.abc import Sequence
from dataclasses import replace
from typing import Any

import pytest

from optimiser.errors import NoPurchase
from optimiser.offer import Framework, IndexClause, Offer, Rebate, Tier
from optimiser.price_book import PriceBook
from optimiser.purchasing import purchase

REAGENT, OTHER = "caustic_soda", "soda_ash"


# --- a year's cost of one offer, read from its words ---------------------------------------------


def invoice(offer: Offer, tonnes: float) -> float:
    """What is paid in a year for so many tonnes, worked out order by order."""
    if offer.orders_per_year:
        orders, size = offer.orders_per_year, tonnes / offer.orders_per_year
    elif offer.order_size_t:
        orders = max(1.0, tonnes / offer.order_size_t)
        size = min(tonnes, offer.order_size_t)
    else:
        orders, size = 1.0, tonnes
    paid = max(tonnes, offer.take_or_pay_t)
    net = tiered(offer, paid)
    if offer.rebate and reached(paid, offer.rebate.above_t):
        back = offer.rebate.fraction
        if offer.rebate.on == "all":
            net *= 1.0 - back
        elif offer.tier_kind == "all_units":
            net -= back * net * (paid - offer.rebate.above_t) / paid
        else:
            net -= back * (net - tiered(offer, offer.rebate.above_t))
    freight = offer.freight_per_t * tonnes + offer.freight_per_drop * orders
    free = offer.freight_free_from_t
    if tonnes == 0.0 or (free and reached(size, free)):
        freight = 0.0
    fee = 0.0 if offer.signed else offer.mobilisation_fee / offer.term_years
    return net + freight + fee


def tiered(offer: Offer, tonnes: float) -> float:
    """Goods of a year by the tiers."""
    if offer.tier_per == "order" and offer.orders_per_year:
        return offer.orders_per_year * one_order(offer, tonnes / offer.orders_per_year)
    if offer.tier_per == "order" and tonnes > offer.order_size_t:
        return tonnes / offer.order_size_t * one_order(offer, offer.order_size_t)
    return one_order(offer, tonnes)


def one_order(offer: Offer, tonnes: float) -> float:
    index = 1.0
    if offer.index:
        change = offer.index.pass_through_fraction * (offer.index.now / offer.index.base - 1.0)
        change = max(change, -offer.index.most_fall_fraction)
        index = 1.0 + min(change, offer.index.most_rise_fraction)
    ladder = [(0.0, offer.price), *((tier.from_t, tier.price) for tier in offer.tiers)]
    if offer.tier_kind == "all_units":
        price = [p for start, p in ladder if reached(tonnes, start)][-1]
        return index * price * tonnes
    ends = [start for start, _ in ladder[1:]] + [math.inf]
    slices = [
        price * max(0.0, min(tonnes, end) - start)
        for (start, price), end in zip(ladder, ends, strict=True)
    ]
    return index * math.fsum(slices)


def reached(amount: float, threshold: float) -> bool:
    return amount >= threshold * (1.0 - 1e-9)


def least(offer: Offer) -> float:
    per_order = offer.least_order_per == "order" and offer.orders_per_year
    return offer.least_order_t * (offer.orders_per_year if per_order else 1.0)


# --- offers at random ----------------------------------------------------------------------------


def random_offer(rng: random.Random, key: str, reagent: str = REAGENT, **terms: Any) -> Offer:
    found: dict[str, Any] = {}
    ordering = rng.choice(["", "orders_per_year", "order_size_t"])
    if ordering:
        found[ordering] = rng.choice([2.0, 5.0, 12.0])
        found["freight_per_drop"] = rng.choice([0.0, rng.uniform(20.0, 150.0)])
        found["freight_free_from_t"] = rng.choice([0.0, 0.0, 1.0, 4.0])
    if rng.random() < 0.6:
        found["tier_per"] = rng.choice(["year", "order"]) if ordering else "year"
        found["tier_kind"] = rng.choice(["all_units", "incremental"])
        size = 0.3 if found["tier_per"] == "order" else 1.0
        starts = sorted(rng.sample([3.0, 6.0, 10.0, 15.0], rng.choice([1, 2])))
        found["tiers"] = tuple(
            Tier(from_t=size * start, price=300.0 * rng.uniform(0.6, 1.0) - 4.0 * start)
            for start in starts
        )
    if rng.random() < 0.4:
        found["least_order_t"] = rng.choice([0.5, 2.0])
        found["least_order_per"] = "order" if ordering == "orders_per_year" else "year"
    if rng.random() < 0.4:
        found["take_or_pay_t"] = rng.choice([2.0, 4.0, 8.0])
    if rng.random() < 0.4:
        found["most_t_per_year"] = rng.choice([26.0, 30.0, 40.0])
    if rng.random() < 0.3:
        found["rebate"] = Rebate(
            fraction=rng.uniform(0.02, 0.2), above_t=rng.choice([3.0, 7.0]),
            on=rng.choice(["all", "excess"]),
        )  # fmt: skip
    if rng.random() < 0.3:
        found |= {"mobilisation_fee": rng.uniform(100.0, 900.0), "term_years": 3.0}
    if rng.random() < 0.2:
        found["index"] = IndexClause(
            base=80.0, now=rng.uniform(60.0, 120.0), pass_through_fraction=0.7,
            most_fall_fraction=0.05, most_rise_fraction=0.08,
        )  # fmt: skip
    return Offer(
        offer=key, reagent=reagent, product="p", form="solution", price_per="t",
        strength_fraction=rng.choice([0.3, 0.5, 0.9]), density_kg_per_l=1.3,
        price=rng.uniform(300.0, 420.0), freight_per_t=rng.uniform(0.0, 40.0),
        **{"supplier": f"supplier of {key}", **found, **terms},
    )  # fmt: skip


# --- splits of one reagent -----------------------------------------------------------------------


def turning_points(offer: Offer) -> list[float]:
    """Every yearly tonnage at which some term of the offer changes."""
    orders = offer.orders_per_year or 1.0
    sizes = [tier.from_t for tier in offer.tiers]
    points = [
        least(offer), offer.most_t, offer.order_size_t, offer.take_or_pay_t,
        offer.freight_free_from_t, offer.freight_free_from_t * orders,
        *sizes, *(size * orders for size in sizes),
    ]  # fmt: skip
    if offer.rebate:
        points.append(offer.rebate.above_t)
    found = {p for p in points if least(offer) <= p <= offer.most_t and math.isfinite(p)}
    return sorted(found | ({0.0} if least(offer) == 0.0 else set()))


def cheapest_split(offers: Sequence[Offer], demand_kg: float) -> float:
    """All offers but one at a turning point or unused, the last one takes what is left."""
    best = math.inf
    for last, offer in enumerate(offers):
        others = [one for k, one in enumerate(offers) if k != last]
        for amounts in itertools.product(*(choices(one) for one in others)):
            spent = math.fsum(cost for _, cost in amounts)
            covered = math.fsum(
                1000.0 * one.strength_fraction * tonnes
                for one, (tonnes, _) in zip(others, amounts, strict=True)
            )
            rest = max(0.0, demand_kg - covered) / (1000.0 * offer.strength_fraction)
            tops = [p for p in turning_points(offer) if p >= rest * (1.0 - 1e-12)]
            if least(offer) <= rest <= offer.most_t:
                tops.append(rest)
            costs = [invoice(offer, p) for p in tops]
            if rest == 0.0 and not offer.signed:
                costs.append(0.0)
            best = min(best, spent + min(costs, default=math.inf))
    return best


def choices(offer: Offer) -> list[tuple[float, float]]:
    found = [(tonnes, invoice(offer, tonnes)) for tonnes in turning_points(offer)]
    return found if offer.signed else [(0.0, 0.0), *found]


@pytest.mark.parametrize("seed", range(100))
def test_splits_of_one_reagent_agree_with_enumeration(seed: int) -> None:
    rng = random.Random(seed)
    offers = [random_offer(rng, f"o{k}") for k in range(rng.choice([1, 2, 3, 4]))]
    if rng.random() < 0.25 and not offers[0].least_order_t:
        offers[0] = random_offer(rng, "old", signed=True, least_order_t=0.0)
    demand_kg = rng.uniform(100.0, 7500.0)
    expected = cheapest_split(offers, demand_kg)
    book = PriceBook(offers)
    closed = book.cheapest({REAGENT: demand_kg})
    assert closed.cost["total"] == pytest.approx(expected, rel=1e-9)
    assert book.cost(REAGENT, demand_kg) == pytest.approx(expected, rel=1e-9)
    for row in closed.buys:
        mine = next(one for one in offers if one.offer == row.offer)
        assert row.cost_per_year == pytest.approx(invoice(mine, row.bought_t_per_year), rel=1e-9)
    for solver in ("highs", "cbc") if seed % 5 == 0 else ("highs",):
        deal = purchase({REAGENT: demand_kg}, offers, solver=solver)
        assert deal.cost["total"] == pytest.approx(expected, rel=2e-6)


# --- everything at once: packs, shares and bundles over two reagents -----------------------------


def cheapest_of_all(offers: Sequence[Offer], demand: dict[str, float]) -> float:
    """Every combination of whole packs."""
    best = math.inf
    counts = [range(math.floor(min(one.most_t, 9.0) / one.pack_t + 1e-9) + 1) for one in offers]
    for packs in itertools.product(*counts):
        tonnes = [n * one.pack_t for n, one in zip(packs, offers, strict=True)]
        kg = [t * 1000.0 * one.strength_fraction for t, one in zip(tonnes, offers, strict=True)]
        held = all(
            math.fsum(a for a, one in zip(kg, offers, strict=True) if one.reagent == name)
            >= need * (1.0 - 1e-9)
            for name, need in demand.items()
        )
        if held and shares_hold(offers, kg):
            best = min(best, least_signed_cost(offers, tonnes) + under_framework(offers, tonnes))
    return best


def shares_hold(offers: Sequence[Offer], kg: Sequence[float]) -> bool:
    for one, mine in zip(offers, kg, strict=True):
        same = [(o, a) for o, a in zip(offers, kg, strict=True) if o.reagent == one.reagent]
        total = math.fsum(a for _, a in same)
        supplier = math.fsum(a for o, a in same if o.supplier == one.supplier)
        if supplier > one.most_share_fraction * total * (1.0 + 1e-9):
            return False
        if mine > 0.0 and supplier < one.least_share_fraction * total * (1.0 - 1e-9):
            return False
    return True


def under_framework(offers: Sequence[Offer], tonnes: Sequence[float]) -> float:
    """Fee, cap and rebate of the one framework in a case."""
    mine = [(o, t) for o, t in zip(offers, tonnes, strict=True) if o.framework and t > 0.0]
    if not mine or mine[0][0].framework is None:
        return 0.0
    terms, volume = mine[0][0].framework, math.fsum(t for _, t in mine)
    if volume > terms.most_t * (1.0 + 1e-9):
        return math.inf
    goods = math.fsum(tiered(o, t) for o, t in mine)
    rebate = terms.rebate_fraction * goods if reached(volume, terms.rebate_above_t) else 0.0
    return terms.fee_per_year - rebate


def least_signed_cost(offers: Sequence[Offer], tonnes: Sequence[float]) -> float:
    """With every bundle signed or not: is what is bought allowed, and what does it cost."""
    best = math.inf
    bundles = sorted({one.bundle for one in offers if one.bundle})
    for signed in itertools.product([False, True], repeat=len(bundles)):
        chosen = {name for name, yes in zip(bundles, signed, strict=True) if yes}
        total = 0.0
        for one, t in zip(offers, tonnes, strict=True):
            is_signed = one.bundle in chosen if one.bundle else t > 0.0
            barred = any(
                o.bundle in chosen and o.reagent == one.reagent and one.bundle != o.bundle
                for o in offers
            )
            too_little = is_signed and t < least(one) * (1.0 - 1e-9) and (
                t > 0.0 or one.least_order_per == "year"
            )  # fmt: skip
            if (t > 0.0 and (not is_signed or barred)) or too_little:
                total = math.inf
            elif is_signed:
                total += invoice(one, t)
        best = min(best, total)
    return best


FRAMEWORK = Framework(
    name="two years", fee_per_year=180.0, most_t=7.5, rebate_fraction=0.15, rebate_above_t=4.0
)


def mixed_case(seed: int) -> tuple[list[Offer], dict[str, float]]:
    rng = random.Random(1000 + seed)
    offers = []
    for reagent in (REAGENT, OTHER):
        shared = rng.random() < 0.5
        for k in range(2):
            terms: dict[str, Any] = {"pack_t": rng.choice([1.0, 1.2, 1.5])}
            if shared:
                terms |= {"most_share_fraction": rng.choice([0.6, 0.7])}
            if rng.random() < 0.3:
                terms["least_share_fraction"] = 0.4
            if k == 0 and seed % 2:
                terms["bundle"] = "pair"
            if k == 1 and seed % 3 == 0:
                terms |= {"framework": FRAMEWORK, "take_or_pay_t": 0.0, "rebate": None}
            offers.append(random_offer(rng, f"{reagent} {k}", reagent, **terms))
    return offers, {REAGENT: rng.uniform(200.0, 2400.0), OTHER: rng.uniform(0.0, 2000.0)}


@pytest.mark.parametrize("seed", range(100))
def test_packs_shares_and_bundles_agree_with_enumeration(seed: int) -> None:
    offers, demand = mixed_case(seed)
    offers = [capped(one) for one in offers]
    expected = cheapest_of_all(offers, demand)
    for solver in ("highs", "cbc") if seed % 10 == 0 else ("highs",):
        if math.isinf(expected):
            with pytest.raises(NoPurchase):
                purchase(demand, offers, solver=solver)
        else:
            deal = purchase(demand, offers, solver=solver)
            assert deal.cost["total"] == pytest.approx(expected, rel=2e-6)
    lower = PriceBook(offers)
    if math.isfinite(expected):
        assert lower.inexact >= {REAGENT}
        assert sum(lower.cost(name, kg) for name, kg in demand.items()) <= expected * (1 + 1e-9)


def capped(offer: Offer) -> Offer:
    """At most 9 t, so that all packs can be counted."""
    return replace(
        offer, most_t_per_year=9.0, take_or_pay_t=min(offer.take_or_pay_t, 8.0),
        least_order_t=0.5 if offer.least_order_per == "order" else offer.least_order_t,
        orders_per_year=min(offer.orders_per_year, 5.0),
    )  # fmt: skip

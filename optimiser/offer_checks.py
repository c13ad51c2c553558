"""Offers given in code: a frame or a list, checked row by row with all problems at once.

Owns what makes an offer usable by the purchasing block. Offers in files are read, with their line
numbers, by `optimiser.offers_reader`.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Iterable, Iterator, Mapping
from typing import TYPE_CHECKING

from catalogs.problems import ProblemLog, Spot, did_you_mean
from optimiser.offer import (
    LEAST_ORDER_PERIODS,
    PRICE_BASES,
    PRICE_UNITS,
    REBATE_KINDS,
    TIER_KINDS,
    TIER_PERIODS,
    Offer,
)

if TYPE_CHECKING:
    import pandas as pd

_TEXTS = ("offer", "supplier", "reagent", "product", "form", "price_per", "valid_until", "note")
_NUMBERS = {"density_kg_per_l": math.nan, "price": math.nan, "freight_per_t": 0.0,
            "least_order_t": 0.0}  # fmt: skip
_STRENGTHS = {"strength_percent": 0.01, "strength_fraction": 1.0}
_AMOUNTS = (
    "price", "freight_per_t", "least_order_t", "pack_t", "orders_per_year", "order_size_t",
    "freight_per_drop", "freight_free_from_t", "take_or_pay_t", "mobilisation_fee",
)  # fmt: skip
_NEEDED = ("offer", "reagent", "price", "price_per")


def require_usable_offers(offers: Iterable[Offer], *, name: str = "offers") -> tuple[Offer, ...]:
    """Return the offers as a tuple when every one of them can be bought from.

    Parameters
    ----------
    offers
        Offers as built in code.
    name
        What to call the list in messages; rows are counted from 1.

    Raises
    ------
    InputFileError
        With every problem of every offer.
    """
    given = tuple(offers)
    log = ProblemLog()
    seen: set[str] = set()
    for row, offer in enumerate(given, start=1):
        spot = Spot(log=log, file=name, line=row)
        _check(offer, spot)
        if offer.offer in seen:
            spot.at("offer").problem(
                repr(offer.offer), "an id of its own", "Another row has it; rename one of them."
            )
        seen.add(offer.offer)
    check_shared(
        (offer, Spot(log=log, file=name, line=row)) for row, offer in enumerate(given, start=1)
    )
    log.raise_if_any()
    return given


def offers_from_frame(frame: pd.DataFrame) -> tuple[Offer, ...]:
    """Turn a frame with the columns of a price book into offers.

    Columns are those of an offers file; the strength may be ``strength_percent`` or
    ``strength_fraction``. Columns beyond ``offer``, ``reagent``, the strength, ``price`` and
    ``price_per`` may be missing, the density only where nothing is priced per litre.

    Raises
    ------
    InputFileError
        With every problem of every row; rows are counted from 1, whatever the index.
    """
    name = "offers frame"
    log = ProblemLog()
    known = [*_TEXTS, *_NUMBERS, *_STRENGTHS]
    columns = [str(column) for column in frame.columns]
    head = Spot(log=log, file=name, line=1)
    for column in columns:
        if column not in known:
            remedy = did_you_mean(column, known, what="columns")
            head.at(column).problem("an unknown column", "a column of a price book", remedy)
    for column in _NEEDED:
        if column not in columns:
            head.at(column).problem("no such column", "a value in every row", "Add the column.")
    if len(set(columns) & set(_STRENGTHS)) != 1:
        head.at("strength_percent").problem(
            "none or two columns of strength", "one of strength_percent and strength_fraction",
            "Give the strength once.",
        )  # fmt: skip
    log.raise_if_any()
    rows = [
        _offer({str(key): value for key, value in row.items()}, Spot(log=log, file=name, line=at))
        for at, row in enumerate(frame.to_dict("records"), start=1)
    ]
    log.raise_if_any()
    return require_usable_offers(rows, name=name)


def _offer(row: Mapping[str, object], spot: Spot) -> Offer:
    numbers = {key: _number(row, key, default, spot) for key, default in _NUMBERS.items()}
    strength = next(
        factor * _number(row, key, math.nan, spot)
        for key, factor in _STRENGTHS.items()
        if key in row
    )
    texts = {key: "" if _is_missing(row.get(key)) else str(row[key]).strip() for key in _TEXTS}
    return Offer(**texts, **numbers, strength_fraction=strength)  # type: ignore[arg-type]


def _number(row: Mapping[str, object], key: str, default: float, spot: Spot) -> float:
    value = row.get(key)
    if _is_missing(value):
        return default
    if isinstance(value, bool) or not hasattr(value, "__float__"):
        remedy = "Use a decimal point, no unit and no thousands separator."
        spot.at(key).problem(repr(value), "a number", remedy)
        return default
    return float(value)


def _is_missing(value: object) -> bool:
    is_nan = isinstance(value, float) and math.isnan(value)
    return value is None or is_nan or str(value) in {"", "<NA>", "NaT"}


def _check(offer: Offer, spot: Spot) -> None:
    before = len(spot.log.problems)
    if not offer.offer:
        spot.at("offer").problem("nothing", "an id", "Give every offer an id of its own.")
    if not 0.0 < offer.strength_fraction <= 1.0:
        spot.at("strength_percent").problem(
            f"{100 * offer.strength_fraction:g}", "above 0 and at most 100",
            "Give the mass of pure compound per mass of product.",
        )  # fmt: skip
    if offer.price_per not in PRICE_UNITS:
        spot.at("price_per").problem(
            repr(offer.price_per), " or ".join(PRICE_UNITS), "Say what the price is for."
        )
    elif offer.price_per == "L" and not 0.0 < offer.density_kg_per_l < math.inf:
        spot.at("density_kg_per_l").problem(
            f"{offer.density_kg_per_l:g}", "a density above 0 for a price per litre",
            "Give the density of the product as delivered.",
        )  # fmt: skip
    for field in _AMOUNTS:
        value = getattr(offer, field)
        if not 0.0 <= value < math.inf:
            spot.at(field).problem(f"{value:g}", "a number of 0 or more", "Correct the number.")
    if len(spot.log.problems) == before:
        check_terms(offer, spot)


def check_terms(offer: Offer, spot: Spot) -> None:
    """Record what contradicts itself among the terms of one offer."""
    for field, found, expected, remedy in (
        *_tier_contradictions(offer), *_order_contradictions(offer),
        *_volume_contradictions(offer),
    ):  # fmt: skip
        spot.at(field).problem(found, expected, remedy)


_Contradiction = tuple[str, str, str, str]


def _tier_contradictions(offer: Offer) -> Iterator[_Contradiction]:
    if offer.tiers and offer.tier_kind not in TIER_KINDS:
        yield (
            "tier_kind", repr(offer.tier_kind), " or ".join(TIER_KINDS),
            "Say whether the price reached holds for everything or each slice has its own.",
        )  # fmt: skip
    if offer.tiers and offer.tier_per not in TIER_PERIODS:
        yield (
            "tier_per", repr(offer.tier_per), " or ".join(TIER_PERIODS),
            "Say whether the tonnes of an order or of a year decide.",
        )  # fmt: skip
    starts = [0.0, *(tier.from_t for tier in offer.tiers)]
    for before, after in itertools.pairwise(starts):
        if not before < after < math.inf:
            yield (
                "tier_from_t", f"{after:g} after {before:g}", "tiers that rise",
                "Order the tiers by tonnes and give each its own beginning.",
            )  # fmt: skip
    for tier in offer.tiers:
        if not 0.0 <= tier.price < math.inf:
            yield "price", f"{tier.price:g}", "a number of 0 or more", "Correct the number."
    if offer.price_per == "pack" and not offer.pack_t > 0.0:
        yield "pack_kg", "nothing", "the size of the pack that is priced", "Fill pack_kg or pack_l."
    if offer.price_for not in PRICE_BASES:
        yield (
            "price_for", repr(offer.price_for), " or ".join(PRICE_BASES),
            "Say whether the price is for the product or its dry active part.",
        )  # fmt: skip


def _order_contradictions(offer: Offer) -> Iterator[_Contradiction]:
    counted, sized = offer.orders_per_year > 0.0, offer.order_size_t > 0.0
    if counted and sized:
        yield (
            "order_size_t", "a size and a number of orders", "one of them",
            "Delete order_size_t or orders_per_year: the other follows from the demand.",
        )  # fmt: skip
    by_order = [
        ("freight_per_drop", offer.freight_per_drop > 0.0),
        ("freight_free_from_t", offer.freight_free_from_t > 0.0),
        ("tier_per", bool(offer.tiers) and offer.tier_per == "order"),
    ]
    for field, stated in by_order:
        if stated and not counted and not sized:
            yield (
                field, "a term per order", "the size or the number of the orders",
                "Fill order_size_t (a full load or tank) or orders_per_year.",
            )  # fmt: skip
    if offer.least_order_per not in LEAST_ORDER_PERIODS:
        yield (
            "least_order_per", repr(offer.least_order_per), " or ".join(LEAST_ORDER_PERIODS),
            "Say whether the least amount is for an order or for a year.",
        )  # fmt: skip
    if offer.least_order_per == "order" and sized and offer.order_size_t < offer.least_order_t:
        yield (
            "order_size_t", f"{offer.order_size_t:g}", f"at least the least order of"
            f" {offer.least_order_t:g}", "Order larger loads, or leave the offer out.",
        )  # fmt: skip


def _volume_contradictions(offer: Offer) -> Iterator[_Contradiction]:
    # the smallest purchase, worked out here because costs are only defined for sound offers
    times = offer.orders_per_year if offer.least_order_per == "order" else 0.0
    for field, least in (
        ("least_order_t", offer.least_order_t * max(times, 1.0)),
        ("take_or_pay_t", offer.take_or_pay_t), ("pack_kg", offer.pack_t),
    ):  # fmt: skip
        if least > offer.most_t * (1.0 + 1e-12):
            yield (
                field, f"{least:g} t a year", f"at most the {offer.most_t:g} t that may be bought",
                "Correct one of the two.",
            )  # fmt: skip
    if not offer.most_t >= 0.0:
        yield "most_t_per_year", f"{offer.most_t:g}", "a number of 0 or more", "Correct it."
    rebate = offer.rebate
    if rebate is not None and not (0.0 <= rebate.fraction <= 1.0 and rebate.on in REBATE_KINDS):
        yield (
            "rebate_on", f"{100.0 * rebate.fraction:g} % on {rebate.on!r}",
            f"0 to 100 % on {' or '.join(REBATE_KINDS)}", "Correct the rebate.",
        )  # fmt: skip
    if rebate is not None and not 0.0 <= rebate.above_t < math.inf:
        yield "rebate_above_t", f"{rebate.above_t:g}", "a number of 0 or more", "Correct it."
    index = offer.index
    if index is not None and not (0.0 < index.base < math.inf and 0.0 < index.now < math.inf):
        yield (
            "index_base",
            f"{index.base:g} and {index.now:g}",
            "two numbers above 0",
            "Correct it.",
        )
    if not (0.0 < offer.currency_rate < math.inf and 0.0 < offer.term_years < math.inf):
        yield (
            "currency_rate",
            f"{offer.currency_rate:g}",
            "a rate and a term above 0",
            "Correct it.",
        )
    if not 0.0 <= offer.least_share_fraction <= offer.most_share_fraction <= 1.0:
        yield (
            "least_share_percent", f"{100.0 * offer.least_share_fraction:g} and at most"
            f" {100.0 * offer.most_share_fraction:g}", "shares from 0 to 100 in this order",
            "Correct the shares.",
        )  # fmt: skip


def check_shared(offers: Iterable[tuple[Offer, Spot]]) -> None:
    """Record where offers of one supplier or bundle contradict each other."""
    most: dict[tuple[str, str], tuple[str, float]] = {}
    frameworks: dict[str, Offer] = {}
    for offer, spot in offers:
        key = (offer.supplier, offer.reagent)
        first = most.setdefault(key, (offer.offer, offer.most_share_fraction))
        if first[1] != offer.most_share_fraction:
            spot.at("most_share_percent").problem(
                f"{100.0 * offer.most_share_fraction:g}",
                f"{100.0 * first[1]:g}, as in offer {first[0]}",
                "The greatest share is the supplier's: state the same on each of its offers.",
            )
        if offer.framework is None:
            continue
        other = frameworks.setdefault(offer.framework.name, offer)
        if other.framework != offer.framework:
            spot.at("framework").problem(
                f"other terms of framework {offer.framework.name!r}",
                f"those of offer {other.offer}",
                "State fee, cap and rebate of a framework alike on each of its offers.",
            )

"""One row of a price book turned into an offer; rows may come from any kind of table.

Owns the columns and what stands in them; the terms themselves are explained in `optimiser.offer`,
what contradicts itself is found by `optimiser.offer_checks`.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass

from catalogs.entries import NON_NEGATIVE, POSITIVE, Entry, Range
from catalogs.problems import Spot, echo, listed
from catalogs.reagents import Reagent
from optimiser.offer import (
    LEAST_ORDER_PERIODS,
    PRICE_BASES,
    PRICE_UNITS,
    REBATE_KINDS,
    TIER_KINDS,
    TIER_PERIODS,
    Framework,
    IndexClause,
    Offer,
    Rebate,
)
from optimiser.trade_strength import COMPOUND, compound_per_word, words_for

OFFER_COLUMNS = (
    "offer", "supplier", "reagent", "product", "form", "strength_percent", "density_kg_per_l",
    "price", "price_per", "freight_per_t", "least_order_t", "valid_until", "note",
)  # fmt: skip
"""Columns that every price book has, in the order they are written."""

TERM_COLUMNS = (
    "strength_as", "strength_g_per_l", "tested_strength_percent", "penalty_percent_per_point",
    "price_for", "pack_kg", "pack_l", "least_order_per", "orders_per_year", "order_size_t",
    "freight_per_drop", "freight_free_from_t", "tier_kind", "tier_per", "tier_from_t",
    "tier_to_t", "take_or_pay_t", "most_t_per_year", "rebate_percent", "rebate_above_t",
    "rebate_on", "mobilisation_fee", "term_years", "index_name", "index_base", "index_now",
    "index_pass_through_percent", "index_most_fall_percent", "index_most_rise_percent",
    "currency", "currency_rate", "currency_rate_date", "bundle", "framework",
    "framework_fee_per_year", "framework_most_t", "framework_rebate_percent",
    "framework_rebate_above_t", "least_share_percent", "most_share_percent", "signed", "left_t",
    "ends_on", "valid_from", "lead_time_d", "shelf_life_d", "deposit", "payment",
)  # fmt: skip
"""Columns that a price book may have; a column that is missing is a term that no offer has."""

TIER_CELLS = ("offer", "tier_from_t", "tier_to_t", "price", "note")
"""What a further row of an offer may carry."""

_TEXTS = (
    "offer", "supplier", "reagent", "product", "form", "note", "index_name", "bundle", "deposit",
    "payment", "currency", "framework",
)  # fmt: skip
_STRENGTH_PERCENT = Range(low=1.0, high=100.0)
_DENSITY_KG_PER_L = Range(low=0.2, high=5.0)
_PERCENT = Range(low=0.0, high=100.0)
_PERCENT_ABOVE_0 = Range(above=0.0, high=100.0)
_OVERSTATED = 1.0005  # a strength may round to this much above the pure compound


@dataclass(frozen=True, slots=True, kw_only=True)
class _Strength:
    """Pure compound per product, the strength in the trade's words, and what is deducted."""

    fraction: float = math.nan
    active_fraction: float | None = None
    deduction_fraction: float = 0.0


def read_offer(entry: Entry, reagents: Mapping[str, Reagent], currency: str) -> Offer:
    """Read the terms of one row; problems go to the entry's log.

    Parameters
    ----------
    entry
        The row's cells.
    reagents
        The catalog.
    currency
        The site's currency; empty where it is not known, so that any may stand.
    """
    refuse_formulas(entry)
    name = entry.choice("reagent", reagents, "reagents")
    reagent = reagents.get(name)
    density = _density(entry, reagent)
    strength = _strength(entry, reagent, density)
    money = _currency(entry, currency)
    price_for = _price_for(entry)
    return Offer(
        offer=entry.text("offer"),
        supplier=entry.text("supplier"),
        reagent=name,
        product=entry.text("product"),
        form=entry.text("form"),
        strength_fraction=strength.fraction,
        active_fraction=strength.active_fraction if price_for == "active" else None,
        strength_deduction_fraction=strength.deduction_fraction,
        density_kg_per_l=density,
        price=entry.number("price", NON_NEGATIVE),
        price_per=entry.choice("price_per", PRICE_UNITS, "units of price"),
        price_for=price_for,
        pack_t=_pack_t(entry, density),
        freight_per_t=entry.number_or("freight_per_t", 0.0, NON_NEGATIVE),
        freight_per_drop=entry.number_or("freight_per_drop", 0.0, NON_NEGATIVE),
        freight_free_from_t=entry.number_or("freight_free_from_t", 0.0, POSITIVE),
        least_order_t=entry.number_or("least_order_t", 0.0, NON_NEGATIVE),
        least_order_per=_least_order_per(entry),
        orders_per_year=entry.number_or("orders_per_year", 0.0, Range(low=1.0, high=366.0)),
        order_size_t=entry.number_or("order_size_t", 0.0, POSITIVE),
        tier_kind=entry.choice_or("tier_kind", "", TIER_KINDS, "kinds of tiers"),
        tier_per=entry.choice_or("tier_per", "", TIER_PERIODS, "periods of tiers"),
        take_or_pay_t=entry.number_or("take_or_pay_t", 0.0, NON_NEGATIVE),
        most_t_per_year=entry.number_or("most_t_per_year", math.inf, POSITIVE),
        rebate=_rebate(entry),
        mobilisation_fee=entry.number_or("mobilisation_fee", 0.0, NON_NEGATIVE),
        term_years=entry.number_or("term_years", 1.0, Range(above=0.0, high=30.0)),
        index=_index(entry),
        currency=money[0],
        currency_rate=money[1],
        currency_rate_date=money[2],
        bundle=entry.text_or("bundle"),
        framework=_framework(entry),
        least_share_fraction=entry.number_or("least_share_percent", 0.0, _PERCENT) / 100.0,
        most_share_fraction=entry.number_or("most_share_percent", 100.0, _PERCENT_ABOVE_0) / 100.0,
        signed=entry.choice_or("signed", "no", ("yes", "no"), "answers") == "yes",
        left_t=entry.number_or("left_t", math.inf, NON_NEGATIVE),
        ends_on=entry.day_or("ends_on"),
        valid_from=entry.day_or("valid_from"),
        valid_until=entry.day_or("valid_until"),
        lead_time_d=entry.number_or("lead_time_d", 0.0, NON_NEGATIVE),
        shelf_life_d=entry.number_or("shelf_life_d", 0.0, POSITIVE),
        deposit=entry.text_or("deposit"),
        payment=entry.text_or("payment"),
        note=entry.text_or("note"),
    )


def refuse_formulas(entry: Entry) -> None:
    """Record texts that a spreadsheet would take for formulas."""
    for column in _TEXTS:
        for node, spot in entry.value(column):
            text = getattr(node, "text", "").lstrip()
            if text[:1] in {"=", "+", "-", "@"}:
                spot.problem(
                    echo(text), "text that no spreadsheet takes for a formula",
                    "Begin the cell with a letter or a digit, not with = + - or @.",
                )  # fmt: skip


def _density(entry: Entry, reagent: Reagent | None) -> float:
    """Read the density; where the cell is empty, say what the catalog knows of the reagent."""
    if reagent is None or entry.has("density_kg_per_l"):
        return entry.number("density_kg_per_l", _DENSITY_KG_PER_L)
    usual = listed(f"{form.density_kg_per_l:g} ({form.form})" for form in reagent.product_forms)
    entry.at("density_kg_per_l").problem(
        "nothing",
        _DENSITY_KG_PER_L.describe(),
        f"Take it from the data sheet (bulk density of a solid). Usual values: {usual}.",
    )
    return math.nan


def _strength(entry: Entry, reagent: Reagent | None, density_kg_per_l: float) -> _Strength:
    """Read the strength in the trade's words."""
    words = (COMPOUND,) if reagent is None else words_for(reagent)
    word = entry.choice_or("strength_as", COMPOUND, words, "words for its strength") or COMPOUND
    if entry.has("strength_g_per_l"):
        grams = entry.number("strength_g_per_l", POSITIVE)
        stated, column = grams / 1000.0 / density_kg_per_l, "strength_g_per_l"
        if entry.has("strength_percent"):
            entry.at(column).problem(
                "two strengths", "one of strength_percent and strength_g_per_l", "Delete one."
            )
    else:
        column = "strength_percent"
        stated = entry.number(column, _STRENGTH_PERCENT) / 100.0
    per_word = 1.0 if reagent is None else compound_per_word(reagent, word)
    if stated * per_word > _OVERSTATED:
        entry.at(column).problem(
            f"{100.0 * stated:.4g} % as {word}, which is {100.0 * stated * per_word:.4g} % of"
            " the compound",
            "at most 100 % of the compound",
            f"Check strength and density, or the words in strength_as: {listed(words)}.",
        )
    delivered, deduction = _tested(entry, stated)
    return _Strength(
        fraction=min(delivered * per_word, 1.0) if not math.isnan(delivered) else math.nan,
        active_fraction=delivered,
        deduction_fraction=deduction,
    )


def _tested(entry: Entry, stated: float) -> tuple[float, float]:
    """What arrives, as tested, and the share of the price deducted for what it falls short."""
    penalty = entry.number_or("penalty_percent_per_point", 0.0, _PERCENT)
    if not entry.has("tested_strength_percent"):
        return stated, 0.0
    tested = entry.number("tested_strength_percent", _STRENGTH_PERCENT) / 100.0
    full_points = math.floor(100.0 * (stated - tested) + 1e-9) if stated > tested else 0
    return tested, min(penalty / 100.0 * full_points, 1.0)


def _pack_t(entry: Entry, density_kg_per_l: float) -> float:
    kg = entry.number_or("pack_kg", 0.0, POSITIVE)
    litres = entry.number_or("pack_l", 0.0, POSITIVE)
    if kg and litres:
        entry.at("pack_l").problem(
            "two sizes of a pack", "one of pack_kg and pack_l", "Delete one."
        )
    return (kg or litres * density_kg_per_l) / 1000.0 if kg or litres else 0.0


def _price_for(entry: Entry) -> str:
    """What the price is for; required as soon as the table has the column."""
    if not entry.has_column("price_for"):
        return "product"
    return entry.choice("price_for", PRICE_BASES, "bases of a price")


def _least_order_per(entry: Entry) -> str:
    """A least order is per order or per year; books from before that column mean an order."""
    if not entry.has_column("least_order_per") or not entry.has("least_order_t"):
        entry.has("least_order_per")
        return "order"
    return entry.choice("least_order_per", LEAST_ORDER_PERIODS, "periods of a least order")


def _rebate(entry: Entry) -> Rebate | None:
    columns = ("rebate_percent", "rebate_above_t", "rebate_on")
    if not {entry.has(column) for column in columns} & {True}:
        return None
    return Rebate(
        fraction=entry.number("rebate_percent", _PERCENT) / 100.0,
        above_t=entry.number("rebate_above_t", NON_NEGATIVE),
        on=entry.choice("rebate_on", REBATE_KINDS, "kinds of rebate"),
    )


def _framework(entry: Entry) -> Framework | None:
    columns = TERM_COLUMNS[TERM_COLUMNS.index("framework") :][:5]
    if not {entry.has(column) for column in columns} & {True}:
        return None
    return Framework(
        name=entry.text("framework"),
        fee_per_year=entry.number_or("framework_fee_per_year", 0.0, NON_NEGATIVE),
        most_t=entry.number_or("framework_most_t", math.inf, POSITIVE),
        rebate_fraction=entry.number_or("framework_rebate_percent", 0.0, _PERCENT) / 100.0,
        rebate_above_t=entry.number_or("framework_rebate_above_t", 0.0, NON_NEGATIVE),
    )


def _index(entry: Entry) -> IndexClause | None:
    columns = (
        "index_name", "index_base", "index_now", "index_pass_through_percent",
        "index_most_fall_percent", "index_most_rise_percent",
    )  # fmt: skip
    if not {entry.has(column) for column in columns} & {True}:
        return None
    return IndexClause(
        name=entry.text_or("index_name"),
        base=entry.number("index_base", POSITIVE),
        now=entry.number("index_now", POSITIVE),
        pass_through_fraction=entry.number("index_pass_through_percent", NON_NEGATIVE) / 100.0,
        most_fall_fraction=entry.number_or("index_most_fall_percent", 100.0, _PERCENT) / 100.0,
        most_rise_fraction=entry.number_or("index_most_rise_percent", math.inf, NON_NEGATIVE)
        / 100.0,
    )


def _currency(entry: Entry, own: str) -> tuple[str, float, str]:
    """Read the currency with its rate: units of the site's currency for one of the offer's."""
    word = entry.text_or("currency")
    rate = entry.number_or("currency_rate", 1.0, POSITIVE)
    day = entry.day_or("currency_rate_date")
    if word and len(word) != 3:
        entry.at("currency").problem(
            echo(word), "a currency of three letters", "Write its code, such as EUR or USD."
        )
    foreign = bool(word) and bool(own) and word != own
    if foreign and not (entry.has("currency_rate") and entry.has("currency_rate_date")):
        entry.at("currency").problem(
            f"{echo(word)} without a dated rate",
            f"the site's currency {own}, or a rate and its date",
            f"Fill currency_rate ({own} for one {word}) and currency_rate_date.",
        )
    if not foreign and entry.has("currency_rate") and own and rate != 1.0:
        entry.at("currency_rate").problem(
            f"{rate:g}", "no rate for the site's own currency", "Name the currency, or delete it."
        )
    return word, rate, day


def tier_cells(entry: Entry) -> tuple[float, float, Spot]:
    """Where a tier begins and ends, and its place. [t]"""
    start = entry.number_or("tier_from_t", math.nan, NON_NEGATIVE)
    end = entry.number_or("tier_to_t", math.inf, POSITIVE)
    return start, end, entry.at("tier_from_t")


def tier_price(entry: Entry) -> float:
    """Read the price of a further tier."""
    return entry.number("price", NON_NEGATIVE)

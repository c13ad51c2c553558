"""A price book carries whole contracts; strengths are the trade's; slips are named by cell."""

from __future__ import annotations

import datetime
import math
from pathlib import Path
from typing import Any

import pytest

from catalogs.problems import InputFileError
from catalogs.reagents import load_reagents
from optimiser.errors import NoPurchase
from optimiser.offer import Framework, IndexClause, Offer, Rebate, Tier
from optimiser.offer_cost import costs_at, orders_in_a_year
from optimiser.offer_dates import date_notes, holding
from optimiser.offers_reader import OFFER_COLUMNS, TERM_COLUMNS, load_offers
from optimiser.purchasing import purchase
from optimiser.trade_strength import compound_per_word, words_for

HEADER = ",".join([*OFFER_COLUMNS, *TERM_COLUMNS])
PLAIN = {
    "offer": "A", "supplier": "Larkspur Supplies", "reagent": "caustic_soda", "product": "lye",
    "form": "solution", "strength_percent": "50", "density_kg_per_l": "1.525", "price": "300",
    "price_per": "t", "price_for": "product",
}  # fmt: skip


def book(tmp_path: Path, *rows: dict[str, str], columns: str = HEADER) -> Path:
    names = columns.split(",")
    lines = [",".join(row.get(name, "") for name in names) for row in rows]
    path = tmp_path / "offers.csv"
    path.write_text("\n".join([columns, *lines, ""]), encoding="utf-8")
    return path


def read(tmp_path: Path, *rows: dict[str, str], **more: str) -> tuple[Offer, ...]:
    return load_offers(book(tmp_path, *({**PLAIN, **row} for row in rows)), **more)


def problems(tmp_path: Path, *rows: dict[str, str], currency: str = "EUR") -> list[str]:
    with pytest.raises(InputFileError) as caught:
        load_offers(book(tmp_path, *rows), currency=currency)
    return [str(one).replace(str(tmp_path) + "/", "") for one in caught.value.problems]


def offer(**terms: Any) -> Offer:
    return Offer(
        offer="A", supplier="Larkspur Supplies", product="lye", form="solution",
        price_per="t", **{
            "reagent": "caustic_soda", "strength_fraction": 0.5, "density_kg_per_l": 1.5,
            "price": 300.0, **terms,
        },
    )  # fmt: skip


# --- reading -------------------------------------------------------------------------------------


def test_every_term_is_read_from_its_column(tmp_path: Path) -> None:
    (found,) = load_offers(
        book(
            tmp_path,
            {
                **PLAIN, "freight_per_t": "20", "freight_per_drop": "90", "order_size_t": "20",
                "freight_free_from_t": "18", "least_order_t": "40", "least_order_per": "year",
                "tier_kind": "incremental", "tier_per": "year", "tier_from_t": "0",
                "tier_to_t": "60", "take_or_pay_t": "50", "most_t_per_year": "400",
                "rebate_percent": "3", "rebate_above_t": "100", "rebate_on": "excess",
                "mobilisation_fee": "1200", "term_years": "3", "index_name": "chlor-alkali",
                "index_base": "100", "index_now": "120", "index_pass_through_percent": "60",
                "index_most_fall_percent": "5", "index_most_rise_percent": "8",
                "currency": "USD", "currency_rate": "0.9", "currency_rate_date": "2026-11-30",
                "bundle": "alkalis", "framework": "two years", "framework_fee_per_year": "500",
                "framework_most_t": "900", "framework_rebate_percent": "2",
                "framework_rebate_above_t": "600", "least_share_percent": "30",
                "most_share_percent": "70", "signed": "yes", "left_t": "350",
                "ends_on": "2027-12-31", "valid_from": "2026-01-01", "valid_until": "2027-06-30",
                "lead_time_d": "5", "shelf_life_d": "360", "deposit": "IBC 80 each",
                "payment": "30 days net", "pack_kg": "25",
            },
            {"offer": "A", "tier_from_t": "60", "price": "280"},
        ),
        currency="EUR",
    )  # fmt: skip
    assert found == offer(
        density_kg_per_l=1.525, freight_per_t=20.0, freight_per_drop=90.0, order_size_t=20.0,
        freight_free_from_t=18.0, least_order_t=40.0, least_order_per="year",
        tier_kind="incremental", tier_per="year", tiers=(Tier(from_t=60.0, price=280.0),),
        take_or_pay_t=50.0, most_t_per_year=400.0,
        rebate=Rebate(fraction=0.03, above_t=100.0, on="excess"), mobilisation_fee=1200.0,
        term_years=3.0, pack_t=0.025,
        index=IndexClause(
            name="chlor-alkali", base=100.0, now=120.0, pass_through_fraction=0.6,
            most_fall_fraction=0.05, most_rise_fraction=0.08,
        ),
        currency="USD", currency_rate=0.9, currency_rate_date="2026-11-30", bundle="alkalis",
        framework=Framework(
            name="two years", fee_per_year=500.0, most_t=900.0, rebate_fraction=0.02,
            rebate_above_t=600.0,
        ),
        least_share_fraction=0.3, most_share_fraction=0.7, signed=True, left_t=350.0,
        ends_on="2027-12-31", valid_from="2026-01-01", valid_until="2027-06-30", lead_time_d=5.0,
        shelf_life_d=360.0, deposit="IBC 80 each", payment="30 days net",
    )  # fmt: skip


def test_a_book_without_the_new_columns_reads_as_it_did(tmp_path: Path) -> None:
    row = {**PLAIN, "least_order_t": "4"}
    (found,) = load_offers(book(tmp_path, row, columns=",".join(OFFER_COLUMNS)))
    assert found == offer(density_kg_per_l=1.525, least_order_t=4.0)


@pytest.mark.parametrize(
    ("row", "place", "text"),
    [
        ({"tier_from_t": "0", "tier_to_t": "60", "tier_kind": "all_units", "tier_per": "year"},
         "3: tier_from_t", "found a gap: 70 after a tier that ends at 60, expected tiers that join"
         "\n    Begin this tier at 60, or end the one before at 70."),
        ({"tier_to_t": "80", "tier_kind": "all_units", "tier_per": "year"}, "3: tier_from_t",
         "found an overlap: 70 after a tier that ends at 80, expected tiers that join\n    Begin"
         " this tier at 80, or end the one before at 70."),
        ({"tier_kind": "all_units"}, "2: tier_per", "found '', expected order or year"),
        ({"tier_per": "year"}, "2: tier_kind", "found '', expected all_units or incremental"),
        ({"tier_kind": "all_units", "tier_per": "order"}, "2: tier_per", "found a term per order,"
         " expected the size or the number of the orders\n    Fill order_size_t"),
        ({"tier_from_t": "5", "tier_kind": "all_units", "tier_per": "year"}, "2: tier_from_t",
         "found 5, expected 0 for the first tier"),
        ({"tier_to_t": "x"}, "2: tier_to_t", "found 'x', expected a number above 0"),
    ],
)  # fmt: skip
def test_tiers_that_do_not_join_are_named(
    tmp_path: Path, row: dict[str, str], place: str, text: str
) -> None:
    found = problems(tmp_path, {**PLAIN, **row}, {"offer": "A", "tier_from_t": "70", "price": "9"})
    assert found[0].startswith(f"offers.csv:{place}: {text}")


def test_a_further_tier_carries_only_its_own_cells(tmp_path: Path) -> None:
    tiered = {**PLAIN, "tier_kind": "all_units", "tier_per": "year"}
    further = {"offer": "A", "tier_from_t": "70", "price": "9", "freight_per_t": "3"}
    assert problems(tmp_path, tiered, further) == [
        "offers.csv:3: freight_per_t: found '3', expected nothing but offer, tier_from_t,"
        " tier_to_t, price, note\n    Empty this cell; the offer's first row says it."
    ]


@pytest.mark.parametrize(
    ("row", "place", "text"),
    [
        ({"price_for": ""}, "price_for", "found nothing, expected one of the bases of a price"),
        ({"price_per": ""}, "price_per", "found nothing, expected one of the units of price"),
        ({"price_per": "pack"}, "pack_kg", "found nothing, expected the size of the pack that is"),
        ({"pack_kg": "25", "pack_l": "20"}, "pack_l", "found two sizes of a pack"),
        ({"least_order_t": "5"}, "least_order_per", "found nothing, expected one of the periods"),
        ({"strength_percent": "104"}, "strength_percent", "found 104, expected a number from 1"),
        ({"strength_percent": "80", "strength_as": "Na2O"}, "strength_percent",
         "found 80 % as Na2O, which is 103.3 % of the compound, expected at most 100 %"),
        ({"strength_percent": "", "strength_g_per_l": "1600"}, "strength_g_per_l",
         "found 104.9 % as compound, which is 104.9 % of the compound, expected at most 100 %"),
        ({"strength_g_per_l": "760"}, "strength_g_per_l", "found two strengths, expected one of"),
        ({"strength_as": "CaO"}, "strength_as", "found 'CaO', expected one of the words for its"),
        ({"currency": "USD"}, "currency", "found 'USD' without a dated rate, expected the site's"
         " currency EUR, or a rate and its date\n    Fill currency_rate (EUR for one USD) and"),
        ({"currency": "dollars"}, "currency", "found 'dollars', expected a currency of three"),
        ({"currency_rate": "1.1"}, "currency_rate", "found 1.1, expected no rate for the site's"),
        ({"supplier": "=HYPERLINK(A1)"}, "supplier", "found '=HYPERLINK(A1)', expected text that"
         " no spreadsheet takes for a formula\n    Begin the cell with a letter or a digit"),
        ({"note": "@SUM(A1)"}, "note", "found '@SUM(A1)', expected text that no spreadsheet"),
        ({"product": "-lye"}, "product", "found '-lye', expected text that no spreadsheet"),
        ({"payment": "+49 30"}, "payment", "found '+49 30', expected text that no spreadsheet"),
        ({"freight_per_drop": "50"}, "freight_per_drop", "found a term per order, expected the"),
        ({"order_size_t": "5", "orders_per_year": "4"}, "order_size_t", "found a size and a number"
         " of orders, expected one of them"),
        ({"order_size_t": "5", "least_order_t": "8", "least_order_per": "order"}, "order_size_t",
         "found 5, expected at least the least order of 8"),
        ({"take_or_pay_t": "50", "most_t_per_year": "40"}, "take_or_pay_t", "found 50 t a year,"
         " expected at most the 40 t that may be bought"),
        ({"rebate_percent": "3"}, "rebate_above_t", "found nothing, expected a number of 0"),
        ({"index_now": "3"}, "index_base", "found nothing, expected a number above 0"),
        ({"least_share_percent": "60", "most_share_percent": "40"}, "least_share_percent",
         "found 60 and at most 40, expected shares from 0 to 100 in this order"),
        ({"signed": "maybe"}, "signed", "found 'maybe', expected one of the answers"),
        ({"framework_most_t": "40"}, "framework", "found nothing, expected text"),
        ({"valid_until": "31.12.2027"}, "valid_until", "found '31.12.2027', expected a date"),
    ],
)  # fmt: skip
def test_a_slip_in_a_term_names_its_cell(
    tmp_path: Path, row: dict[str, str], place: str, text: str
) -> None:
    found = problems(tmp_path, {**PLAIN, **row})
    assert any(one.startswith(f"offers.csv:2: {place}: {text}") for one in found), found


def test_all_slips_come_in_one_report(tmp_path: Path) -> None:
    found = problems(
        tmp_path, {**PLAIN, "price_for": "", "currency": "USD"}, {**PLAIN},
        {**PLAIN, "offer": "B", "pack_kg": "-1"},
    )  # fmt: skip
    assert [one.split(": found")[0] for one in found] == [
        "offers.csv:2: currency", "offers.csv:2: price_for", "offers.csv:3: offer",
        "offers.csv:4: pack_kg",
    ]  # fmt: skip


def test_offers_of_one_framework_and_supplier_agree(tmp_path: Path) -> None:
    framed = {**PLAIN, "framework": "two years", "framework_most_t": "90"}
    found = problems(
        tmp_path, {**framed, "most_share_percent": "60"},
        {**framed, "offer": "B", "framework_most_t": "80", "most_share_percent": "50"},
    )  # fmt: skip
    assert [one.split(", expected")[0] for one in found] == [
        "offers.csv:3: most_share_percent: found 50",
        "offers.csv:3: framework: found other terms of framework 'two years'",
    ]


# --- strengths and prices ------------------------------------------------------------------------


def in_words(tmp_path: Path, reagent: str, **cells: str) -> Offer:
    (found,) = read(tmp_path, {"reagent": reagent, **cells})
    return found


@pytest.mark.parametrize(("cao_percent", "expected"), [(72.0, 95.1), (74.0, 97.8)])
def test_lime_quoted_as_cao_g08(tmp_path: Path, cao_percent: float, expected: float) -> None:
    """Handbook of Environmental Engineering, lime chapter; a supplier's page."""
    found = in_words(
        tmp_path, "hydrated_lime", strength_percent=str(cao_percent), strength_as="CaO",
        density_kg_per_l="0.5",
    )  # fmt: skip
    assert 100.0 * found.strength_fraction == pytest.approx(expected, rel=0.005)


def test_caustic_quoted_in_grams_per_litre_g04(tmp_path: Path) -> None:
    """Density table at 20 C: 762.7 g/L and 19.07 mol/L at 50 %."""
    found = in_words(
        tmp_path, "caustic_soda", strength_percent="", strength_g_per_l="762.7",
        density_kg_per_l="1.5253",
    )  # fmt: skip
    assert found.strength_fraction == pytest.approx(0.5, rel=0.005)
    mol_per_l = 1000.0 * found.strength_fraction * found.density_kg_per_l / 39.997
    assert mol_per_l == pytest.approx(19.07, rel=0.005)


@pytest.mark.parametrize(
    ("reagent", "percent", "density", "mol_per_l"),
    [("hydrochloric_acid", "37.2", "1.18", 12.1), ("sulfuric_acid", "96", "1.84", 18.0),
     ("potassium_hydroxide", "45", "1.45", 11.7), ("caustic_soda", "24", "1.2629", 7.58)],
)  # fmt: skip
def test_commercial_strengths_in_moles_g05(
    tmp_path: Path, reagent: str, percent: str, density: str, mol_per_l: float
) -> None:
    """Reagent composition table of acids and bases."""
    known = load_reagents()
    if reagent not in known:
        (reagent,) = [name for name, one in known.items() if one.formula == "KOH"]
    found = in_words(tmp_path, reagent, strength_percent=percent, density_kg_per_l=density)
    moles = 1000.0 * found.strength_fraction * found.density_kg_per_l
    assert moles / known[reagent].molar_mass_g_per_mol == pytest.approx(mol_per_l, rel=0.01)


@pytest.mark.parametrize(
    ("reagent", "word", "ratio"),
    [("caustic_soda", "Na2O", 79.994 / 61.979), ("soda_ash", "Na2O", 105.988 / 61.979),
     ("quicklime", "CaO", 1.0), ("magnesium_hydroxide", "MgO", 58.319 / 40.304),
     ("sodium_hydrosulfide", "Na2S", 56.06 / 78.04), ("sodium_sulfide", "Na2S", 1.0)],
)  # fmt: skip
def test_words_of_the_trade_count_one_element(reagent: str, word: str, ratio: float) -> None:
    """Stoichiometry, with molar masses in g/mol."""
    assert compound_per_word(load_reagents()[reagent], word) == pytest.approx(ratio, rel=1e-3)


def test_a_word_without_the_reagents_element_is_none_of_its_words() -> None:
    assert words_for(load_reagents()["soda_ash"]) == ("compound", "Na2O", "Na2CO3", "NaOH")


@pytest.mark.parametrize(
    ("cells", "per_t"),
    [
        ({"price_per": "t"}, 300.0),
        ({"price_per": "short_ton"}, 300.0 / 0.90718474),
        ({"price_per": "L", "price": "0.4"}, 400.0 / 1.525),
        ({"price_per": "pack", "price": "9", "pack_kg": "25"}, 360.0),
        ({"price_per": "pack", "price": "90", "pack_l": "200"}, 90.0 / 0.305),
        ({"price_for": "active", "price": "600"}, 300.0),
        ({"price_for": "active", "price": "600", "strength_percent": "38.74",
          "strength_as": "Na2O"}, 600.0 * 0.3874),
    ],
)  # fmt: skip
def test_prices_are_turned_into_tonnes_of_product(
    tmp_path: Path, cells: dict[str, str], per_t: float
) -> None:
    (found,) = read(tmp_path, cells)
    assert found.price_per_t == pytest.approx(per_t, rel=1e-9)


@pytest.mark.parametrize(
    ("tested", "deduction", "fraction"), [("67.4", 4.0, 0.674), ("69.01", 0.0, 0.6901)]
)
def test_weak_lime_is_paid_less_for_every_full_point_g09(
    tmp_path: Path, tested: str, deduction: float, fraction: float
) -> None:
    """A utility's tender: 2 % for every full 1 % of CaO below certified, nothing for better."""
    lime = {
        "reagent": "hydrated_lime", "strength_percent": "70", "strength_as": "CaO",
        "density_kg_per_l": "0.5", "penalty_percent_per_point": "2",
        "tested_strength_percent": tested,
    }  # fmt: skip
    (found,) = read(tmp_path, lime)
    assert found.price_per_t == pytest.approx(300.0 * (1.0 - deduction / 100.0))
    assert found.strength_fraction == pytest.approx(fraction * 1.3213, rel=1e-3)
    (better,) = read(tmp_path, {**lime, "tested_strength_percent": "71.5"})
    assert better.price_per_t == pytest.approx(300.0)


@pytest.mark.parametrize(
    ("now", "factor"), [(100.0, 1.0), (110.0, 1.06), (150.0, 1.08), (95.0, 0.97), (50.0, 0.95)]
)
def test_an_index_moves_the_price_between_floor_and_cap(now: float, factor: float) -> None:
    clause = IndexClause(
        base=100.0, now=now, pass_through_fraction=0.6, most_fall_fraction=0.05,
        most_rise_fraction=0.08,
    )  # fmt: skip
    assert offer(index=clause).price_per_t == pytest.approx(300.0 * factor)


def test_a_foreign_offer_costs_its_rate_in_every_cause() -> None:
    here = offer(freight_per_t=20.0, freight_per_drop=50.0, order_size_t=4.0, mobilisation_fee=90.0)
    there = offer(
        freight_per_t=20.0, freight_per_drop=50.0, order_size_t=4.0, mobilisation_fee=90.0,
        currency="USD", currency_rate=0.8,
    )  # fmt: skip
    for cause, cost in costs_at(here, 10.0)[0].items():
        assert costs_at(there, 10.0)[0][cause] == pytest.approx(0.8 * cost)


def test_magnesia_replaces_caustic_at_the_published_saving_g02() -> None:
    """A trade article: 730 t of Mg(OH)2 at 400 for 1000 t of NaOH at 550 saves 258 000."""
    known = load_reagents()
    caustic_mol = 1000.0 * 1e6 / known["caustic_soda"].molar_mass_g_per_mol
    magnesia_t = caustic_mol / 2.0 * known["magnesium_hydroxide"].molar_mass_g_per_mol / 1e6
    lye = offer(strength_fraction=1.0, price=550.0)
    slurry = offer(reagent="magnesium_hydroxide", strength_fraction=1.0, price=400.0)
    dear = purchase({"caustic_soda": 1e6}, [lye]).cost["total"]
    cheap = purchase({"magnesium_hydroxide": 1000.0 * magnesia_t}, [slurry]).cost["total"]
    assert magnesia_t == pytest.approx(730.0, rel=0.003)
    assert dear - cheap == pytest.approx(258000.0, rel=0.003)


# --- what a term costs, in round numbers ---------------------------------------------------------


def test_take_or_pay_charges_what_is_not_taken_and_no_freight_for_it() -> None:
    deal = purchase({"caustic_soda": 4000.0}, [offer(take_or_pay_t=20.0, freight_per_t=10.0)])
    assert deal.cost == pytest.approx(
        {"goods": 2400.0, "freight": 80.0, "not taken": 3600.0, "total": 6080.0}
    )


def test_a_sunk_commitment_is_paid_whatever_is_bought() -> None:
    old = offer(signed=True, take_or_pay_t=10.0, mobilisation_fee=500.0)
    assert purchase({}, [old]).cost["total"] == pytest.approx(3000.0)
    assert purchase({"caustic_soda": 5000.0}, [old]).cost["total"] == pytest.approx(3000.0)
    assert purchase({"caustic_soda": 6000.0}, [old]).cost["total"] == pytest.approx(3600.0)


def test_full_loads_are_a_yearly_average_and_one_order_at_least() -> None:
    tank = offer(order_size_t=20.0, freight_per_drop=100.0)
    assert orders_in_a_year(tank, 50.0) == 2.5
    assert costs_at(tank, 50.0)[0]["freight"] == pytest.approx(250.0)
    assert costs_at(tank, 5.0)[0]["freight"] == pytest.approx(100.0)


def test_more_is_bought_where_that_reaches_a_cheaper_tier() -> None:
    tiered = offer(tiers=(Tier(from_t=10.0, price=200.0),), tier_kind="all_units", tier_per="year")
    deal = purchase({"caustic_soda": 4500.0}, [tiered])
    assert deal.cost["total"] == pytest.approx(2000.0)
    (buy,) = deal.buys
    assert (buy.tier, buy.surplus_kg_pure_per_year) == (2, pytest.approx(500.0))


def test_the_two_readings_of_a_tier_table_differ() -> None:
    tiers = (Tier(from_t=10.0, price=200.0),)
    every = offer(tiers=tiers, tier_kind="all_units", tier_per="year")
    slices = offer(tiers=tiers, tier_kind="incremental", tier_per="year")
    assert purchase({"caustic_soda": 6000.0}, [every]).cost["total"] == pytest.approx(2400.0)
    assert purchase({"caustic_soda": 6000.0}, [slices]).cost["total"] == pytest.approx(3400.0)


def test_a_cap_leaves_the_rest_to_the_dearer_offer_or_to_nobody() -> None:
    capped = offer(most_t_per_year=6.0)
    with pytest.raises(NoPurchase, match="caustic_soda: 5,000 kg pure a year are needed, the"):
        purchase({"caustic_soda": 5000.0}, [capped])


# --- dates ---------------------------------------------------------------------------------------


def test_offers_out_of_date_are_used_only_if_told() -> None:
    old = offer(valid_until="2020-01-31")
    with pytest.raises(NoPurchase, match=r"offer A \(Larkspur Supplies\) was valid until 2020-01-"):
        purchase({"caustic_soda": 500.0}, [old])
    told = purchase({"caustic_soda": 500.0}, [old], use_expired=True)
    assert told.cost["total"] == pytest.approx(300.0)


def test_validity_counts_its_first_and_last_day() -> None:
    one = offer(
        valid_from="2026-03-01", valid_until="2026-03-31", signed=True, ends_on="2026-03-30"
    )
    days = [datetime.date(2026, 3, d) for d in (1, 30, 31)] + [datetime.date(2026, 2, 28)]
    assert [bool(holding([one], day)) for day in days] == [True, True, False, False]
    assert [date_notes([one], day, used=False) for day in days[2:]] == [
        ("offer A (Larkspur Supplies) ended on 2026-03-30: left out",),
        ("offer A (Larkspur Supplies) is valid from 2026-03-01: left out",),
    ]


def test_a_number_of_orders_scales_what_is_stated_per_order() -> None:
    monthly = offer(
        orders_per_year=12.0, least_order_t=0.5, tier_per="order", tier_kind="all_units",
        tiers=(Tier(from_t=2.0, price=200.0),), freight_per_drop=40.0, freight_free_from_t=2.0,
    )  # fmt: skip
    little, _ = costs_at(monthly, 3.0)
    assert little["goods"] == pytest.approx(1800.0)  # 12 orders of at least half a tonne
    assert little["freight"] == pytest.approx(480.0)
    much, tier = costs_at(monthly, 24.0)
    assert (much["goods"], much["freight"], tier) == (pytest.approx(4800.0), 0.0, 2)
    assert math.isclose(sum(much.values()), 4800.0)

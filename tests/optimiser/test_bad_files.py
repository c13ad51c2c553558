"""Bad site files and price books: each problem with its place, fact, expectation and remedy."""

from __future__ import annotations

import time
from pathlib import Path

import pytest

from catalogs.problems import InputFileError
from optimiser.offers_reader import OFFER_COLUMNS, load_offers
from optimiser.site_reader import load_site

SITE = """\
site: Harrow Sluice wire works
currency: EUR
feed:
  stands_for: average
  flow_m3_per_d: 60
  operating_days_per_year: 220
  temperature_degc: 20
  ph: 3
  close_charge_with: SO4
  analysis:
    Cu: {dissolved: 20 mg/L, total: 21 mg/L}
    Zn: 15 mg/L
    Na: 100 mg/L
    SO4: 320 mg/L
limits:
  own:
    - {parameter: Cu, daily_mg_per_l: 1, monthly_mg_per_l: 0.5, source: permit}
  ph: {low: 6.5, high: 9.5}
treatment:
  reagents: [caustic_soda, hydrated_lime]
  trim_reagents: [sulfuric_acid]
  ph_set_point: {low: 7, high: 10}
disposal:
  rules:
    - {sludge_class: any, tariff_per_wet_t: 100}
offers: offers.csv
"""

OFFERS = f"""\
{",".join(OFFER_COLUMNS)}
A,Quoin Alkali,caustic_soda,caustic 50 %,solution,50,1.525,300,t,20,10,,
B,Quoin Alkali,hydrated_lime,lime,powder,95,0.5,250,t,20,10,,
C,Quoin Alkali,sulfuric_acid,acid,solution,96,1.84,0.3,L,,,,
"""


@pytest.fixture(autouse=True)
def _folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)


def problems_of(
    old: str = "", new: str = "", *, offers: str = OFFERS, site: str = SITE
) -> list[str]:
    """Messages for the site above with one text replaced."""
    assert old in site
    Path("site.yaml").write_text(site.replace(old, new, 1))
    Path("offers.csv").write_text(offers)
    try:
        load_site("site.yaml")
    except InputFileError as error:
        return [str(problem) for problem in error.problems]
    return []


def test_the_site_that_these_tests_damage_is_sound() -> None:
    assert problems_of() == []


def test_scientific_notation_is_a_number() -> None:
    assert problems_of("flow_m3_per_d: 60", "flow_m3_per_d: 6e1") == []
    assert problems_of("Zn: 15 mg/L", "Zn: 1.5e1 mg/L") == []


NUMBER = "    Write digits with a decimal point, such as 12, 12.5 or 1e-3."
RANGE = "    Correct the number; the field's unit is in its name."


@pytest.mark.parametrize(
    ("value", "found", "remedy"),
    [
        ("410,50", "'410,50'",
         "    Use a decimal point, no unit and no thousands separator: 410.50"),
        ("sixty", "'sixty'", NUMBER),
        (".nan", "'.nan'", NUMBER),
        ("inf", "'inf'", NUMBER),
        ("-60", "-60", RANGE),
        ("0", "0", RANGE),
        ("60 m3/d", "'60 m3/d'",
         "    Write the number alone; its unit is in the name of the field."),
        ("'60'", "the text '60'", "    Remove the quotes."),
        ("[60]", "a list", "    Write one number after the colon."),
    ],
)  # fmt: skip
def test_what_is_no_sound_number_is_refused(value: str, found: str, remedy: str) -> None:
    assert problems_of("flow_m3_per_d: 60", f"flow_m3_per_d: {value}") == [
        f"site.yaml:5: feed.flow_m3_per_d: found {found}, expected a number above 0\n{remedy}"
    ]


def test_an_unknown_key_comes_with_the_nearest_known_one() -> None:
    [problem] = problems_of("flow_m3_per_d: 60", "flow_m3_per_day: 60")
    assert problem.startswith(
        "site.yaml:5: feed.flow_m3_per_day: found an unknown key, expected only known keys\n"
        "    Did you mean `flow_m3_per_d`? The keys known here: acidity_end_ph, "
    )
    [problem] = problems_of("currency: EUR", "currency: EUR\nchemistry: mine.csv")
    assert problem.startswith("site.yaml:3: chemistry: found an unknown key, expected only known")


def test_every_missing_block_and_key_is_reported() -> None:
    assert problems_of("", "", site="currency: EUR\nfeed: {ph: 3}\n") == [
        "site.yaml:1: site: found nothing, expected text\n    Add `site` here.",
        "site.yaml:1: treatment: found nothing, expected a block of keys\n"
        "    Add `treatment` here.",
        "site.yaml:1: limits: found nothing, expected a block of keys\n    Add `limits` here.",
        "site.yaml:1: disposal: found nothing, expected a block of keys\n    Add `disposal` here.",
        "site.yaml:1: offers: found nothing, expected text\n    Add `offers` here.",
        "site.yaml:2: feed.stands_for: found nothing, expected one of the kinds of feed\n"
        "    Add `stands_for` here.",
        "site.yaml:2: feed.flow_m3_per_d: found nothing, expected a number above 0\n"
        "    Add `flow_m3_per_d` here.",
        "site.yaml:2: feed.operating_days_per_year: found nothing, expected a number above 0 and"
        " at most 366\n    Add `operating_days_per_year` here.",
        "site.yaml:2: feed.temperature_degc: found nothing, expected a number from 0 to 60\n"
        "    Add `temperature_degc` here.",
        "site.yaml:2: feed.close_charge_with: found nothing, expected one of the closing ions\n"
        "    Add `close_charge_with` here.",
        "site.yaml:2: feed.analysis: found nothing, expected a block of keys\n"
        "    Add `analysis` here.",
    ]


QUANTITY = "expected a quantity with its unit, such as 38 mg/L or <0.05 mg/L"
UNITS = (
    "The units known here: mg/L, g/m3, g/L, kg/m3, ug/L, mg/m3, ng/L, mol/L, mmol/L, umol/L,"
    " meq/L, eq/L."
)


@pytest.mark.parametrize(
    ("value", "found_and_remedy"),
    [
        ("15", f"found '15', {QUANTITY}\n    Add the unit: 15 mg/L. {UNITS}"),
        ("15 mgl", f"found '15 mgl', {QUANTITY}\n    Did you mean `15 mg/L`? {UNITS}"
         " A basis follows the unit: 12 mg/L as N."),
        ("15 ppm", f"found '15 ppm', {QUANTITY}\n    In a dilute water 1 ppm is 1 mg/L: write"
         f" 15 mg/L. {UNITS}"),
        ("1,5 mg/L", f"found '1,5 mg/L', {QUANTITY}\n    Use a decimal point, no unit and no"
         " thousands separator: 1.5"),
        ("1 500 mg/L", f"found '1 500 mg/L', {QUANTITY}\n    Write the number without spaces:"
         " 1200 mg/L, not 1 200 mg/L."),
        ("some mg/L", f"found 'some mg/L', {QUANTITY}\n    Write the number first; a value below"
         " the reporting limit as < and that limit."),
        ("nan mg/L", f"found 'nan mg/L', {QUANTITY}\n    Write the number first; a value below"
         " the reporting limit as < and that limit."),
        ("-15 mg/L", "found '-15 mg/L', expected a concentration of 0 or more\n    Correct the"
         " number, or write < and the reporting limit."),
        ("15 mg/L as N", "found '15 mg/L as N', expected a basis that suits Zn\n    Write a mass"
         " per litre as one of: Zn; without a basis it is the mass of zinc itself."),
        ("2e6 g/L", "found '2e6 g/L', expected at most 1 kg/L\n    Check the unit: mg/L, ug/L or"
         " g/L."),
    ],
)  # fmt: skip
def test_quantities_without_a_sound_unit_are_refused(value: str, found_and_remedy: str) -> None:
    assert problems_of("Zn: 15 mg/L", f"Zn: {value}") == [
        f"site.yaml:12: feed.analysis.Zn: {found_and_remedy}"
    ]


def test_dissolved_above_total_is_refused() -> None:
    assert problems_of("dissolved: 20 mg/L, total: 21 mg/L", "dissolved: 20 mg/L, total: 2 mg/L")[
        0
    ] == (
        "site.yaml:11: feed.analysis.Cu: found dissolved 20 mg/L above total 2 mg/L, expected"
        " dissolved at most total\n    Check the units and whether the two values were swapped."
    )


def test_a_total_alone_is_asked_for_its_dissolved_part() -> None:
    assert problems_of("{dissolved: 20 mg/L, total: 21 mg/L}", "{total: 21 mg/L}") == [
        "site.yaml:11: feed.analysis.Cu.dissolved: found nothing, expected a quantity such as"
        " 38 mg/L\n    Add `dissolved` here."
    ]


def test_chromium_and_iron_are_asked_for_their_oxidation_state() -> None:
    assert problems_of("Zn: 15 mg/L", "Zn: 15 mg/L\n    Cr: 3 mg/L\n    Fe: 2 mg/L") == [
        "site.yaml:13: feed.analysis.Cr: found Cr without its oxidation state, expected Cr(III)"
        " and Cr(VI) apart\n    Give Cr(III) and Cr(VI); where one was measured, the other is the"
        " rest of the total Cr.",
        "site.yaml:14: feed.analysis.Fe: found Fe without its oxidation state, expected Fe(II) and"
        " Fe(III) apart\n    Give Fe(II) and Fe(III); where one was measured, the other is the"
        " rest of the total Fe.",
    ]


@pytest.mark.parametrize(
    ("analyte", "name", "how"),
    [
        ("Cr(VI)", "hexavalent chromium", "reduce it to Cr(III) first"),
        ("CN", "free cyanide", "destroy it first, by oxidation"),
    ],
)
@pytest.mark.parametrize("value", ["0.06 mg/L", "<0.1 mg/L", "60 ug/L"])
def test_what_precipitation_cannot_remove_is_refused(
    analyte: str, name: str, how: str, value: str
) -> None:
    assert problems_of("Zn: 15 mg/L", f"Zn: 15 mg/L\n    {analyte}: {value}") == [
        f"site.yaml:13: feed.analysis.{analyte}: found {value}, expected at most 0.05 mg/L"
        f" dissolved {name}\n    Precipitation does not remove it: {how}, then give the analysis"
        f" after that, and name the day in feed: `pretreated: {{{analyte}: 2026-05-04}}`."
    ]


def test_a_pretreatment_needs_its_date() -> None:
    text = "Zn: 15 mg/L\n    CN: 0.3 mg/L\n  pretreated: {CN: last spring}"
    assert problems_of("Zn: 15 mg/L\n    Na: 100 mg/L\n    SO4: 320 mg/L", text) == [
        "site.yaml:14: feed.pretreated.CN: found 'last spring', expected a date\n"
        "    Write year-month-day, such as 2026-05-04."
    ]


def test_cyanide_above_its_limit_is_refused_even_when_pretreated() -> None:
    site = SITE.replace("limits:\n", "limits:\n  sets: [metal_finishing_existing]\n")
    text = "Zn: 15 mg/L\n    CN: 3 mg/L\n  pretreated: {CN: 2026-05-04}\n"
    assert problems_of("Zn: 15 mg/L\n    Na: 100 mg/L\n    SO4: 320 mg/L\n", text, site=site) == [
        "site.yaml:16: limits.sets: found CN 3 mg/L in the feed, expected at most 0.65 mg/L, its"
        " limit in metal_finishing_existing\n    Destroy it first and give the analysis after that:"
        " precipitation leaves it."
    ]


def test_an_unknown_analyte_is_refused() -> None:
    [problem] = problems_of("Zn: 15 mg/L", "Zn: 15 mg/L\n    Sulfate: 1 mg/L")
    assert problem.startswith("site.yaml:13: feed.analysis.Sulfate: found 'Sulfate', expected an ")
    assert problem.endswith(
        " Leave out an ion that is not listed; the closing ion stands for its charge."
    )


def test_an_analysis_that_cannot_be_electroneutral_is_refused_at_its_line() -> None:
    [problem] = problems_of("Na: 100 mg/L", "Na: 100 mg/L\n    Cl: 1200 mg/L")
    assert problem.startswith("site.yaml:10: feed.analysis: found an analysis that does not hold (")
    assert "SO4" in problem
    assert problem.endswith(
        "), expected a water that can exist, its charge closed with SO4\n    Check its units and"
        " look for missing ions; then correct what is named above."
    )


@pytest.mark.parametrize(
    ("old", "new", "place", "text"),
    [
        ("  ph: 3\n", "  ph: 15\n", "8: feed.ph",
         "found 15, expected a number from 0 to 14\n" + RANGE),
        ("  ph: 3\n", "", "3: feed.ph",
         "found no acid, expected ph, acidity_meq_per_l or titration\n"
         "    Add the measured `ph` here."),
        ("  ph: 3\n", "  titration: [[0, 3], [5, 2.5]]\n", "8: feed.titration[2]",
         "found 5 meq/L at pH 2.5 after 0 meq/L at 3, expected points that rise in base and in pH\n"
         "    Sort the points; leave out those where the pH fell."),
        ("  ph: 3\n", "  ph: 3\n  titration: [[0, 3], 5]\n", "9: feed.titration[2]",
         "found '5', expected a pair [base in meq/L, pH]\n    Write each point as [4.5, 3.1]."),
        ("  ph: 3\n", "  ph: 7\n  alkalinity: 120 mg/L\n", "9: feed.alkalinity",
         "found '120 mg/L', expected an alkalinity such as 120 mg/L as CaCO3 or 2.4 meq/L\n"
         "    Alkalinity is reported as CaCO3: write that basis, or use meq/L."),
        ("{low: 7, high: 10}", "{low: 10, high: 7}", "22: treatment.ph_set_point",
         "found low 10 and high 7, expected low below high\n    Correct or swap the two values."),
        ("{low: 6.5, high: 9.5}", "{low: 9.5, high: 9.5}", "18: limits.ph",
         "found low 9.5 and high 9.5, expected low below high\n"
         "    Correct or swap the two values."),
        ("close_charge_with: SO4", "close_charge_with: NO3", "9: feed.close_charge_with",
         "found 'NO3', expected one of the closing ions\n    Did you mean `CO3`? The closing ions"
         " known here: CO3, Ca, Cl, F, HCO3, K, Mg, NH4, Na, PO4, S, SO4, acetate."),
        ("monthly_mg_per_l: 0.5", "monthly_mg_per_l: 5", "17: limits.own[1].monthly_mg_per_l",
         "found monthly 5 above daily 1, expected the monthly average at most the daily maximum\n"
         "    Correct or swap the two values."),
        ("daily_mg_per_l: 1, monthly_mg_per_l: 0.5, ", "", "17: limits.own[1]",
         "found a limit without a value, expected daily_mg_per_l, monthly_mg_per_l,"
         " daily_load_kg_per_d, monthly_load_kg_per_d, surcharge_per_kg\n    Add at least one of"
         " them."),
        ("monthly_mg_per_l: 0.5", "daily_load_kg_per_d: 0.5, monthly_load_kg_per_d: 0.6",
         "17: limits.own[1].monthly_load_kg_per_d",
         "found monthly 0.6 above daily 0.5, expected the monthly average at most the daily maximum"
         "\n    Correct or swap the two values."),
        ("monthly_mg_per_l: 0.5", "free_mg_per_l: 0.5", "17: limits.own[1].free_mg_per_l",
         "found a free concentration without a surcharge, expected `free_mg_per_l` beside"
         " `surcharge_per_kg`\n    Add the rate, or delete this key."),
        ("  ph: {low: 6.5,", "  sets: [metal_finishing_existing]\n  combined_flow: {mixed: later,"
         " streams: [{stream: roof, kind: dilute, flow_m3_per_d: 5}]}\n  ph: {low: 6.5,",
         "19: limits.combined_flow.mixed",
         "found 'later', expected one of the places where the streams mix\n    The places where the"
         " streams mix known here: after_treatment, before_treatment."),
        ("monthly_mg_per_l: 0.5", "surcharge_per_kg: 0", "17: limits.own[1].surcharge_per_kg",
         f"found 0, expected a number above 0\n{RANGE}"),
        ("monthly_mg_per_l: 0.5", "surcharge_per_kg: 5, free_mg_per_l: -1",
         "17: limits.own[1].free_mg_per_l", f"found -1, expected a number of 0 or more\n{RANGE}"),
        ("{parameter: Cu,", "{parameter: sum, of: [Cu],", "17: limits.own[1].of",
         "found a sum of one, expected at least two metals\n    List what is added up."),
        ("{parameter: Cu,", "{parameter: Cu, of: [Cu, Zn],", "17: limits.own[1].of",
         "found `of` beside Cu, expected `of` only with `parameter: sum`\n    Delete `of`."),
        ("{parameter: Cu,", "{parameter: Ni,", "17: limits.own[1].parameter",
         "found a limit on 'Ni', which was never analysed, expected a parameter that the feed's"
         " analysis or an allowed reagent holds\n    Add Ni to feed.analysis (as `<0.05 mg/L` if"
         " none was found), or delete the limit."),
        ("{parameter: Cu,", "{parameter: sum, of: [Cu, Cr],", "17: limits.own[1].of",
         "found a limit on 'Cr', which was never analysed, expected a parameter that the feed's"
         " analysis or an allowed reagent holds\n    Add Cr(III) or Cr(VI) to feed.analysis (as"
         " `<0.05 mg/L` if none was found), or delete the limit."),
        ("reagents: [caustic_soda,", "reagents: [caustic_sda,", "20: treatment.reagents[1]",
         "found 'caustic_sda', expected one of the reagents\n    Did you mean `caustic_soda`? The"
         " reagents known here: barium_chloride, calcium_chloride, carbon_dioxide, caustic_soda,"
         " ferric_chloride, ferric_sulfate, ferrous_sulfide, hydrated_lime, hydrochloric_acid,"
         " magnesium_chloride, magnesium_hydroxide, potassium_hydroxide, quicklime, soda_ash,"
         " sodium_bicarbonate, sodium_chloride, sodium_hydrosulfide, sodium_sulfate,"
         " sodium_sulfide, sulfuric_acid."),
        ("hydrated_lime]", "hydrated_lime, soda_ash]", "20: treatment.reagents[3]",
         "found soda_ash, which no offer sells, expected at least one offer of it in offers.csv\n"
         "    Add an offer, or take the reagent out of the list."),
        ("  trim_reagents", "  required: [soda_ash]\n  trim_reagents",
         "21: treatment.required[1]",
         "found 'soda_ash', expected one of the allowed reagents\n    The allowed reagents known"
         " here: caustic_soda, hydrated_lime."),
        ("  trim_reagents", "  most_reagents: 2.5\n  trim_reagents", "21: treatment.most_reagents",
         "found 2.5, expected a whole number from 1 to 9\n    Write no decimals."),
        ("offers: offers.csv", "offers: prices.csv", "26: offers",
         "found no file 'prices.csv' beside the site file, expected a price book\n    Write one"
         f" with the columns {','.join(OFFER_COLUMNS)}, or correct the name."),
        ("tariff_per_wet_t: 100", "tariff_per_wet_t: 100, metals: [Cu], above_mg_per_kg_dry: 5",
         "24: disposal.rules",
         "found only rules with a condition, expected a last rule without `metals` for every other"
         " sludge\n    Add the tariff of ordinary sludge as last rule."),
        ("disposal:", "disposal:\n  most_wet_t_per_year: 0", "24: disposal.most_wet_t_per_year",
         f"found 0, expected a number above 0\n{RANGE}"),
        ("offers: offers.csv", "offers: offers.csv\ntoday: {soda_ash: 5}", "27: today.soda_ash",
         "found 'soda_ash', expected one of the reagents allowed in treatment\n    The reagents"
         " allowed in treatment known here: caustic_soda, hydrated_lime, sulfuric_acid."),
        ("offers: offers.csv", "offers: offers.csv\nsolver: {name: highest}", "27: solver.name",
         "found 'highest', expected one of the solvers\n    Did you mean `highs`? The solvers known"
         " here: cbc, highs."),
        ("flow_m3_per_d: 60\n", "flow_m3_per_d: 60\n  peak_flow_m3_per_d: 50\n",
         "6: feed.peak_flow_m3_per_d",
         "found a peak of 50 m3/d below the flow of 60 m3/d, expected the highest flow of a day\n"
         "    Correct one of the two."),
        ("offers: offers.csv",
         "offers: offers.csv\ndosing: {caustic_soda: {pump_l_per_h: {low: 5, high: 2}}}",
         "27: dosing.caustic_soda.pump_l_per_h.low",
         "found low 5 is not below high 2, expected the least and the greatest rate\n"
         "    Exchange or correct them."),
        ("offers: offers.csv",
         "offers: offers.csv\nstock: {monthly_flow_m3_per_d: [60, 50, 70]}",
         "27: stock.monthly_flow_m3_per_d",
         "found 3 flows, expected twelve flows in m3/d, from January to December\n"
         "    Write one for every month, 0 where the plant rests."),
        ("offers: offers.csv", "offers: offers.csv\nstock: {holding_percent_per_year: 0}",
         "27: stock.holding_percent_per_year",
         "found 0, expected a number above 0 and at most 100\n" + RANGE),
    ],
)  # fmt: skip
def test_one_slip_gives_one_message(old: str, new: str, place: str, text: str) -> None:
    assert problems_of(old, new) == [f"site.yaml:{place}: {text}"]


def test_a_decimal_comma_inside_braces_is_explained() -> None:
    assert problems_of("daily_mg_per_l: 1,", "daily_mg_per_l: 0,5,") == [
        "site.yaml:17: limits.own[1]: found '5' as a key, expected a name as a key\n"
        "    If a decimal comma was meant, write a decimal point: 0.5, not 0,5.",
        f"site.yaml:17: limits.own[1].daily_mg_per_l: found 0, expected a number above 0\n{RANGE}",
    ]


@pytest.mark.parametrize(
    ("old", "new", "place", "text"),
    [
        ("caustic_soda,caustic", "caustik_soda,caustic", "2: reagent",
         "found 'caustik_soda', expected one of the reagents\n    Did you mean `caustic_soda`?"),
        (",300,t,", ",410,50,t,", "2: row",
         "found 14 cells, expected 13 cells, as in the header\n    Write decimals with a point"
         " (410.50) and put text that holds a comma in double quotes."),
        (",300,t,", ',"410,50",t,', "2: price",
         "found '410,50', expected a number of 0 or more\n    Use a decimal point, no unit and no"
         " thousands separator: 410.50"),
        (",300,t,", ",-3,t,", "2: price", "found -3, expected a number of 0 or more\n" + RANGE),
        (",300,t,", ",,t,", "2: price",
         "found nothing, expected a number of 0 or more\n    Add `price` here."),
        (",300,t,", ",300,kg,", "2: price_per",
         "found 'kg', expected one of the units of price\n    The units of price known here: L,"
         " pack, short_ton, t."),
        (",50,1.525", ",0.5,1.525", "2: strength_percent",
         "found 0.5, expected a number from 1 to 100\n" + RANGE),
        (",50,1.525", ",50,1525", "2: density_kg_per_l",
         "found 1525, expected a number from 0.2 to 5\n" + RANGE),
        ("lime,powder,95,0.5", "lime,powder,95,", "3: density_kg_per_l",
         "found nothing, expected a number from 0.2 to 5\n    Take it from the data sheet (bulk"
         " density of a solid). Usual values: 0.5 (powder, 72 % CaO), "),
        ("20,10,,\nB", "20,10,31.12.2027,\nB", "2: valid_until",
         "found '31.12.2027', expected a date\n    Write year-month-day, such as 2026-05-04."),
        ("\nB,", "\nA,", "3: offer",
         "found 'A' twice, expected a name of its own for each offer\n    It already stands in line"
         " 2: rename one of them."),
        ("strength_percent,", "strength,", "1: header",
         "found the column 'strength', expected only known columns\n    Did you mean"
         " `strength_percent`? Write as first line: offer,supplier,"),
    ],
)  # fmt: skip
def test_a_slip_in_the_price_book_names_line_and_column(
    old: str, new: str, place: str, text: str
) -> None:
    assert old in OFFERS
    problems = [p for p in problems_of(offers=OFFERS.replace(old, new, 1)) if "offers.csv:" in p]
    assert problems[0].startswith(f"offers.csv:{place}: {text}")


def test_the_price_book_alone_is_checked_in_the_same_way() -> None:
    Path("book.csv").write_text(OFFERS.replace(",300,t,", ",x,t,"))
    with pytest.raises(InputFileError, match=r"book\.csv:2: price: found 'x', expected a number"):
        load_offers("book.csv")


def test_problems_of_all_blocks_and_of_both_files_come_in_one_report() -> None:
    site = SITE
    for old, new in (
        ("currency: EUR", "currency: EUR\ncurrency: USD"),
        ("temperature_degc: 20", "temperature_degc: 80"),
        ("Zn: 15 mg/L", "Zn: 15"),
        ("parameter: Cu", "parameter: Coper"),
        ("tariff_per_wet_t: 100", "tariff_per_wet_t: -1"),
    ):
        assert old in site
        site = site.replace(old, new, 1)
    problems = problems_of(
        site=site, offers=OFFERS.replace(",300,", ",NaN,").replace(",250,", ",,")
    )
    assert [":".join(p.split(":")[:3]) for p in problems] == [
        "site.yaml:3: currency",
        "site.yaml:8: feed.temperature_degc",
        "site.yaml:13: feed.analysis.Zn",
        "site.yaml:18: limits.own[1].parameter",
        "site.yaml:26: disposal.rules[1].tariff_per_wet_t",
        "offers.csv:2: price",
        "offers.csv:3: price",
    ]


def test_a_directory_and_a_missing_file_are_refused() -> None:
    problems_of()
    with pytest.raises(InputFileError) as caught:
        load_site(".")
    assert str(caught.value) == (
        ".:1: file: found a directory, expected a file\n"
        "    Name a file in it: offers.csv, site.yaml."
    )
    with pytest.raises(InputFileError) as caught:
        load_site("nowhere.yaml")
    assert str(caught.value) == (
        "nowhere.yaml:1: file: found no readable file (No such file or directory), expected a"
        " file\n    Check the path and its rights."
    )


def test_a_hundred_megabytes_and_an_alias_bomb_are_refused_at_once() -> None:
    with Path("big.yaml").open("wb") as stream:
        stream.truncate(100_000_000)
    Path("bomb.yaml").write_text(
        "a: &a [x, x, x, x, x, x, x, x, x]\n"
        + "".join(
            f"{new}: &{new} [{', '.join(['*' + old] * 9)}]\n"
            for old, new in zip("abcdefgh", "bcdefghi", strict=True)
        )
    )
    start = time.perf_counter()
    with pytest.raises(InputFileError, match=r"big\.yaml:1: file: found a file of 100\.0 MB"):
        load_site("big.yaml")
    with pytest.raises(InputFileError, match=r"bomb\.yaml:1: file: found &a, expected no anchors"):
        load_site("bomb.yaml")
    assert time.perf_counter() - start < 0.5


def test_a_damaged_book_is_not_blamed_on_the_reagents() -> None:
    problems = problems_of(offers="a;b\n1;2\n")
    assert [p.split(": found")[0] for p in problems] == ["offers.csv:1: header"]

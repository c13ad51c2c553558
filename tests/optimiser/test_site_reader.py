"""A sound site file becomes the problem it describes, with the catalog's figures filled in."""

from __future__ import annotations

import datetime
from pathlib import Path

import pytest

from catalogs.limit_sets import load_limit_sets
from catalogs.practice_data import floors_mg_per_l, variability_of
from chemistry.feed import feed_water
from optimiser.offers_reader import OFFER_COLUMNS, load_offers
from optimiser.site import (
    Disposal,
    DisposalRule,
    Limit,
    Offer,
    PhWindow,
    Separator,
    Site,
    SolverSettings,
    Treatment,
)
from optimiser.site_reader import load_site

FULL = """\
site: Harrow Sluice wire works
currency: CHF
feed:
  stands_for: peak
  flow_m3_per_d: 6e1
  operating_days_per_year: 220
  temperature_degc: 12.5
  ph: 3
  acidity_meq_per_l: 4.2
  acidity_end_ph: 7
  titration: [[0, 3], [2, 4.5], [4.5, 7.5]]
  tss_mg_per_l: 30
  aerated: true
  close_charge_with: Na
  analysis:
    Cu: {dissolved: 20 mg/L, total: 21 mg/L}
    Zn: 15000 ug/L
    Cd: <0.01 mg/L
    Pb: {dissolved: <0.1 mg/L, total: 0.05 mg/L}
    Fe(II): 4 mg/L
    Cr(VI): 0.3 mg/L
    Cr(III): 1 mg/L
    NH4: 14.007 mg/L as N
    SO4: 320 mg/L
    Cl: 40 mg/L
  pretreated: {"Cr(VI)": 2026-05-04, CN: 2026-05-05}
limits:
  sets: [metal_finishing_new]
  own:
    - {parameter: Cu, daily_mg_per_l: 1, monthly_mg_per_l: 0.5, source: permit 7}
    - {parameter: sum, of: [Cu, Zn, Cr], daily_mg_per_l: 3}
    - {parameter: Zn, daily_load_kg_per_d: 0.2}
    - {parameter: Na, daily_mg_per_l: 900}
    - {parameter: sulfide, daily_mg_per_l: 1}
    - {parameter: TDS, daily_mg_per_l: 3000}
  ph: {low: 4.5, high: 9.5, source: by-law}
  design_margin: 0.7
  variability: {Cu: {daily: 2.5, monthly: 1.5}}
  floors: {Cu: {hydroxide: 0.03}}
treatment:
  reagents: [caustic_soda, sodium_hydrosulfide]
  required: [caustic_soda]
  trim_reagents: [sulfuric_acid, caustic_soda]
  most_reagents: 2
  dose_ceilings_mg_per_l: {caustic_soda: 900}
  least_doses_mg_per_l: {sodium_hydrosulfide: 5}
  dose_factors: {caustic_soda: 1.1}
  equipment_cost_per_year: {sulfuric_acid: 400}
  ph_set_point: {low: 8.5, high: 10}
  ph_tolerance: 0.2
  dose_tolerance_fraction: 0.1
  separator: {name: clarifier, tss_mg_per_l: 15, capture_fraction: 0.985, cost_per_year: 1200}
  polymer_g_per_kg_solids: 4
  polymer_price_per_kg: 5
  scale_supersaturation_si: 0.5
  magnesia_ph_ceiling: 9.2
  vent_pco2_atm: 5e-4
  sulfide_least_ph: 8
  scrubber: packed column
  h2s_limit_ppm: 5
  inert_solids_dilute: true
disposal:
  cake_solids_fraction: 0.25
  bound_water_factor: 1.3
  rules:
    - {sludge_class: hazardous, metals: [Cd, Cr], above_mg_per_kg_dry: 1000,
       tariff_per_wet_t: 310, pickup_fee: 280, tonnes_per_pickup: 12, yearly_fee: 900, text: a b}
    - {sludge_class: other, tariff_per_wet_t: 120}
burden_charges_per_kg: {Cl: 0.05, TDS: 1e-2}
offers: prices.csv
expired_offers: use
solver: {name: cbc, time_limit_s: 5, relative_gap: 1e-4, seed: 3}
today: {caustic_soda: 420}
"""

PRICES = f"""\
# prices of the year
{",".join(OFFER_COLUMNS)}
A,Quoin Alkali,caustic_soda,"caustic, 50 %",solution,50,1.525,300,t,20,10,2026-11-30,old
B,Quoin Alkali,sodium_hydrosulfide,NaHS,solution,40,1.28,0.5,L,,,2026-12-01,
C,Quoin Alkali,sulfuric_acid,acid,solution,96,1.84,0.3,L,1,2,,
D,Quoin Alkali,soda_ash,soda,powder,99,1,350,t,,,,
"""
DEMOS = sorted((Path(__file__).parents[2] / "catalogs" / "sites").glob("*/site.yaml"))
DAY = datetime.date(2026, 12, 1)


@pytest.fixture
def site(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Site:
    monkeypatch.chdir(tmp_path)
    Path("full.yaml").write_text(FULL)
    Path("prices.csv").write_text(PRICES)
    return load_site("full.yaml", on_day=DAY)


def test_the_feed_is_read_in_mg_per_litre_of_each_analyte(site: Site) -> None:
    assert (site.name, site.currency, site.stands_for) == (
        "Harrow Sluice wire works", "CHF", "peak",
    )  # fmt: skip
    assert (site.path, site.flow_m3_per_d, site.operating_days_per_year) == (
        Path("full.yaml"), 60.0, 220.0,
    )  # fmt: skip
    assert site.flow_m3_per_year == 13200.0
    water = site.analysis
    assert (water.temperature_degc, water.ph, water.acidity_meq_per_l) == (12.5, 3.0, 4.2)
    assert (water.acidity_end_ph, water.tss_mg_per_l, water.aerated) == (7.0, 30.0, True)
    assert water.titration == ((0.0, 3.0), (2.0, 4.5), (4.5, 7.5))
    assert water.close_charge_with == "Na"
    parts = {
        name: (m.dissolved_mg_per_l, m.total_mg_per_l, m.below_reporting_limit)
        for name, m in water.measurements.items()
    }
    assert parts["Cu"] == (20.0, 21.0, False)
    assert parts["Zn"] == (15.0, 15.0, False)
    assert parts["Cd"] == (0.01, 0.01, True)
    assert parts["Pb"] == (0.05, 0.05, True)
    assert parts["NH4"][0] == pytest.approx(18.039, rel=1e-5)
    assert water.measurements["Cu"].as_written == "dissolved 20 mg/L, total 21 mg/L"
    assert site.pretreated == {"Cr(VI)": "2026-05-04", "CN": "2026-05-05"}


def test_the_system_holds_what_was_analysed_dosed_or_closed_with_and_no_more(site: Site) -> None:
    assert set(site.system.components) == {
        "H+", "Na+", "CO3-2", "Cu+2", "Zn+2", "Cd+2", "Pb+2", "Fe+2", "Fe+3", "Cr+3", "NH4+",
        "SO4-2", "Cl-", "HS-",
    }  # fmt: skip
    assert site.system.temperature_degc == 12.5
    assert feed_water(site.analysis, site.system).closing_ion == "Na+"


def test_own_limits_follow_those_of_the_sets(site: Site) -> None:
    source = load_limit_sets()["metal_finishing_new"].source
    assert site.limits == (
        Limit(parameter="Cd", daily_mg_per_l=0.11, monthly_mg_per_l=0.07, source=source),
        Limit(parameter="Cr", daily_mg_per_l=2.77, monthly_mg_per_l=1.71, source=source),
        Limit(parameter="Cu", daily_mg_per_l=3.38, monthly_mg_per_l=2.07, source=source),
        Limit(parameter="Pb", daily_mg_per_l=0.69, monthly_mg_per_l=0.43, source=source),
        Limit(parameter="Zn", daily_mg_per_l=2.61, monthly_mg_per_l=1.48, source=source),
        Limit(parameter="Cu", daily_mg_per_l=1.0, monthly_mg_per_l=0.5, source="permit 7"),
        Limit(
            parameter="sum", of=("Cu", "Zn", "Cr"), daily_mg_per_l=3.0,
            source="full.yaml, line 31",
        ),
        Limit(parameter="Zn", daily_load_kg_per_d=0.2, source="full.yaml, line 32"),
        Limit(parameter="Na", daily_mg_per_l=900.0, source="full.yaml, line 33"),
        Limit(parameter="sulfide", daily_mg_per_l=1.0, source="full.yaml, line 34"),
        Limit(parameter="TDS", daily_mg_per_l=3000.0, source="full.yaml, line 35"),
    )  # fmt: skip
    assert site.ph_window == PhWindow(
        low=5.0, high=9.5, source="40 CFR 403.5(b), general sewer prohibition"
    )
    assert site.design_margin == 0.7


def test_ratios_and_floors_are_the_catalogs_unless_the_site_has_its_own(site: Site) -> None:
    assert site.variability["Cu"] == (2.5, 1.5)
    zinc = variability_of("Zn")
    assert site.variability["Zn"] == (zinc.daily_ratio, zinc.monthly_ratio)
    assert site.floors_mg_per_l["Cu"]["hydroxide"] == 0.03
    assert site.floors_mg_per_l["Cu"]["sulfide"] == floors_mg_per_l()["Cu"]["sulfide"]
    assert site.floors_mg_per_l["Zn"] == floors_mg_per_l()["Zn"]


def test_treatment_disposal_and_the_rest_are_read_field_by_field(site: Site) -> None:
    assert site.treatment == Treatment(
        reagents=("caustic_soda", "sodium_hydrosulfide"), required=("caustic_soda",),
        trim_reagents=("sulfuric_acid", "caustic_soda"), most_reagents=2,
        dose_ceilings_mg_per_l={"caustic_soda": 900.0},
        least_doses_mg_per_l={"sodium_hydrosulfide": 5.0}, dose_factors={"caustic_soda": 1.1},
        equipment_cost_per_year={"sulfuric_acid": 400.0},
        ph_set_point=PhWindow(low=8.5, high=10.0), ph_tolerance=0.2, dose_tolerance_fraction=0.1,
        separator=Separator(
            name="clarifier", tss_mg_per_l=15.0, capture_fraction=0.985, cost_per_year=1200.0
        ),
        polymer_g_per_kg_solids=4.0, polymer_price_per_kg=5.0, scale_supersaturation_si=0.5,
        magnesia_ph_ceiling=9.2, vent_pco2_atm=5e-4, sulfide_least_ph=8.0,
        scrubber="packed column", h2s_limit_ppm=5.0, inert_solids_dilute=True,
    )  # fmt: skip
    assert site.disposal == Disposal(
        cake_solids_fraction=0.25, bound_water_factor=1.3,
        rules=(
            DisposalRule(
                sludge_class="hazardous", metals=("Cd", "Cr"), above_mg_per_kg_dry=1000.0,
                tariff_per_wet_t=310.0, pickup_fee=280.0, tonnes_per_pickup=12.0,
                yearly_fee=900.0, text="a b",
            ),
            DisposalRule(sludge_class="other", tariff_per_wet_t=120.0),
        ),
    )  # fmt: skip
    assert site.burden_charges_per_kg == {"Cl": 0.05, "TDS": 0.01}
    assert site.solver == SolverSettings(name="cbc", time_limit_s=5.0, relative_gap=1e-4, seed=3)
    assert site.today == {"caustic_soda": 420.0}
    assert set(site.reagents) == {"caustic_soda", "sodium_hydrosulfide", "sulfuric_acid"}


def test_the_price_book_keeps_every_offer(site: Site) -> None:
    assert site.offers == load_offers("prices.csv")
    assert [offer.offer for offer in site.offers] == ["A", "B", "C", "D"]
    assert site.offers[0] == Offer(
        offer="A", supplier="Quoin Alkali", reagent="caustic_soda", product="caustic, 50 %",
        form="solution", strength_fraction=0.5, density_kg_per_l=1.525, price=300.0,
        price_per="t", freight_per_t=20.0, least_order_t=10.0, valid_until="2026-11-30",
        note="old",
    )  # fmt: skip
    assert site.offers[1].freight_per_t == site.offers[1].least_order_t == 0.0
    assert site.offers[1].price_per_t == pytest.approx(0.5 * 1000 / 1.28)


def test_notes_say_what_was_assumed(site: Site) -> None:
    assert site.notes == (
        "Cr(VI): 0.3 mg/L is above 0.05 mg/L; the site states pretreatment on 2026-05-04."
        " Precipitation does not remove it",
        "limit set metal_finishing_new: CN 1.2 mg/L daily and 0.65 mg/L monthly is not planned on:"
        " precipitation does not remove cyanide",
        "limit set metal_finishing_new: Ni, Ag not analysed, assumed absent",
        "limit set metal_finishing_new leaves out: total toxic organics 2.13 mg/L daily (not"
        " changed by precipitation)",
        "limit set metal_finishing_new leaves out: amenable cyanide 0.86 daily and 0.32 monthly may"
        " replace total cyanide where cyanide is treated",
        "the pH window begins at 5, not at 4.5: 40 CFR 403.5(b), general sewer prohibition",
        "Na has a limit and was not analysed in the feed: only what the charge balance and the"
        " doses bring is counted",
        "sulfide has a limit and was not analysed in the feed: only what the charge balance and the"
        " doses bring is counted",
        "the charge is closed with Na, which has a limit: whether it is met leans on the charge"
        " balance of the analysis",
        "offer A (Quoin Alkali) was valid until 2026-11-30: used all the same, ask whether it"
        " holds",
    )


def test_what_is_left_out_takes_its_documented_default(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)
    Path("s.yaml").write_text(
        "site: s\ncurrency: EUR\n"
        "feed: {stands_for: average, flow_m3_per_d: 1, operating_days_per_year: 365,"
        " temperature_degc: 25, ph: 6, close_charge_with: SO4, analysis: {Cu: 3 mg/L}}\n"
        "limits: {own: [{parameter: Cu, daily_mg_per_l: 1}], ph: {low: 6, high: 9}}\n"
        "treatment: {reagents: [caustic_soda]}\n"
        "disposal: {rules: [{sludge_class: any, tariff_per_wet_t: 0}]}\noffers: o.csv\n"
    )
    Path("o.csv").write_text(
        f"{','.join(OFFER_COLUMNS)}\nA,Q,caustic_soda,c,solution,50,1.525,3,t,,,,\n"
    )
    site = load_site("s.yaml", on_day=DAY)
    assert site.treatment == Treatment(reagents=("caustic_soda",))
    assert site.disposal.cake_solids_fraction == 0.30
    assert site.disposal.bound_water_factor == 1.2
    assert site.solver == SolverSettings()
    assert site.design_margin == 0.8
    assert (site.analysis.tss_mg_per_l, site.analysis.aerated) == (0.0, False)
    assert (site.pretreated, site.today, site.burden_charges_per_kg) == ({}, {}, {})
    assert set(site.system.components) == {"H+", "Na+", "SO4-2", "CO3-2", "Cu+2"}
    assert site.notes == ()


def test_the_order_of_the_blocks_does_not_matter(site: Site) -> None:
    blocks = FULL.replace("\nfeed:", "\n@feed:").replace("\nlimits:", "\n@limits:")
    blocks = blocks.replace("\ntreatment:", "\n@treatment:").replace("\ndisposal:", "\n@disposal:")
    head, feed, limits, treatment, rest = blocks.split("@")
    Path("full.yaml").write_text(treatment + rest + limits + feed + head)
    again = load_site("full.yaml", on_day=DAY)
    assert again.treatment == site.treatment
    assert again.analysis == site.analysis
    assert [limit.label for limit in again.limits] == [limit.label for limit in site.limits]


def test_a_byte_order_mark_and_windows_line_ends_change_nothing(site: Site) -> None:
    Path("full.yaml").write_bytes(b"\xef\xbb\xbf" + FULL.replace("\n", "\r\n").encode())
    Path("prices.csv").write_bytes(b"\xef\xbb\xbf" + PRICES.replace("\n", "\r\n").encode())
    again = load_site("full.yaml", on_day=DAY)
    assert (again.limits, again.offers) == (site.limits, site.offers)
    assert again.analysis == site.analysis


def test_there_are_demo_sites_to_read() -> None:
    assert len(DEMOS) >= 4


@pytest.mark.parametrize("demo", DEMOS, ids=lambda path: path.parent.name)
def test_every_demo_site_loads(demo: Path) -> None:
    site = load_site(demo, on_day=DAY)
    assert not [note for note in site.notes if "valid until" in note]
    assert feed_water(site.analysis, site.system).charge_balance_error_percent < 10.0

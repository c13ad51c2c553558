"""From an analysis to an electroneutral water: charge, acid, alkalinity, iron, words."""

from __future__ import annotations

from dataclasses import replace
from functools import cache

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from chemistry import Solid, Species, System, WaterError, equilibrate
from chemistry.closure import base_demand_mol_per_l, charge_mol_per_l, gross_charge_mol_per_l
from chemistry.feed import (
    ANALYTES,
    FeedWater,
    Measurement,
    WaterAnalysis,
    charge_balance_error_percent,
    component_of,
    feed_water,
    oxidise_iron,
    water_burden,
)

# Formation constants at 25 C and zero ionic strength.
# Carbonate: Plummer & Busenberg 1982, Geochim. Cosmochim. Acta 46, 1011. Water, bisulfate,
# CaSO4, NaSO4-: Nordstrom et al. 1990, ACS Symp. Ser. 416, 398. Ammonia: Bates & Pinching 1949.
# Iron and copper hydrolysis and fresh hydroxides: Brown & Ekberg 2016; Powell et al. 2007; Hidmi &
# Edwards 1999. H2PO4-, HPO4-2: Stumm & Morgan.
SPECIES = (
    ("H2O = OH- + H+", -14.0),
    ("CO3-2 + H+ = HCO3-", 10.329),
    ("CO3-2 + 2 H+ = CO2(aq) + H2O", 16.681),
    ("SO4-2 + H+ = HSO4-", 1.988),
    ("NH4+ = NH3(aq) + H+", -9.244),
    ("PO4-3 + H+ = HPO4-2", 12.35),
    ("PO4-3 + 2 H+ = H2PO4-", 19.55),
    ("Ca+2 + SO4-2 = CaSO4(aq)", 2.3),
    ("Na+ + SO4-2 = NaSO4-", 0.75),
    ("Cu+2 + H2O = CuOH+ + H+", -7.95),
    ("Cu+2 + 2 H2O = Cu(OH)2(aq) + 2 H+", -16.2),
    ("Fe+3 + H2O = FeOH+2 + H+", -2.19),
    ("Fe+3 + SO4-2 = FeSO4+", 4.25),
)
SOLIDS = (
    ("Cu+2 + 2 H2O = Cu(OH)2(s) + 2 H+", -9.3),
    ("Fe+3 + 3 H2O = Fe(OH)3(s) + 3 H+", -4.5),
    ("Ca+2 + CO3-2 = CaCO3(s)", 8.48),
)
COMPONENTS = (
    "H+", "Na+", "Ca+2", "Mg+2", "NH4+", "Cl-", "SO4-2", "CO3-2", "PO4-3", "HS-", "Cu+2", "Fe+2",
    "Fe+3",
)  # fmt: skip


@cache
def system(activity: str = "davies") -> System:
    return System(
        COMPONENTS,
        [Species.from_reaction(r, k) for r, k in SPECIES],
        [Solid.from_reaction(r, k) for r, k in SOLIDS],
        activity=activity,
    )


def measured(**mg_per_l: float) -> dict[str, Measurement]:
    return {
        name.replace("_II_", "(II)").replace("_III_", "(III)"): Measurement(
            dissolved_mg_per_l=value, total_mg_per_l=value
        )
        for name, value in mg_per_l.items()
    }


RINSE = WaterAnalysis(
    measurements=measured(Cu=38.0, SO4=820.0, Na=150.0, Cl=40.0), ph=2.4, close_charge_with="SO4"
)


def total(water: FeedWater, component: str) -> float:
    return float(water.totals_mol_per_l[water.system.index[component]])


def relative_charge(water: FeedWater) -> float:
    gross = gross_charge_mol_per_l(water.system, water.totals_mol_per_l)
    return abs(charge_mol_per_l(water.system, water.totals_mol_per_l)) / gross


# -- analytes ----------------------------------------------------------------------------------


def test_every_modelled_analyte_has_the_charge_of_its_component_and_protons() -> None:
    for analyte in ANALYTES.values():
        if analyte.is_modelled:
            component = analyte.component
            sign = 1 if "+" in component else -1
            digits = component.replace("-", "+").split("+")[1] or "1"
            assert analyte.charge == sign * int(digits) + analyte.protons


def test_chromate_and_cyanide_have_no_component() -> None:
    assert [a.analyte for a in ANALYTES.values() if not a.is_modelled] == ["Cr(VI)", "CN"]
    with pytest.raises(WaterError, match=r"'CN' is no ion that the equilibrium knows"):
        component_of("CN")


# -- charge balance ----------------------------------------------------------------------------


def test_charge_balance_error_of_the_published_formula() -> None:
    # British Columbia water quality tools documentation: 100 (cations - anions)/(cations + anions);
    # 10.4 and 9.6 meq/L give 4.0 %.
    assert charge_balance_error_percent(10.4, 9.6) == pytest.approx(4.0, rel=1e-3)
    assert charge_balance_error_percent(0.0, 0.0) == 0.0


def test_bicarbonate_counts_once_in_the_charge_balance_error() -> None:
    # At pH 8.3 carbonate is bicarbonate: 5 meq/L of sodium and 4 of bicarbonate miss by 1 in 9.
    water = feed_water(
        WaterAnalysis(
            measurements=measured(Na=5 * 22.990, HCO3=4 * 61.016), ph=8.3, close_charge_with="Cl"
        ),
        system(),
    )
    assert water.charge_balance_error_percent == pytest.approx(100.0 / 9.0, abs=0.7)
    assert total(water, "Cl-") == pytest.approx(1e-3, rel=0.06)
    assert "CHECK" not in water.notes[0]  # chloride was not analysed: said in its own words
    assert water.notes[0].startswith("Cl was not analysed: its whole")


def test_ph_and_closing_ion_are_found_together() -> None:
    water = feed_water(RINSE, system())
    assert relative_charge(water) < 1e-12
    assert water.ph == pytest.approx(2.4, abs=1e-9)
    held = equilibrate(system().narrowed(solids=()), water.totals_mol_per_l[None, :], ph=2.4)
    h = system().index["H+"]
    assert held.totals[0, h] == pytest.approx(total(water, "H+"), rel=1e-9)
    bisulfate = held.species_mol_per_l[0, system().species_names.index("HSO4-")]
    assert bisulfate > 0.05 * total(water, "SO4-2")  # the coupling that is being tested exists


@settings(max_examples=25, deadline=None, derandomize=True)
@given(
    ph=st.floats(min_value=0.8, max_value=12.5),
    copper=st.floats(min_value=0.0, max_value=500.0),
    calcium=st.floats(min_value=0.0, max_value=400.0),
    sulfate=st.floats(min_value=0.0, max_value=3000.0),
    carbonate=st.floats(min_value=0.0, max_value=300.0),
    ammonium=st.floats(min_value=0.0, max_value=200.0),
)
def test_held_ph_and_returned_proton_total_give_the_same_water(
    ph: float, copper: float, calcium: float, sulfate: float, carbonate: float, ammonium: float
) -> None:
    values = measured(Cu=copper, Ca=calcium, SO4=sulfate, CO3=carbonate, NH4=ammonium)
    analysis = WaterAnalysis(measurements=values, ph=ph, close_charge_with="Cl")
    try:
        water = feed_water(analysis, system())
    except WaterError:
        water = feed_water(replace(analysis, close_charge_with="Na"), system())
    assert relative_charge(water) < 1e-12
    bare = system().narrowed(solids=())
    by_ph = equilibrate(bare, water.totals_mol_per_l[None, :], ph=ph)
    by_total = equilibrate(bare, water.totals_mol_per_l[None, :])
    assert by_total.ph == pytest.approx(by_ph.ph, abs=1e-9)
    scale = np.maximum(by_ph.species_mol_per_l, 1e-12)
    assert np.max(np.abs(by_total.species_mol_per_l - by_ph.species_mol_per_l) / scale) < 1e-9


def test_an_anion_that_cannot_be_lowered_enough_is_refused_with_size_and_remedy() -> None:
    analysis = WaterAnalysis(
        measurements=measured(Na=23.0, Cl=355.0, SO4=48.0), ph=7.0, close_charge_with="SO4"
    )
    with pytest.raises(WaterError) as refused:
        feed_water(analysis, system())
    assert str(refused.value) == (
        "the analysis cannot be made electroneutral with SO4: anions exceed cations by 10 meq/L, "
        "and only 0.999 meq/L of SO4 can be taken away. Close with another ion: raise Na, Ca, or "
        "lower Cl (10 meq/L); or look for a value that is wrong or missing"
    )


def test_an_ion_without_charge_at_this_ph_is_refused() -> None:
    analysis = WaterAnalysis(measurements=measured(Na=100.0), ph=2.5, close_charge_with="CO3")
    with pytest.raises(WaterError, match="CO3 carries too little charge at this pH"):
        feed_water(analysis, system())


def test_lowering_a_measured_ion_is_allowed_and_said() -> None:
    water = feed_water(replace(RINSE, ph=3.5), system())
    assert water.closing_mol_per_l < 0.0
    assert total(water, "SO4-2") == pytest.approx(
        0.820 / 96.056 + water.closing_mol_per_l, rel=1e-12
    )
    assert water.notes[0].startswith("CHECK THE ANALYSIS: the analysis misses electroneutrality")
    assert "SO4 was lowered by" in water.notes[0]


def test_a_balanced_analysis_gets_its_closing_in_one_line() -> None:
    water = feed_water(WaterAnalysis(
        measurements=measured(Na=230.0, Cl=350.0), ph=7.0, close_charge_with="Cl"
    ), system())  # fmt: skip
    assert abs(water.charge_balance_error_percent) < 5.0
    assert water.notes == ("charge balance error +0.7 %: Cl was raised by 4.65 mg/L to close it",)


# -- pH and acid -------------------------------------------------------------------------------


def test_acid_of_ph_2_takes_400_mg_of_caustic_to_ph_9() -> None:
    # Arithmetic: 10 mmol/L of strong acid; within 5 %, activity adds up to 10 % at a measured pH 2.
    analysis = WaterAnalysis(measurements={}, ph=2.0, close_charge_with="Cl")
    ideal = feed_water(analysis, system("ideal"))
    caustic = 39.997e3 * base_demand_mol_per_l(ideal.system, ideal.totals_mol_per_l, 9.0)
    assert caustic == pytest.approx(400.0, rel=0.05)
    real = feed_water(analysis, system("davies"))
    caustic_real = 39.997e3 * base_demand_mol_per_l(real.system, real.totals_mol_per_l, 9.0)
    assert 1.05 < caustic_real / caustic < 1.15


@pytest.mark.parametrize(("activity", "expected"), [("ideal", 10.565), ("davies", 10.52)])
def test_soda_ash_in_water_keeps_its_ph_through_an_analysis(activity: str, expected: float) -> None:
    # 1 mmol/L Na2CO3, closed, 25 C: closed form with pK 6.35, 10.33, 14.00 (Stumm & Morgan, from
    # memory); within 0.05 pH.
    soda = System(
        ["H+", "Na+", "CO3-2"],
        [
            Species.from_reaction("H2O = OH- + H+", -14.0),
            Species.from_reaction("CO3-2 + H+ = HCO3-", 10.33),
            Species.from_reaction("CO3-2 + 2 H+ = CO2(aq) + H2O", 16.68),
        ],
        activity=activity,
    )
    state = equilibrate(soda, {"Na+": 2e-3, "CO3-2": 1e-3})
    assert float(state.ph[0]) == pytest.approx(expected, abs=0.05)
    analysis = WaterAnalysis(
        measurements=measured(CO3=60.008), ph=float(state.ph[0]), close_charge_with="Na"
    )
    water = feed_water(analysis, soda)
    assert total(water, "Na+") == pytest.approx(2e-3, rel=1e-9)
    assert total(water, "H+") == pytest.approx(0.0, abs=1e-12)


def test_alkaline_water_from_ph_7_to_8_3_takes_35_mg_of_caustic() -> None:
    # 200 mg/L as CaCO3 at pH 7.0: 0.886 meq/L, 35.4 mg/L NaOH by closed form; within 6 %.
    analysis = WaterAnalysis(
        measurements={}, ph=7.0, alkalinity_mg_per_l_as_caco3=200.0, close_charge_with="Na"
    )
    water = feed_water(analysis, system())
    assert total(water, "Na+") == pytest.approx(200.0 / 50.04e3, rel=1e-9)
    base = base_demand_mol_per_l(water.system, water.totals_mol_per_l, 8.3)
    assert 1e3 * base == pytest.approx(0.886, rel=0.06)
    assert 39.997e3 * base == pytest.approx(35.4, rel=0.06)


def test_alkalinity_is_what_acid_brings_to_the_carbon_dioxide_point() -> None:
    analysis = WaterAnalysis(
        measurements=measured(Ca=80.0, Mg=12.0, Na=40.0, NH4=5.0), ph=7.8,
        alkalinity_mg_per_l_as_caco3=250.0, close_charge_with="Cl",
    )  # fmt: skip
    water = feed_water(analysis, system())
    assert water.ph == pytest.approx(7.8, abs=1e-9)
    assert relative_charge(water) < 1e-12
    acid = 250.0 / 50.04e3
    end = water.totals_mol_per_l.copy()
    end[system().index["H+"]] += acid
    end[system().index["Cl-"]] += acid
    at_end = equilibrate(system().narrowed(solids=()), end[None, :])
    carbon_dioxide = {"CO3-2": total(water, "CO3-2"), "H+": 2.0 * total(water, "CO3-2")}
    pure = equilibrate(system().narrowed(solids=()), carbon_dioxide)
    assert at_end.ph == pytest.approx(pure.ph, abs=0.05)


def test_alkalinity_contradictions_are_refused() -> None:
    sour = replace(RINSE, alkalinity_mg_per_l_as_caco3=20.0)
    with pytest.raises(WaterError, match=r"cannot exist at pH 2.4: a water below pH 4.3 has none"):
        feed_water(sour, system())
    twice = WaterAnalysis(
        measurements=measured(HCO3=100.0), ph=7.0, alkalinity_mg_per_l_as_caco3=80.0,
        close_charge_with="Na",
    )  # fmt: skip
    with pytest.raises(WaterError, match="alkalinity and HCO3 both fix the carbonate"):
        feed_water(twice, system())
    with pytest.raises(WaterError, match="cannot be closed with carbonate"):
        feed_water(
            replace(twice, measurements=measured(Na=50.0), close_charge_with="CO3"), system()
        )
    caustic = replace(twice, measurements={}, ph=12.5)
    with pytest.raises(WaterError, match=r"alkalinity of 1.6 meq/L does not fit this pH"):
        feed_water(caustic, system())


def test_measured_acidity_overrides_the_ph_and_the_difference_is_told() -> None:
    analysis = replace(RINSE, ph=2.3, acidity_meq_per_l=8.0)
    water = feed_water(analysis, system())
    assert relative_charge(water) < 1e-12
    assert water.acid is not None
    assert water.acid.demand_meq_per_l == pytest.approx(8.0, rel=1e-9)
    base = base_demand_mol_per_l(system(), water.totals_mol_per_l, 8.3)
    assert 1e3 * base == pytest.approx(8.0, rel=1e-9)
    alone = feed_water(replace(analysis, acidity_meq_per_l=None), system())
    by_ph = 1e3 * base_demand_mol_per_l(system(), alone.totals_mol_per_l, 8.3)
    assert water.acid.demand_by_ph_meq_per_l == pytest.approx(by_ph, rel=1e-9)
    missed = water.acid.difference_meq_per_l
    assert missed == pytest.approx(8.0 - by_ph, rel=1e-6)
    assert water.acid.difference_kg_naoh_per_m3 == pytest.approx(0.039997 * (8.0 - by_ph), rel=1e-4)
    assert any(n.startswith("the measured pH 2.3 alone would give") for n in water.notes)


def test_a_titration_made_from_a_known_water_finds_its_proton_total() -> None:
    known = feed_water(RINSE, system())
    points = tuple(
        (1e3 * base_demand_mol_per_l(system(), known.totals_mol_per_l, ph), ph)
        for ph in (2.6, 3.5, 6.0, 9.0)
    )
    analysis = replace(RINSE, ph=2.0, titration=points)
    found = feed_water(analysis, system())
    assert found.totals_mol_per_l == pytest.approx(known.totals_mol_per_l, rel=1e-8)
    assert found.acid is not None
    assert found.acid.misfit_meq_per_l < 1e-6
    assert found.ph == pytest.approx(2.4, abs=1e-7)


def test_a_titration_trusts_its_steep_part_more_than_a_reading_at_low_ph() -> None:
    known = feed_water(RINSE, system())
    end = 1e3 * base_demand_mol_per_l(system(), known.totals_mol_per_l, 9.0)
    analysis = replace(RINSE, titration=((0.0, 2.5), (end, 9.0)))
    found = feed_water(analysis, system())
    # The first reading is 0.1 pH off, about 1.2 meq/L; the fit moves by less than a fifth of it.
    assert 1e3 * abs(total(found, "H+") - total(known, "H+")) < 0.2


# -- iron, particles, limits, words ------------------------------------------------------------


def test_aeration_turns_ferrous_iron_into_ferric_and_uses_a_proton() -> None:
    analysis = WaterAnalysis(
        measurements=measured(Fe_II_=93.0, Na=20.0), ph=2.9, close_charge_with="SO4"
    )
    still = feed_water(analysis, system())
    blown = feed_water(replace(analysis, aerated=True), system())
    iron = 93.0 / 55.845e3
    assert total(blown, "Fe+2") == 0.0
    assert total(blown, "Fe+3") == pytest.approx(iron)
    assert total(blown, "H+") == pytest.approx(total(still, "H+") - iron)
    assert relative_charge(blown) < 1e-12
    assert blown.ph_as_sampled == pytest.approx(2.9, abs=1e-9)
    assert blown.ph > blown.ph_as_sampled
    # Fe+2 + 1/4 O2 + 5/2 H2O = Fe(OH)3 + 2 H+: both ends need the same base once ferric
    # hydroxide is the solid, two moles per mole beyond the free acid.
    acid = total(still, "H+")
    base = base_demand_mol_per_l(system(), blown.totals_mol_per_l, 8.0)
    assert base == pytest.approx(acid + 2.0 * iron, rel=2e-3)


def test_aeration_without_ferrous_iron_changes_nothing() -> None:
    totals = feed_water(RINSE, system()).totals_mol_per_l
    assert oxidise_iron(system(), totals) == pytest.approx(totals)


def test_particles_below_limits_and_unmodelled_analytes_are_kept_and_said() -> None:
    values = {
        **RINSE.measurements,
        "Cu": Measurement(dissolved_mg_per_l=38.0, total_mg_per_l=40.0),
        "Mg": Measurement(
            dissolved_mg_per_l=0.5, total_mg_per_l=0.5, below_reporting_limit=True,
            as_written="<0.5 mg/L",
        ),
        "Cr(VI)": Measurement(dissolved_mg_per_l=0.02, total_mg_per_l=0.02),
    }  # fmt: skip
    water = feed_water(replace(RINSE, measurements=values, tss_mg_per_l=1.0), system())
    assert water.particulate_mg_per_l == {"Cu": 2.0}
    assert total(water, "Mg+2") == pytest.approx(0.25 / 24.305e3)
    assert water.below_reporting_limit == ("Mg",)
    assert water.unmodelled_mg_per_l == {"Cr(VI)": 0.02}
    assert water.notes[1:] == (
        "on particles of unknown form in the feed: Cu 2 mg/L",
        "particles carry 2 mg/L of analytes, more than the suspended solids of 1 mg/L: check both",
        "Cr(VI) 0.02 mg/L is not modelled: not removed by precipitation: it needs reduction to "
        "Cr(III) first",
        "below the reporting limit, half of it in the balance: Mg",
    )


def test_a_supersaturated_feed_names_its_solids() -> None:
    analysis = WaterAnalysis(
        measurements=measured(Ca=200.0, HCO3=500.0, Cu=5.0), ph=8.2, close_charge_with="Cl"
    )
    water = feed_water(analysis, system())
    assert list(water.supersaturation_si_log10) == ["Cu(OH)2(s)", "CaCO3(s)"]
    with_solids = equilibrate(system(), water.totals_mol_per_l[None, :])
    assert float(with_solids.solids["CaCO3(s)"].iloc[0]) > 0.0
    assert any(n.startswith("the feed is supersaturated as it is: Cu(OH)2(s)") for n in water.notes)


def test_a_measured_analyte_outside_the_system_is_refused() -> None:
    values = {**RINSE.measurements, **measured(Zn=3.0)}
    with pytest.raises(WaterError, match=r"the system has no component for Zn \(Zn\+2\)"):
        feed_water(replace(RINSE, measurements=values), system())
    zero = {**RINSE.measurements, **measured(Zn=0.0)}
    feed_water(replace(RINSE, measurements=zero), system())


def test_impossible_analyses_are_refused_with_every_problem_at_once() -> None:
    values = {
        "Cu": Measurement(dissolved_mg_per_l=5.0, total_mg_per_l=4.0),
        "Xx": Measurement(dissolved_mg_per_l=float("nan"), total_mg_per_l=1.0),
    }
    with pytest.raises(WaterError) as refused:
        WaterAnalysis(measurements=values, close_charge_with="SO4", tss_mg_per_l=-1.0)
    text = str(refused.value)
    for part in (
        "Cu: dissolved 5 mg/L is above total 4 mg/L",
        "unknown analyte 'Xx'",
        "Xx: nan mg/L is no concentration",
        "no acid given: state the pH, an acidity or titration points",
        "tss_mg_per_l is -1.0",
    ):
        assert part in text


# -- burden ------------------------------------------------------------------------------------


def test_neutralised_sulfuric_acid_leaves_1_448_kg_of_salt_per_kg() -> None:
    # Stoichiometry, 0.2 %: Na2SO4 from H2SO4 and NaOH; NaCl per HCl 1.6029.
    sulfate = np.zeros(len(COMPONENTS))
    sulfate[[system().index["Na+"], system().index["SO4-2"]]] = [2e-3, 1e-3]
    burden = water_burden(sulfate, system())
    assert float(burden["TDS"]) / 98.078 == pytest.approx(1.4483, rel=0.002)
    assert float(burden["SO4"]) / 98.078 == pytest.approx(0.9794, rel=0.002)
    assert float(burden["Na"]) == pytest.approx(45.98)


def test_dissolved_solids_of_acid_and_base_are_their_own_masses() -> None:
    totals = np.zeros((3, len(COMPONENTS)))
    h, na, co3 = (system().index[c] for c in ("H+", "Na+", "CO3-2"))
    totals[0, [h, system().index["SO4-2"]]] = [2e-3, 1e-3]  # sulfuric acid
    totals[1, [h, na]] = [-1e-3, 1e-3]  # caustic
    totals[2, [h, na, co3]] = [1e-3, 1e-3, 1e-3]  # sodium bicarbonate
    assert water_burden(totals, system())["TDS"] == pytest.approx(
        [98.072, 39.997, 84.006], rel=1e-4
    )


def test_hardness_and_sulfide_on_their_bases() -> None:
    totals = np.zeros(len(COMPONENTS))
    totals[[system().index[c] for c in ("Ca+2", "Mg+2", "HS-")]] = [1e-3, 5e-4, 1e-4]
    burden = water_burden(totals, system())
    assert float(burden["hardness"]) == pytest.approx(150.12)
    assert float(burden["sulfide"]) == pytest.approx(3.206)


def test_the_feed_tells_its_salt_hardness_and_metals() -> None:
    analysis = replace(RINSE, measurements={**RINSE.measurements, **measured(Ca=40.078)})
    water = feed_water(analysis, system())
    assert water.hardness_mg_per_l_as_caco3 == pytest.approx(100.08)
    burden = water.burden_mg_per_l
    ions = burden["Na"] + burden["Ca"] + burden["Cl"] + burden["SO4"] + 38.0
    acid = 1.008e3 * total(water, "H+")
    assert water.tds_mg_per_l == pytest.approx(ions + acid, rel=1e-12)
    assert water.dissolved_mg_per_l == {"Cu": pytest.approx(38.0)}
    assert 0.01 < water.ionic_strength < 0.03

"""Scale, magnesia, gas, trim and corners bind a plan, held against calculations made here."""

from __future__ import annotations

from dataclasses import replace
from itertools import product
from typing import Any

import numpy as np
import pytest

from catalogs.problems import InputFileError
from chemistry import equilibrate
from chemistry.state import EquilibriumState
from chemistry.system import System
from optimiser import NoPlan, assess, plan
from optimiser.evaluation import Evaluator
from optimiser.points import VENTED_FORMED, Points
from optimiser.site import Site
from tests.optimiser.small_sites import (
    CARBONATE,
    FLOW_M3_PER_D,
    SULFATE,
    SULFIDE,
    Tree,
    dissolved_mg_per_l,
    dose_for_ph,
    held_back,
    lost_co2_mol_per_l,
    own,
    row_of,
    settled,
    small_site,
)

ZN = 65.38
PB = 207.2
GYPSUM = "CaSO4.2H2O(s)"
EXACT: Tree = {"treatment": {"ph_tolerance": 0, "dose_tolerance_fraction": 0}}


def solid_kg_per_d(data: dict[str, float], start: str) -> float:
    return sum(mass for name, mass in data.items() if name.startswith(start))


# enough sulfate for gypsum to form even where it is held back
STRONG: Tree = {
    "feed": {"ph": 1.8, "analysis": {"SO4": "6500 mg/L", "Na": "1500 mg/L", "Ca": "450 mg/L"}}
}


# -- gypsum and calcite ---------------------------------------------------------------------------


def test_gypsum_is_held_back_for_the_sulfate_limit_and_formed_for_the_sludge() -> None:
    site = small_site(SULFATE, STRONG, EXACT, own({"parameter": "SO4", "daily_mg_per_l": 9000}))
    fed = 2300.0
    result = assess(site, {"hydrated_lime": fed}, trim="none")
    reacting = fed / 1.15
    formed = settled(site, {"hydrated_lime": reacting})
    held = held_back(site.system, 0.3)
    free = settled(site, {"hydrated_lime": reacting}, system=held)
    ph = min(float(formed.ph[0]), float(free.ph[0]))
    waters = [
        settled(
            site, {"hydrated_lime": dose_for_ph(site, "hydrated_lime", ph, {}, system=system)},
            system=system,
        )
        for system in (site.system, held)
    ]  # fmt: skip
    by_end = [dissolved_mg_per_l(w, "SO4-2", 96.056) for w in waters]
    row = row_of(result, "SO4")
    assert by_end[1] > 1.1 * by_end[0]
    assert row["predicted"] == pytest.approx(by_end[1], rel=1e-5)
    assert "scale held back" in row["worst_state"]
    # the held water stands exactly 0.3 above the solubility product of gypsum, 10^-4.59
    names = list(site.system.components)
    ln_a = waters[1].log_activity[0]
    product_log10 = (ln_a[names.index("Ca+2")] + ln_a[names.index("SO4-2")]) / np.log(10.0)
    assert product_log10 == pytest.approx(-4.59 + 0.3, abs=0.01)  # the water's activity, about 1
    made = float(waters[0].solids[GYPSUM].iloc[0]) * 172.17 * FLOW_M3_PER_D
    shown = solid_kg_per_d(result.sludge["dry_kg_per_d_by_solid"], "CaSO4")
    assert shown == pytest.approx(made, rel=1e-3)
    assert made > 1.0


def test_a_sulfate_limit_that_only_formed_gypsum_would_meet_is_missed() -> None:
    loose = own({"parameter": "SO4", "daily_mg_per_l": 9000})
    doses = {"hydrated_lime": 1150.0}
    held = row_of(assess(small_site(SULFATE, EXACT, loose), doses), "SO4")["predicted"]
    none: Tree = {"treatment": {"scale_supersaturation_si": 0}}
    formed = row_of(assess(small_site(SULFATE, EXACT, loose, none), doses), "SO4")["predicted"]
    between = own({"parameter": "SO4", "daily_mg_per_l": float(np.sqrt(held * formed)) / 0.8})
    assert not row_of(assess(small_site(SULFATE, EXACT, between), doses), "SO4")["meets"]
    assert row_of(assess(small_site(SULFATE, EXACT, between, none), doses), "SO4")["meets"]


def test_calcite_is_held_back_for_the_hardness_limit() -> None:
    site = small_site(
        CARBONATE, EXACT, {"feed": {"analysis": {"Ca": "250 mg/L"}}},
        own({"parameter": "hardness", "daily_mg_per_l": 5000}),
    )  # fmt: skip
    doses = {"caustic_soda": 300.0, "soda_ash": 600.0}
    row = row_of(assess(site, doses), "hardness")
    lost = lost_co2_mol_per_l(site, doses)
    ends = list(product((0.0, lost), (site.system, held_back(site.system, 0.3))))
    free = [settled(site, doses, system=s, lost_co2_mol_per_l=g) for g, s in ends]
    ph = min(float(state.ph[0]) for state in free)
    found = []
    for gone, system in ends:
        rest = {"soda_ash": doses["soda_ash"]}
        dose = dose_for_ph(site, "caustic_soda", ph, rest, system=system, lost_co2_mol_per_l=gone)
        state = settled(
            site, {**rest, "caustic_soda": dose}, system=system, lost_co2_mol_per_l=gone
        )
        found.append(float(state.dissolved["Ca+2"].iloc[0]) * 2.0 * 50043.5)
    assert found[1] > 1.04 * found[0]
    assert found[3] > 1.01 * found[2]
    assert row["predicted"] == pytest.approx(max(found), rel=1e-4)
    assert "scale held back" in row["worst_state"]


# -- magnesia -------------------------------------------------------------------------------------

MAGNESIA: Tree = {
    "treatment": {
        "reagents": ["magnesium_hydroxide"],
        "equipment_cost_per_year": {"caustic_soda": None, "hydrated_lime": None},
    }
}


def test_magnesia_never_controls_above_its_ceiling() -> None:
    easy = own({"parameter": "Cu", "daily_mg_per_l": 1.0}, {"parameter": "Zn", "daily_mg_per_l": 9})
    found = plan(small_site(MAGNESIA, easy))
    assert found.set_points[0]["controller"] == "magnesium_hydroxide"
    assert found.set_points[0]["ph_set_point"] <= 9.0 + 1e-9


def test_a_limit_that_needs_magnesia_above_its_ceiling_has_no_plan_with_it_alone() -> None:
    # 1.6 mg/L zinc is reached at pH 9 only without the tolerance of the set point
    hard = own({"parameter": "Zn", "daily_mg_per_l": 0.75})
    with pytest.raises(NoPlan):
        plan(small_site(MAGNESIA, hard))
    raised = plan(small_site(MAGNESIA, hard, {"treatment": {"magnesia_ph_ceiling": 9.6}}))
    assert 9.0 < raised.set_points[0]["ph_set_point"] <= 9.6


def test_magnesia_beside_caustic_must_have_dissolved_below_its_ceiling() -> None:
    site = small_site(
        {"treatment": {"reagents": ["caustic_soda", "magnesium_hydroxide"]},
         "disposal": {"bound_water_factor": 1.0}},
        {"treatment": {"equipment_cost_per_year": {"hydrated_lime": None}}},
    )  # fmt: skip
    enough = {"magnesium_hydroxide": 140.0, "caustic_soda": 60.0}
    most = {"magnesium_hydroxide": 300.0, "caustic_soda": 60.0}
    before = [
        float(settled(site, {"magnesium_hydroxide": d["magnesium_hydroxide"] / 1.15}).ph[0])
        for d in (enough, most)
    ]
    assert before[0] < 9.0 < before[1]
    rule = "practical pH ceiling"
    assert not any(rule in r for r in assess(site, enough).data["rules_missed"])
    missed = assess(site, most)
    assert any(rule in r for r in missed.data["rules_missed"])
    assert not missed.compliant


# -- carbon dioxide -------------------------------------------------------------------------------


def test_carbon_dioxide_is_planned_kept_and_vented_and_the_dearer_dose_counts() -> None:
    site = small_site(CARBONATE, EXACT)
    doses = {"caustic_soda": 140.0, "soda_ash": 300.0}
    result = assess(site, doses, trim="none")
    rest = {"soda_ash": doses["soda_ash"]}
    lost = lost_co2_mol_per_l(site, doses)
    assert lost > 1e-3  # most of 2.8 mmol/L
    free = [settled(site, doses, lost_co2_mol_per_l=g) for g in (0.0, lost)]
    ph = min(float(state.ph[0]) for state in free)
    assert result.set_points[0]["ph_set_point"] == pytest.approx(ph, abs=1e-6)
    need = [dose_for_ph(site, "caustic_soda", ph, rest, lost_co2_mol_per_l=g) for g in (0.0, lost)]
    assert need[0] > 1.1 * need[1]  # kept carbon dioxide takes alkali
    assert result.doses["caustic_soda"] == pytest.approx(max(need), rel=1e-6)
    for component, name, mass in (("Pb+2", "Pb", PB), ("Zn+2", "Zn", ZN)):
        residual = [
            dissolved_mg_per_l(
                settled(site, {**rest, "caustic_soda": d}, lost_co2_mol_per_l=g), component, mass
            )
            for d, g in zip(need, (0.0, lost), strict=True)
        ]
        row = row_of(result, name)
        assert residual[0] != pytest.approx(residual[1], rel=0.01)
        assert row["residual"] == pytest.approx(max(residual), rel=1e-5)
        kept = residual[0] > residual[1]
        assert ("gas kept" if kept else "CO2 vented") in row["worst_state"]


def test_a_vented_water_that_cannot_be_solved_does_not_count_as_one_that_lost_nothing(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    evaluator = Evaluator(small_site(CARBONATE, EXACT))
    index = evaluator.plant.index
    doses = np.zeros((1, len(index)))
    doses[0, index["soda_ash"]] = 300.0
    controller = np.array([index["caustic_soda"]])
    points = Points(doses, controller, np.array([8.8]), np.array([-1]))
    honest = evaluator.evaluate(points)
    assert honest.blocks[0].reached.all()
    assert VENTED_FORMED in {block.end for block in honest.blocks}

    def unsettled(system: System, totals: Any, *given: Any, **asked: Any) -> EquilibriumState:
        state = equilibrate(system, totals, *given, **asked)
        return replace(state, converged=state.converged & ("pco2_atm" not in asked))

    monkeypatch.setattr("optimiser.plant.equilibrate", unsettled)
    seen = evaluator.evaluate(points)
    assert not seen.blocks[0].reached.any()
    assert seen.violation[0] >= 5.0
    assert not seen.feasible[0]


def test_carbonate_into_an_alkaline_feed_loses_no_carbon_dioxide() -> None:
    site = small_site(CARBONATE, EXACT, {"feed": {"ph": 7.2}})
    assert lost_co2_mol_per_l(site, {"soda_ash": 300.0}) < 1e-9
    result = assess(site, {"soda_ash": 300.0})
    assert not any("vented" in row["worst_state"] for row in result.data["limits"])


# -- sulfide --------------------------------------------------------------------------------------


def h2s_ppm(state: EquilibriumState) -> float:
    """Pressure over a water from its dissolved H2S and Henry's constant 10^-0.99 at 25 C."""
    names = state.system.species_names
    amount = state.species_mol_per_l[0, names.index("H2S(aq)")]
    return float(1e6 * amount / 10.0**-0.99)


def test_a_sulfide_plan_holds_the_ph_before_and_after_the_dose_and_the_gas() -> None:
    site = small_site(SULFIDE)
    found = plan(site)
    assert found.doses["sodium_hydrosulfide"] >= 2.0
    others = {"caustic_soda": found.doses["caustic_soda"]}
    assert float(settled(site, others).ph[0]) >= 8.5 - 1e-6
    assert found.set_points[0]["ph_set_point"] - 0.25 >= 8.5 - 1e-6
    sulfide = found.doses["sodium_hydrosulfide"]
    after_trim = {}
    for share, shift in product((0.95, 1.0, 1.05), (-0.25, 0.0, 0.25)):
        fed = {"sodium_hydrosulfide": share * sulfide}
        ph = found.set_points[0]["ph_set_point"] + shift
        tank = settled(site, {**fed, "caustic_soda": dose_for_ph(site, "caustic_soda", ph, fed)})
        assert h2s_ppm(tank) <= 10.0
        trimmed = equilibrate(
            site.system.narrowed(solids=()), tank.dissolved_mol_per_l[0], ph=min(ph, 9.25)
        )
        assert h2s_ppm(trimmed) <= 10.0
        after_trim[share, shift] = h2s_ppm(trimmed)
    assert found.water["h2s_ppm"].max() == pytest.approx(after_trim[1.0, 0.0], rel=0.01)


def test_sulfide_below_ph_8_5_breaks_a_rule_before_and_after() -> None:
    site = small_site(SULFIDE)
    result = assess(site, {"caustic_soda": 116.0, "sodium_hydrosulfide": 20.0}, trim="none")
    assert float(settled(site, {"caustic_soda": 116.0}).ph[0]) < 8.5
    assert {"pH before the sulfide dose", "pH after the sulfide dose"} <= set(
        result.data["rules_missed"]
    )
    assert not result.compliant


def test_the_gas_limit_counts_the_trimmed_water_too() -> None:
    low: Tree = {"limits": {"ph": {"low": 6.5, "high": 7.5}}}
    doses = {"caustic_soda": 150.0, "sodium_hydrosulfide": 20.0}
    site = small_site(SULFIDE, low)
    result = assess(site, doses)
    missed = result.data["rules_missed"]
    assert "H2S over the water, after trim" in missed
    assert "H2S over the water, tank" not in missed
    assert not result.compliant
    tank = settled(site, doses)
    after = equilibrate(site.system.narrowed(solids=()), tank.dissolved_mol_per_l[0], ph=7.25)
    assert h2s_ppm(tank) < 10.0 < h2s_ppm(after)
    shown = result.water.set_index("point")["h2s_ppm"]
    assert shown["tank"] == pytest.approx(h2s_ppm(tank), rel=1e-3)
    assert shown["after trim"] == pytest.approx(h2s_ppm(after), rel=0.01)
    high = assess(small_site(SULFIDE, low, {"treatment": {"h2s_limit_ppm": 1e6}}), doses)
    assert "H2S over the water, after trim" not in high.data["rules_missed"]


def test_a_tighter_gas_limit_closes_the_way_to_a_plan() -> None:
    with pytest.raises(NoPlan):
        plan(small_site(SULFIDE, {"treatment": {"h2s_limit_ppm": 1e-4}}))


def test_where_the_gas_limit_closes_the_way_the_reasons_name_it() -> None:
    with pytest.raises(NoPlan) as caught:
        plan(small_site(SULFIDE, {"treatment": {"h2s_limit_ppm": 1e-4}}))
    assert "H2S over the water" in str(caught.value)


def test_a_lower_sulfide_ph_without_a_scrubber_is_refused() -> None:
    with pytest.raises(InputFileError, match="scrubber"):
        small_site(SULFIDE, {"treatment": {"sulfide_least_ph": 7.5}})
    assert small_site(
        SULFIDE, {"treatment": {"sulfide_least_ph": 7.5, "scrubber": "caustic scrubber S2"}}
    )


# -- trim -----------------------------------------------------------------------------------------


def test_what_would_form_after_the_trim_earns_no_credit() -> None:
    # at pH 12 zinc stays dissolved as zincate; in the trimmed water it would precipitate
    site = small_site(EXACT, {"treatment": {"ph_set_point": {"low": 7.5, "high": 12.5}}})
    doses = {"caustic_soda": 700.0}
    bare, trimmed = assess(site, doses, trim="none"), assess(site, doses)
    tank = settled(site, doses)
    residual = dissolved_mg_per_l(tank, "Zn+2", ZN)
    assert residual > 3.0
    after = trimmed.water.set_index("point").loc["after trim"]
    assert after["ph"] == pytest.approx(9.25, abs=0.26)
    late = equilibrate(site.system, tank.dissolved_mol_per_l[0], ph=float(after["ph"]))
    assert dissolved_mg_per_l(late, "Zn+2", ZN) < 0.5 * residual
    for metal in ("Cu", "Zn"):
        row = row_of(trimmed, metal)
        assert row["predicted"] >= row_of(bare, metal)["predicted"] * (1.0 - 1e-9)
    assert row_of(trimmed, "Zn")["residual"] == pytest.approx(residual, rel=1e-5)


def test_the_trim_dose_is_what_brings_the_separated_water_into_the_window() -> None:
    site = small_site(EXACT)
    result = assess(site, {"caustic_soda": 300.0})
    tank = settled(site, {"caustic_soda": 300.0})
    liquid = site.system.narrowed(solids=())
    index = site.system.index
    totals = tank.dissolved_mol_per_l[0].copy()
    acid = result.doses["hydrochloric_acid@trim"] / 1000.0 / 36.458
    totals[index["H+"]] += acid
    totals[index["Cl-"]] += acid
    assert float(equilibrate(liquid, totals).ph[0]) == pytest.approx(9.5, abs=1e-6)
    assert float(tank.ph[0]) > 10.5


# -- corners --------------------------------------------------------------------------------------


def worst_residuals(site: Site, doses: dict[str, float], ph: float) -> dict[str, float]:
    """Largest dissolved lead and zinc over corners and both ends of the carbon dioxide."""
    worst: dict[str, float] = {"Pb": 0.0, "Zn": 0.0}
    corners = [(0.0, 1.0), *product((-0.25, 0.25), (0.95, 1.05))]
    for vents, (shift, share) in product((False, True), corners):
        rest = {"soda_ash": share * doses["soda_ash"]}
        lost = lost_co2_mol_per_l(site, rest) if vents else 0.0
        dose = dose_for_ph(site, "caustic_soda", ph + shift, rest, lost_co2_mol_per_l=lost)
        state = settled(site, {**rest, "caustic_soda": dose}, lost_co2_mol_per_l=lost)
        for component, name, mass in (("Pb+2", "Pb", PB), ("Zn+2", "Zn", ZN)):
            worst[name] = max(worst[name], dissolved_mg_per_l(state, component, mass))
    return worst


def test_limits_hold_at_every_corner_of_set_point_and_doses() -> None:
    site = small_site(CARBONATE, {"feed": {"ph": 7.2}})
    doses = {"caustic_soda": 15.0, "soda_ash": 40.0}
    result = assess(site, doses, trim="none")
    worst = worst_residuals(site, doses, result.set_points[0]["ph_set_point"])
    for name, residual in worst.items():
        row = row_of(result, name)
        assert row["residual"] == pytest.approx(residual, rel=1e-5)
        assert "set point" in row["worst_state"]
        assert "soda_ash" in row["worst_state"]
    nominal = settled(site, doses)
    assert worst["Pb"] > 1.2 * dissolved_mg_per_l(nominal, "Pb+2", PB)


def test_a_corner_of_less_carbonate_loses_no_more_carbon_dioxide_than_it_has() -> None:
    site = small_site(CARBONATE)
    doses = {"caustic_soda": 160.0, "soda_ash": 250.0}
    result = assess(site, doses, trim="none")
    worst = worst_residuals(site, doses, result.set_points[0]["ph_set_point"])
    for name, residual in worst.items():
        assert row_of(result, name)["residual"] == pytest.approx(residual, rel=0.02)


def test_wider_tolerances_cost_more() -> None:
    narrow: Tree = {"treatment": {"ph_tolerance": 0.0, "dose_tolerance_fraction": 0.0}}
    wide: Tree = {"treatment": {"ph_tolerance": 0.4, "dose_tolerance_fraction": 0.1}}
    costs = [plan(small_site(CARBONATE, change)).cost["total"] for change in (narrow, wide)]
    assert costs[0] * 1.01 < costs[1]

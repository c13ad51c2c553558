"""The text of a plan says what its data say, in an order that people can use."""

from __future__ import annotations

import copy
from typing import Any

import pytest

from optimiser.errors import NoPlan
from optimiser.render import assessment_text, plan_text
from optimiser.render_no_plan import no_plan_data, no_plan_text
from optimiser.tables import WIDTH, Ink, number, table


def _limit(parameter: str, averaging: str, predicted: float, **changes: Any) -> dict[str, Any]:
    target = changes.pop("target", 0.4)
    return {
        "parameter": parameter,
        "averaging": averaging,
        "unit": "mg/L",
        "limit": 0.5,
        "source": "permit 4711",
        "residual": 0.061,
        "carry_over": 0.0312,
        "floor": 0.03,
        "variability_factor": 3.3,
        "predicted": predicted,
        "target": target,
        "margin_percent": 100.0 * (1.0 - predicted / target),
        "meets": predicted <= target,
        "worst_state": "tank at pH 8.95, soda ash 5 % low",
        **changes,
    }


def _feed(key: str, reagent: str, paced_by: str, dose: float) -> dict[str, Any]:
    return {
        "key": key,
        "reagent": reagent,
        "offer": f"{reagent[:3].upper()}-1",
        "product": f"{reagent} as delivered",
        "dose_mg_per_l": dose,
        "pure_kg_per_d": 49.44,
        "product_kg_per_d": 98.88,
        "product_l_per_h": 2.7,
        "paced_by": paced_by,
        "alarm_low_mg_per_l": 0.95 * dose,
        "alarm_high_mg_per_l": 1.05 * dose,
    }


PLAN: dict[str, Any] = {
    "site": {
        "name": "Alder Street finishing shop",
        "currency": "EUR",
        "flow_m3_per_d": 120.0,
        "operating_days_per_year": 250.0,
        "stands_for": "average",
        "activity_model": "davies",
        "temperature_degc": 20.0,
    },
    "compliant": True,
    "set_points": [
        {
            "stage": "tank",
            "controller": "caustic_soda",
            "ph_set_point": 9.2,
            "ph_alarm_low": 8.95,
            "ph_alarm_high": 9.45,
        },
        {
            "stage": "trim",
            "controller": "sulfuric_acid@trim",
            "ph_set_point": 8.5,
            "ph_alarm_low": 8.25,
            "ph_alarm_high": 8.75,
        },
    ],
    "doses": {"caustic_soda": 412.04, "soda_ash": 150.0, "sulfuric_acid@trim": 30.1},
    "feeding": [
        _feed("caustic_soda", "caustic soda", "pH controller", 412.04),
        _feed("soda_ash", "soda ash", "flow", 150.0),
        _feed("sulfuric_acid@trim", "sulfuric acid", "pH controller", 30.1),
    ],
    "capacities": [],
    "purchases": [
        {
            "offer": "CAU-2",
            "supplier": "Marrow & Pike",
            "reagent": "caustic_soda",
            "product": "caustic soda 50 %",
            "used_t_per_year": 24.7,
            "bought_t_per_year": 25.0,
            "surplus_t_per_year": 0.3,
            "goods_per_year": 9375.0,
            "freight_per_year": 1250.0,
        }
    ],
    "cost": {
        "caustic_soda": 9375.0,
        "soda_ash": 1890.0,
        "sulfuric_acid@trim": 310.0,
        "freight": 1250.0,
        "disposal": 14200.0,
        "polymer": 0.0,
        "total": 27025.0,
    },
    "limits": [
        _limit("Cu", "daily", 0.304),
        _limit("Ni", "monthly", 0.3984, worst_state="tank at pH 8.95"),
        _limit("Cu + Ni + Zn", "daily", 1.9, target=2.4, floor=None),
        _limit("SO4", "daily", 1123.0, target=1200.0, residual=None, carry_over=None, floor=None),
    ],
    "rules_missed": [],
    "ph": {"low": 6.5, "high": 9.5, "lowest": 8.21, "highest": 8.77, "meets": True},
    "water": [
        {
            "point": "feed",
            "ph": 2.4,
            "ionic_strength_mol_per_l": 0.031,
            "tds_mg_per_l": 1250.0,
            "h2s_ppm": 0.0,
        },
        {
            "point": "after trim",
            "ph": 8.5,
            "ionic_strength_mol_per_l": 0.037,
            "tds_mg_per_l": 1873.0,
            "h2s_ppm": None,
        },
    ],
    "burden": {
        "Na": {"feed_mg_per_l": 90.0, "effluent_mg_per_l": 391.0, "added_mg_per_l": 301.0},
        "Mg": {"feed_mg_per_l": 4.0, "effluent_mg_per_l": 4.0, "added_mg_per_l": 4e-14},
        "K": {"feed_mg_per_l": 0.0, "effluent_mg_per_l": 0.0, "added_mg_per_l": 0.0},
    },
    "sludge": {
        "dry_kg_per_d_by_solid": {"Ni(OH)2(s)": 2.11, "Cu(OH)2(s)": 7.02},
        "unreacted_kg_per_d": 0.0,
        "feed_solids_kg_per_d": 1.8,
        "dry_t_per_year": 2.73,
        "wet_t_per_year": 10.9,
        "sludge_class": "hazardous",
        "rule": "Cd is above 1000 mg per kg dry",
    },
    "cautions": ["Caustic soda of 50 % freezes near 14 C: keep the tank and the line warm."],
    "assumptions": ["Only solids that form within hours are counted."],
    "proof": {
        "kind": "searched",
        "recipes_examined": 57,
        "cells_examined": 1,
        "states_examined": 12345,
        "smallest_step_percent": 1.0,
        "certificate": {
            "mass_balance": 3.1e-14,
            "supersaturation": 2e-10,
            "presence": 4e-11,
            "charge": 1e-13,
        },
        "seconds": {"model": 1.24, "verify": 3.0},
    },
    "runners_up": [
        {
            "reagents": ["hydrated_lime", "soda_ash"],
            "doses": {"hydrated_lime": 390.0, "soda_ash": 120.0},
            "ph_set_point": 9.4,
            "total": 28100.0,
            "difference_percent": 3.98,
        }
    ],
    "versions": {"dosewright": "0.1.0"},
}


@pytest.fixture
def data() -> dict[str, Any]:
    return copy.deepcopy(PLAN)


def test_headline_states_cost_and_the_tightest_limit(data: dict[str, Any]) -> None:
    first, second, third = plan_text(data).splitlines()[:3]
    assert first == "Alder Street finishing shop: cheapest plan found, EUR 27,025 a year"
    assert second.startswith("  120 m3/d on 250 days a year; the analysis stands for the average")
    assert third == (
        "  Every limit is met. The tightest is Ni (monthly): 0.398 mg/L predicted against a target "
        "of 0.400"
    )


def test_sections_follow_the_order_of_use(data: dict[str, Any]) -> None:
    text = plan_text(data)
    headings = [line for line in text.splitlines() if line and not line.startswith(" ")]
    assert headings == [
        "Alder Street finishing shop: cheapest plan found, EUR 27,025 a year",
        "What the operator sets",
        "Doses and feed rates",
        "What is bought",
        "Cost, EUR a year",
        "Limits",
        "pH through the train",
        "Burden: what the doses add to the water, mg/L",
        "Sludge",
        "Cautions",
        "Assumptions",
        "Proof",
        "Runners-up",
        "Made with",
    ]


def test_operator_reads_set_points_and_flow_paced_doses_with_alarms(data: dict[str, Any]) -> None:
    text = plan_text(data)
    assert (
        "  Tank: pH 9.20, alarm below 8.95 and above 9.45; the pH controller drives caustic soda.\n"
        "  Trim: pH 8.50, alarm below 8.25 and above 8.75; the pH controller drives sulfuric acid "
        "(trim).\n"
        "  Soda ash: 150.0 mg/L in proportion to the flow, alarm below 142.5 and above 157.5 mg/L."
    ) in text


def test_a_tank_without_a_controller_says_so(data: dict[str, Any]) -> None:
    data["set_points"][0]["controller"] = None
    assert "  Tank: no pH controller; the doses bring pH 9.20, alarm below 8.95" in plan_text(data)


def test_every_dose_offer_and_cost_of_the_data_is_printed(data: dict[str, Any]) -> None:
    text = plan_text(data)
    for expected in ("412.0", "CAU-2", "Marrow & Pike", "9,375", "1,250", "14,200", "27,025"):
        assert expected in text


def test_a_cost_of_nothing_is_left_out_but_the_total_is_kept(data: dict[str, Any]) -> None:
    text = plan_text(data)
    assert "polymer" not in text
    data["cost"]["polymer"] = 12.0
    assert "polymer" in plan_text(data)


def test_residual_and_carry_over_stand_apart(data: dict[str, Any]) -> None:
    row = next(line for line in plan_text(data).splitlines() if line.startswith("  Cu  "))
    assert row.split() == [
        "Cu", "daily", "0.5", "mg/L", "0.0610", "0.0312", "0.0300", "3.3", "0.304", "0.400",
        "24", "%",
    ]  # fmt: skip


def test_burden_leaves_out_rounding_and_what_is_not_there(data: dict[str, Any]) -> None:
    rows = [line.split() for line in plan_text(data).splitlines()]
    assert ["Mg", "4.00", "0", "4.00"] in rows
    assert not any(row[:1] == ["K"] for row in rows)


def test_worst_cases_are_grouped_by_what_they_are(data: dict[str, Any]) -> None:
    text = plan_text(data)
    assert "  Worst case (Cu, Cu + Ni + Zn, SO4): tank at pH 8.95, soda ash 5 % low." in text
    assert "  Worst case (Ni): tank at pH 8.95." in text
    assert "  Source of the limit: permit 4711." in text


def test_an_assessment_that_fails_names_what_is_missed(data: dict[str, Any]) -> None:
    data["limits"][0].update(predicted=0.61, margin_percent=-52.5, meets=False)
    data["compliant"] = False
    lines = assessment_text(data).splitlines()
    assert lines[0] == (
        "Alder Street finishing shop: these doses do NOT comply and cost EUR 27,025 a year"
    )
    assert "  Limits missed: Cu (daily)." in lines
    assert any(line.startswith("  Cu ") and line.endswith("MISSED") for line in lines)


def test_a_missed_ph_window_is_named_at_the_top(data: dict[str, Any]) -> None:
    data["ph"].update(highest=9.71, meets=False)
    data["compliant"] = False
    top = "\n".join(assessment_text(data).splitlines()[:6])
    assert "Window missed: pH at discharge 8.21 to 9.71" in top


def test_a_broken_safety_rule_is_named_at_the_top(data: dict[str, Any]) -> None:
    data["rules_missed"] = ["sulfide dosed below pH 8.5"]
    data["compliant"] = False
    assert "  Rule missed: sulfide dosed below pH 8.5." in assessment_text(data).splitlines()[:6]


def test_a_search_is_not_called_a_bound(data: dict[str, Any]) -> None:
    text = " ".join(plan_text(data).split())
    assert "in 57 recipes, 1 cell of doses and pH and 12,345 equilibrium states" in text
    assert "A search, not a bound" in text
    assert "gap" not in text


def test_a_search_that_ran_out_of_time_says_so(data: dict[str, Any]) -> None:
    said = "The time limit ended the search before it was through."
    assert said not in plan_text(data)
    data["proof"]["stopped_early"] = True
    assert said in plan_text(data)


def test_a_value_that_no_state_reaches_is_no_number_in_json() -> None:
    clash = {"limit": "Ni", "lowest_reachable": float("inf"), "target": 0.2}
    (kept,) = no_plan_data("Alder Street", NoPlan("no plan", clashes=[clash]))["clashes"]
    assert kept == {"limit": "Ni", "lowest_reachable": None, "target": 0.2}


def test_lines_stay_within_the_width(data: dict[str, Any]) -> None:
    data["cautions"] = ["Never share a bund, sump or drain with acid. " * 6]
    data["purchases"][0]["supplier"] = "The United Hartlebrook Alkali and Washing Soda Works " * 2
    data["feeding"][0]["product"] = "caustic soda 50 % in returnable containers of 1000 litres " * 2
    data["limits"][0].update(meets=False, margin_percent=-2109.0, averaging="daily load")
    data["limits"][0]["parameter"] = " + ".join(("Cu", "Ni", "Zn", "Pb", "Cd", "Ag", "Cr(III)"))
    assert max(len(line) for line in plan_text(data).splitlines()) <= WIDTH


def test_colour_changes_no_word(data: dict[str, Any]) -> None:
    import re

    painted = plan_text(data, Ink(on=True))
    assert "\x1b[" in painted
    assert re.sub(r"\x1b\[[0-9;]*m", "", painted) == plan_text(data)


def test_no_plan_says_how_low_each_limit_can_go_and_why() -> None:
    data = {
        "site": {"name": "Alder Street", "currency": "EUR"},
        "message": "no doses meet every limit:",
        "relaxations": [],
        "openers": [],
        "reasons": ["Ni (monthly) is stopped by carry-over"],
        "clashes": [
            {
                "limit": "Ni (monthly)",
                "lowest_reachable": 0.31,
                "best_compromise": 0.35,
                "target": 0.24,
                "stopped_by": "carry-over at 20 mg/L of suspended solids",
            }
        ],
    }
    text = no_plan_text(data)
    assert text.startswith("Alder Street: no plan\n  No doses meet every limit.\n")
    assert "  - Ni (monthly) is stopped by carry-over\n" in text
    row = next(line for line in text.splitlines() if line.startswith("  Ni (monthly)"))
    assert row.split(maxsplit=5) == [
        "Ni", "(monthly)", "0.240", "0.310", "0.350", "carry-over at 20 mg/L of suspended solids",
    ]  # fmt: skip


@pytest.mark.parametrize(
    ("value", "text"),
    [
        (0.0999, "0.0999"),
        (9.996, "10.0"),
        (0.00099951, "0.00100"),
        (-3.2, "-3.20"),
        (1e6, "1,000,000"),
    ],
)
def test_numbers_keep_their_significant_digits(value: float, text: str) -> None:
    assert number(value) == text


def test_a_wide_text_column_wraps_and_numbers_stay_whole() -> None:
    lines = table(["what", "why", "x"], [["a", "word " * 60, "1,234,567"]], text_columns=(0, 1))
    assert max(map(len, lines)) <= WIDTH
    assert sum("word" in line for line in lines) > 1
    assert sum("1,234,567" in line for line in lines) == 1

"""What the published solubilities in pure water teach, beyond their numbers."""

from __future__ import annotations

import pytest

from chemistry import equilibrate
from tests.reference.cases import load_cases, readings_of
from tests.reference.waters import bare_product, dissolved, mg_per_l, saturated_with_bare_solid


def test_cadmium_hydroxide_leaves_milligrams_not_the_slipped_table_value() -> None:
    slipped = load_cases()["A07"].inputs["slipped_mg_per_l"]
    for reading in readings_of("A07").values():
        assert reading.measured > 1.0, reading.label
        assert reading.measured > 10_000.0 * slipped, reading.label


def test_the_slipped_cadmium_value_is_the_sulfide_constant_in_the_hydroxide_formula() -> None:
    inputs = load_cases()["A07"].inputs
    amount = saturated_with_bare_solid("Cd+2", "OH-", "Cd(OH)2", inputs["slipped_ksp"])
    assert mg_per_l(amount, "Cd") == pytest.approx(inputs["slipped_mg_per_l"], rel=0.02)


def test_the_tabulated_nickel_is_about_thirty_times_too_low() -> None:
    table = load_cases()["A08"].inputs["table_mg_per_l"]
    ratios = [r.measured / table for r in readings_of("A08").values()]
    assert min(ratios) > 25.0
    assert max(ratios) < 50.0


def test_the_tabulated_carbonates_are_a_hundred_times_too_low_or_more() -> None:
    table = load_cases()["A12"].inputs["table_mg_per_l"]
    for name, reading in readings_of("A12").items():
        assert reading.measured > 99.0 * table[name.split("_")[0]], name


def test_lead_hydroxide_is_far_more_soluble_than_its_tabulated_product() -> None:
    readings = readings_of("A03")
    assert readings["shipped"].measured > 10.0 * readings["high"].measured


@pytest.mark.parametrize("excess", [1.5, 1e3, 1e6])
def test_a_saturated_water_does_not_depend_on_how_much_solid_lies_in_it(excess: float) -> None:
    ksp = load_cases()["A10"].inputs["ksp"]["Hg"]
    system = bare_product("Hg+2", "S-2", "HgS", ksp)
    total = excess * ksp**0.5
    state = equilibrate(system, {"Hg+2": total, "S-2": total})
    assert dissolved(state, "Hg+2") == pytest.approx(ksp**0.5, rel=1e-9)

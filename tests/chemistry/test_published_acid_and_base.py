"""What the published waters without metals teach, beyond their numbers."""

from __future__ import annotations

import pytest

from tests.reference.cases import readings_of
from tests.reference.reagents import alkali_per_acid, shipped


def test_half_of_the_sulfide_is_gas_forming_at_ph_seven_and_a_hundredth_at_nine() -> None:
    share = {name: r.measured for name, r in readings_of("E07").items()}
    assert share["shipped 7.0"] == pytest.approx(0.5, abs=0.05)
    assert share["shipped 8.0"] == pytest.approx(0.1, abs=0.02)
    assert share["shipped 9.0"] == pytest.approx(0.01, abs=0.002)


def test_the_free_sulfide_ion_spans_six_decades_between_tables() -> None:
    ions = [r.measured for r in readings_of("E08").values()]
    assert max(ions) / min(ions) > 1e6


def test_magnesia_cannot_reach_the_ph_of_nickel_and_cadmium() -> None:
    ceiling = readings_of("E14")["practical_ceiling"].measured
    valleys = readings_of("B01")
    assert valleys["Ni"].measured > ceiling + 1.0
    assert valleys["Cd"].measured > ceiling + 1.0


def test_soda_ash_gives_half_its_alkali_where_the_carbon_dioxide_stays() -> None:
    soda, dilute_mol_per_l = shipped("soda_ash"), 0.001
    stripped = readings_of("G01")["Na2CO3"].measured
    closed = alkali_per_acid(soda, amount=dilute_mol_per_l, end_ph=8.3, pco2_atm=None)
    assert closed / stripped == pytest.approx(2.0, rel=0.03)


def test_the_ph_of_lime_falls_as_the_water_warms() -> None:
    assert readings_of("E02")["shipped"].measured < -0.02

"""Published check values, computed through the equilibrium and judged by their own tolerances."""

from __future__ import annotations

from math import isfinite

import pytest

from tests.reference import report
from tests.reference.cases import (
    Expectation,
    computations,
    load_cases,
    readings,
    readings_of,
)

HARD = [name for name, case in load_cases().items() if case.use == "hard"]
COMPARED = [name for name, case in load_cases().items() if case.use != "hard"]

# Hard values that no test demands; each says why in its file and stands in the report.
NOT_DEMANDED = {
    "A07 shipped",
    "A15 shipped",
    "B14 other_ph_of_minimum",
    "B14 other_fresh",
    "D04 shipped",
    "D06 lead_at_minimum",
    "D06 chloride_of_minimum",
    "E11 davies",
}


@pytest.mark.parametrize("name", HARD)
def test_hard_case_meets_its_published_values(name: str) -> None:
    missed = [str(r) for r in readings_of(name).values() if r.asserted and not r.passes]
    assert not missed, "\n".join(missed)


def test_every_hard_case_demands_something() -> None:
    demanding = {r.case.case for r in readings() if r.asserted}
    assert set(HARD) <= demanding


def test_no_hard_value_is_let_off_unnoticed() -> None:
    let_off = {r.label for r in readings() if r.case.use == "hard" and not r.asserted}
    assert let_off == NOT_DEMANDED
    assert all(r.expectation.not_asserted for r in readings() if r.label in NOT_DEMANDED)


@pytest.mark.parametrize("name", COMPARED)
def test_soft_case_is_computed_and_compared(name: str) -> None:
    found = readings_of(name)
    assert found
    for reading in found.values():
        assert isfinite(reading.ratio), reading.label
        assert reading.ratio > 0.0, reading.label


def test_every_case_is_computed_and_nothing_else() -> None:
    assert set(computations()) == set(load_cases())


def test_the_report_shows_every_value_and_marks_the_misses() -> None:
    lines = report.report().splitlines()
    for reading in readings():
        shown = [line for line in lines if line.strip().startswith(f"{reading.label} ")]
        assert len(shown) == 1, reading.label
        assert (" NO " in shown[0]) == (reading.passes is False), shown[0]


@pytest.mark.parametrize(
    ("expectation", "inside", "outside"),
    [
        (Expectation(unit="", expected=10.0, relative=0.1), 10.9, 11.1),
        (Expectation(unit="", expected=10.0, factor=2.0), 5.1, 4.9),
        (Expectation(unit="", expected=10.0, absolute=0.5), 9.6, 9.4),
        (Expectation(unit="", within=(1.0, 2.0)), 1.99, 2.01),
        (Expectation(unit="", within=(1.28, 2.07), ends_are_results=True), 2.074, 2.076),
        (Expectation(unit="", within=(1.28, 2.07), ends_are_results=True), 1.276, 1.274),
    ],
)
def test_a_tolerance_lets_in_what_is_inside_only(
    expectation: Expectation, inside: float, outside: float
) -> None:
    assert expectation.met_by(inside)
    assert not expectation.met_by(outside)

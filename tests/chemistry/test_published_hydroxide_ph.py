"""What the published pH values of hydroxides teach, beyond their numbers."""

from __future__ import annotations

import numpy as np
import pytest

from catalogs import load_system
from tests.reference.cases import readings_of
from tests.reference.hydroxide_ph import dissolved_at
from tests.reference.scans import first_true, least


def _measured(case: str) -> dict[str, float]:
    return {name: reading.measured for name, reading in readings_of(case).items()}


def test_one_constant_moves_copper_nearly_tenfold_and_leaves_its_ph() -> None:
    copper = _measured("B14")
    assert 8.0 < copper["other_fresh"] / copper["fresh"] < 10.0
    assert copper["other_ph_of_minimum"] == pytest.approx(copper["ph_of_minimum"], abs=0.01)


def test_aged_nickel_hydroxide_flatters_a_hundredfold() -> None:
    nickel = _measured("B17")
    assert nickel["fresh"] / nickel["aged"] == pytest.approx(100.0, rel=1e-6)


def test_two_published_chromium_sets_differ_tenfold() -> None:
    chromium = _measured("B16")
    assert 9.0 < chromium["set_a"] / chromium["set_b"] < 12.0


def test_the_chromium_valley_is_flat_down_to_the_published_ph() -> None:
    system = load_system(components=["Cr+3"])
    ph = np.array([7.5, readings_of("B01")["Cr"].measured])
    at_published, at_least = dissolved_at(system, "Cr+3", 0.001, ph)
    assert at_published < 2.0 * at_least


def test_metals_start_to_precipitate_in_the_published_order() -> None:
    order = ("B06", "B04", "B03", "B08", "B11")
    starts = [_measured(case)["start"] for case in order]
    published = [readings_of(case)["start"].expectation.reference for case in order]
    assert starts == sorted(starts)
    assert published == sorted(published)


@pytest.mark.parametrize("case", ["B03", "B04", "B06", "B09"])
def test_overdosed_alkali_brings_the_metal_back(case: str) -> None:
    found = _measured(case)
    assert found["start"] < found["complete"] < found["returns"]


def test_a_scan_finds_the_edge_and_the_lowest_point_of_a_known_curve() -> None:
    assert first_true(lambda x: x * x >= 2.0, 0.0, 2.0) == pytest.approx(2.0**0.5, abs=1e-5)
    where, value = least(lambda x: (x - 1.7) ** 2 + 3.0, 0.0, 5.0)
    assert where == pytest.approx(1.7, abs=1e-3)
    assert value == pytest.approx(3.0, abs=1e-6)


def test_a_scan_refuses_a_condition_that_holds_already_or_never() -> None:
    with pytest.raises(AssertionError, match="already"):
        first_true(lambda x: x >= 0.0, 0.0, 1.0)
    with pytest.raises(AssertionError, match="nowhere"):
        first_true(lambda x: x > 2.0, 0.0, 1.0)
    with pytest.raises(AssertionError, match="edge"):
        least(lambda x: x, 0.0, 1.0)

"""Gaps in a series of samples are filled in one stated way, and every filling is said."""

from __future__ import annotations

import datetime
from typing import Any

import pytest

from chemistry.analysis import Measurement
from chemistry.errors import WaterError
from chemistry.sample_gaps import complete_samples
from chemistry.samples import Reported, SampleDefaults, SampleRecord, Samples

DEFAULTS = SampleDefaults(close_charge_with="SO4", temperature_degc=20.0)


def record(day: int, **values: Any) -> SampleRecord:
    """One sample of March with 100 m3/d at pH 3 unless told."""
    both = values.pop("Cu", None)
    given = {"flow_m3_per_d": 100.0, "ph": 3.0, **values}
    if both is not None:
        given |= {"dissolved": {"Cu": both}, "total": {"Cu": both}}
    return SampleRecord(day=datetime.date(2025, 3, day), **given)


def amounts(samples: Samples, name: str = "Cu") -> list[tuple[float, float, bool]]:
    found = [sample.analysis.measurements[name] for sample in samples.samples]
    return [(m.dissolved_mg_per_l, m.total_mg_per_l, m.below_reporting_limit) for m in found]


def of(value: float, *, below: bool = False) -> Reported:
    return Reported(value=value, is_below=below, as_written=f"{value:g} mg/L")


def test_samples_come_in_order_of_time() -> None:
    found = complete_samples([record(9, Cu=of(1)), record(2, Cu=of(2))], DEFAULTS)
    assert [sample.day.day for sample in found.samples] == [2, 9]


def test_a_blank_takes_the_median_of_the_others_and_is_said() -> None:
    rows = [record(1, Cu=of(1)), record(2, Cu=of(9)), record(3, Cu=of(2)), record(4)]
    found = complete_samples(rows, DEFAULTS)
    assert amounts(found)[3] == (2.0, 2.0, False)
    assert found.samples[3].assumed == ("Cu",)
    assert found.assumptions == (
        "Cu: blank in 1 of 4 samples (2025-03-04), taken as the median of the others, 2 mg/L",
    )
    assert (found.summary[-1].results, found.summary[-1].blanks) == (3, 1)


def test_a_blank_among_reporting_limits_is_below_one() -> None:
    rows = [record(1, Cu=of(0.1, below=True)), record(2, Cu=of(0.1, below=True)), record(3)]
    assert amounts(complete_samples(rows, DEFAULTS))[2] == (0.1, 0.1, True)


def test_one_of_dissolved_and_total_follows_from_the_median_share() -> None:
    rows = [
        record(1, dissolved={"Cu": of(8)}, total={"Cu": of(10)}),
        record(2, dissolved={"Cu": of(4)}),
        record(3, total={"Cu": of(20)}),
    ]
    found = complete_samples(rows, DEFAULTS)
    assert amounts(found) == [(8, 10, False), (4, 5, False), (16, 20, False)]
    assert "median share of dissolved, 80 %" in found.assumptions[0]


def test_an_analyte_with_totals_only_counts_as_dissolved_and_says_so() -> None:
    found = complete_samples([record(1, total={"Cu": of(5)})], DEFAULTS)
    assert amounts(found) == [(5, 5, False)]
    assert found.assumptions == ("Cu: only total reported, taken as dissolved as well",)


def test_what_the_file_lacks_comes_from_the_defaults() -> None:
    nickel = Measurement(dissolved_mg_per_l=7, total_mg_per_l=7, as_written="7 mg/L")
    defaults = SampleDefaults(
        close_charge_with="SO4", temperature_degc=18.0, ph=2.5, measurements={"Ni": nickel}
    )
    found = complete_samples([record(1, Cu=of(1), ph=None)], defaults)
    analysis = found.samples[0].analysis
    assert (analysis.ph, analysis.temperature_degc) == (2.5, 18.0)
    assert analysis.measurements["Ni"] is nickel
    assert found.assumptions == ("Ni: not in the file, 7 mg/L of the site file for every sample",)


def test_a_sample_without_flow_is_left_out_and_named() -> None:
    found = complete_samples([record(1, Cu=of(1)), record(2, Cu=of(2), flow_m3_per_d=0)], DEFAULTS)
    assert len(found.samples) == 1
    assert found.assumptions == ("2025-03-02: no flow, left out",)


def test_without_any_flow_every_sample_weighs_the_same() -> None:
    rows = [record(d, Cu=of(d), flow_m3_per_d=None) for d in (1, 2)]
    found = complete_samples(rows, DEFAULTS)
    assert found.weights == (0.5, 0.5)
    assert not found.flow_is_measured


def test_weights_are_shares_of_the_volume() -> None:
    rows = [record(1, Cu=of(1), flow_m3_per_d=300), record(2, Cu=of(2))]
    assert complete_samples(rows, DEFAULTS).weights == (0.75, 0.25)


def test_an_acid_sample_gets_no_alkalinity() -> None:
    rows = [
        record(1, Cu=of(1), ph=7.0, alkalinity_mg_per_l_as_caco3=of(80)),
        record(2, Cu=of(1), ph=3.0),
        record(3, Cu=of(1), ph=7.0),
    ]
    found = [
        s.analysis.alkalinity_mg_per_l_as_caco3 for s in complete_samples(rows, DEFAULTS).samples
    ]
    assert found == [80, None, 80]


def test_an_acidity_stands_before_the_ph_and_a_blank_one_leaves_it_to_the_ph() -> None:
    rows = [record(1, Cu=of(1), acidity_meq_per_l=4.0, ph=None), record(2, Cu=of(1))]
    found = complete_samples(rows, DEFAULTS).samples
    assert (found[0].analysis.acidity_meq_per_l, found[0].analysis.ph) == (4.0, None)
    assert (found[1].analysis.acidity_meq_per_l, found[1].analysis.ph) == (None, 3.0)


def test_a_value_far_above_the_others_is_pointed_out() -> None:
    rows = [record(d, Cu=of(1)) for d in range(1, 6)] + [record(9, Cu=of(1000))]
    assert "check its unit" in complete_samples(rows, DEFAULTS).assumptions[-1]


def test_no_acid_and_no_flow_are_refused() -> None:
    with pytest.raises(WaterError, match="no acid given"):
        complete_samples([record(1, Cu=of(1), ph=None)], DEFAULTS)
    with pytest.raises(ValueError, match="no sample with flow"):
        complete_samples([record(1, Cu=of(1), flow_m3_per_d=0)], DEFAULTS)

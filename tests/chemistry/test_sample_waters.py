"""Samples closed side by side equal samples closed alone, and their mean is their mixture."""

from __future__ import annotations

import datetime
from dataclasses import replace

import numpy as np
import pytest

from catalogs.constants import load_system
from chemistry.feed import feed_water
from chemistry.sample_gaps import complete_samples
from chemistry.sample_waters import close_samples, mean_analysis
from chemistry.samples import Reported, SampleDefaults, SampleRecord, Samples
from chemistry.system import System

COMPONENTS = ("H+", "Na+", "Ca+2", "SO4-2", "Cl-", "CO3-2", "NH4+", "Cu+2", "Zn+2", "Fe+2", "Fe+3")
MEANS = {"Cu": 30.0, "Zn": 15.0, "Fe(II)": 4.0, "Na": 200.0, "Ca": 60.0, "SO4": 700.0, "NH4": 20.0}


@pytest.fixture(scope="module")
def system() -> System:
    return load_system(20.0, components=COMPONENTS)


def series(count: int, *, aerated: bool = False, **changes: object) -> Samples:
    """Acid samples, every third near pH 6 with an alkalinity; seeded."""
    rng = np.random.default_rng(7)
    records = []
    for i in range(count):
        near_neutral = i % 3 == 0
        factor = 0.05 if near_neutral else float(np.exp(rng.normal(0.0, 0.3)))
        amounts = {
            name: Reported(value=mean * (factor if name in ("Cu", "Zn", "Fe(II)") else 1.0))
            for name, mean in MEANS.items()
        }
        records.append(
            SampleRecord(
                day=datetime.date(2025, 1, 1) + datetime.timedelta(days=i),
                flow_m3_per_d=float(rng.uniform(50.0, 300.0)),
                ph=float(rng.uniform(5.8, 6.4) if near_neutral else rng.uniform(2.1, 3.0)),
                alkalinity_mg_per_l_as_caco3=Reported(value=60.0) if near_neutral else None,
                dissolved=amounts, total=amounts,
            )
        )  # fmt: skip
    defaults = SampleDefaults(close_charge_with="SO4", temperature_degc=20.0, aerated=aerated)
    return complete_samples(records, replace(defaults, **changes))  # type: ignore[arg-type]


@pytest.mark.parametrize("aerated", [False, True])
def test_a_batch_of_samples_equals_each_sample_alone(system: System, aerated: bool) -> None:
    samples = series(9, aerated=aerated)
    waters = close_samples(samples, system)
    assert dict(waters.failures) == {}
    for i, sample in enumerate(samples.samples):
        alone = feed_water(sample.analysis, system)
        assert waters.totals_mol_per_l[i] == pytest.approx(alone.totals_mol_per_l, abs=1e-14)
        assert waters.ph[i] == pytest.approx(alone.ph_as_sampled, abs=1e-9)
        assert waters.charge_balance_error_percent[i] == pytest.approx(
            alone.charge_balance_error_percent, abs=1e-8
        )


def test_every_closed_sample_is_electroneutral(system: System) -> None:
    waters = close_samples(series(12), system)
    assert np.abs(waters.totals_mol_per_l @ system.component_charges).max() < 1e-15


@pytest.mark.parametrize("aerated", [False, True])
def test_the_mean_analysis_closes_to_the_mixture(system: System, aerated: bool) -> None:
    samples = series(9, aerated=aerated)
    waters = close_samples(samples, system)
    mixed = np.array(samples.weights) @ waters.totals_mol_per_l
    found = feed_water(mean_analysis(samples, waters), system)
    assert found.totals_mol_per_l == pytest.approx(mixed, abs=1e-13)


def test_the_mean_of_ph_would_miss_the_mixture(system: System) -> None:
    samples = series(9)
    waters = close_samples(samples, system)
    naive = float(np.array(samples.weights) @ waters.ph)
    mixed = mean_analysis(samples, waters).ph
    assert mixed is not None
    assert abs(naive - mixed) > 0.5


def test_reporting_limits_count_half_in_a_mean_unless_all_are_below(system: System) -> None:
    day = datetime.date(2025, 1, 1)
    records = [
        SampleRecord(
            day=day + datetime.timedelta(days=i), flow_m3_per_d=100.0, ph=3.0,
            dissolved={"Cu": cu, "Zn": zn}, total={"Cu": cu, "Zn": zn},
        )
        for i, (cu, zn) in enumerate([
            (Reported(value=0.2, is_below=True), Reported(value=0.4, is_below=True)),
            (Reported(value=0.5), Reported(value=0.2, is_below=True)),
        ])
    ]  # fmt: skip
    samples = complete_samples(
        records, SampleDefaults(close_charge_with="SO4", temperature_degc=20.0)
    )
    mean = mean_analysis(samples).measurements
    assert mean["Cu"].dissolved_mg_per_l == pytest.approx(0.3)
    assert not mean["Cu"].below_reporting_limit
    assert mean["Zn"].dissolved_mg_per_l == pytest.approx(0.3)
    assert mean["Zn"].below_reporting_limit


def test_acidity_is_closed_as_it_is_for_one_sample(system: System) -> None:
    samples = series(4, acidity_meq_per_l=9.0, ph=None)
    waters = close_samples(samples, system)
    alone = feed_water(samples.samples[1].analysis, system)
    assert waters.totals_mol_per_l[1] == pytest.approx(alone.totals_mol_per_l, abs=1e-14)


def test_a_sample_that_cannot_be_closed_says_why_and_leaves_the_others(system: System) -> None:
    samples = series(3)
    broken = replace(
        samples.samples[1],
        analysis=replace(samples.samples[1].analysis, close_charge_with="NH4"),
    )
    mended = replace(samples, samples=(samples.samples[0], broken, samples.samples[2]))
    waters = close_samples(mended, system)
    assert list(waters.failures) == [1]
    assert "NH4" in waters.failures[1]
    assert np.isfinite(waters.ph[[0, 2]]).all()
    assert np.isnan(waters.ph[1])

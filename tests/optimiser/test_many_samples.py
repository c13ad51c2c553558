"""Plans for many samples: what a plan certifies on each of them, and what they cost."""

from __future__ import annotations

import datetime
import tempfile
from dataclasses import replace
from functools import cache
from pathlib import Path

import numpy as np
import pytest

from optimiser import assess, load_site, plan
from optimiser.errors import NoPlan
from optimiser.evaluation import Evaluator
from optimiser.feeds import distinct_samples, mixed_feeds
from optimiser.monthly import monthly_means
from optimiser.outcome import Assessment, Plan
from optimiser.points import Points
from optimiser.quality import MONTHLY
from optimiser.sample_search import on_every_sample
from optimiser.site import Site
from tests.optimiser.test_bad_files import OFFERS
from tests.optimiser.test_site_samples import SAMPLED

DAY = datetime.date(2026, 1, 1)
HEADER = "Date,Flow (m3/d),pH,Cu dissolved mg/L,Cu total mg/L,Zn mg/L,Na mg/L,SO4 mg/L"
ROWS = (
    "2025-01-07,40,3.1,18,19,12,90,300",
    "2025-01-14,80,2.9,32,33,19,100,340",
    "2025-01-21,60,3.0,20,21,15,100,320",
    "2025-02-04,50,3.2,12,13,9,95,310",
    "2025-02-11,70,2.8,26,27,22,110,350",
)
WORST = 1  # holds most copper
FILTERED = SAMPLED.replace(
    "  ph_set_point:",
    "  separator: {name: filter, tss_mg_per_l: 3, capture_fraction: 0.995}\n  ph_set_point:",
)


def write(folder: Path, rows: tuple[str, ...], *, header: str = HEADER) -> Site:
    folder.mkdir(parents=True, exist_ok=True)
    (folder / "site.yaml").write_text(FILTERED, encoding="utf-8")
    (folder / "offers.csv").write_text(OFFERS, encoding="utf-8")
    (folder / "samples.csv").write_text("\n".join([header, *rows]) + "\n", encoding="utf-8")
    return load_site(folder / "site.yaml", on_day=DAY)


@cache
def folder() -> Path:
    return Path(tempfile.mkdtemp())


@cache
def site_of(rows: tuple[str, ...] = ROWS) -> Site:
    return write(folder() / str(abs(hash(rows))), rows)


def with_factors(site: Site, daily: float, monthly: float) -> Site:
    return replace(site, variability={"default": (daily, monthly)})


@cache
def plan_of(rows: tuple[str, ...] = ROWS, daily: float = 1.0, monthly: float = 1.0) -> Plan:
    return plan(with_factors(site_of(rows), daily, monthly))


def test_one_sample_costs_what_its_analysis_costs() -> None:
    site = site_of(ROWS[2:3])
    alone = replace(site, samples=None, sample_waters=None)
    with_sample, without = plan(site), plan(alone)
    assert with_sample.cost["total"] == pytest.approx(without.cost["total"], rel=1e-6)
    assert with_sample.data["proof"]["states_examined"] == without.data["proof"]["states_examined"]


def test_a_site_without_samples_has_one_water_of_the_whole_volume() -> None:
    evaluator = Evaluator(replace(site_of(), samples=None, sample_waters=None))
    assert evaluator.plant.feeds.weight.tolist() == [1.0]
    assert on_every_sample(evaluator) is evaluator


def test_samples_twice_over_change_nothing() -> None:
    bottles = [row.replace(",", f",{name},", 1) for row in ROWS for name in "AB"]
    twice = write(folder() / "twice", tuple(bottles), header=HEADER.replace(",", ",Sample,", 1))
    site = site_of()
    assert twice.samples is not None
    assert site.samples is not None
    assert len(twice.samples.samples) == 2 * len(site.samples.samples)
    again = plan(with_factors(twice, 1.0, 1.0))
    assert again.cost["total"] == pytest.approx(plan_of().cost["total"], rel=1e-7)


def test_the_plan_holds_for_each_sample_alone() -> None:
    found = plan_of()
    assert found.compliant
    controller = found.data["set_points"][0]["controller"]
    for number, row in enumerate(ROWS):
        one = replace(site_of((row,)), stands_for="peak")
        doses = dict(found.doses)
        evaluator = on_every_sample(Evaluator(site_of()))
        fed = _fed(found, evaluator)
        doses[controller] = float(fed[number + 1, evaluator.plant.index[controller]])
        doses = {key: dose for key, dose in doses.items() if "@" not in key}
        judged = assess(one, doses)
        daily = [x for x in judged.data["limits"] if x["averaging"] != MONTHLY]
        assert daily
        assert all(x["meets"] for x in daily), (row, daily)


def _fed(found: Plan | Assessment, evaluator: Evaluator) -> np.ndarray:
    return evaluator.evaluate(_point(found, evaluator), full=False).priced.fed[0]


def _point(found: Plan | Assessment, evaluator: Evaluator) -> Points:
    plant = evaluator.plant
    stage = found.data["set_points"][0]
    doses = np.zeros((1, len(plant.names)))
    trim = -1
    for key, dose in found.doses.items():
        name, _, at = key.partition("@")
        if at:
            trim = plant.index[name]
        elif name != stage["controller"]:
            doses[0, plant.index[name]] = dose
    return Points(
        doses, np.array([plant.index[stage["controller"]]]), np.array([stage["ph_set_point"]]),
        np.array([trim]),
    )  # fmt: skip


def test_without_its_worst_sample_a_feed_costs_no_more() -> None:
    rest = tuple(row for n, row in enumerate(ROWS) if n != WORST)
    fewer = plan_of(rest)
    flows = [float(row.split(",")[1]) for row in ROWS]
    # the same yearly volume, so that only the water differs
    same = replace(site_of(rest), flow_m3_per_d=float(np.mean(flows)))
    again = plan(with_factors(same, 1.0, 1.0))
    assert again.cost["total"] <= plan_of().cost["total"] * (1.0 + 1e-6)
    assert fewer.compliant


def test_purchases_are_the_mean_of_the_volume() -> None:
    found = plan_of()
    evaluator = on_every_sample(Evaluator(site_of()))
    fed = _fed(found, evaluator)[1:]
    flow = np.array([float(row.split(",")[1]) for row in ROWS])
    mean = flow @ fed / flow.sum()
    for name, dose in found.doses.items():
        if "@" not in name:
            assert dose == pytest.approx(float(mean[evaluator.plant.index[name]]), rel=1e-9)


def test_doses_assessed_again_cost_the_same() -> None:
    found = plan_of()
    again = assess(with_factors(site_of(), 1.0, 1.0), found.doses)
    assert again.compliant
    assert again.cost["total"] == pytest.approx(found.cost["total"], rel=1e-6)


def test_monthly_means_are_those_of_each_month_by_volume() -> None:
    site = site_of()
    evaluator = on_every_sample(Evaluator(site))
    point = Points(
        np.zeros((1, len(evaluator.plant.names))), np.array([-1]), np.array([7.0]), np.array([-1])
    )
    seen = evaluator.evaluate(point, full=False, all_ends=False)
    number = next(
        n for n, c in enumerate(evaluator.judge.checks)
        if c.averaging == MONTHLY and c.label == "Cu"
    )  # fmt: skip
    # nothing is dosed into acid water: all copper stays dissolved, carried solids are the feed's
    value = seen.judged[0].value[1:, number]
    flow = np.array([40.0, 80.0, 60.0, 50.0, 70.0])
    expected = [flow[:3] @ value[:3] / 180.0, flow[3:] @ value[3:] / 120.0]
    means = monthly_means(evaluator, seen, number)
    assert means.value[0, 0] == pytest.approx(expected, rel=1e-12)
    assert value[:2] == pytest.approx([18.0, 32.0], rel=0.06)


def test_a_monthly_limit_binds_on_its_month_and_not_on_a_sample() -> None:
    found = plan_of()
    rows = [x for x in found.data["limits"] if x["averaging"] == MONTHLY]
    assert rows
    for row in rows:
        assert "2025-0" in row["worst_state"]
        assert row["meets"]


def test_factors_shrink_to_what_the_samples_do_not_show() -> None:
    site = with_factors(site_of(), 4.0, 2.0)
    evaluator = Evaluator(site)
    whole = Evaluator(site, mixed_feeds(site, evaluator.plant.feed, distinct_samples(site)))
    flow = np.array([40.0, 80.0, 60.0, 50.0, 70.0])
    copper = np.array([19.0, 33.0, 21.0, 13.0, 27.0])
    mean = flow @ copper / flow.sum()
    daily, monthly = (
        next(c for c in whole.judge.checks if c.label == "Cu" and c.averaging == kind)
        for kind in ("daily", MONTHLY)
    )
    assert daily.variability == pytest.approx(4.0 * mean / 33.0, rel=1e-6)
    month = max(flow[:3] @ copper[:3] / 180.0, flow[3:] @ copper[3:] / 120.0)
    assert monthly.variability == pytest.approx(2.0 * mean / month, rel=1e-6)


def test_no_plan_names_the_sample() -> None:
    site = with_factors(site_of(), 1.0, 1.0)
    tight = replace(
        site, limits=tuple(replace(x, daily_mg_per_l=1e-5, monthly_mg_per_l=None)
                           for x in site.limits if x.parameter == "Cu"),
    )  # fmt: skip
    with pytest.raises(NoPlan, match="2025-0"):
        plan(tight)


def test_the_plan_says_what_it_certified() -> None:
    data = plan_of().data
    assert data["samples"]["count"] == len(ROWS)
    assert data["samples"]["first"] == "2025-01-07"
    assert data["samples"]["months"] == ["2025-01", "2025-02"]
    assert data["samples"]["states_certified"] >= len(ROWS) * 3
    assert data["proof"]["certificate"]["mass_balance"] < 1e-9

"""The optimality benchmark: its seeded sites, and plans of two of them beside references."""

from __future__ import annotations

import tempfile
from dataclasses import replace
from functools import cache
from pathlib import Path

import pytest

from optimiser import load_site
from optimiser.evaluation import Evaluator
from optimiser.site import Site
from tests.benchmarks import plan_reference
from tests.benchmarks.plan_reference import Compared, compare, judge, lower_bound_of
from tests.benchmarks.reference_rows import RESULTS, read_rows, stale
from tests.benchmarks.seeded_sites import (
    CONTRACT_SEEDS,
    KINDS,
    PEAK_SEEDS,
    SEEDS,
    seeded_site,
    write_site,
)

SMALL = ("seed_04", "seed_16")  # planned in about a second each


@cache
def _loaded(seed: int) -> Site:
    with tempfile.TemporaryDirectory() as folder:
        return load_site(write_site(seed, Path(folder)))


# -- the sites are what they promise ---------------------------------------------------------------


@pytest.mark.parametrize("seed", SEEDS)
def test_a_seeded_site_is_read_like_any_other_and_has_what_its_seed_promises(seed: int) -> None:
    site, made = _loaded(seed), seeded_site(seed)
    assert 2 <= len(made.metals) <= 6
    assert 4 <= len(site.treatment.reagents) <= 8
    assert site.treatment.most_reagents in (2, 3)
    assert site.stands_for == ("peak" if seed in PEAK_SEEDS else "average")
    offered = [offer.reagent for offer in site.offers]
    bought = {*site.treatment.reagents, *site.treatment.trim_reagents}
    assert set(offered) == bought
    if seed in CONTRACT_SEEDS:
        assert all(offered.count(name) == 3 for name in bought)
        assert any(offer.tiers for offer in site.offers)


def test_a_seed_gives_the_same_files_each_time(tmp_path: Path) -> None:
    one, two = (write_site(7, tmp_path / name) for name in ("one", "two"))
    for name in ("site.yaml", "offers.csv"):
        assert (one.parent / name).read_bytes() == (two.parent / name).read_bytes()


def test_the_twenty_sites_cover_the_ranges_and_every_kind_of_limit_twice() -> None:
    made = [seeded_site(seed) for seed in SEEDS]
    assert {len(one.metals) for one in made} == {2, 3, 4, 5, 6}
    assert {len(one.reagents) for one in made} == {4, 5, 6, 7, 8}
    assert sorted(one.kind for one in made) == sorted([*KINDS, *KINDS])
    kinds = {tier_kind for seed in CONTRACT_SEEDS for tier_kind in _tier_kinds(_loaded(seed))}
    assert kinds == {"all_units", "incremental"}


def _tier_kinds(site: Site) -> set[str]:
    return {offer.tier_kind for offer in site.offers if offer.tiers}


@pytest.mark.parametrize(
    ("kind", "parameter"),
    [
        ("sulfate cap", "SO4"), ("chloride cap", "Cl"), ("TDS load", "TDS"), ("barium", "Ba"),
        ("sum of metals", "sum"), ("sulfide", "sulfide"), ("monthly averages", "monthly"),
    ],
)  # fmt: skip
def test_sites_of_a_kind_have_its_limit(kind: str, parameter: str) -> None:
    for seed in (s for s in SEEDS if seeded_site(s).kind == kind):
        limits = _loaded(seed).limits
        if parameter == "monthly":
            assert any(limit.monthly_mg_per_l for limit in limits)
        else:
            assert parameter in {limit.parameter for limit in limits}


# -- plans beside references -----------------------------------------------------------------------


def test_kept_references_belong_to_instances_of_the_benchmark() -> None:
    """The benchmark itself asks for the missing ones and fails where too few are counted."""
    kept = set(read_rows())
    assert kept <= set(plan_reference.instances())
    assert set(SMALL) <= kept


@pytest.mark.parametrize("name", SMALL)
def test_the_plan_of_a_small_seed_is_no_dearer_than_its_exhaustive_reference(
    name: str, tmp_path: Path
) -> None:
    one = compare(name, read_rows(), tmp_path)
    assert one.status == "test", one.reason
    assert -plan_reference.REFINE_ABOVE <= one.gap <= 0.001


def test_a_kept_point_is_evaluated_again_and_goes_stale_with_its_cost_and_files(
    tmp_path: Path,
) -> None:
    path = plan_reference.path_of("seed_16", tmp_path)
    row, evaluator = read_rows()["seed_16"][0], Evaluator(load_site(path))
    assert stale(row, path, evaluator) == ""
    dearer = replace(row, cost_per_year=f"{1.001 * row.cost:.4f}")
    assert "costs -0.0999 % more" in stale(dearer, path, evaluator)
    missed = replace(row, ph_set_point="6.1")
    assert "misses a limit" in stale(missed, path, evaluator)
    with path.open("a", encoding="utf-8") as file:
        file.write("# changed\n")
    assert "files have changed" in stale(row, path, evaluator)


# -- the verdict -----------------------------------------------------------------------------------


def _compared(*gaps: float) -> list[Compared]:
    return [
        Compared(f"site_{i}", "demo", "test", "", 1e4 * (1.0 + gap), "", 1.0, 1e4, "x")
        for i, gap in enumerate(gaps)
    ]


def test_the_floors_are_on_the_median_the_worst_and_the_count() -> None:
    assert judge(_compared(0.0, 0.0004, 0.0049), least_counted=3).missed == ()
    worst = judge(_compared(0.0, 0.0, 0.0051), least_counted=3)
    assert worst.missed == ("worst gap +0.510 %, at most 0.5 %",)
    median = judge(_compared(0.0, 0.0011, 0.0012), least_counted=3)
    assert median.missed == ("median gap +0.110 %, at most 0.1 %",)
    few = judge(_compared(0.0, 0.0), least_counted=3)
    assert few.missed == ("2 instances count, 3 are wanted",)


def test_a_plan_that_is_not_found_misses_the_worst_gap() -> None:
    (lost,) = _compared(float("inf"))
    assert judge([lost], least_counted=1).missed[-1] == "worst gap +inf %, at most 0.5 %"


def test_instances_without_a_test_do_not_count_and_faults_miss() -> None:
    good, other = _compared(0.0, -0.01)
    untested = replace(other, status="no test", reason="dearer")
    assert judge([good, untested], least_counted=1).gaps == (good.gap,)
    fault = replace(other, status="fault", reason="solver")
    assert judge([good, fault], least_counted=1).missed == ("site_1: fault, solver",)


def test_bounds_above_the_reference_or_the_plan_are_found() -> None:
    below, above = (
        replace(one, bound_cost_per_year=lower_bound_of({"lower_bound_per_year": bound}))
        for one, bound in zip(_compared(0.0, -0.0005), (9990.0, 9996.0), strict=True)
    )
    assert judge([below], least_counted=1).missed == ()
    assert judge([above], least_counted=1).missed == (
        "site_1: bound 9,996.00 above the reference or the plan",
    )
    assert _compared(0.0)[0].bound_holds, "no bound is no broken bound"


def test_the_results_name_the_command_that_made_them() -> None:
    assert "# Made by: python -m tests.benchmarks.plan_reference --build" in RESULTS.read_text(
        encoding="utf-8"
    )

"""The same site gives the same plan to the last bit, in any process; both solvers agree."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import pytest

from tests.optimiser.cli_runs import SITES, run, write_site

DEMOS = ("silver_rinse", "mercury_lab")


def planned(site: Path, *arguments: str, seed: str = "0") -> dict[str, Any]:
    """The plan of a process of its own; all of its output is JSON."""
    done = run("plan", site, "--json", *arguments, environment={"PYTHONHASHSEED": seed})
    assert (done.returncode, done.stderr) == (0, "")
    data: dict[str, Any] = json.loads(done.stdout)
    return data


def without_seconds(data: dict[str, Any]) -> str:
    assert data["proof"].pop("seconds")
    return json.dumps(data)


@pytest.mark.parametrize("solver", ["highs", "cbc"])
def test_two_processes_give_the_same_plan_to_the_last_bit(solver: str, tmp_path: Path) -> None:
    site = write_site(tmp_path / "site", {"treatment": {"most_reagents": 2}})
    first, second = (planned(site, "--solver", solver, seed=seed) for seed in ("1", "2"))
    assert without_seconds(first) == without_seconds(second)


@pytest.mark.slow
@pytest.mark.parametrize("demo", DEMOS)
def test_demos_repeat_to_the_last_bit_and_both_solvers_agree(demo: str) -> None:
    limit = ("--time-limit", "600", "--most-reagents", "2")
    first, second = (planned(SITES / demo, *limit, seed=seed) for seed in ("1", "2"))
    other = planned(SITES / demo, *limit, "--solver", "cbc")
    assert without_seconds(first) == without_seconds(second)
    assert other["cost"]["total"] == pytest.approx(first["cost"]["total"], rel=1e-4)
    assert set(other["doses"]) == set(first["doses"])

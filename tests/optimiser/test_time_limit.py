"""A time limit ends a search at points that were verified, wherever it comes."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import pytest

from optimiser import assess, load_site, plan
from optimiser.errors import Interrupted
from optimiser.polish_step import Bounds
from tests.optimiser.cli_runs import write_site


class Patience:
    """Says that it is late from the n-th question on."""

    def __init__(self, questions: int) -> None:
        self.left = questions

    def late(self, _bounds: Bounds) -> bool:
        self.left -= 1
        return self.left < 0


def limited(monkeypatch: pytest.MonkeyPatch, questions: int) -> None:
    monkeypatch.setattr(Bounds, "late", property(Patience(questions).late))


TWO = {"treatment": {"most_reagents": 2}}
TOO_SOON, IN_TIME = (0, 1), (2, 3, 4, 5, 6, 8)  # questions before the first starts, and after


@pytest.mark.parametrize("questions", IN_TIME)
def test_a_search_cut_short_returns_a_verified_plan(
    questions: int, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    site = load_site(write_site(tmp_path, TWO))
    whole = plan(site)
    limited(monkeypatch, questions)
    found = plan(site)
    proof = found.to_dict()["proof"]
    assert proof["stopped_early"]
    assert found.compliant
    assert found.cost["total"] >= whole.cost["total"] * (1.0 - 1e-6)
    again = assess(site, found.doses)
    assert again.compliant
    assert again.cost["total"] == pytest.approx(found.cost["total"], rel=1e-6)


@pytest.mark.parametrize("questions", TOO_SOON)
def test_a_search_cut_short_before_any_start_is_verified_has_no_plan(
    questions: int, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    site = load_site(write_site(tmp_path, TWO))
    limited(monkeypatch, questions)
    with pytest.raises(Interrupted, match="before a verified plan was found"):
        plan(site)


def test_a_limit_that_is_never_reached_changes_nothing(tmp_path: Path) -> None:
    site = load_site(write_site(tmp_path, TWO))
    long = replace(site, solver=replace(site.solver, time_limit_s=1e6))
    assert plan(long).cost == plan(site).cost
    assert not plan(long).to_dict()["proof"]["stopped_early"]

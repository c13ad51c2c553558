"""Faults of solvers and states end in one clear message, an exit code and nothing unverified."""

from __future__ import annotations

import json
import re
from pathlib import Path

import pytest

from tests.optimiser.cli_runs import REPORT, program, run, with_cbc, write_site


@pytest.fixture
def site(tmp_path: Path) -> Path:
    return write_site(tmp_path / "site")


@pytest.fixture
def scratch(tmp_path: Path) -> Path:
    folder = tmp_path / "scratch"
    folder.mkdir()
    return folder


# -- solvers that are not there -------------------------------------------------------------------


def test_a_missing_highs_is_named_with_what_to_install(site: Path) -> None:
    done = run("plan", site, "--json", arranged="sys.modules['highspy'] = None")
    assert (done.returncode, done.stdout) == (2, "")
    assert done.stderr == (
        "dosewright: solver highs cannot be used: the package highspy is missing\n"
        "    Install it with: python -m pip install 'pulp[highs]>=3.3.2,<4'\n"
    )


def test_a_proof_without_highspy_is_refused_before_anything_is_searched(site: Path) -> None:
    arranged = "sys.modules['highspy'] = None\nimport optimiser.search as s\ndel s.Search.run\n"
    done = run("plan", site, "--solver", "cbc", "--prove", "1", "--json", arranged=arranged)
    assert (done.returncode, done.stdout) == (2, "")
    assert done.stderr == (
        "dosewright: solver highs cannot be used: the package highspy is missing, and a proof "
        "needs it whatever solver plans\n"
        "    Install it with: python -m pip install 'pulp[highs]>=3.3.2,<4'\n"
    )


def test_a_missing_cbc_is_named_with_its_path(site: Path, tmp_path: Path) -> None:
    nowhere = tmp_path / "nowhere" / "cbc"
    done = run("plan", site, "--solver", "cbc", arranged=with_cbc(nowhere))
    assert (done.returncode, done.stdout) == (2, "")
    assert done.stderr.splitlines()[0] == (
        f"dosewright: solver cbc cannot be used: no program at {nowhere}"
    )


# -- solvers that break down ----------------------------------------------------------------------

GARBAGE = 'while [ $# -gt 1 ]; do shift; done; printf "Optimal - x\\nall well\\n" > "$1"'
EMPTY = 'while [ $# -gt 1 ]; do shift; done; : > "$1"'
BREAKDOWNS = {
    "killed midway": ("kill -KILL $$", "failed: the program ended with code -9"),
    "failing": ("echo much text; exit 7", "failed: the program ended with code 7"),
    "silent": ("exit 0", "failed: the program wrote no solution"),
    "garbled": (GARBAGE, "wrote a solution that cannot be read"),
    "empty": (EMPTY, "wrote a solution that cannot be read"),
}


SHORT = """
from dataclasses import replace
def short(run):
    return lambda self, model, request: run(self, model, replace(request, time_limit_s=1.0))
"""


@pytest.mark.parametrize("kind", BREAKDOWNS)
def test_a_solver_program_that_breaks_down_is_a_fault(
    kind: str, site: Path, tmp_path: Path, scratch: Path
) -> None:
    script, said = BREAKDOWNS[kind]
    arranged = with_cbc(program(tmp_path / "cbc", script))
    done = run(
        "plan", site, "--solver", "cbc", "--json", arranged=arranged, cwd=scratch,
        environment={"TMPDIR": str(scratch)},
    )  # fmt: skip
    assert (done.returncode, done.stdout) == (1, "")
    assert done.stderr == (
        f"dosewright: cbc on model 'polish step': {said}\n    {REPORT}\n"
    )  # fmt: skip
    assert list(scratch.iterdir()) == []


def test_a_solver_program_that_forgets_the_time_is_ended(
    site: Path, tmp_path: Path, scratch: Path
) -> None:
    marker = tmp_path / "pid"
    stuck = program(tmp_path / "cbc", f"echo $$ > {marker}; exec sleep 250")
    arranged = with_cbc(stuck) + "import optimiser.pulp_backends as b\nb._CBC_GRACE_S = 0.5\n"
    arranged += SHORT + "b.CbcBackend.run = short(b.CbcBackend.run)\n"
    done = run(
        "plan", site, "--solver", "cbc", cwd=scratch, arranged=arranged,
        environment={"TMPDIR": str(scratch)},
    )  # fmt: skip
    assert (done.returncode, done.stdout) == (1, "")
    assert "was ended because it ran on 0.5 s after its time limit of 1 s" in done.stderr
    assert "Traceback" not in done.stderr
    assert not Path(f"/proc/{marker.read_text().strip()}").exists()
    assert list(scratch.iterdir()) == []


def test_debug_shows_where_a_solver_broke_down(site: Path, tmp_path: Path) -> None:
    arranged = with_cbc(program(tmp_path / "cbc", "exit 7"))
    done = run("plan", site, "--solver", "cbc", "--debug", arranged=arranged)
    assert done.returncode == 1
    assert done.stderr.startswith("Traceback")
    assert "the program ended with code 7" in done.stderr


# -- solvers that talk nonsense -------------------------------------------------------------------

NONSENSE = """
import math
import optimiser.pulp_backends as b
from optimiser.backend import Claim, RawOutcome
honest = b.HighsBackend.run
def say(model, values, claim=Claim.OPTIMAL, bound=None):
    return RawOutcome(claim=claim, version="nonsense 1", values=values, bound=bound)
def run(self, model, request):
    {answer}
b.HighsBackend.run = run
"""
ANSWERS = {
    "nothing": ("return say(model, {})", "returned a solution that does not hold"),
    "no numbers": (
        "return say(model, dict.fromkeys(model.variables, math.nan))",
        "returned a solution that does not hold",
    ),
    "no solution": (
        "return say(model, {}, claim=Claim.INFEASIBLE)",
        "found no best solution where staying at the point is a solution of finite cost",
    ),
    "ends of ranges": (
        "return say(model, {k: v.low for k, v in model.variables.items()})",
        "returned a solution that does not hold",
    ),
    "a bound that is no number": (
        "return say(model, honest(self, model, request).values, bound=math.nan)",
        "proves nan as the least cost",
    ),
    "a bound above the cost": (
        "return say(model, honest(self, model, request).values, bound=1e9)",
        "proves 1e+09 as the least cost",
    ),
}


@pytest.mark.parametrize("kind", ANSWERS)
def test_an_answer_that_does_not_hold_is_a_fault(kind: str, site: Path) -> None:
    answer, said = ANSWERS[kind]
    done = run("plan", site, "--json", arranged=NONSENSE.format(answer=answer))
    assert (done.returncode, done.stdout) == (1, "")
    assert done.stderr.startswith("dosewright: highs on model 'polish step': ")
    assert said in done.stderr
    assert done.stderr.endswith(f"    {REPORT}\n")
    assert "Traceback" not in done.stderr


def test_a_solver_that_optimises_nothing_gives_a_dearer_plan_but_a_verified_one(
    site: Path,
) -> None:
    answer = "return say(model, honest(self, model.without_costs(), request).values)"
    poor = run("plan", site, "--json", arranged=NONSENSE.format(answer=answer))
    good = run("plan", site, "--json")
    assert (poor.returncode, good.returncode) == (0, 0), poor.stderr
    found, best = json.loads(poor.stdout), json.loads(good.stdout)
    assert found["compliant"]
    assert all(row["meets"] for row in found["limits"])
    assert found["cost"]["total"] >= best["cost"]["total"] * (1.0 - 1e-6)
    doses = [f"--dose={key}={dose!r}" for key, dose in found["doses"].items()]
    again = run("assess", site, "--json", *doses)
    assert again.returncode == 0
    assert json.loads(again.stdout)["cost"]["total"] == pytest.approx(
        found["cost"]["total"], rel=1e-6
    )


# -- states that miss their certificate -----------------------------------------------------------

FAILING = """
import dataclasses
import numpy as np
import optimiser.planning as planning
import optimiser.plant as plant
import optimiser.search as search
PHASE = [""]
def during(name, function):
    def inside(*args, **kwargs):
        before, PHASE[0] = PHASE[0], name
        try:
            return function(*args, **kwargs)
        finally:
            PHASE[0] = before
    return inside
search.Search._best_of = during("grid", search.Search._best_of)
search.polish = during("polish", search.polish)
planning._verified = during("final", planning._verified)
CALLS = [0]
def spoiled(state):
    bad = np.arange(state.converged.size) % {every} == {every} - 1
    return dataclasses.replace(state, converged=state.converged & ~bad), bad
def titrate(*args, **kwargs):
    found = honest_titrate(*args, **kwargs)
    if PHASE[0] != {phase!r}:
        return found
    CALLS[0] += 1
    if CALLS[0] > {times}:
        return found
    state, bad = spoiled(found.state)
    return dataclasses.replace(found, state=state, reached=found.reached & ~bad)
honest_titrate, plant.titrate = plant.titrate, titrate
import atexit
atexit.register(lambda: sys.stderr.write(f"{{CALLS[0]}} spoiled"))
"""


@pytest.mark.parametrize(("phase", "every"), [("grid", 3), ("grid", 2), ("polish", 5)])
def test_states_that_fail_on_the_way_leave_a_verified_plan(
    phase: str, every: int, site: Path
) -> None:
    arranged = FAILING.format(phase=phase, every=every, times=10**9)
    done = run("plan", site, "--json", arranged=arranged)
    count = int(done.stderr.removesuffix(" spoiled"))
    assert count > 0
    assert done.returncode == 0
    found = json.loads(done.stdout)
    assert found["compliant"]
    assert found["proof"]["certificate"]["mass_balance"] <= 1e-9
    best = json.loads(run("plan", site, "--json").stdout)
    assert found["cost"]["total"] == pytest.approx(best["cost"]["total"], rel=0.05)
    assert found["cost"]["total"] >= best["cost"]["total"] * (1.0 - 1e-6)


def test_states_that_fail_in_every_polish_leave_the_starts_that_comply(site: Path) -> None:
    done = run(
        "plan", site, "--json", arranged=FAILING.format(phase="polish", every=1, times=10**9)
    )
    assert done.returncode == 0
    found, best = json.loads(done.stdout), json.loads(run("plan", site, "--json").stdout)
    assert found["compliant"]
    assert found["cost"]["total"] > best["cost"]["total"]


def test_where_states_of_starts_fail_too_no_plan_is_ruled_out(site: Path) -> None:
    arranged = FAILING.format(phase="polish", every=1, times=10**9)
    arranged += "search.Search._polish = during('polish', search.Search._polish)\n"
    done = run("plan", site, "--json", arranged=arranged)
    assert done.returncode == 3
    told = json.loads(done.stdout)
    assert not told["compliant"]
    assert told["message"].startswith("no plan was found: ")
    said = re.match(
        r"([\d,]+) of ([\d,]+) equilibrium states could not be solved and counted as misses, so "
        "that a plan is not ruled out$",
        told["reasons"][0],
    )
    assert said is not None
    failed, solved = (int(count.replace(",", "")) for count in said.groups())
    assert 0 < failed < solved


def test_a_plan_that_does_not_hold_when_verified_afresh_is_left_out(site: Path) -> None:
    best = json.loads(run("plan", site, "--json").stdout)
    done = run("plan", site, "--json", arranged=FAILING.format(phase="final", every=1, times=1))
    assert done.returncode == 0, done.stderr
    found = json.loads(done.stdout)
    assert found["compliant"]
    assert list(found["doses"]) != list(best["doses"])
    assert found["cost"]["total"] > best["cost"]["total"]
    assert [row["reagents"] for row in found["runners_up"]] == [
        row["reagents"] for row in best["runners_up"][1:]
    ]
    said = "did not hold when its states were solved afresh"
    assert any(said in text for text in found["assumptions"])


def test_when_nothing_holds_afresh_no_plan_is_shown(site: Path) -> None:
    done = run("plan", site, "--json", arranged=FAILING.format(phase="final", every=1, times=10**9))
    assert (done.returncode, done.stdout) == (1, "")
    assert "plans were found and do not hold when verified afresh" in done.stderr
    assert "Traceback" not in done.stderr

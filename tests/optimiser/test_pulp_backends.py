"""Backends: missing programs are named, solvers stay silent, leave no files and repeat."""

from __future__ import annotations

import ast
import ctypes
import os
import random
import subprocess
import sys
import tempfile
import textwrap
import time
from pathlib import Path
from typing import cast

import pytest

from optimiser import pulp_backends
from optimiser.backend import Backend, SolveRequest
from optimiser.bound_tighten import Ends
from optimiser.errors import SolverFault, SolverUnavailable
from optimiser.highs_linear import HighsLinear
from optimiser.linear_model import Expression, Model, Sense
from optimiser.pulp_backends import CbcBackend, HighsBackend, native_output_on_stderr
from optimiser.site import SolverSettings
from optimiser.solver import SOLVERS, Solver, Termination, open_solver, solver_from
from tests.optimiser.solver_models import (
    blend,
    knapsacks,
    market_split,
    random_mixed_model,
    spread_model,
)

ROOT = Path(__file__).parents[2]


@pytest.fixture(params=SOLVERS)
def name(request: pytest.FixtureRequest) -> str:
    return str(request.param)


# --- solvers that are not there ----------------------------------------------------------------


def run_python(code: str, **environment: str) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [sys.executable, "-W", "error", "-c", textwrap.dedent(code)],
        capture_output=True, text=True, check=False, cwd=ROOT,
        env={**os.environ, "PYTHONPATH": str(ROOT), "PYTHONUNBUFFERED": "", **environment},
    )  # fmt: skip


@pytest.mark.parametrize(
    ("package", "said"),
    [
        ("highspy", "solver highs cannot be used: the package highspy is missing"),
        ("pulp", "solver highs cannot be used: the package pulp is missing"),
    ],
)
def test_a_missing_package_is_named_with_what_to_install(package: str, said: str) -> None:
    done = run_python(f"""
        import sys
        sys.modules[{package!r}] = None
        from optimiser.errors import SolverUnavailable
        from optimiser.linear_model import Model
        from optimiser.solver import open_solver
        model = Model("m")
        model.add_variable("x")
        try:
            open_solver().solve(model)
        except SolverUnavailable as error:
            print(error)
            print(error.exit_code, error.tried)
    """)
    assert done.stderr == ""
    assert done.stdout == (
        f"{said}\n    Install it with: python -m pip install 'pulp[highs]>=3.3.2,<4'\n2 highs\n"
    )


def test_a_missing_cbc_is_named_with_its_path(tmp_path: Path) -> None:
    nowhere = str(tmp_path / "cbc")
    with pytest.raises(SolverUnavailable) as caught:
        Solver(CbcBackend(path=nowhere)).solve(blend())
    assert str(caught.value).startswith(f"solver cbc cannot be used: no program at {nowhere}\n")
    assert "python -m pip install" in caught.value.how_to_install


def test_a_pulp_that_works_otherwise_is_refused(monkeypatch: pytest.MonkeyPatch) -> None:
    import pulp

    monkeypatch.setattr(pulp, "__version__", "4.2.0")
    with pytest.raises(SolverUnavailable, match=r"PuLP 4\.2\.0 is installed"):
        open_solver().solve(blend())


def test_an_unknown_solver_is_refused_with_those_known() -> None:
    with pytest.raises(SolverUnavailable, match="there is no solver 'simplex'; choose one of: hig"):
        open_solver("simplex")


def test_a_program_that_breaks_down_is_a_fault(tmp_path: Path) -> None:
    broken = tmp_path / "cbc"
    broken.write_text("#!/bin/sh\nexit 3\n")
    broken.chmod(0o755)
    with pytest.raises(
        SolverFault, match="cbc on model 'blend': failed: the program ended with code 3"
    ):
        Solver(CbcBackend(path=str(broken))).solve(blend())


def test_a_site_chooses_its_solver() -> None:
    solver = solver_from(SolverSettings(name="cbc", time_limit_s=9.0, relative_gap=1e-4, seed=5))
    assert solver.backend.name == "cbc"
    assert solver.request == SolveRequest(time_limit_s=9.0, relative_gap=1e-4, seed=5)


# --- silence, files, repetition, speed ---------------------------------------------------------


def test_no_solver_text_reaches_stdout(name: str, capfd: pytest.CaptureFixture[str]) -> None:
    open_solver(name).solve(random_mixed_model(1))
    open_solver(name, time_limit_s=0.2).solve(knapsacks(10, 60))
    assert capfd.readouterr().out == ""


def test_a_process_prints_its_own_text_only(name: str) -> None:
    done = run_python(f"""
        from optimiser.linear_model import Expression, Model, Sense
        from optimiser.solver import open_solver
        print("before")
        model = Model("m")
        model.add_variable("x", integer=True)
        model.add_row("r", {{"x": 2.0}}, Sense.AT_LEAST, 3.0)
        model.add_cost("c", Expression({{"x": 1.0}}))
        report = open_solver({name!r}).solve(model)
        print(report.objective)
    """)
    assert done.returncode == 0, done.stderr
    assert done.stdout == "before\n2.0\n"


def test_native_text_goes_to_stderr_even_from_a_buffer() -> None:
    """The C library buffers its own stdout when it is a pipe, and would empty it much later."""
    done = run_python("""
        import ctypes, sys
        from optimiser.pulp_backends import native_output_on_stderr
        native = ctypes.CDLL(None)
        native.puts(b"first")
        with native_output_on_stderr():
            native.puts(b"banner")
        native.puts(b"last")
        native.fflush(None)
    """)
    assert done.stdout == "first\nlast\n"
    assert done.stderr == "banner\n"


def test_descriptors_come_back_after_an_error(capfd: pytest.CaptureFixture[str]) -> None:
    with pytest.raises(ValueError, match="inside"), native_output_on_stderr():
        raise ValueError("inside")
    ctypes.CDLL(None).puts(b"seen")
    ctypes.CDLL(None).fflush(None)
    assert capfd.readouterr().out == "seen\n"


def test_a_process_without_stdout_can_solve() -> None:
    done = run_python("""
        import os, sys
        os.close(1)
        from optimiser.linear_model import Expression, Model, Sense
        from optimiser.solver import open_solver
        model = Model("m")
        model.add_variable("x", low=2.0)
        model.add_cost("c", Expression({"x": 1.0}))
        sys.stderr.write(str(open_solver().solve(model).objective))
    """)
    assert done.stderr.splitlines()[0] == "2.0"


def test_cbc_leaves_no_file_behind(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    monkeypatch.setattr(tempfile, "tempdir", str(tmp_path))
    monkeypatch.chdir(tmp_path)
    open_solver("cbc").solve(random_mixed_model(2))
    open_solver("cbc", time_limit_s=0.2).solve(market_split())
    assert list(tmp_path.iterdir()) == []


def test_cbc_works_in_a_folder_with_a_blank(
    monkeypatch: pytest.MonkeyPatch, tmp_path: Path
) -> None:
    folder = tmp_path / "with blank"
    folder.mkdir()
    monkeypatch.setattr(tempfile, "tempdir", str(folder))
    assert open_solver("cbc").solve(blend()).objective == pytest.approx(145.0)
    assert list(folder.iterdir()) == []


def test_a_solve_repeats_to_the_last_bit(name: str) -> None:
    model = random_mixed_model(11)
    first, second = open_solver(name).solve(model), open_solver(name).solve(model)
    assert first.values == second.values
    linear = [open_solver(name).solve(model.relaxed()) for _ in range(2)]
    assert linear[0].values == linear[1].values
    assert linear[0].marginal_values == linear[1].marginal_values


def test_two_hundred_small_models_take_less_than_two_seconds() -> None:
    rng = random.Random(0)
    solver = open_solver("highs")
    started = time.process_time()
    for _ in range(200):
        model = Model("small")
        keys = [model.add_variable(f"v{i}") for i in range(30)]
        for j in range(20):
            terms = {key: rng.uniform(0.1, 2.0) for key in rng.sample(keys, 8)}
            model.add_row(f"r{j}", terms, Sense.AT_LEAST, rng.uniform(1.0, 5.0))
        model.add_cost("c", Expression({key: rng.uniform(0.5, 3.0) for key in keys}))
        assert solver.solve(model).termination is Termination.OPTIMAL
    assert time.process_time() - started < 2.0


def test_pulp_and_highspy_are_imported_behind_the_port_alone() -> None:
    importers = set()
    for package in ("optimiser", "catalogs", "chemistry"):
        for path in (ROOT / package).rglob("*.py"):
            for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
                names = [alias.name for alias in node.names] if isinstance(node, ast.Import) else []
                names += [node.module or ""] if isinstance(node, ast.ImportFrom) else []
                roots = {found.split(".")[0] for found in names}
                importers |= {(path.name, root) for root in roots & {"pulp", "highspy"}}
    assert importers == {("pulp_backends.py", "pulp"), ("highs_linear.py", "highspy")}


def test_what_a_kept_program_writes_stays_off_the_standard_output(
    capfd: pytest.CaptureFixture[str],
) -> None:
    model = Model("one")
    x = model.add_variable("x", high=4.0)
    model.add_row("half", {x: 2.0}, Sense.AT_LEAST, 3.0)
    model.add_cost("goods", Expression({x: 1.0}))
    ends = Ends(model, 3.0)
    kept = cast(HighsLinear, ends.solver)
    kept._solver.setOptionValue("output_flag", True)
    assert ends.ends(x) == pytest.approx((1.5, 3.0))
    out, err = capfd.readouterr()
    assert out == ""
    assert err


def test_backends_answer_to_the_protocol() -> None:
    backends: list[Backend] = [HighsBackend(), CbcBackend()]
    assert [backend.name for backend in backends] == list(SOLVERS)


def test_cbc_is_told_to_be_as_precise_as_highs(monkeypatch: pytest.MonkeyPatch) -> None:
    model = spread_model()
    least = open_solver("highs").solve(model).objective
    assert open_solver("cbc").solve(model).objective == pytest.approx(least, rel=1e-7)
    monkeypatch.setattr(pulp_backends, "_CBC_DUAL_TOLERANCE", 1e-7)
    with pytest.raises(SolverFault, match=r"calls 15\.93\d* optimal, but only -inf is proven"):
        open_solver("cbc").solve(model)

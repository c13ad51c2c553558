"""HiGHS and CBC through PuLP: translation of models, and what their statuses truly mean.

The only module that imports pulp. Facts that it rests on, seen with PuLP 3.3.2: variable names are
rewritten and may then collide, so columns get numbered names; ``status`` calls a solution at the
time limit optimal, so ``sol_status`` decides; special ordered sets are dropped in silence, so none
are used; a native library may write to descriptor 1, so that is led to descriptor 2 meanwhile.
"""

from __future__ import annotations

import contextlib
import ctypes
import math
import os
import re
import signal
import subprocess
import tempfile
import threading
import time
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from optimiser.backend import Claim, RawOutcome, SolveRequest
from optimiser.errors import SolverFault, SolverUnavailable
from optimiser.linear_model import Model, Row, Sense

INSTALL = "Install it with: python -m pip install 'pulp[highs]>=3.3.2,<4'"
_THREADS = 1
"""One thread repeats to the last bit; HiGHS also keeps the number for the whole process."""

_CBC_DUAL_TOLERANCE = 1e-9
"""At its default of 1e-7 CBC 2.10.3 called 12 of 2000 random linear models optimal that were not,
by up to 65 %, where costs spread over six decades; at this value none."""

_CBC_GRACE_S = 5.0
"""How long CBC may go on after its time limit, which it checks between steps only, before it is
ended. Common practice, no source."""

_LOG = "log.txt"

_DESCRIPTOR_LOCK = threading.RLock()


@dataclass(frozen=True, slots=True)
class HighsBackend:
    """HiGHS inside this process, through the highspy package."""

    name: str = "highs"

    def run(self, model: Model, request: SolveRequest) -> RawOutcome:
        """Solve a model; see `optimiser.backend.Backend`."""
        pulp = _load_pulp(self.name)
        if not pulp.HiGHS.hscb:
            raise SolverUnavailable("highs", "the package highspy is missing", INSTALL)
        translated = _Translation(pulp, model)
        program = pulp.HiGHS(
            msg=False,
            threads=_THREADS,
            timeLimit=request.time_limit_s,
            gapRel=request.relative_gap,
            random_seed=request.seed,
        )
        run_statuses: list[str] = []

        def call_solver(problem: Any) -> None:
            run_statuses.append(problem.solverModel.run().name)

        program.callSolver = call_solver
        try:
            with native_output_on_stderr():
                translated.problem.solve(program)
        except (pulp.PulpError, pulp.PulpSolverError, KeyError) as error:
            raise SolverFault(self.name, model.name, f"failed: {error}") from error
        return self._outcome(translated, run_statuses)

    def _outcome(self, translated: _Translation, run_statuses: list[str]) -> RawOutcome:
        native = translated.problem.solverModel
        ended = native.getModelStatus().name
        claim = self._claim(translated, ended)
        if claim is None or "kError" in run_statuses:
            said = f"ended with {ended} (run: {', '.join(run_statuses) or 'none'})"
            raise SolverFault(self.name, translated.model.name, said)
        version = f"HiGHS {native.version()}"
        if claim not in {Claim.OPTIMAL, Claim.STOPPED_WITH_VALUES}:
            return RawOutcome(claim=claim, version=version)
        bound = None
        if translated.model.integers:
            bound = translated.cost_of(native.getInfo().mip_dual_bound)
        return RawOutcome(
            claim=claim, version=version, values=translated.values(), bound=bound,
            marginal_values=translated.marginal_values(),
        )  # fmt: skip

    @staticmethod
    def _claim(translated: _Translation, ended: str) -> Claim | None:
        """Read the outcome from sol_status, and from HiGHS itself where PuLP merges cases."""
        claims = {
            (1, "kOptimal"): Claim.OPTIMAL,
            (2, "kTimeLimit"): Claim.STOPPED_WITH_VALUES,
            (0, "kTimeLimit"): Claim.STOPPED_EMPTY,
            (-1, "kInfeasible"): Claim.INFEASIBLE,
            (-1, "kUnboundedOrInfeasible"): Claim.INFEASIBLE_OR_UNBOUNDED,
            (-2, "kUnbounded"): Claim.UNBOUNDED,
        }
        return claims.get((translated.problem.sol_status, ended))


@dataclass(frozen=True, slots=True)
class CbcBackend:
    """The CBC program that PuLP 3 brings, run on files in a folder of its own.

    ``path`` names another CBC program; empty for the one that comes with PuLP.
    """

    path: str = ""
    name: str = "cbc"

    def run(self, model: Model, request: SolveRequest) -> RawOutcome:
        """Solve a model; see `optimiser.backend.Backend`."""
        pulp = _load_pulp(self.name)
        path = self.path or str(pulp.PULP_CBC_CMD.pulp_cbc_path)
        translated = _Translation(pulp, model)
        with tempfile.TemporaryDirectory(prefix="dosewright-") as name:
            folder = Path(name)
            program = pulp.COIN_CMD(path=path, msg=False)
            if not program.available():
                raise SolverUnavailable("cbc", f"no program at {path}", INSTALL)
            program.solve_CBC = lambda problem: _run_cbc(program, problem, folder, request)
            started = time.perf_counter()
            try:
                translated.problem.solve(program)
            except subprocess.TimeoutExpired as error:
                said = f"was ended because it ran on {error.timeout - request.time_limit_s:g} s "
                said += f"after its time limit of {request.time_limit_s:g} s"
                raise SolverFault(self.name, model.name, said) from error
            except (pulp.PulpError, pulp.PulpSolverError, OSError) as error:
                raise SolverFault(self.name, model.name, f"failed: {error}") from error
            except (ValueError, LookupError) as error:
                said = "wrote a solution that cannot be read"
                raise SolverFault(self.name, model.name, said) from error
            spent_s = time.perf_counter() - started
            text = (folder / _LOG).read_text(errors="replace")
        return self._outcome(translated, text, request, spent_s)

    def _outcome(
        self, translated: _Translation, log: str, request: SolveRequest, spent_s: float
    ) -> RawOutcome:
        found = re.search(r"^Version:\s*(\S+)", log, re.MULTILINE)
        version = f"CBC {found.group(1) if found else 'of unknown version'}"
        ended = (translated.problem.status, translated.problem.sol_status)
        claim = self._claim(*ended)
        if claim is None or (claim is Claim.STOPPED_EMPTY and spent_s < 0.9 * request.time_limit_s):
            raise SolverFault(self.name, translated.model.name, f"ended with status {ended}")
        if claim not in {Claim.OPTIMAL, Claim.STOPPED_WITH_VALUES}:
            return RawOutcome(claim=claim, version=version)
        values = translated.values()
        return RawOutcome(
            claim=claim, version=version, values=values,
            bound=self._bound(translated, log, claim, request, values),
            marginal_values=translated.marginal_values(),
        )  # fmt: skip

    @staticmethod
    def _claim(status: int, sol_status: int) -> Claim | None:
        """Read the outcome from sol_status.

        ``status`` is needed once: a mixed-integer model without solution comes back as -1 with
        sol_status 0, like nothing found. CBC says so for unbounded models too.
        """
        if (status, sol_status) == (-1, 0):
            return Claim.INFEASIBLE_OR_UNBOUNDED
        if (status, sol_status) == (-3, 0):
            return None
        return {
            1: Claim.OPTIMAL,
            2: Claim.STOPPED_WITH_VALUES,
            0: Claim.STOPPED_EMPTY,
            -1: Claim.INFEASIBLE_OR_UNBOUNDED,
            -2: Claim.UNBOUNDED,
        }.get(sol_status)

    @staticmethod
    def _bound(
        translated: _Translation, log: str, claim: Claim, request: SolveRequest,
        values: dict[str, float],
    ) -> float | None:  # fmt: skip
        """What the gap that was asked for implies; at the time limit, the bound in the log.

        The log prints bounds to three decimals only, so the last one is taken off.
        """
        best = translated.model.objective
        if claim is Claim.OPTIMAL:
            reach = request.relative_gap / (1.0 - request.relative_gap)
            return best.value(values) - reach * abs(best.value(values) - best.constant)
        found = re.search(r"^Lower bound:\s*([-+.\deE]+)", log, re.MULTILINE)
        return translated.cost_of(float(found.group(1)) - 1e-3) if found else None


def _run_cbc(program: Any, problem: Any, folder: Path, request: SolveRequest) -> int:
    """Run CBC on a PuLP problem in a folder and read its solution back.

    The program is a child of this process that must not outlive it: however this ends, by a time
    limit that CBC ignores or by an interruption, the child is ended first.
    """
    model, solution = folder / "model.mps", folder / "model.sol"
    columns, column_names, row_names, _ = problem.writeMPS(str(model), rename=1)
    options = {
        "sec": request.time_limit_s, "randomSeed": request.seed, "randomCbcSeed": request.seed,
        "dualT": f"{_CBC_DUAL_TOLERANCE:g}", "ratio": request.relative_gap,
    }  # fmt: skip
    words = [f"{word}" for key, value in options.items() for word in (f"-{key}", value)]
    command = [program.path, str(model), *words, "-solve", "-printingOptions", "all"]
    command += ["-solution", str(solution)]
    running = None
    with (folder / _LOG).open("wb") as log:
        try:
            with _signals_kept_back():
                running = subprocess.Popen(
                    command, stdin=subprocess.DEVNULL, stdout=log, stderr=subprocess.STDOUT
                )
            code = running.wait(timeout=request.time_limit_s + _CBC_GRACE_S)
        finally:
            if running is not None:
                running.kill()
                running.wait()
    if code:
        raise OSError(f"the program ended with code {code}")
    if not solution.exists():
        raise OSError("the program wrote no solution")
    status, values, reduced, prices, slacks, sol_status = program.readsol_MPS(
        str(solution), problem, columns, column_names, row_names
    )
    problem.assignVarsVals(values)
    problem.assignVarsDj(reduced)
    problem.assignConsPi(prices)
    problem.assignConsSlack(slacks, activity=True)
    problem.assignStatus(status, sol_status)
    return int(status)


@contextlib.contextmanager
def _signals_kept_back() -> Iterator[None]:
    """Let a request to stop wait until a child that is being started is known by name."""
    arrived: list[int] = []
    kept: dict[int, Any] = {}
    if threading.current_thread() is threading.main_thread():
        for name in ("SIGINT", "SIGTERM", "SIGHUP"):
            number = getattr(signal, name, None)
            if number is not None and callable(signal.getsignal(number)):
                kept[number] = signal.signal(number, lambda number, _frame: arrived.append(number))
    try:
        yield
    finally:
        for number, handler in kept.items():
            signal.signal(number, handler)
    for number in arrived:
        signal.raise_signal(number)


class _Translation:
    """A model as a PuLP problem, and the way back.

    Rows whose coefficients are all below 1 are multiplied by a power of 2, and so are the costs:
    solvers hold rows and costs to absolute tolerances, which small numbers would slip through.
    """

    def __init__(self, pulp: Any, model: Model) -> None:
        self.model = model
        self._pulp = pulp
        self.problem = pulp.LpProblem("model", pulp.LpMinimize)
        self._columns = {
            key: self.problem.add_variable(
                f"x{number:06d}",
                None if variable.low == -math.inf else variable.low,
                None if variable.high == math.inf else variable.high,
                pulp.LpInteger if variable.integer else pulp.LpContinuous,
            )
            for number, (key, variable) in enumerate(model.variables.items(), start=1)
        }
        costs = model.objective.terms
        self._cost_factor = _factor_to_one(max(map(abs, costs.values()), default=0.0))
        self.problem.setObjective(
            pulp.LpAffineExpression(
                [(x, self._cost_factor * costs.get(key, 0.0)) for key, x in self._columns.items()]
            )
        )
        self._rows = {
            key: self._add_row(number, row)
            for number, (key, row) in enumerate(model.rows.items(), start=1)
            if row.terms
        }

    def _add_row(self, number: int, row: Row) -> tuple[Any, float]:
        factor = _factor_to_one(row.largest_coefficient)
        senses = {
            Sense.AT_MOST: self._pulp.LpConstraintLE,
            Sense.AT_LEAST: self._pulp.LpConstraintGE,
            Sense.EQUAL: self._pulp.LpConstraintEQ,
        }
        terms = [(self._columns[key], factor * a) for key, a in row.terms.items()]
        constraint = self._pulp.LpConstraint(
            self._pulp.LpAffineExpression(terms),
            senses[row.sense],
            f"r{number:06d}",
            factor * row.rhs,
        )
        self.problem.addConstraint(constraint)
        return constraint, factor

    def values(self) -> dict[str, float]:
        """Value per variable; NaN where the solver gave none."""
        return {
            key: math.nan if column.varValue is None else float(column.varValue)
            for key, column in self._columns.items()
        }

    def marginal_values(self) -> dict[str, float] | None:
        """Price per row; None for a model with integers."""
        if self.model.integers:
            return None
        return {
            key: float(row.pi or 0.0) * factor / self._cost_factor
            for key, (row, factor) in self._rows.items()
        }

    def cost_of(self, solver_objective: float) -> float:
        """Turn a number on the solver's scale of costs into a cost."""
        return float(solver_objective) / self._cost_factor + self.model.objective.constant


@contextlib.contextmanager
def native_output_on_stderr() -> Iterator[None]:
    """Lead what native code writes to descriptor 1 to descriptor 2 meanwhile.

    Python's own ``sys.stdout`` keeps its buffer and is not touched. The C library's buffer is
    emptied on both sides, or its text would come out on the wrong one.
    """
    with _DESCRIPTOR_LOCK:
        try:
            kept = os.dup(1)
        except OSError:  # no descriptor 1, so nothing can reach it
            yield
            return
        try:
            _flush_native_buffers()
            try:
                os.dup2(2, 1)
            except OSError:  # no descriptor 2 either
                sink = os.open(os.devnull, os.O_WRONLY)
                os.dup2(sink, 1)
                os.close(sink)
            yield
        finally:
            _flush_native_buffers()
            os.dup2(kept, 1)
            os.close(kept)


def _flush_native_buffers() -> None:
    with contextlib.suppress(OSError, AttributeError, TypeError):
        ctypes.CDLL(None).fflush(None)


def _factor_to_one(largest: float) -> float:
    """Power of 2 that lifts a number below 1 into 1 to 2; 1 for any other."""
    if not 0.0 < largest < 1.0:
        return 1.0
    return 2.0 ** -math.floor(math.log2(largest))


def _load_pulp(solver: str) -> Any:
    try:
        import pulp
    except ImportError as error:
        raise SolverUnavailable(solver, "the package pulp is missing", INSTALL) from error
    if int(pulp.__version__.split(".", maxsplit=1)[0]) >= 4:
        why = f"PuLP {pulp.__version__} is installed, and 4 and later work otherwise"
        raise SolverUnavailable(solver, why, INSTALL)
    return pulp

"""The solver port: outcomes in our own words, and an independent check of every answer.

Owns what the rest of the optimiser sees of solving; the programs that do it stand behind
`optimiser.backend` (see `optimiser.pulp_backends`).
"""

from __future__ import annotations

import math
import time
from collections.abc import Mapping
from dataclasses import dataclass, field
from enum import Enum
from typing import TYPE_CHECKING, Protocol

from optimiser.backend import (
    Backend,
    Claim,
    LinearProgram,
    RawOutcome,
    SolveRequest,
    WarmLinear,
)
from optimiser.errors import SolverFault, SolverUnavailable, unknown_solver
from optimiser.linear_model import FEASIBILITY_TOLERANCE, Model
from optimiser.solution_check import (
    OPTIMALITY_TOLERANCE,
    dual_bound,
    reduced_costs,
    settled_values,
)

if TYPE_CHECKING:
    from optimiser.site import SolverSettings

SOLVERS = ("highs", "cbc")
"""Names that `open_solver` takes; the first is the default."""


class Termination(Enum):
    """How a solve ended; the only thing callers decide on."""

    OPTIMAL = "proven optimal within the gap asked for"
    TIME_LIMIT_WITH_SOLUTION = "time limit, best solution so far"
    TIME_LIMIT_WITHOUT_SOLUTION = "time limit, no solution yet"
    INFEASIBLE = "no solution exists"
    UNBOUNDED = "the cost has no lower end"

    @property
    def has_solution(self) -> bool:
        """Whether values come with this outcome."""
        return self in {Termination.OPTIMAL, Termination.TIME_LIMIT_WITH_SOLUTION}


@dataclass(frozen=True, slots=True, kw_only=True)
class SolveReport:
    """A checked outcome.

    Attributes
    ----------
    objective
        Total cost of ``values``, worked out here and not taken from the solver; NaN without values.
    bound
        Proven lower bound on the total cost: from the row prices for a linear model, from the
        solver's tree for a mixed-integer one; None where there is none.
    gap
        ``(objective - bound) / |objective|``; None without a bound.
    values
        Value per variable, empty without a solution. Ranges and whole numbers hold exactly, rows
        to `FEASIBILITY_TOLERANCE`.
    marginal_values
        For linear models: change of the least cost per unit that a row's right-hand side rises.
        Empty for mixed-integer models, whose solvers return none that mean anything.
    reduced_costs
        For linear models: change of the least cost per unit that a variable is forced up.
    seconds
        Wall time of the solve.
    """

    termination: Termination
    objective: float
    bound: float | None
    gap: float | None
    values: Mapping[str, float]
    marginal_values: Mapping[str, float]
    reduced_costs: Mapping[str, float]
    seconds: float
    solver: str
    version: str
    seed: int


class SolverPort(Protocol):
    """What the optimiser needs of a solver."""

    def solve(self, model: Model) -> SolveReport:
        """Minimise the cost of a model and check the answer."""
        ...

    def solve_with_integers_fixed(self, model: Model, values: Mapping[str, float]) -> SolveReport:
        """Solve the linear model that is left when the integers keep the values given."""
        ...


@dataclass(frozen=True, slots=True)
class Solver:
    """A backend whose every answer is checked before anyone sees it.

    Solved linear models are checked in both directions: the values against every row and range,
    and the claim of optimality against the bound that the row prices prove (weak duality).
    """

    backend: Backend
    request: SolveRequest = field(default_factory=SolveRequest)

    def solve(self, model: Model) -> SolveReport:
        """Minimise the cost of a model and check the answer.

        Raises
        ------
        SolverUnavailable
            The program is not installed.
        SolverFault
            The program failed, or its answer does not hold.
        """
        started = time.perf_counter()
        if not model.variables or _fails_without_variables(model):
            raw = _constant_outcome(model)
        else:
            raw = self.backend.run(model, self.request)
        if raw.claim in {Claim.OPTIMAL, Claim.STOPPED_WITH_VALUES}:
            return self._checked(model, raw, started)
        if raw.claim in {Claim.UNBOUNDED, Claim.INFEASIBLE_OR_UNBOUNDED}:
            termination = self._infeasible_or_unbounded(model)
        elif raw.claim is Claim.INFEASIBLE:
            termination = Termination.INFEASIBLE
        else:
            termination = Termination.TIME_LIMIT_WITHOUT_SOLUTION
        return self._report(termination, raw, started)

    def solve_with_integers_fixed(self, model: Model, values: Mapping[str, float]) -> SolveReport:
        """Solve the linear model that is left when the integers keep the values given.

        This is the source of marginal values for mixed-integer models: they hold for the choice
        of offers and reagents in ``values`` and say nothing about another choice.
        """
        return self.solve(model.with_integers_fixed(values))

    def _checked(self, model: Model, raw: RawOutcome, started: float) -> SolveReport:
        values: Mapping[str, float] = settled_values(model, raw.values)
        wrong = model.violations(values)
        if wrong and model.integers:
            values, wrong = self._repaired(model, values, wrong)
        if wrong and raw.claim is Claim.STOPPED_WITH_VALUES:
            return self._report(Termination.TIME_LIMIT_WITHOUT_SOLUTION, raw, started)
        if wrong:
            raise self._fault(model, "returned a solution that does not hold", wrong)
        proven = raw.claim is Claim.OPTIMAL
        termination = Termination.OPTIMAL if proven else Termination.TIME_LIMIT_WITH_SOLUTION
        bound = raw.bound
        prices: Mapping[str, float] = {}
        reduced: Mapping[str, float] = {}
        if proven and not model.integers and raw.marginal_values is not None:
            prices = raw.marginal_values
            reduced = reduced_costs(model, prices)
            bound = dual_bound(model, values, prices, reduced)
        return self._report(
            termination, raw, started,
            values=values, objective=model.objective.value(values),
            bound=self._believable_bound(model, values, bound, proven=proven),
            marginal_values=prices, reduced=reduced,
        )  # fmt: skip

    def _repaired(
        self, model: Model, values: Mapping[str, float], wrong: list[str]
    ) -> tuple[Mapping[str, float], list[str]]:
        """Solve again with the integers as they are, when rounding them broke a row.

        A binary within tolerance of 0 lets a little through behind a large coefficient. Integers
        that are no whole numbers in their ranges are not repaired.
        """
        for variable in model.variables.values():
            x = values[variable.key]
            if variable.integer and not (variable.low <= x <= variable.high and x == round(x)):
                return values, wrong
        fixed = model.with_integers_fixed(values)
        again = self.backend.run(fixed, self.request)
        if again.claim is not Claim.OPTIMAL:
            return values, wrong
        repaired = settled_values(fixed, again.values)
        return repaired, model.violations(repaired)

    def _believable_bound(
        self, model: Model, values: Mapping[str, float], bound: float | None, *, proven: bool
    ) -> float | None:
        if bound is None:
            return None
        objective = model.objective
        best = objective.value(values)
        size = max(1.0, abs(best), sum(abs(c * values[k]) for k, c in objective.terms.items()))
        slack = OPTIMALITY_TOLERANCE * size
        if not bound <= best + slack:
            said = f"proves {bound:.9g} as the least cost of a solution that costs {best:.9g}"
            raise self._fault(model, said, [])
        if proven and best - bound > slack + self.request.relative_gap * size:
            said = f"calls {best:.9g} optimal, but only {bound:.9g} is proven"
            raise self._fault(model, said, [])
        return min(bound, best) if bound > -math.inf else None

    def _infeasible_or_unbounded(self, model: Model) -> Termination:
        """Tell the two apart by asking for any solution at all."""
        costless = model.without_costs()
        raw = self.backend.run(costless, self.request)
        if raw.claim in {Claim.OPTIMAL, Claim.STOPPED_WITH_VALUES}:
            values = settled_values(costless, raw.values)
            wrong = costless.violations(values)
            if wrong and costless.integers:
                _, wrong = self._repaired(costless, values, wrong)
            if not wrong:
                return Termination.UNBOUNDED
            if raw.claim is Claim.OPTIMAL:
                raise self._fault(model, "returned a solution that does not hold", wrong)
            return Termination.TIME_LIMIT_WITHOUT_SOLUTION
        if raw.claim is Claim.STOPPED_EMPTY:
            return Termination.TIME_LIMIT_WITHOUT_SOLUTION
        return Termination.INFEASIBLE

    def _report(
        self,
        termination: Termination,
        raw: RawOutcome,
        started: float,
        *,
        values: Mapping[str, float] | None = None,
        objective: float = math.nan,
        bound: float | None = None,
        marginal_values: Mapping[str, float] | None = None,
        reduced: Mapping[str, float] | None = None,
    ) -> SolveReport:
        gap = None
        if bound is not None:
            gap = 0.0 if objective == bound else (objective - bound) / max(abs(objective), 1e-12)
        return SolveReport(
            termination=termination, objective=objective, bound=bound, gap=gap,
            values=values or {}, marginal_values=marginal_values or {},
            reduced_costs=reduced or {}, seconds=time.perf_counter() - started,
            solver=self.backend.name, version=raw.version, seed=self.request.seed,
        )  # fmt: skip

    def _fault(self, model: Model, what: str, details: list[str]) -> SolverFault:
        return SolverFault(self.backend.name, model.name, what, details)


def open_solver(
    name: str = "highs",
    *,
    time_limit_s: float = 60.0,
    relative_gap: float = 1e-6,
    seed: int = 1,
) -> Solver:
    """Return the checked solver that goes by a name.

    Parameters
    ----------
    name
        ``highs`` (in process, the default) or ``cbc`` (the program that PuLP brings, as a
        cross-check).
    time_limit_s, relative_gap, seed
        Limits of each solve. [s, fraction, -]

    Raises
    ------
    SolverUnavailable
        No solver goes by this name. Whether it is installed shows at the first solve.
    """
    from optimiser.pulp_backends import CbcBackend, HighsBackend

    backends: dict[str, Backend] = {"highs": HighsBackend(), "cbc": CbcBackend()}
    if name not in backends:
        raise SolverUnavailable(
            repr(name), unknown_solver(name, SOLVERS), "Name one of these in the site file."
        )
    request = SolveRequest(time_limit_s=time_limit_s, relative_gap=relative_gap, seed=seed)
    return Solver(backends[name], request)


def open_warm_linear(program: LinearProgram) -> WarmLinear:
    """Keep a linear program ready to be solved again and again.

    Raises
    ------
    SolverUnavailable
        The package that does it is not installed.
    """
    from optimiser.highs_linear import HighsLinear

    return HighsLinear(program)


def require_warm_linear() -> None:
    """Make sure that `open_warm_linear` can work, before long work that ends in it.

    Raises
    ------
    SolverUnavailable
        The package that does it is not installed.
    """
    from optimiser.highs_linear import require_highspy

    require_highspy()


def solver_from(settings: SolverSettings) -> Solver:
    """Return the checked solver that a site asks for."""
    return open_solver(
        settings.name,
        time_limit_s=settings.time_limit_s,
        relative_gap=settings.relative_gap,
        seed=settings.seed,
    )


def _fails_without_variables(model: Model) -> bool:
    constant_rows = (row for row in model.rows.values() if not row.terms)
    return any(row.excess({}) > FEASIBILITY_TOLERANCE for row in constant_rows)


def _constant_outcome(model: Model) -> RawOutcome:
    claim = Claim.INFEASIBLE if _fails_without_variables(model) else Claim.OPTIMAL
    return RawOutcome(claim=claim, version="none needed", bound=model.objective.constant)

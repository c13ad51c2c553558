"""Branch and bound over cells: which to look at next, when a cell is closed, how it is split.

Owns the order of the work; that nothing it does loses a plan is argued in `optimiser.bound`.
"""

from __future__ import annotations

import heapq
import time
from collections import Counter
from collections.abc import Callable
from dataclasses import dataclass, replace
from itertools import count

from optimiser.bound import PROVEN_GAP, Bound
from optimiser.bound_branch import Branching
from optimiser.bound_cells import Cell, CellModel
from optimiser.bound_intervals import supported
from optimiser.bound_model import Relaxation
from optimiser.bound_roots import all_recipes, least_cost, roots
from optimiser.bound_shrink import shrink
from optimiser.errors import SolverFault
from optimiser.evaluation import Evaluator
from optimiser.solver import SolveReport, SolverPort, Termination, open_solver

ALLOWANCE = 1e-5
"""Share of a bound given up for the solver's own tolerances."""

TANGENT_ROUNDS = 3
SHRINK_ROUNDS = 4
LEAST_RISE = 1e-3  # of the plan's cost, per round of shrinking
LEAST_SHRINKAGE = 0.9
LEAST_SHARE, LEAST_MISS = 1e-4, 0.01  # of tangents worth adding

CELL_GAP = 1e-3
CELL_TIME_LIMIT_S = 20.0

EMPTY, DEAR, FIXED = "no compliant water", "cost", "fixed cost"


@dataclass(frozen=True, slots=True, eq=False)
class Examined:
    """An open cell with its relaxation and the last solution of that."""

    made: CellModel
    report: SolveReport | None
    shrunk: bool


class BranchAndBound:
    """One run over a site."""

    def __init__(
        self, evaluator: Evaluator, solver: SolverPort, plan_per_year: float, *,
        seconds: float, gap: float, progress: Callable[[str], None] | None = None,
    ) -> None:  # fmt: skip
        self.evaluator, self.solver = evaluator, solver
        self.relaxation = Relaxation(evaluator)
        self.branching = Branching(self.relaxation, plan_per_year)
        self.plan = plan_per_year
        self.cut = plan_per_year * (1.0 - gap)
        self.begun = time.perf_counter()
        self.deadline = self.begun + seconds
        self.heap: list[tuple[float, int, Cell, Examined | None]] = []
        self.order = count()
        self.closed: Counter[str] = Counter()
        self.lowest_closed = plan_per_year
        self.cells = self.recipes = 0
        self.progress = progress or (lambda _text: None)

    def run(self) -> Bound:
        """Split the cell of the least bound until none is left below the cut, or time is up."""
        why = supported(self.evaluator.plant.system)
        if why:
            return Bound(lower_per_year=0.0, plan_per_year=self.plan, reason=why)
        self._begin()
        while self.heap and self.heap[0][0] < self.cut and not self._late():
            _, _, cell, known = heapq.heappop(self.heap)
            self.progress(f"no plan below {self.lowest:,.0f} so far, {self.cells} cells examined")
            if known is None:
                self.examine(cell)
            elif not known.shrunk:
                self.shrink(cell, known)
            else:
                self._split(cell, known)
        return Bound(
            lower_per_year=self.lowest, plan_per_year=self.plan, recipes=self.recipes,
            cells=self.cells, closed=dict(self.closed), open_cells=len(self.heap),
            seconds=time.perf_counter() - self.begun,
        )  # fmt: skip

    @property
    def lowest(self) -> float:
        """The least bound of all cells."""
        return min(self.lowest_closed, self.heap[0][0] if self.heap else self.plan)

    def _late(self) -> bool:
        return time.perf_counter() > self.deadline

    def _begin(self) -> None:
        for recipe in all_recipes(self.relaxation):
            self.recipes += 1
            floor = least_cost(self.relaxation, recipe)
            if floor >= self.cut:
                self._close(FIXED, floor)
                continue
            for cell in roots(self.relaxation, recipe, self.plan):
                self._keep(cell, None)

    def _keep(self, cell: Cell, known: Examined | None) -> None:
        heapq.heappush(self.heap, (cell.bound, next(self.order), cell, known))

    def _close(self, why: str, bound: float) -> None:
        self.closed[why] += 1
        self.lowest_closed = min(self.lowest_closed, bound)

    # -- one cell ----------------------------------------------------------------------------------

    def _split(self, cell: Cell, known: Examined) -> None:
        for child in self.branching.split(cell, known.made, known.report):
            if self._late():
                self._keep(child, None)
            else:
                self.examine(child)

    def examine(self, cell: Cell) -> None:
        """Bound a cell as it is: close it, or keep it for shrinking."""
        self.cells += 1
        made = self.relaxation.build(cell)
        if made is None:
            self._close(EMPTY, self.plan)
            return
        bound, report = self._bounded(made, cell.bound)
        self._settle(made, bound, report, shrunk=False)

    def shrink(self, cell: Cell, known: Examined) -> None:
        """Shrink a cell as long as that pays: close it, or keep it for splitting."""
        made: CellModel | None = known.made
        bound, report = cell.bound, known.report
        for turn in range(SHRINK_ROUNDS):
            assert made is not None
            before, width = bound, made.width
            smaller = shrink(self.relaxation, made, self.plan)
            made = None if smaller is None else self.relaxation.build(smaller)
            if made is None:
                self._close(EMPTY, self.plan)
                return
            bound, report = self._bounded(made, bound)
            rose = bound - before >= LEAST_RISE * self.plan
            stuck = turn > 0 and not rose and made.width > LEAST_SHRINKAGE * width
            if bound >= self.cut or stuck or _infeasible(report) or self._late():
                break
        assert made is not None
        self._settle(made, bound, report, shrunk=True)

    def _settle(
        self, made: CellModel, bound: float, report: SolveReport | None, *, shrunk: bool
    ) -> None:
        """Close a cell or keep it with what is known of it."""
        if _infeasible(report):
            self._close(EMPTY, self.plan)
        elif bound >= self.cut:
            self._close(DEAR, bound)
        else:
            control = dict(made.control)
            cell = replace(made.cell, bound=bound, ranges=made.ranges, control=control)
            self._keep(cell, Examined(made, report, shrunk))

    def _bounded(self, made: CellModel, bound: float) -> tuple[float, SolveReport | None]:
        """Bound of a relaxation with tangents added where it needs them, and its last report."""
        report = None
        for _ in range(TANGENT_ROUNDS):
            try:
                report = self.solver.solve(made.model)
            except SolverFault:
                # an answer that does not hold proves nothing: the cell keeps its earlier bound
                return bound, None
            if report.bound is not None:
                bound = max(bound, report.bound - ALLOWANCE * abs(report.bound))
            if bound >= self.cut or not report.termination.has_solution:
                break
            added = sum(
                rows.cut(report.values, least_share=LEAST_SHARE, miss=LEAST_MISS)
                for rows in made.rows.values()
            )
            if not added:
                break
        return bound, report


def _infeasible(report: SolveReport | None) -> bool:
    return report is not None and report.termination is Termination.INFEASIBLE


def prove(
    evaluator: Evaluator, plan_per_year: float, *, seconds: float,
    progress: Callable[[str], None] | None = None,
) -> Bound:  # fmt: skip
    """Bound the cost of every plan of a site from below.

    Parameters
    ----------
    evaluator
        The site, ready to be evaluated.
    plan_per_year
        Cost of the plan in question; cells that cannot undercut it are closed.
    seconds
        Time after which the run ends with what it has.

    Returns
    -------
    Bound
        Valid whether or not time sufficed.
    """
    settings = evaluator.site.solver
    solver = open_solver(
        settings.name, time_limit_s=min(CELL_TIME_LIMIT_S, seconds), relative_gap=CELL_GAP,
        seed=settings.seed,
    )  # fmt: skip
    run = BranchAndBound(
        evaluator, solver, plan_per_year, seconds=seconds, gap=PROVEN_GAP, progress=progress
    )
    return run.run()

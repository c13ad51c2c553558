"""Linear programs that HiGHS keeps and solves again and again, one cost changed at a time.

The only module that imports highspy by itself: PuLP starts every solve anew, which the thousands of
solves behind a lower bound cannot afford.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from optimiser.backend import LinearProgram
from optimiser.errors import SolverUnavailable
from optimiser.pulp_backends import INSTALL, native_output_on_stderr

FloatArray = NDArray[np.float64]


def require_highspy() -> Any:
    """Return the package highspy.

    Raises
    ------
    SolverUnavailable
        It is missing.
    """
    try:
        import highspy
    except ImportError as error:
        why = "the package highspy is missing, and a proof needs it whatever solver plans"
        raise SolverUnavailable("highs", why, INSTALL) from error
    return highspy


class HighsLinear:
    """One linear program inside this process; see `optimiser.backend.WarmLinear`."""

    def __init__(self, program: LinearProgram) -> None:
        self._highspy = require_highspy()
        self._rows = program.row_low.size
        lp = self._highspy.HighsLp()
        lp.num_col_, lp.num_row_ = program.low.size, self._rows
        lp.col_cost_ = np.zeros(program.low.size)
        lp.col_lower_, lp.col_upper_ = program.low, program.high
        lp.row_lower_, lp.row_upper_ = program.row_low, program.row_high
        lp.a_matrix_.format_ = self._highspy.MatrixFormat.kRowwise
        lp.a_matrix_.start_, lp.a_matrix_.index_ = program.start, program.column
        lp.a_matrix_.value_ = program.value
        with native_output_on_stderr():
            self._solver = self._highspy.Highs()
            self._solver.setOptionValue("output_flag", False)
            self._solver.setOptionValue("threads", 1)
            self._solver.setOptionValue("presolve", "off")
            self._solver.passModel(lp)

    def row_prices(self, column: int, cost: float) -> FloatArray | None:
        """Minimise ``cost`` times one variable, from where the last solve ended."""
        solver = self._solver
        with native_output_on_stderr():
            solver.changeColCost(column, cost)
            solver.run()
            status = solver.getModelStatus()
            prices = np.array(solver.getSolution().row_dual)
            solver.changeColCost(column, 0.0)
        solved = status == self._highspy.HighsModelStatus.kOptimal and prices.size == self._rows
        return prices if solved else None

"""What a solving program is asked and what it answers, before anything is checked.

Owns the contract between `optimiser.solver` and the programs behind it.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from enum import Enum
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from optimiser.linear_model import Model

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int32]


class Claim(Enum):
    """What a backend says about its run, before anything is checked."""

    OPTIMAL = "optimal"
    STOPPED_WITH_VALUES = "stopped by the time limit with values"
    STOPPED_EMPTY = "stopped by the time limit without values"
    INFEASIBLE = "infeasible"
    UNBOUNDED = "unbounded"
    INFEASIBLE_OR_UNBOUNDED = "infeasible or unbounded"


@dataclass(frozen=True, slots=True, kw_only=True)
class SolveRequest:
    """Limits of one solve. Threads are not among them: backends always use one."""

    time_limit_s: float = 60.0
    relative_gap: float = 1e-6
    seed: int = 1


@dataclass(frozen=True, slots=True, kw_only=True)
class RawOutcome:
    """What a backend returns, unchecked.

    ``bound`` is a lower bound on the objective with its constant, where the program gives one;
    ``marginal_values`` per row only for models without integers.
    """

    claim: Claim
    version: str
    values: Mapping[str, float] = field(default_factory=dict)
    bound: float | None = None
    marginal_values: Mapping[str, float] | None = None


class Backend(Protocol):
    """A program that solves models; it may be wrong, `optimiser.solver.Solver` checks it."""

    @property
    def name(self) -> str:
        """Name that users write."""
        ...

    def run(self, model: Model, request: SolveRequest) -> RawOutcome:
        """Solve a model with at least one variable."""
        ...


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class LinearProgram:
    """Ranges of variables and of rows; row ``i`` has ``column[start[i]:start[i + 1]]``."""

    low: FloatArray
    high: FloatArray
    row_low: FloatArray
    row_high: FloatArray
    start: IntArray
    column: IntArray
    value: FloatArray


class WarmLinear(Protocol):
    """A linear program that is kept and solved again and again; what it says is not trusted."""

    def row_prices(self, column: int, cost: float) -> FloatArray | None:
        """Prices of the rows where ``cost`` times one variable is least, None where unsolved."""
        ...

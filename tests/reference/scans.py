"""Scans along one number: where something starts, and where it is least.

Each round computes a whole batch, then looks closer around what it found.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]


def first_true(
    holds: Callable[[FloatArray], BoolArray],
    low: float,
    high: float,
    *,
    points: int = 41,
    rounds: int = 4,
) -> float:
    """Least x at which a condition holds that does not hold at ``low``."""
    for _ in range(rounds):
        x = np.linspace(low, high, points)
        found = holds(x)
        assert found.any(), f"holds nowhere between {low} and {high}"
        assert not found[0], f"holds at {low} already"
        at = int(np.argmax(found))
        low, high = float(x[at - 1]), float(x[at])
    return high


def least(
    values: Callable[[FloatArray], FloatArray],
    low: float,
    high: float,
    *,
    points: int = 41,
    rounds: int = 3,
) -> tuple[float, float]:
    """Where a curve with one valley is least, and its value there."""
    where, lowest = low, np.inf
    for _ in range(rounds):
        x = np.linspace(low, high, points)
        y = values(x)
        at = int(np.argmin(y))
        assert 0 < at < points - 1, f"least at the edge, {x[at]}"
        where, lowest = float(x[at]), float(y[at])
        low, high = float(x[at - 1]), float(x[at + 1])
    return where, lowest

"""Batches of small dense linear systems: scaling, solving, refinement.

Owns what happens when one of them is singular; knows nothing of chemistry.
"""

from __future__ import annotations

import numpy as np

from chemistry.batch import FloatArray


def left_inverse(basis: FloatArray) -> FloatArray:
    """Rows w with w.v = weights of v on the basis rows, (n, k, components)."""
    return np.swapaxes(np.linalg.pinv(basis), 1, 2)


def solve_batch(matrix: FloatArray, rhs: FloatArray) -> FloatArray:
    """Solve a batch of small systems; singular ones are regularised, not raised."""
    try:
        return _solve(matrix, rhs)
    except np.linalg.LinAlgError:
        count = matrix.shape[1]
        nudged = matrix.copy()
        nudged[:, range(count), range(count)] += 1e-12
        try:
            return _solve(nudged, rhs)
        except np.linalg.LinAlgError:
            return np.asarray(np.einsum("nij,nj->ni", np.linalg.pinv(nudged), rhs), dtype=float)


def _solve(matrix: FloatArray, rhs: FloatArray) -> FloatArray:
    return np.asarray(np.linalg.solve(matrix, rhs[:, :, None])[:, :, 0], dtype=float)


def solve_equilibrated(matrix: FloatArray, rhs: FloatArray) -> FloatArray:
    """Solve with rows and columns scaled to unit largest entries, one refinement step."""
    scaled, row, column = equilibrate_matrix(matrix)
    target = rhs / row
    answer = solve_batch(scaled, target)
    rest = target - np.einsum("nij,nj->ni", scaled, answer)
    answer = answer + solve_batch(scaled, rest)
    return answer / column


def equilibrate_matrix(matrix: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Row- and column-scaled copy with the scales."""
    row = np.maximum(np.abs(matrix).max(axis=2), 1e-300)
    scaled = matrix / row[:, :, None]
    column = np.maximum(np.abs(scaled).max(axis=1), 1e-300)
    scaled = scaled / column[:, None, :]
    return scaled, row, column

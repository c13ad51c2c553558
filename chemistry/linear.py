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
    """Solve a batch of small systems, right-hand sides (n, size) or (n, size, k).

    Singular ones are regularised, not raised; the others come out as if alone.
    """
    columns = rhs[:, :, None] if rhs.ndim == 2 else rhs
    return np.asarray(_solve(matrix, columns).reshape(rhs.shape), dtype=float)


def _solve(matrix: FloatArray, rhs: FloatArray) -> FloatArray:
    try:
        return np.asarray(np.linalg.solve(matrix, rhs), dtype=float)
    except np.linalg.LinAlgError:
        if matrix.shape[0] == 1:
            return _solve_singular(matrix, rhs)
        half = matrix.shape[0] // 2
        return np.concatenate(
            [_solve(matrix[:half], rhs[:half]), _solve(matrix[half:], rhs[half:])]
        )


def _solve_singular(matrix: FloatArray, rhs: FloatArray) -> FloatArray:
    nudged = matrix + 1e-12 * np.eye(matrix.shape[1])
    try:
        return np.asarray(np.linalg.solve(nudged, rhs), dtype=float)
    except np.linalg.LinAlgError:
        return np.full_like(rhs, np.nan)


def solve_equilibrated(matrix: FloatArray, rhs: FloatArray, *, refined: bool = True) -> FloatArray:
    """Solve with rows and columns scaled to unit largest entries, ``refined`` by one step."""
    scaled, row, column = equilibrate_matrix(matrix)
    target = rhs / row
    answer = solve_batch(scaled, target)
    if refined:
        rest = target - (scaled @ answer[:, :, None])[:, :, 0]
        answer = answer + solve_batch(scaled, rest)
    return answer / column


def equilibrate_matrix(matrix: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Row- and column-scaled copy with the scales."""
    size = np.abs(matrix)
    row = np.maximum(size.max(axis=2), 1e-300)
    size /= row[:, :, None]
    column = np.maximum(size.max(axis=1), 1e-300)
    scaled = matrix / row[:, :, None]
    scaled /= column[:, None, :]
    return scaled, row, column

"""How the balances feel the activity model: products of its slopes with the stoichiometry.

Owns the sums over species that eliminate the surroundings from a Newton step, each one matrix
product with the concentrations of a whole batch.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from chemistry.activity import ActivityModel
from chemistry.batch import FloatArray, IntArray


@dataclass(slots=True)
class Coupled:
    """The surroundings' part of a linearised batch.

    ``held_back`` (n, columns, columns) is ``1 - L'MO``, ``by_activity`` (n, columns, components)
    ``L'MA`` and ``side`` (n, columns, components) ``O'MA``, with the concentrations M, the
    functionals L, the offset slopes O and the stoichiometry A.
    """

    held_back: FloatArray
    by_activity: FloatArray
    side: FloatArray


class Coupling:
    """Species-by-species products for some of the surroundings, kept between steps.

    The offset slope of species i with the column d is ``z_i^2 D'(I)`` in the first column, less
    ``eps_id`` and plus ``w_i`` times the slope of ln a_w. Only D' and the slope of ln a_w depend on
    the state, so every sum over species is a product of the concentrations with a fixed matrix.
    """

    def __init__(self, model: ActivityModel, formation: FloatArray, columns: IntArray) -> None:
        self.model, self.columns = model, columns
        self.count, self.components = columns.size, formation.shape[1]
        weights = model.functionals[:, columns]
        steady = model.steady_slope[:, columns]
        screened = model.squared_charges[:, None]
        parts = [
            _products(weights, formation), _products(screened, formation),
            _products(weights, screened),
        ]  # fmt: skip
        if model.name == "sit":
            water = model.water[:, None]
            parts += [
                _products(steady, formation), _products(water, formation),
                _products(weights, steady), _products(weights, water),
            ]  # fmt: skip
        self.ends = np.cumsum([p.shape[1] for p in parts])[:-1]
        self.products = np.ascontiguousarray(np.concatenate(parts, axis=1))

    def at(self, m: FloatArray, y: FloatArray) -> Coupled:
        """Evaluate for a batch of concentrations (n, species) and surroundings (n, width)."""
        n, k, c = m.shape[0], self.count, self.components
        sums = np.split(m @ self.products, self.ends, axis=1)
        by_activity = sums[0].reshape(n, k, c)
        _, slope = self.model.screening(y[:, 0])
        spread, side = np.zeros((n, k, k)), np.zeros((n, k, c))
        if self.model.name == "sit":
            water = self.model.ln_water_slope(y)[:, self.columns]
            side += sums[3].reshape(n, k, c) + water[:, :, None] * sums[4][:, None, :]
            spread += sums[5].reshape(n, k, k) + sums[6][:, :, None] * water[:, None, :]
        side[:, 0] += slope[:, None] * sums[1]
        spread[:, :, 0] += slope[:, None] * sums[2]
        return Coupled(np.eye(k) - spread, by_activity, side)


def _products(one: FloatArray, other: FloatArray) -> FloatArray:
    """Every product of a column of one with a column of the other, (species, k * l)."""
    return (one[:, :, None] * other[:, None, :]).reshape(one.shape[0], -1)

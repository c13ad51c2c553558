"""Residual factors of jar tests in predictions: dissolved as measured over dissolved by theory.

Owns how a factor meets the metals of a state, and what stays certain of it for lower bounds; the
factors themselves come from `optimiser.jar_tests`.

Notes
-----
With ``f`` the factor of a metal, ``r`` what theory leaves dissolved and ``h`` what it holds in
solids (mg/L), a prediction takes ``min(f r, r + h)``: no more dissolves than is in the tank. Solids
stay those of theory, as they differ by ``(f - 1) r`` only, of which the separator passes a few
hundredths.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from chemistry.analysis import ANALYTES
from chemistry.state import EquilibriumState
from optimiser.site import Site
from optimiser.site_feed import STATES_OF_ELEMENT

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]


class ResidualFactors:
    """A site's residual factors against the metals that its limits name.

    ``weights`` (metals, components) gives mg/L of a metal per mol/L; ``factored`` is the same times
    the factors.
    """

    def __init__(self, site: Site, metals: Sequence[str], weights: FloatArray) -> None:
        self.weights = weights
        self.known = dict(site.residual_factors)
        factor = np.ones_like(weights)
        for i, metal in enumerate(metals):
            for part in STATES_OF_ELEMENT.get(metal, (metal,)):
                column = site.system.index.get(ANALYTES[part].component)
                if column is not None:
                    factor[i, column] = self._of(metal, part)
        self.factored = weights * factor
        self.any = bool((factor != 1.0).any())

    def _of(self, metal: str, part: str) -> float:
        """Factor of one state of a metal: its own, else the one of its element."""
        elements = [e for e, states in STATES_OF_ELEMENT.items() if part in states]
        for name in (metal, part, *elements):
            if name in self.known:
                return self.known[name][0]
        return 1.0

    def residual(
        self, state: EquilibriumState, solid_metal: FloatArray
    ) -> tuple[FloatArray, FloatArray, BoolArray]:
        """Dissolved metals as predicted and by theory, and where all of the tank is dissolved.

        Parameters
        ----------
        state
            The tank, (states,).
        solid_metal
            Metals per mole of solid, (solids, metals). [mg/mol]

        Returns
        -------
        tuple
            (states, metals) each; concentrations in mg/L.
        """
        theory = np.asarray(state.dissolved_mol_per_l @ self.weights.T)
        if not self.any:
            return theory, theory, np.zeros(theory.shape, dtype=bool)
        factored = state.dissolved_mol_per_l @ self.factored.T
        most = theory + state.solids_mol_per_l @ solid_metal
        return np.minimum(factored, most), theory, factored > most

    def slope(self, liquid: FloatArray, held: FloatArray, at_most: BoolArray) -> FloatArray:
        """Change of the predicted residual, (states, metals, k).

        ``liquid`` (states, components, k) and ``held`` (states, metals, k) are the changes of
        dissolved totals and of metals in solids; ``at_most`` as `residual` returned it.
        """
        moved = np.einsum("mc,nck->nmk", self.factored, liquid)
        if at_most.any():
            top = np.einsum("mc,nck->nmk", self.weights, liquid) + held
            moved = np.where(at_most[:, :, None], top, moved)
        return np.asarray(moved)

    def least_weights(
        self, metals: Sequence[int], totals: FloatArray, target_mg_per_l: float
    ) -> FloatArray:
        """Weights of a sum of metals that no prediction within a target falls below.

        Parameters
        ----------
        metals
            Positions of the metals that are added up.
        totals
            Least totals of the tank, (components,). [mol/L]
        target_mg_per_l
            What the sum has to stay below.

        Returns
        -------
        ndarray
            Per component. [mg/mol]

        Notes
        -----
        A metal of which the tank holds more than the target cannot be all dissolved in a state that
        meets it, so its residual is ``f r``; otherwise ``min(f r, r + h) >= min(f, 1) r``.
        """
        found = np.zeros(self.weights.shape[1])
        for m in metals:
            held_down = float(totals @ self.weights[m]) > target_mg_per_l
            found += (
                self.factored[m] if held_down else np.minimum(self.factored[m], self.weights[m])
            )
        return found

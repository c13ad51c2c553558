"""Responses: what a dose leaves dissolved, from the joint equilibrium of the whole water.

Owns dose ladders and their derivatives; straight-line envelopes around a response are
`chemistry.envelope`.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from chemistry.envelope import ActiveSetChange, Envelope, linearise
from chemistry.errors import WaterError
from chemistry.state import EquilibriumState, equilibrate
from chemistry.system import System

if TYPE_CHECKING:
    import pandas as pd

__all__ = ["ActiveSetChange", "Envelope", "Response", "linearise", "response"]

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

# Share of the largest dose that stands for 0 where derivatives need a component to be there.
TRACE_DOSE_FRACTION = 1e-12


@dataclass(frozen=True, eq=False, kw_only=True)
class Response:
    """States of one water over a ladder of doses of one reagent.

    Parameters
    ----------
    system
        The given system narrowed to the components of water and reagent.
    totals_mol_per_l
        Totals before the dose, (components,). [mol/L]
    additions
        Moles of each component per mole of reagent, (components,).
    held_ph
        The pH kept by other means, or None where it follows from the dose.
    doses_mol_per_l
        The ladder, (doses,). [mol/L]
    state
        Equilibrium at each dose (axis 0).
    """

    system: System
    totals_mol_per_l: FloatArray
    additions: FloatArray
    held_ph: float | None
    doses_mol_per_l: FloatArray
    state: EquilibriumState

    @property
    def ph(self) -> FloatArray:
        """The pH at each dose, (doses,)."""
        return self.state.ph

    @property
    def dissolved_mol_per_l(self) -> FloatArray:
        """Dissolved total of every component at each dose, (doses, components). [mol/L]"""
        return self.state.dissolved_mol_per_l

    @property
    def solids_mol_per_l(self) -> FloatArray:
        """Amount of every candidate solid at each dose, (doses, solids). [mol/L]"""
        return self.state.solids_mol_per_l

    @property
    def dissolved(self) -> pd.DataFrame:
        """Dissolved totals by component name, doses as index. [mol/L]"""
        frame = self.state.dissolved
        frame.index = self._dose_index()
        return frame

    @property
    def solids(self) -> pd.DataFrame:
        """Amounts of solids by name, doses as index. [mol/L]"""
        frame = self.state.solids
        frame.index = self._dose_index()
        return frame

    @property
    def base_demand_mol_per_l(self) -> FloatArray:
        """Strong base that holds the pH at each dose (negative: acid), (doses,). [mol/L]

        Zero where the pH is free.
        """
        if self.held_ph is None:
            return np.zeros(self.doses_mol_per_l.size)
        proton = self.system.index["H+"]
        own = self.totals_mol_per_l[proton] + self.doses_mol_per_l * self.additions[proton]
        return np.asarray(own - self.state.totals[:, proton], dtype=float)

    def residual_mol_per_l(self, component: str) -> FloatArray:
        """Dissolved total of one component at each dose, (doses,). [mol/L]"""
        return np.asarray(self.dissolved_mol_per_l[:, self._column(component)], dtype=float)

    def ln_residual(
        self, component: str, doses_mol_per_l: FloatArray
    ) -> tuple[FloatArray, FloatArray, BoolArray]:
        """Natural log of a residual at any doses, its exact slope and the solids present.

        Returns
        -------
        ln_residual : ndarray, shape (n,)
            Natural log of the dissolved total. [ln(mol/L)]
        slope : ndarray, shape (n,)
            Its derivative by the dose, one-sided at the onset of a solid. [L/mol]
        present : ndarray, shape (n, solids)
            Whether each candidate solid is there.
        """
        column = self._column(component)
        state = self._solve(doses_mol_per_l)
        residual = state.dissolved_mol_per_l[:, column]
        change = state.sensitivity(self.additions[None, :]).dissolved[:, column, 0]
        return np.log(residual), np.asarray(change / residual, dtype=float), state.active

    def at(self, doses_mol_per_l: FloatArray | Sequence[float]) -> Response:
        """Return the same response on another ladder."""
        doses = _ladder(doses_mol_per_l)
        return Response(
            system=self.system, totals_mol_per_l=self.totals_mol_per_l, additions=self.additions,
            held_ph=self.held_ph, doses_mol_per_l=doses, state=self._solve(doses),
        )  # fmt: skip

    def _solve(self, doses_mol_per_l: FloatArray) -> EquilibriumState:
        return _states(
            self.system, self.totals_mol_per_l, self.additions, doses_mol_per_l, self.held_ph
        )

    def _column(self, component: str) -> int:
        if component not in self.system.index or component == "H+":
            raise WaterError(
                f"{component!r} is in neither the water nor the reagent: "
                f"there are {', '.join(c for c in self.system.components if c != 'H+')}"
            )
        return self.system.index[component]

    def _dose_index(self) -> pd.Index[float]:
        import pandas as pd

        return pd.Index(self.doses_mol_per_l, name="dose_mol_per_l")


def response(
    system: System,
    totals: Mapping[str, float] | FloatArray,
    additions: Mapping[str, float] | FloatArray,
    doses_mol_per_l: FloatArray | Sequence[float],
    ph: float | None = None,
) -> Response:
    """Dose one reagent into a water and find the equilibrium at every dose.

    Parameters
    ----------
    system
        Components, species and candidate solids.
    totals : mapping or ndarray, shape (components,)
        Totals of the water, H+ being the signed proton total. [mol/L]
    additions : mapping or ndarray, shape (components,)
        Moles of each component per mole of reagent, as in ``Reagent.components``.
    doses_mol_per_l : array-like, shape (doses,)
        Rising doses, at least two. [mol/L]
    ph
        Keep this pH by other means; by default it follows from the dose.

    Returns
    -------
    Response

    Raises
    ------
    WaterError
        Unknown components, doses that do not rise, totals that no water can have.
    EquilibriumError
        A state missed its certificate.
    """
    base, vector = _vector(system, totals, "totals"), _vector(system, additions, "additions")
    doses = _ladder(doses_mol_per_l)
    kept = (base != 0.0) | (vector != 0.0)
    kept |= np.array([c == "H+" for c in system.components])
    small = system.narrowed([c for c, k in zip(system.components, kept, strict=True) if k])
    state = _states(small, base[kept], vector[kept], doses, ph)
    return Response(
        system=small, totals_mol_per_l=base[kept], additions=vector[kept], held_ph=ph,
        doses_mol_per_l=doses, state=state,
    )  # fmt: skip


def _states(
    system: System, totals: FloatArray, additions: FloatArray, doses: FloatArray, ph: float | None
) -> EquilibriumState:
    """Equilibria at these doses; 0 becomes a trace where the reagent brings a new component."""
    new = (totals == 0.0) & (additions != 0.0)
    if "H+" in system.index:
        new[system.index["H+"]] = False
    if new.any():
        doses = np.maximum(doses, TRACE_DOSE_FRACTION * max(float(doses.max()), 1e-6))
    return equilibrate(system, totals + doses[:, None] * additions, ph=ph)


def _vector(system: System, values: Mapping[str, float] | FloatArray, what: str) -> FloatArray:
    if not isinstance(values, Mapping):
        array = np.asarray(values, dtype=float)
        if array.shape != (len(system.components),):
            raise WaterError(
                f"{what} have shape {array.shape}: expected one value for each of the "
                f"{len(system.components)} components"
            )
        return array
    unknown = sorted(set(values) - set(system.components))
    if unknown:
        raise WaterError(f"{what} name unknown components: {', '.join(unknown)}")
    return np.array([float(values.get(c, 0.0)) for c in system.components])


def _ladder(doses_mol_per_l: FloatArray | Sequence[float]) -> FloatArray:
    doses = np.asarray(doses_mol_per_l, dtype=float)
    rising = doses.ndim == 1 and doses.size >= 2 and bool(np.all(np.diff(doses) > 0.0))
    if not rising or not np.isfinite(doses).all() or doses[0] < 0.0:
        raise WaterError("doses must be at least two rising numbers, none below 0")
    return doses

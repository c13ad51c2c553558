"""Equilibrium states as callers see them: results and certificate.

Owns `equilibrate` and `EquilibriumState`; what callers hand in is checked in `chemistry.request`,
derivatives are in `chemistry.sensitivity`, the solution steps in `chemistry.equilibrium`.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Protocol

import numpy as np
from numpy.typing import NDArray

from chemistry.batch import ABSENT_LN, Batch, BoolArray, FloatArray, new_batch
from chemistry.equilibrium import solve, solve_warm
from chemistry.errors import EquilibriumError, WaterError
from chemistry.failures import failure_text
from chemistry.gas import CO2_SPECIES, H2S_SPECIES, LOG10_HENRY_CO2, LOG10_HENRY_H2S, ln_henry
from chemistry.kernel import Kernel
from chemistry.request import (
    LARGEST_TOTAL_MOL_PER_L,
    Totals,
    read_request,
    read_totals,
)
from chemistry.sensitivity import Sensitivity, sensitivity_of
from chemistry.system import LN10, System

if TYPE_CHECKING:
    import pandas as pd

__all__ = ["CO2_SPECIES", "H2S_SPECIES", "LOG10_HENRY_CO2", "LOG10_HENRY_H2S"]
__all__ += ["EquilibriumState", "Sensitivity", "equilibrate", "kernel_of", "read_totals"]

CERTIFIED_MASS_BALANCE = 1e-10
CERTIFIED_SATURATION = 1e-8
CERTIFIED_SURROUNDINGS = 1e-9  # seen against species: share of I, for the others of the largest


@dataclass(frozen=True, eq=False)
class EquilibriumState:
    """Certified equilibrium states of a batch of waters (axis 0).

    Arrays are mol/L (taken as mol/kg), log activities natural. ``titrant_mol_per_l`` is what was
    added to hold the pH (0 where the pH was free), in moles of the titrant given.
    """

    system: System
    totals: FloatArray
    log_activity: FloatArray
    surroundings: FloatArray
    solids_mol_per_l: FloatArray
    titrant_mol_per_l: FloatArray
    active: BoolArray
    converged: BoolArray
    batch: Batch
    kernel: Kernel

    @property
    def ph(self) -> FloatArray:
        """-log10 of the proton activity, (n,); nan in a system without H+."""
        if self.kernel.proton < 0:
            return np.full(self.totals.shape[0], np.nan)
        return -self.log_activity[:, self.kernel.proton] / LN10

    @property
    def ionic_strength(self) -> FloatArray:
        """Ionic strength, (n,). [mol/L]"""
        return self.surroundings[:, 0]

    @cached_property
    def species_mol_per_l(self) -> FloatArray:
        """Concentration of every species, (n, species), order of ``system.species_names``."""
        return self.kernel.molalities(self.log_activity, self.surroundings)

    @cached_property
    def dissolved_mol_per_l(self) -> FloatArray:
        """Dissolved total of every component summed from its species, (n, components)."""
        return self.species_mol_per_l @ self.system.formation

    @cached_property
    def saturation_index_log10(self) -> FloatArray:
        """log10 saturation index of every candidate solid, (n, solids); -inf where impossible."""
        index = self.kernel.saturation_ln(self.log_activity, self.surroundings) / LN10
        return np.where(index < 0.4 * ABSENT_LN / LN10, -np.inf, index)

    def partial_pressure_atm(self, species: str) -> FloatArray:
        """Pressure of CO2 or H2S over the water by Henry's law at its temperature, (n,). [atm]

        Raises
        ------
        KeyError
            Another species than ``CO2(aq)`` or ``H2S(aq)`` is asked for.
        """
        ln_solubility = ln_henry(species, self.system.temperature_degc)
        if species not in self.system.species_names:
            return np.zeros(self.totals.shape[0])
        k = self.system.species_names.index(species)
        ln_a = self.log_activity @ self.system.formation[k] + self.system.ln_k[k]
        ln_a += self.system.water[k] * self.kernel.model.ln_water(self.surroundings)
        pressure: FloatArray = np.exp(ln_a - ln_solubility)
        return pressure

    @cached_property
    def certificate_arrays(self) -> dict[str, FloatArray]:
        """Certificate per state, each (n,): see `certificate`."""
        m = self.species_mol_per_l
        sums, scale = self.kernel.amounts(m, self.solids_mol_per_l)
        mass = np.abs(sums - self.totals) / np.maximum(scale, 1e-300)
        mass = np.where(self.batch.present, mass, 0.0).max(axis=1)
        si = self.kernel.saturation_ln(self.log_activity, self.surroundings) / LN10
        present = np.abs(np.where(self.active, si, 0.0)).max(axis=1, initial=0.0)
        absent = np.where(self.active, -np.inf, si).max(axis=1, initial=-np.inf)
        charged = np.abs(m * self.system.charges).sum(axis=1)
        charge = np.abs(m @ self.system.charges) / np.maximum(charged, 1e-300)
        return {
            "mass_balance": mass,
            "supersaturation": np.maximum(absent, 0.0),
            "presence": np.maximum(present, -self.solids_mol_per_l.min(axis=1, initial=0.0)),
            "charge": charge,
        }

    @property
    def certificate(self) -> pd.DataFrame:
        """Certificate per state.

        ``mass_balance``: max over components of |sum - T| / sum(|stoichiometry| x amount);
        ``supersaturation``: largest SI of a solid that is absent (0 if none);
        ``presence``: largest |SI| of a solid that is present; ``charge``: |sum z m| / sum |z| m
        (a water whose totals, proton included, are not neutral shows it here); ``converged``.
        """
        import pandas as pd

        return pd.DataFrame({**self.certificate_arrays, "converged": self.converged})

    @property
    def dissolved(self) -> pd.DataFrame:
        """Dissolved totals, states x components. [mol/L]"""
        import pandas as pd

        return pd.DataFrame(self.dissolved_mol_per_l, columns=list(self.system.components))

    @property
    def solids(self) -> pd.DataFrame:
        """Amounts of solids, states x solids. [mol/L]"""
        import pandas as pd

        return pd.DataFrame(self.solids_mol_per_l, columns=list(self.system.solid_names))

    @property
    def saturation_index(self) -> pd.DataFrame:
        """log10 saturation index, states x solids."""
        import pandas as pd

        return pd.DataFrame(self.saturation_index_log10, columns=list(self.system.solid_names))

    def sensitivity(self, directions: FloatArray) -> Sensitivity:
        """Exact derivatives along directions in the totals, by the implicit function theorem.

        Parameters
        ----------
        directions : ndarray, shape (k, components) or (n, k, components)
            Moles of each component per mole of the direction.

        Notes
        -----
        Where the pH is held the titrant follows. At the onset of a solid a derivative is one-sided.
        """
        return sensitivity_of(self, directions)

    def sensitivity_to_temperature(self) -> Sensitivity:
        """Exact derivatives per degree C: constants move, totals and what is held stay."""
        from chemistry.temperature import temperature_sensitivity_of

        return temperature_sensitivity_of(self)

    def row(self, position: int) -> EquilibriumState:
        """Return one state as a batch of one."""
        return self.rows(np.array([position]))

    def rows(self, positions: NDArray[np.int64] | BoolArray) -> EquilibriumState:
        """Return some states."""
        return EquilibriumState(
            self.system, self.totals[positions], self.log_activity[positions],
            self.surroundings[positions], self.solids_mol_per_l[positions],
            self.titrant_mol_per_l[positions], self.active[positions], self.converged[positions],
            self.batch.take(positions), self.kernel,
        )  # fmt: skip


class Start(Protocol):
    """What a warm start reads: a state, or values picked from states."""

    @property
    def log_activity(self) -> FloatArray:
        """Natural log activities, (n, components)."""
        ...

    @property
    def surroundings(self) -> FloatArray:
        """What the activity model sees, (n, width)."""
        ...

    @property
    def solids_mol_per_l(self) -> FloatArray:
        """(n, solids)."""
        ...

    @property
    def active(self) -> BoolArray:
        """Which solids are present, (n, solids)."""
        ...


def equilibrate(
    system: System,
    totals: Totals,
    ph: float | FloatArray | Sequence[float] | None = None,
    pco2_atm: float | FloatArray | Sequence[float] | None = None,
    on_failure: str = "raise",
    *,
    titrant: FloatArray | None = None,
    start: Start | None = None,
    require_neutral: bool = False,
) -> EquilibriumState:
    """Find the equilibrium of a batch of waters.

    Parameters
    ----------
    system
        Components, species, solids, constants and activity model.
    totals
        Mapping component -> mol/L (a number or one per state), or array (states, components).
        ``H+`` is the signed proton total (OH- counts -1). A component without a total is absent.
        [mol/L]
    ph
        Held pH (activity scale): the proton total becomes unknown. nan leaves a state free.
    pco2_atm
        Held CO2 pressure: the carbonate total becomes unknown. [atm]
    on_failure
        ``raise`` or ``flag`` (see ``converged``).
    titrant
        What is added to hold the pH, moles of each component per mole, (components,) or
        (states, components); protons alone by default.
    start
        A solution of neighbouring waters (same number of states) to start from.
    require_neutral
        Refuse totals that no electroneutral water has (free pH). By default ions that take no part,
        such as nitrate, may be left out; ``certificate`` shows their charge.

    Raises
    ------
    WaterError
        Totals, pH or pressure that no water can have: every one with its state, component, value.
    EquilibriumError
        A state missed its certificate and ``on_failure`` is ``raise``. A held pH or pressure that
        only more than 60 mol/L of something could reach counts as missed.

    Examples
    --------
    >>> from chemistry.system import Solid, Species, System
    >>> silver = System(
    ...     ["H+", "Ag+", "Cl-", "Na+"],
    ...     [Species.from_reaction("H2O = OH- + H+", -14.0)],
    ...     [Solid.from_reaction("Ag+ + Cl- = AgCl(s)", 9.75)], activity="ideal",
    ... )
    >>> state = equilibrate(silver, {"Ag+": 1e-3, "Cl-": 1e-3, "H+": 0.0})
    >>> [round(float(x), 8) for x in state.dissolved["Ag+"]]
    [1.334e-05]
    """
    if on_failure not in ("raise", "flag"):
        raise ValueError(f"on_failure is {on_failure!r}: use 'raise' or 'flag'")
    asked = read_request(system, totals, ph, pco2_atm, titrant, require_neutral=require_neutral)
    kernel = kernel_of(system)
    batch = new_batch(system, asked.totals, asked.ph, asked.ln_co2, asked.titrant)
    if start is None:
        solve(kernel, batch)
    else:
        _begin_at(kernel, batch, start)
        solve_warm(kernel, batch)
    state = _as_state(system, kernel, batch)
    if on_failure == "raise" and not state.converged.all():
        raise EquilibriumError(failure_text(state))
    return state


def certified_or_solved(
    system: System, totals: FloatArray, found: Start, trusted: BoolArray
) -> EquilibriumState:
    """States at values found elsewhere: kept where they pass the certificate, else solved.

    Parameters
    ----------
    totals : ndarray, shape (n, components)
    found
        Values of the n waters.
    trusted : ndarray, shape (n,)
        Rows worth a try; the others are solved from the values as a start.
    """
    kernel = kernel_of(system)
    asked = read_request(system, totals, None, None, None)
    batch = new_batch(system, asked.totals, asked.ph, asked.ln_co2, asked.titrant)
    _begin_at(kernel, batch, found)
    batch.converged = trusted.copy()
    state = _as_state(system, kernel, batch)
    open_rows = np.flatnonzero(~state.converged)
    if open_rows.size:
        part = batch.take(open_rows)
        solve_warm(kernel, part)
        batch.put(open_rows, part)
        state = _as_state(system, kernel, batch)
    return state


def _begin_at(kernel: Kernel, batch: Batch, start: Start) -> None:
    states = batch.totals.shape[0]
    if start.log_activity.shape != batch.ln_activity.shape:
        raise WaterError(
            f"start has (states, components) {start.log_activity.shape}, the totals have "
            f"{batch.ln_activity.shape}: start from as many waters of the same system"
        )
    seen = start.log_activity > 0.5 * ABSENT_LN
    batch.ln_activity = np.where(batch.present & seen, start.log_activity, batch.ln_activity)
    batch.surroundings = start.surroundings.copy()
    batch.surroundings[:, 0] = np.maximum(batch.surroundings[:, 0], 1e-9)
    gone = (~batch.present).astype(float) @ kernel.solid_absolute.T > 0.0
    batch.active = start.active & ~gone
    batch.solids = np.where(batch.active, start.solids_mol_per_l, 0.0).reshape(states, -1)


def kernel_of(system: System) -> Kernel:
    """Return the system's kernel, built once and kept with it."""
    kept = system.__dict__.get("_kernel")
    if kept is None:
        kept = Kernel(system)
        system.__dict__["_kernel"] = kept
    assert isinstance(kept, Kernel)
    return kept


def _as_state(system: System, kernel: Kernel, batch: Batch) -> EquilibriumState:
    m = kernel.molalities(batch.ln_activity, batch.surroundings)
    sums, _ = kernel.amounts(m, batch.solids)
    dose, _ = kernel.doses(batch, sums - batch.totals)
    totals = batch.totals + kernel.added(batch, sums)
    held = np.flatnonzero(~np.isnan(batch.ph_ln))
    totals[held, batch.pivot[held]] = sums[held, batch.pivot[held]]
    if kernel.carbonate >= 0:
        opened = ~np.isnan(batch.co2_ln)
        totals[opened, kernel.carbonate] = sums[opened, kernel.carbonate]
    state = EquilibriumState(
        system, totals, batch.ln_activity, batch.surroundings, batch.solids,
        dose, batch.active, batch.converged, batch, kernel,
    )  # fmt: skip
    proof = state.certificate_arrays
    off = np.abs(kernel.surroundings(m) - batch.surroundings)
    strength, most = batch.surroundings[:, 0], batch.surroundings.max(axis=1)
    batch.converged[:] &= (
        (proof["mass_balance"] <= CERTIFIED_MASS_BALANCE)
        & (proof["supersaturation"] <= CERTIFIED_SATURATION)
        & (proof["presence"] <= CERTIFIED_SATURATION)
        & (np.abs(totals).max(axis=1, initial=0.0) <= LARGEST_TOTAL_MOL_PER_L)
        & (off[:, 0] <= CERTIFIED_SURROUNDINGS * np.maximum(strength, 1e-9))
        & (off.max(axis=1) <= CERTIFIED_SURROUNDINGS * np.maximum(most, 1e-9))
    )
    return state

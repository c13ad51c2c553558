"""Equilibrium states as callers see them: results, certificate and exact derivatives.

Owns `equilibrate` (validation, batching, certificates) and `EquilibriumState`; the solution steps
themselves are in `chemistry.equilibrium`.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from chemistry.active_set import slots_of
from chemistry.batch import ABSENT_LN, Batch, new_batch
from chemistry.equilibrium import solve, solve_warm
from chemistry.errors import EquilibriumError, WaterError
from chemistry.kernel import Kernel
from chemistry.linear import equilibrate_matrix, solve_batch
from chemistry.newton import assemble, linearise
from chemistry.system import LN10, System

if TYPE_CHECKING:
    import pandas as pd

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

Totals = Mapping[str, float | FloatArray | Sequence[float]] | FloatArray

# log10 K of CO2(g) = CO2(aq) and of CO3-2 + 2 H+ = CO2(aq) + H2O at 25 C.
# Source: Plummer & Busenberg 1982, Geochim. Cosmochim. Acta 46, 1011.
LOG10_HENRY_CO2 = -1.468
LOG10_HENRY_H2S = -0.99  # H2S(g) = H2S(aq), mol/kg/atm, from memory

CERTIFIED_MASS_BALANCE = 1e-10
CERTIFIED_SATURATION = 1e-8
CO2_SPECIES = "CO2(aq)"
H2S_SPECIES = "H2S(aq)"


@dataclass(frozen=True, eq=False)
class Sensitivity:
    """Derivatives of a batch of states.

    ``dissolved`` (n, components, k), ``ph`` (n, k), ``solids`` (n, solids, k), ``titrant`` (n, k):
    change per mol/L of each of the k directions in which the totals move; ``titrant`` is the amount
    that holding the pH takes. ``h2s_atm`` (n, k) is the change of the H2S pressure.
    """

    dissolved: FloatArray
    ph: FloatArray
    solids: FloatArray
    titrant: FloatArray
    ln_activity: FloatArray


@dataclass(frozen=True, eq=False)
class EquilibriumState:
    """Certified equilibrium states of a batch of waters (axis 0).

    Arrays are mol/L (taken as mol/kg), log activities natural. ``titrant_mol_per_l`` is what was
    added to hold the pH (0 where the pH was free), in moles of the titrant given.
    """

    system: System
    totals: FloatArray
    log_activity: FloatArray
    ionic_strength: FloatArray
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

    @cached_property
    def species_mol_per_l(self) -> FloatArray:
        """Concentration of every species, (n, species), order of ``system.species_names``."""
        return self.kernel.molalities(self.log_activity, self.ionic_strength)

    @cached_property
    def dissolved_mol_per_l(self) -> FloatArray:
        """Dissolved total of every component summed from its species, (n, components)."""
        return self.species_mol_per_l @ self.system.formation

    @cached_property
    def saturation_index_log10(self) -> FloatArray:
        """log10 saturation index of every candidate solid, (n, solids); -inf where impossible."""
        index = self.kernel.saturation_ln(self.log_activity) / LN10
        return np.where(index < 0.4 * ABSENT_LN / LN10, -np.inf, index)

    def partial_pressure_atm(self, species: str) -> FloatArray:
        """Pressure of CO2 or H2S over the water by Henry's law, (n,). [atm]

        Raises
        ------
        KeyError
            Another species than ``CO2(aq)`` or ``H2S(aq)`` is asked for.
        """
        log10_henry = {CO2_SPECIES: LOG10_HENRY_CO2, H2S_SPECIES: LOG10_HENRY_H2S}[species]
        if species not in self.system.species_names:
            return np.zeros(self.totals.shape[0])
        k = self.system.species_names.index(species)
        ln_a = self.log_activity @ self.system.formation[k] + self.system.ln_k[k]
        pressure: FloatArray = np.exp(ln_a - LN10 * log10_henry)
        return pressure

    @cached_property
    def certificate_arrays(self) -> dict[str, FloatArray]:
        """Certificate per state, each (n,): see `certificate`."""
        m = self.species_mol_per_l
        sums, scale = self.kernel.amounts(m, self.solids_mol_per_l)
        mass = np.abs(sums - self.totals) / np.maximum(scale, 1e-300)
        mass = np.where(self.batch.present, mass, 0.0).max(axis=1)
        si = self.kernel.saturation_ln(self.log_activity) / LN10
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
        The bordered matrix of the last Newton step is solved for ``d(l, x)/dt``. Where the pH is
        held the titrant follows; the derivative of the dissolved total of component c is then
        that of its total minus that of its solids. At the onset of a solid it is one-sided.
        """
        n, count = self.totals.shape
        ways = np.broadcast_to(directions, (n, *np.shape(directions)[-2:]))
        kernel, batch = self.kernel, self.batch
        slots, used = slots_of(self.active)
        lin = linearise(kernel, batch, slots, used)
        system = assemble(kernel, batch, lin, used)
        k = ways.shape[1]
        width = system.matrix.shape[1]
        dl = np.zeros((n, k, count))
        dx = np.zeros((n, k, width - count))
        scaled, row, column = equilibrate_matrix(system.matrix)
        for j in range(k):
            rhs = np.zeros((n, width))
            rhs[:, :count] = ways[:, j]
            self._open(rhs)
            answer = solve_batch(scaled, rhs / row) / column
            dl[:, j], dx[:, j] = answer[:, :count], answer[:, count:]
        return self._derivatives(ways, dl, dx, slots, used, lin.to_strength, lin.denominator)

    def _open(self, rhs: FloatArray) -> None:
        """Right-hand side of the totals' balances with the held rows' conditions at rest."""
        still = self.batch.take(slice(None))  # type: ignore[arg-type]
        dummy = np.zeros((rhs.shape[0], rhs.shape[1], rhs.shape[1]))
        self.kernel.hold(still, dummy, rhs)
        h, c = self.kernel.proton, self.kernel.carbonate
        rhs[~np.isnan(still.ph_ln), h] = 0.0
        if c >= 0:
            rhs[~np.isnan(still.co2_ln), c] = 0.0
        rhs[:, : self.totals.shape[1]][~still.present] = 0.0

    def _derivatives(
        self, ways: FloatArray, dl: FloatArray, dx: FloatArray, slots: NDArray[np.int64],
        used: BoolArray, to_strength: FloatArray, denominator: FloatArray,
    ) -> Sensitivity:  # fmt: skip
        n, k, _ = dl.shape
        kernel = self.kernel
        m = self.species_mol_per_l
        _, slope = kernel.model.screening(self.ionic_strength)
        d_strength = np.einsum("nc,nkc->nk", to_strength, dl) / denominator[:, None]
        solids = np.zeros((n, self.solids_mol_per_l.shape[1], k))
        for j in range(k):
            np.put_along_axis(solids[:, :, j], slots, np.where(used, dx[:, j], 0.0), axis=1)
        dissolved = np.empty((n, dl.shape[2], k))
        gained = np.empty((n, k))
        for j in range(k):
            dm = m * (
                dl[:, j] @ kernel.formation_t + (slope * d_strength[:, j])[:, None] * kernel.z2
            )
            dissolved[:, :, j] = dm @ kernel.formation
            total = dissolved[:, :, j] + solids[:, :, j] @ kernel.solid_formation
            gained[:, j] = self._titrant_change(total - ways[:, j])
        ph = -dl[:, :, kernel.proton] / LN10 if kernel.proton >= 0 else np.full((n, k), np.nan)
        return Sensitivity(dissolved, ph, solids, gained, dl)

    def _titrant_change(self, surplus: FloatArray) -> FloatArray:
        h, c = self.kernel.proton, self.kernel.carbonate
        change = np.zeros(surplus.shape[0])
        held = ~np.isnan(self.batch.ph_ln)
        if not held.any():
            return change
        v = self.batch.titrant[held]
        gap = surplus[held]
        opened = ~np.isnan(self.batch.co2_ln[held])
        pivot, value = v[:, h].copy(), gap[:, h].copy()
        if c >= 0:
            pivot[opened] -= 2.0 * v[opened, c]
            value[opened] -= 2.0 * gap[opened, c]
        change[held] = value / pivot
        return change

    def row(self, position: int) -> EquilibriumState:
        """Return one state as a batch of one."""
        return self.rows(np.array([position]))

    def rows(self, positions: NDArray[np.int64] | BoolArray) -> EquilibriumState:
        """Return some states."""
        return EquilibriumState(
            self.system, self.totals[positions], self.log_activity[positions],
            self.ionic_strength[positions], self.solids_mol_per_l[positions],
            self.titrant_mol_per_l[positions], self.active[positions], self.converged[positions],
            self.batch.take(positions), self.kernel,
        )  # fmt: skip


def read_totals(system: System, totals: Totals) -> FloatArray:
    """Return totals as an array (states, components). [mol/L]

    Raises
    ------
    WaterError
        Unknown components, shapes that do not fit, nan, or a negative total other than H+.
    """
    if isinstance(totals, Mapping):
        unknown = sorted(set(totals) - set(system.components))
        if unknown:
            raise WaterError(
                f"unknown components: {', '.join(unknown)}; the system has "
                f"{', '.join(system.components)}"
            )
        columns = {name: np.atleast_1d(np.asarray(v, float)) for name, v in totals.items()}
        sizes = {v.shape[0] for v in columns.values()} - {1}
        if len(sizes) > 1 or any(v.ndim != 1 for v in columns.values()):
            raise WaterError(f"totals of different lengths: {sorted(sizes)}")
        array = np.zeros((sizes.pop() if sizes else 1, len(system.components)))
        for name, column in columns.items():
            array[:, system.index[name]] = column
    else:
        array = np.array(totals, dtype=float, ndmin=2)
        if array.ndim != 2 or array.shape[1] != len(system.components):
            raise WaterError(
                f"totals have shape {np.shape(totals)}: expected (states, "
                f"{len(system.components)}) in the order of system.components"
            )
    _check_totals(system, array)
    return array


def _check_totals(system: System, array: FloatArray) -> None:
    problems = []
    signed = np.array([name == "H+" for name in system.components])
    bad = ~np.isfinite(array) | ((array < 0.0) & ~signed)
    for state, component in np.argwhere(bad)[:20]:
        name = system.components[component]
        value = array[state, component]
        rule = "a finite number" if signed[component] else "a finite number, 0 or more"
        problems.append(f"state {state}: total of {name} is {value:g} mol/L, expected {rule}")
    large = np.abs(array) > 60.0
    for state, component in np.argwhere(large & np.isfinite(array))[:20]:
        problems.append(
            f"state {state}: total of {system.components[component]} is "
            f"{array[state, component]:g} mol/L, more than any water holds (60 mol/L)"
        )
    if problems:
        raise WaterError("; ".join(problems))


def _held(name: str, values: float | FloatArray | Sequence[float] | None, n: int) -> FloatArray:
    if values is None:
        return np.full(n, np.nan)
    array = np.atleast_1d(np.asarray(values, dtype=float))
    if array.ndim != 1 or array.shape[0] not in (1, n):
        raise WaterError(f"{name} has shape {np.shape(values)}: expected one value or {n}")
    return np.broadcast_to(array, (n,)).copy()


def _states(
    totals: FloatArray, ph: object, pco2_atm: object, titrant: FloatArray | None
) -> tuple[FloatArray, int]:
    sizes = {totals.shape[0]}
    for values in (ph, pco2_atm):
        if values is not None:
            sizes.add(np.atleast_1d(np.asarray(values)).shape[0])
    if titrant is not None and np.ndim(titrant) == 2:
        sizes.add(np.shape(titrant)[0])
    n = max(sizes)
    if sizes - {1, n}:
        raise WaterError(f"totals, pH and pCO2 name different numbers of states: {sorted(sizes)}")
    return np.broadcast_to(totals, (n, totals.shape[1])).copy(), n


def equilibrate(
    system: System,
    totals: Totals,
    ph: float | FloatArray | Sequence[float] | None = None,
    pco2_atm: float | FloatArray | Sequence[float] | None = None,
    on_failure: str = "raise",
    *,
    titrant: FloatArray | None = None,
    start: EquilibriumState | None = None,
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

    Raises
    ------
    WaterError
        Totals, pH or pressure that no water can have.
    EquilibriumError
        A state missed its certificate and ``on_failure`` is ``raise``.

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
    array, n = _states(read_totals(system, totals), ph, pco2_atm, titrant)
    ph_values, co2 = _held("ph", ph, n), _held("pco2_atm", pco2_atm, n)
    _check_held(system, ph_values, co2)
    vectors = _titrant(system, titrant, n)
    with np.errstate(divide="ignore", invalid="ignore"):
        ln_co2 = np.log(co2) + LN10 * (LOG10_HENRY_CO2) - _co2_formation_ln(system)
    kernel = kernel_of(system)
    batch = new_batch(system, array, ph_values, ln_co2, vectors)
    if start is not None and start.totals.shape[0] == n:
        _begin_at(batch, start)
        solve_warm(kernel, batch)
    else:
        solve(kernel, batch)
    state = _as_state(system, kernel, batch)
    if on_failure == "raise" and not state.converged.all():
        raise EquilibriumError(_failure_text(state))
    return state


def _begin_at(batch: Batch, start: EquilibriumState) -> None:
    seen = start.log_activity > 0.5 * ABSENT_LN
    batch.ln_activity = np.where(batch.present & seen, start.log_activity, batch.ln_activity)
    batch.ionic_strength = start.ionic_strength.copy()
    batch.solids = start.solids_mol_per_l.copy()
    batch.active = start.active.copy()


def _check_held(system: System, ph: FloatArray, co2: FloatArray) -> None:
    bad = ~np.isnan(ph) & ~((ph > -3.0) & (ph < 17.0))
    if bad.any():
        first = int(np.flatnonzero(bad)[0])
        raise WaterError(f"state {first}: pH {ph[first]:g} is outside -3 to 17")
    bad = ~np.isnan(co2) & ~((co2 > 0.0) & (co2 < 100.0))
    if bad.any():
        first = int(np.flatnonzero(bad)[0])
        raise WaterError(f"state {first}: pCO2 {co2[first]:g} atm is outside 0 to 100 atm")
    if (~np.isnan(ph)).any() and "H+" not in system.index:
        raise WaterError("pH cannot be held: the system has no component H+")
    if (~np.isnan(co2)).any() and CO2_SPECIES not in system.species_names:
        raise WaterError(f"pCO2 cannot be held: the system has no species {CO2_SPECIES}")


def _titrant(system: System, titrant: FloatArray | None, n: int) -> FloatArray:
    if titrant is None:
        vector = np.zeros(len(system.components))
        if "H+" in system.index:
            vector[system.index["H+"]] = 1.0
        return np.broadcast_to(vector, (n, vector.size)).copy()
    array = np.atleast_2d(np.asarray(titrant, dtype=float))
    if array.shape[1] != len(system.components) or array.shape[0] not in (1, n):
        raise WaterError(f"titrant has shape {np.shape(titrant)}")
    return np.broadcast_to(array, (n, array.shape[1])).copy()


def _co2_formation_ln(system: System) -> float:
    if CO2_SPECIES not in system.species_names:
        return 0.0
    return float(system.ln_k[system.species_names.index(CO2_SPECIES)])


def kernel_of(system: System) -> Kernel:
    """Return the system's kernel, built once and kept with it."""
    kept = system.__dict__.get("_kernel")
    if kept is None:
        kept = Kernel(system)
        system.__dict__["_kernel"] = kept
    assert isinstance(kept, Kernel)
    return kept


def _as_state(system: System, kernel: Kernel, batch: Batch) -> EquilibriumState:
    m = kernel.molalities(batch.ln_activity, batch.ionic_strength)
    sums, _ = kernel.amounts(m, batch.solids)
    added = kernel.added(batch, sums)
    held = ~np.isnan(batch.ph_ln)
    dose = np.zeros(held.shape[0])
    if held.any():
        h, c = kernel.proton, kernel.carbonate
        v = batch.titrant[held]
        pivot, value = v[:, h].copy(), (sums - batch.totals)[held, h].copy()
        opened = ~np.isnan(batch.co2_ln[held])
        if c >= 0 and opened.any():
            pivot[opened] -= 2.0 * v[opened, c]
            value[opened] -= 2.0 * (sums - batch.totals)[held, c][opened]
        dose[held] = value / pivot
    totals = batch.totals + added
    if kernel.proton >= 0:
        totals[held, kernel.proton] = sums[held, kernel.proton]
    if kernel.carbonate >= 0:
        opened = ~np.isnan(batch.co2_ln)
        totals[opened, kernel.carbonate] = sums[opened, kernel.carbonate]
    state = EquilibriumState(
        system, totals, batch.ln_activity, batch.ionic_strength, batch.solids,
        dose, batch.active, batch.converged, batch, kernel,
    )  # fmt: skip
    proof = state.certificate_arrays
    good = (
        (proof["mass_balance"] <= CERTIFIED_MASS_BALANCE)
        & (proof["supersaturation"] <= CERTIFIED_SATURATION)
        & (proof["presence"] <= CERTIFIED_SATURATION)
    )
    batch.converged = batch.converged & good
    return EquilibriumState(
        system, totals, batch.ln_activity, batch.ionic_strength, batch.solids,
        dose, batch.active, batch.converged, batch, kernel,
    )  # fmt: skip


def _failure_text(state: EquilibriumState) -> str:
    rows = np.flatnonzero(~state.converged)
    proof = state.certificate_arrays
    lines = [f"{rows.size} of {state.converged.size} states missed their certificate"]
    for i in rows[:3]:
        water = {
            name: float(v)
            for name, v in zip(state.system.components, state.batch.totals[i], strict=True)
            if v != 0.0
        }
        lines.append(
            f"state {i}: mass balance {proof['mass_balance'][i]:.1e}, supersaturation "
            f"{proof['supersaturation'][i]:.1e}, presence {proof['presence'][i]:.1e}; "
            f"totals {water!r}"
        )
    return "\n".join(lines)

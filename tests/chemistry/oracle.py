"""An independent equilibrium in 50 digits: plain Newton on every unknown at once, nothing shared.

The unknowns are log activities, amounts of the solids said to be present, ionic strength, and what
holding a pH or a CO2 pressure adds. Which solids are present is taken from outside and verified: no
amount below 0, no absent solid supersaturated; a start only saves steps.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field

from mpmath import mp, mpf

from chemistry import EquilibriumState, Species, System
from chemistry.formula import charge_of

DIGITS = 50
GUARD_DIGITS = 15
GAS_CONSTANT_KJ_PER_MOL_K = "8.314462618e-3"
LOG10_HENRY_CO2 = "-1.468"  # CO2(g) = CO2(aq), Plummer & Busenberg 1982
A_AT_25_DEGC = "0.509"


@dataclass(frozen=True)
class Held:
    """What is held besides totals: pH with a titrant (protons alone if none), pCO2 in atm."""

    ph: float | None = None
    pco2_atm: float | None = None
    titrant: Mapping[str, float] = field(default_factory=lambda: {"H+": 1.0})


@dataclass(frozen=True)
class Exact:
    """A solution in 50 digits, by name; ``misses`` is the largest relative error of a balance."""

    ln_activity: dict[str, mpf]
    dissolved: dict[str, mpf]
    solids: dict[str, mpf]
    ionic_strength: mpf
    titrant: mpf
    co2: mpf
    misses: mpf
    worst_absent_si: mpf

    @property
    def ph(self) -> mpf:
        """-log10 of the proton activity."""
        return -self.ln_activity["H+"] / mp.log(10)


class Water:
    """One water with its unknowns in a list: components, solids present, I, titrant, CO2."""

    def __init__(
        self, system: System, totals: Mapping[str, float], present: Iterable[str], held: Held
    ) -> None:
        self.system, self.held = system, held
        self.totals = {c: mpf(t) for c, t in totals.items()}
        names = {c for c, t in totals.items() if t != 0} | {"H+"}
        if held.ph is not None:
            names |= set(held.titrant)
        if held.pco2_atm is not None:
            names |= {"CO3-2"}
        self.components = [c for c in system.components if c in names]
        formed = [s for s in system.species if set(s.stoichiometry) <= names]
        self.species = [({c: 1}, mpf(0), charge_of(c)) for c in self.components]
        self.species += [(s.stoichiometry, self.ln_k(s), s.charge) for s in formed]
        possible = [s for s in system.solids if set(s.stoichiometry) <= names]
        self.solids = {s.name: (s.stoichiometry, self.ln_k(s)) for s in possible}
        self.present = list(present)
        self.size = len(self.components) + len(self.present) + 3

    def ln_k(self, item) -> mpf:
        """Natural log K at the system's temperature by van 't Hoff."""
        value = mp.log(10) * mpf(item.log10_k)
        if item.enthalpy_kj_per_mol is not None:
            kelvin = mpf(self.system.temperature_degc) + mpf("273.15")
            shift = 1 / kelvin - 1 / mpf("298.15")
            value -= mpf(item.enthalpy_kj_per_mol) / mpf(GAS_CONSTANT_KJ_PER_MOL_K) * shift
        return value

    def screening(self, strength: mpf) -> tuple[mpf, mpf]:
        """-ln g of a charge of 1 by Davies' equation, frozen above I = 0.5, and its slope."""
        if self.system.activity == "ideal":
            return mpf(0), mpf(0)
        if self.system.temperature_degc != 25.0:
            raise ValueError("the oracle knows Davies' A at 25 C alone")
        a = mpf(A_AT_25_DEGC) * mp.log(10)
        held = min(strength, mpf("0.5"))
        root = mp.sqrt(held)
        slope = a * (1 / (2 * root * (1 + root) ** 2) - mpf("0.3"))
        value = a * (root / (1 + root) - mpf("0.3") * held)
        return value, slope if strength < mpf("0.5") else mpf(0)

    def equations(self, unknowns: list[mpf]) -> tuple[mp.matrix, mp.matrix, list[mpf]]:
        """Errors, Jacobian and the sum of |terms| of every balance."""
        count, solids = len(self.components), len(self.present)
        index = {c: i for i, c in enumerate(self.components)}
        ln_a, amounts = unknowns[:count], unknowns[count : count + solids]
        strength, dose, co2 = unknowns[count + solids :]
        at_i, at_dose, at_co2 = (count + solids + k for k in range(3))
        errors, slopes = mp.matrix(self.size, 1), mp.matrix(self.size, self.size)
        scale = [mpf(0)] * count
        value, slope = self.screening(strength)
        errors[at_i], slopes[at_i, at_i] = -strength, mpf(-1)
        for parts, ln_k, z in self.species:
            ln_m = ln_k + z * z * value + sum(n * ln_a[index[c]] for c, n in parts.items())
            m = mp.exp(ln_m)
            errors[at_i] += m * z * z / 2
            slopes[at_i, at_i] += m * z**4 * slope / 2
            for c, n in parts.items():
                slopes[at_i, index[c]] += m * z * z * n / 2
                errors[index[c]] += n * m
                scale[index[c]] += abs(n) * m
                slopes[index[c], at_i] += n * m * z * z * slope
                for other, k in parts.items():
                    slopes[index[c], index[other]] += n * k * m
        for j, name in enumerate(self.present):
            parts, ln_k = self.solids[name]
            row = count + j
            errors[row] = ln_k + sum(n * ln_a[index[c]] for c, n in parts.items())
            for c, n in parts.items():
                slopes[row, index[c]] = mpf(n)
                slopes[index[c], row] = mpf(n)
                errors[index[c]] += n * amounts[j]
                scale[index[c]] += abs(n * amounts[j])
        for c, i in index.items():
            added = dose * mpf(self.held.titrant.get(c, 0)) + co2 * {"CO3-2": 1, "H+": 2}.get(c, 0)
            errors[i] -= self.totals.get(c, mpf(0)) + added
            slopes[i, at_dose] = -mpf(self.held.titrant.get(c, 0))
            slopes[i, at_co2] = -mpf({"CO3-2": 1, "H+": 2}.get(c, 0))
        self._conditions(index, unknowns, errors, slopes, at_dose, at_co2)
        return errors, slopes, scale

    def _conditions(self, index, unknowns, errors, slopes, at_dose, at_co2) -> None:
        """Rows of the dose and of the CO2 added: the held condition, else that nothing is added."""
        if self.held.ph is None:
            errors[at_dose], slopes[at_dose, at_dose] = unknowns[at_dose], mpf(1)
        else:
            slopes[at_dose, index["H+"]] = mpf(1)
            errors[at_dose] = unknowns[index["H+"]] + mp.log(10) * mpf(self.held.ph)
        if self.held.pco2_atm is None:
            errors[at_co2], slopes[at_co2, at_co2] = unknowns[at_co2], mpf(1)
        else:
            gas = next(s for s in self.system.species if s.name == "CO2(aq)")
            ln_a = mp.log(mpf(self.held.pco2_atm)) + mp.log(10) * mpf(LOG10_HENRY_CO2)
            errors[at_co2] = self.ln_k(gas) - ln_a
            for c, n in gas.stoichiometry.items():
                errors[at_co2] += n * unknowns[index[c]]
                slopes[at_co2, index[c]] = mpf(n)


def solve_exact(water: Water, start: list[mpf], rounds: int = 60) -> tuple[Exact, list[mpf]]:
    """Newton to 50 digits; raises where it does not arrive or the solids said present are wrong."""
    with mp.workdps(DIGITS + GUARD_DIGITS):
        unknowns = [mpf(u) for u in start]
        count = len(water.components)
        at_i = count + len(water.present)
        for _ in range(rounds):
            errors, slopes, _ = water.equations(unknowns)
            step = mp.lu_solve(slopes, -errors)
            largest = max([abs(step[i]) for i in range(count)])
            part = min(mpf(1), 3 / largest) if largest > 0 else mpf(1)
            unknowns = [u + part * step[i] for i, u in enumerate(unknowns)]
            unknowns[at_i] = max(unknowns[at_i], mpf("1e-12"))
            if largest < mpf(10) ** (-DIGITS // 2 - 3):
                break
        exact = _read(water, unknowns)
        if exact.misses > mpf(10) ** (8 - DIGITS):
            raise ArithmeticError(f"no convergence: {mp.nstr(exact.misses, 3)}")
        negative = [n for n, x in exact.solids.items() if x < 0]
        if negative or exact.worst_absent_si > 0:
            raise ArithmeticError(f"wrong solids: {negative}, SI {exact.worst_absent_si}")
        return exact, unknowns


def _read(water: Water, unknowns: list[mpf]) -> Exact:
    errors, _, scale = water.equations(unknowns)
    count = len(water.components)
    ln_a = dict(zip(water.components, unknowns[:count], strict=True))
    amounts = dict(zip(water.present, unknowns[count:-3], strict=True))
    value, _ = water.screening(unknowns[-3])
    dissolved = dict.fromkeys(water.components, mpf(0))
    for parts, ln_k, z in water.species:
        m = mp.exp(ln_k + z * z * value + sum(n * ln_a[c] for c, n in parts.items()))
        for c, n in parts.items():
            dissolved[c] += n * m
    absent = [
        ln_k + sum(n * ln_a[c] for c, n in parts.items())
        for name, (parts, ln_k) in water.solids.items()
        if name not in amounts
    ]
    misses = [abs(errors[i]) / scale[i] for i in range(count)]
    misses += [abs(errors[i]) for i in range(count, water.size)]
    worst = max(absent, default=mpf("-inf"))
    return Exact(ln_a, dissolved, amounts, unknowns[-3], *unknowns[-2:], max(misses), worst)


def water_of(state: EquilibriumState, held: Held | None = None) -> tuple[Water, list[mpf]]:
    """A state of one water as a `Water` with its solids, and a start from its numbers."""
    system = state.system
    given = zip(system.components, state.batch.totals[0], strict=True)
    present = [n for n, a in zip(system.solid_names, state.active[0], strict=True) if a]
    water = Water(system, {c: float(t) for c, t in given}, present, held or Held())
    ln_a = [mpf(float(state.log_activity[0, system.index[c]])) for c in water.components]
    amounts = [mpf(float(state.solids_mol_per_l[0, system.solid_names.index(n)])) for n in present]
    strength = mpf(float(state.ionic_strength[0]))
    co2 = mpf(0)
    if water.held.pco2_atm is not None:
        filled = float((state.totals - state.batch.totals)[0, system.index["CO3-2"]])
        dosed = float(state.titrant_mol_per_l[0]) * water.held.titrant.get("CO3-2", 0.0)
        co2 = mpf(filled - dosed)
    return water, [*ln_a, *amounts, strength, mpf(float(state.titrant_mol_per_l[0])), co2]


__all__ = ["DIGITS", "Exact", "Held", "Species", "Water", "solve_exact", "water_of"]

"""An independent equilibrium in 50 digits: plain Newton on every unknown at once, nothing shared.

The unknowns are log activities, amounts of the solids said to be present, what the activity
coefficients depend on, and what holding a pH or a CO2 pressure adds. Which solids are present is
taken from outside and verified: no amount below 0, no absent solid supersaturated; a start only
saves steps.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np
from mpmath import mp, mpf

from chemistry import EquilibriumState, Solid, Species, System
from chemistry.formula import charge_of
from tests.chemistry.oracle_activity import Coefficients, Evaluated

DIGITS = 50
GUARD_DIGITS = 15
SEED = 7
GAS_CONSTANT_KJ_PER_MOL_K = "8.314462618e-3"
# CO2(g) = CO2(aq) at 25 C, and its enthalpy in kJ/mol: Plummer & Busenberg 1982.
LOG10_HENRY_CO2, ENTHALPY_HENRY_CO2 = "-1.468", "-19.98"
CARBON_DIOXIDE = {"CO3-2": 1, "H+": 2}


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
        with mp.workdps(DIGITS + GUARD_DIGITS):
            return -self.ln_activity["H+"] / mp.log(10)


@dataclass(frozen=True)
class Formed:
    """A species or solid: components, ln K at temperature, charge, water of formation."""

    name: str
    parts: Mapping[str, float]
    ln_k: mpf
    charge: int
    water: mpf


class Water:
    """One water, its unknowns in a list: components, solids present, surroundings, titrant, CO2."""

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
        self.index = {c: i for i, c in enumerate(self.components)}
        self.species = [Formed(c, {c: 1}, mpf(0), charge_of(c), mpf(0)) for c in self.components]
        self.species += [self.formed(s) for s in system.species if set(s.stoichiometry) <= names]
        possible = [self.formed(s) for s in system.solids if set(s.stoichiometry) <= names]
        self.solids = {s.name: s for s in possible}
        self.present = list(present)
        self.coefficients = Coefficients(
            system, [s.name for s in self.species], [s.charge for s in self.species],
            [s.water for s in self.species],
        )  # fmt: skip
        self.at_y = len(self.components) + len(self.present)
        self.at_dose = self.at_y + self.coefficients.width
        self.at_co2, self.size = self.at_dose + 1, self.at_dose + 2

    def formed(self, item: Species | Solid) -> Formed:
        """With natural log K at the system's temperature."""
        value = self.ln_k_at(item.log10_k, item.enthalpy_kj_per_mol)
        charge = item.charge if isinstance(item, Species) else 0
        return Formed(item.name, item.stoichiometry, value, charge, mpf(item.water))

    def ln_k_at(self, log10_k: float | str, enthalpy_kj_per_mol: float | str | None) -> mpf:
        """Natural log of a constant given at 25 C at the system's temperature."""
        with mp.workdps(DIGITS + GUARD_DIGITS):
            kelvin = mpf(self.system.temperature_degc) + mpf("273.15")
            shift = (1 / kelvin - 1 / mpf("298.15")) / mpf(GAS_CONSTANT_KJ_PER_MOL_K)
            return mp.log(10) * mpf(log10_k) - mpf(enthalpy_kj_per_mol or 0) * shift

    def ln_activity_product(self, item: Formed, unknowns: Sequence[mpf]) -> mpf:
        """ln K plus the log activities of the components that form a species or solid."""
        return item.ln_k + sum(n * unknowns[self.index[c]] for c, n in item.parts.items())

    def equations(self, unknowns: Sequence[mpf]) -> tuple[mp.matrix, mp.matrix, list[mpf]]:
        """Errors, Jacobian and the sum of |terms| of every balance."""
        index, at_y = self.index, self.at_y
        seen = self.coefficients.evaluate(unknowns[at_y : self.at_dose])
        errors, slopes = mp.matrix(self.size, 1), mp.matrix(self.size, self.size)
        scale = [mpf(0)] * len(index)
        for j in range(self.coefficients.width):
            errors[at_y + j], slopes[at_y + j, at_y + j] = -unknowns[at_y + j], mpf(-1)
        for s, item in enumerate(self.species):
            m = mp.exp(self.ln_activity_product(item, unknowns) + seen.offsets[s])
            change = [(index[c], n * m) for c, n in item.parts.items()]
            change += [(at_y + j, m * o) for j, o in enumerate(seen.slopes[s])]
            counts = [(index[c], n) for c, n in item.parts.items()]
            for i, n in counts:
                scale[i] += abs(n) * m
            counts += [(at_y + j, w) for j, w in self.coefficients.weights(s).items()]
            for row, n in counts:
                errors[row] += n * m
                for column, dm in change:
                    slopes[row, column] += n * dm
        for j, name in enumerate(self.present):
            item, row = self.solids[name], len(index) + j
            errors[row] = self.ln_activity_product(item, unknowns) + item.water * seen.ln_water
            for k, by_water in enumerate(seen.by_water):
                slopes[row, at_y + k] = item.water * by_water
            for c, n in item.parts.items():
                slopes[row, index[c]] = slopes[index[c], row] = mpf(n)
                errors[index[c]] += n * unknowns[row]
                scale[index[c]] += abs(n * unknowns[row])
        self._additions(unknowns, seen, errors, slopes)
        return errors, slopes, scale

    def _additions(
        self, unknowns: Sequence[mpf], seen: Evaluated, errors: mp.matrix, slopes: mp.matrix
    ) -> None:
        """Totals with what is added, and the conditions held, else that nothing is added."""
        index, held = self.index, self.held
        for at, way in ((self.at_dose, held.titrant), (self.at_co2, CARBON_DIOXIDE)):
            errors[at], slopes[at, at] = unknowns[at], mpf(1)
            for c, i in index.items():
                errors[i] -= unknowns[at] * mpf(way.get(c, 0))
                slopes[i, at] = -mpf(way.get(c, 0))
        for c, i in index.items():
            errors[i] -= self.totals.get(c, mpf(0))
        if held.ph is not None:
            slopes[self.at_dose, self.at_dose] = mpf(0)
            slopes[self.at_dose, index["H+"]] = mpf(1)
            errors[self.at_dose] = unknowns[index["H+"]] + mp.log(10) * mpf(held.ph)
        if held.pco2_atm is not None:
            gas = next(s for s in self.species if s.name == "CO2(aq)")
            ln_a = mp.log(mpf(held.pco2_atm)) + self.ln_k_at(LOG10_HENRY_CO2, ENTHALPY_HENRY_CO2)
            slopes[self.at_co2, self.at_co2] = mpf(0)
            ln_gas = self.ln_activity_product(gas, unknowns) + gas.water * seen.ln_water
            errors[self.at_co2] = ln_gas - ln_a
            for k, by_water in enumerate(seen.by_water):
                slopes[self.at_co2, self.at_y + k] = gas.water * by_water
            for c, n in gas.parts.items():
                slopes[self.at_co2, index[c]] = mpf(n)


class Factors:
    """The slopes at a solution, factored once: enough for steps to solutions close by."""

    def __init__(self, water: Water, unknowns: Sequence[mpf]) -> None:
        with mp.workdps(DIGITS + GUARD_DIGITS):
            _, slopes, _ = water.equations(unknowns)
            self.lower_upper, self.order = mp.LU_decomp(slopes)

    def solve(self, right: mp.matrix) -> mp.matrix:
        """Solution for one right-hand side."""
        return mp.U_solve(self.lower_upper, mp.L_solve(self.lower_upper, right, self.order))


def solve_exact(
    water: Water, start: Sequence[mpf], rounds: int = 60, factors: Factors | None = None
) -> tuple[Exact, list[mpf]]:
    """Newton to 50 digits; raises where it does not arrive or the solids said present are wrong.

    ``factors`` of a solution close by save most of the work.
    """
    with mp.workdps(DIGITS + GUARD_DIGITS):
        unknowns = [mpf(u) for u in start]
        for _ in range(rounds):
            errors, slopes, _ = water.equations(unknowns)
            step = factors.solve(-errors) if factors else mp.lu_solve(slopes, -errors)
            largest = max(abs(step[i]) for i in range(len(water.components)))
            part = min(mpf(1), 3 / largest) if largest > 0 else mpf(1)
            before = unknowns
            unknowns = [u + part * step[i] for i, u in enumerate(unknowns)]
            for i in range(water.at_y, water.at_dose):
                unknowns[i] = max(unknowns[i], before[i] / 100)
            if largest < mpf(10) ** (-DIGITS // 2 - 3):
                break
        exact = _read(water, unknowns)
        if exact.misses > mpf(10) ** (8 - DIGITS):
            raise ArithmeticError(f"no convergence: {mp.nstr(exact.misses, 3)}")
        negative = [n for n, x in exact.solids.items() if x < 0]
        if negative or exact.worst_absent_si > 0:
            raise ArithmeticError(f"wrong solids: {negative}, SI {exact.worst_absent_si}")
        return exact, unknowns


def _read(water: Water, unknowns: Sequence[mpf]) -> Exact:
    errors, _, scale = water.equations(unknowns)
    count = len(water.components)
    ln_a = dict(zip(water.components, unknowns[:count], strict=True))
    amounts = dict(zip(water.present, unknowns[count : water.at_y], strict=True))
    seen = water.coefficients.evaluate(unknowns[water.at_y : water.at_dose])
    dissolved, strength = dict.fromkeys(water.components, mpf(0)), mpf(0)
    for s, item in enumerate(water.species):
        m = mp.exp(water.ln_activity_product(item, unknowns) + seen.offsets[s])
        strength += m * item.charge**2 / 2
        for c, n in item.parts.items():
            dissolved[c] += n * m
    absent = [
        water.ln_activity_product(item, unknowns) + item.water * seen.ln_water
        for name, item in water.solids.items()
        if name not in amounts
    ]
    misses = [abs(errors[i]) / scale[i] for i in range(count)]
    misses += [abs(errors[i]) for i in range(count, water.size)]
    worst = max(absent, default=mpf("-inf"))
    return Exact(
        ln_a, dissolved, amounts, strength, unknowns[water.at_dose], unknowns[water.at_co2],
        max(misses), worst,
    )  # fmt: skip


def water_of(
    state: EquilibriumState, held: Held | None = None, totals: Mapping[str, float] | None = None
) -> tuple[Water, list[mpf]]:
    """A state of one water as a `Water` with its solids, and a start from its numbers.

    ``totals`` are the state's unless given.
    """
    system = state.system
    given = dict(zip(system.components, map(float, state.batch.totals[0]), strict=True))
    present = [n for n, a in zip(system.solid_names, state.active[0], strict=True) if a]
    water = Water(system, totals or given, present, held or Held())
    start = [float(state.log_activity[0, system.index[c]]) for c in water.components]
    start += [float(state.solids_mol_per_l[0, system.solid_names.index(n)]) for n in present]
    if water.coefficients.is_sit:
        m = dict(zip(system.species_names, state.species_mol_per_l[0], strict=True))
        start += [float(m[s.name]) for s in water.species]
    else:
        start.append(float(state.ionic_strength[0]))
    dose = float(state.titrant_mol_per_l[0])
    co2 = 0.0
    if water.held.pco2_atm is not None:
        filled = float((state.totals - state.batch.totals)[0, system.index["CO3-2"]])
        co2 = filled - dose * water.held.titrant.get("CO3-2", 0.0)
    return water, [mpf(value) for value in (*start, dose, co2)]


def blurred(start: Sequence[mpf]) -> list[mpf]:
    """A start that only shows the size of each number, so that the oracle has to find the rest."""
    rng = np.random.default_rng(SEED)
    return [u + mpf(float(rng.uniform(-0.3, 0.3))) * min(mpf(1), abs(u)) for u in start]


def worst_difference(state: EquilibriumState, exact: Exact) -> float:
    """Largest relative difference of a dissolved total, protons against the sum of their terms."""
    system, worst = state.system, 0.0
    scale = state.species_mol_per_l[0] @ np.abs(system.formation)
    for name, value in exact.dissolved.items():
        column = system.index[name]
        difference = float(abs(value - mpf(float(state.dissolved_mol_per_l[0, column]))))
        worst = max(worst, difference / (scale[column] if name == "H+" else float(abs(value))))
    return worst

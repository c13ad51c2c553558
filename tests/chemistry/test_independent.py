"""Independent methods agree: Newton in 50 digits, and Gibbs energy minimised by a cone solver."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import product

import numpy as np
import pytest
from mpmath import mpf
from numpy.typing import NDArray

from catalogs import load_system
from chemistry import EquilibriumState, System, equilibrate
from tests.chemistry.certificate import ln_gamma
from tests.chemistry.oracle import (
    DIGITS,
    SEED,
    Held,
    blurred,
    solve_exact,
    water_of,
    worst_difference,
)

FloatArray = NDArray[np.float64]

DISSOLVED_AGREES = 1e-9  # relative; the promise is 1e-6
GIBBS_AGREES = 1e-6
GIBBS_FROM_MOL_PER_L = 1e-6

CONE_GAPS = (1e-12, 2e-12, 4e-12)  # tightest first; rounding does not always allow it
# Units of the energy tried at each gap: whether rounding allows the gap hangs on the last digit.
CONE_UNITS = (1.0, 0.7, 1.5, 0.4, 3.0)

# Components beside H+, at most seven of them; the proton total closes the charge.
KINDS: dict[str, tuple[str, ...]] = {
    "plating rinse": ("Na+", "Ca+2", "Cu+2", "Zn+2", "Cl-", "SO4-2", "CO3-2"),
    "nickel and cadmium with sulfide": ("Na+", "Ni+2", "Cd+2", "NH4+", "Cl-", "HS-"),
    "lead and silver": ("Na+", "Pb+2", "Ag+", "Cl-", "SO4-2", "CO3-2"),
    "iron, aluminium, fluoride, phosphate": (
        "Na+", "Ca+2", "Fe+3", "Al+3", "F-", "PO4-3", "SO4-2",
    ),
    "barium and strontium": ("Na+", "Ba+2", "Sr+2", "Cl-", "SO4-2", "CO3-2"),
    "chromium, manganese, cobalt": ("Na+", "Mg+2", "Cr+3", "Mn+2", "Co+2", "Cl-", "SO4-2"),
    "mercury and chloride": ("Na+", "Hg+2", "Ca+2", "Cl-", "CH3COO-", "CO3-2"),
    "struvite": ("K+", "Mg+2", "Ca+2", "NH4+", "PO4-3", "CO3-2", "Cl-"),
}  # fmt: skip
PER_KIND = 3


@dataclass(frozen=True)
class Case:
    """One water of a kind; ``low`` to ``high`` are the decades that its totals were drawn from."""

    kind: str
    number: int
    decades: tuple[float, float]

    @property
    def system(self) -> System:
        return load_system(components=["H+", *KINDS[self.kind]], activity="davies")

    @property
    def totals(self) -> FloatArray:
        rng = np.random.default_rng([SEED, list(KINDS).index(self.kind), self.number])
        system = self.system
        proton = system.index["H+"]
        totals = 10.0 ** rng.uniform(*self.decades, len(system.components))
        totals[proton] = 0.0
        totals[proton] = -(totals @ system.component_charges)
        return totals

    def __str__(self) -> str:
        return f"{self.kind} {self.number}"


DECADES = ((-6.0, -0.7), (-4.0, -1.0), (-8.0, -2.0))
CASES = [Case(kind, n, DECADES[n % len(DECADES)]) for kind in KINDS for n in range(PER_KIND)]
GIBBS_CASES = [c for c in CASES if np.delete(c.totals, 0).min() >= GIBBS_FROM_MOL_PER_L]


@pytest.mark.parametrize("case", CASES, ids=str)
def test_fifty_digits_give_the_same_dissolved_totals(case: Case) -> None:
    state = equilibrate(case.system, case.totals)
    water, start = water_of(state)
    exact, _ = solve_exact(water, blurred(start))
    assert exact.misses < mpf(10) ** (8 - DIGITS)
    assert worst_difference(state, exact) < DISSOLVED_AGREES
    assert abs(float(exact.ph) - state.ph[0]) < 1e-9
    for name, amount in exact.solids.items():
        here = state.solids_mol_per_l[0, state.system.solid_names.index(name)]
        assert float(amount) == pytest.approx(here, rel=1e-7, abs=1e-12)


HELD = {
    "pH": Held(ph=9.2),
    "pCO2": Held(pco2_atm=4e-4),
    "pH and pCO2": Held(ph=7.5, pco2_atm=1e-3),
    "pH by lime": Held(ph=9.0, titrant={"Ca+2": 1.0, "H+": -2.0}),
    "pH by soda ash": Held(ph=8.0, titrant={"Na+": 2.0, "CO3-2": 1.0}),
    "pH by soda ash in open air": Held(ph=8.2, pco2_atm=4e-4, titrant={"Na+": 2.0, "CO3-2": 1.0}),
}


@pytest.mark.parametrize("held", HELD.values(), ids=list(HELD))
def test_fifty_digits_agree_where_ph_or_pressure_is_held(held: Held) -> None:
    system = load_system(components=["H+", *KINDS["plating rinse"]], activity="davies")
    totals = {"Na+": 2e-3, "Ca+2": 1e-3, "Cu+2": 6e-4, "Zn+2": 3e-4, "Cl-": 2e-3, "SO4-2": 5e-3}
    totals["H+"] = 1.0e-2 + 2e-3 - 2e-3 - 2 * (1e-3 + 6e-4 + 3e-4)
    titrant = np.array([held.titrant.get(c, 0.0) for c in system.components])
    state = equilibrate(system, totals, ph=held.ph, pco2_atm=held.pco2_atm, titrant=titrant)
    exact, _ = solve_exact(*water_of(state, held))
    assert worst_difference(state, exact) < DISSOLVED_AGREES
    assert float(exact.titrant) == pytest.approx(float(state.titrant_mol_per_l[0]), rel=1e-9)


SALTY = {
    "sodium chloride brine with lime": {
        "Na+": 1.4, "Cl-": 1.5, "Ca+2": 0.1, "SO4-2": 0.02, "H+": -0.06,
    },
    "sulfate brine at its gypsum": {"Na+": 0.8, "Ca+2": 0.05, "SO4-2": 0.45, "H+": 0.0},
    "acid chloride brine with lead": {"Na+": 0.3, "Pb+2": 0.05, "Cl-": 0.7, "H+": 0.3},
    "copper ammonia brine": {"NH4+": 0.8, "Cu+2": 0.01, "Cl-": 0.5, "H+": -0.32},
}  # fmt: skip


@pytest.mark.parametrize("totals", SALTY.values(), ids=list(SALTY))
def test_fifty_digits_agree_in_salty_water(totals: dict[str, float]) -> None:
    """Specific ion interaction, water activity included, written twice."""
    system = load_system(components=list(dict.fromkeys(["H+", *totals])), activity="sit")
    state = equilibrate(system, totals)
    assert state.ionic_strength[0] > 0.5
    exact, _ = solve_exact(*water_of(state))
    assert worst_difference(state, exact) < DISSOLVED_AGREES
    assert abs(float(exact.ph) - state.ph[0]) < 1e-9
    assert float(exact.ionic_strength) == pytest.approx(state.ionic_strength[0], rel=1e-9)


def gibbs_dissolved(state: EquilibriumState) -> FloatArray:
    """Dissolved totals at the least Gibbs energy, coefficients fixed at the state's, (components,).

    The energy over RT is ``sum n (ln n - 1 - ln K + ln g) - sum x ln Ks``; the multipliers of the
    balances are the components' potentials, and give the smallest concentrations best. Amounts are
    counted in units of the most that the totals allow.
    """
    import cvxpy as cp

    system, totals = state.system, state.totals[0]
    a, g = system.formation, system.solid_formation
    ln_k = np.log(10.0) * np.array([0.0] * totals.size + [s.log10_k for s in system.species])
    ln_ks = np.log(10.0) * np.array([s.log10_k for s in system.solids])
    constants = ln_k - ln_gamma(state, system.charges)[0]
    unit, solid_unit = most_of(a, system, totals), most_of(g, system, totals)
    y, x = cp.Variable(unit.size), cp.Variable(solid_unit.size, nonneg=True)
    row = np.abs(a).T @ unit + np.abs(g).T @ solid_unit
    left = (a.T * unit / row[:, None]) @ y + (g.T * solid_unit / row[:, None]) @ x
    balances = left == totals / row
    energy = -unit @ cp.entr(y) + (unit * (np.log(unit) - 1.0 - constants)) @ y
    energy -= (ln_ks * solid_unit) @ x
    for gap, factor in product(CONE_GAPS, CONE_UNITS):
        size = unit.max() * factor
        problem = cp.Problem(cp.Minimize(energy / size), [balances])
        problem.solve(
            solver=cp.CLARABEL, tol_gap_abs=gap, tol_gap_rel=gap, tol_feas=gap, warm_start=False
        )
        if problem.status == cp.OPTIMAL:
            break
    assert problem.status == cp.OPTIMAL
    potentials = -np.asarray(balances.dual_value) * size / row
    return np.exp(a @ potentials + constants) @ a


def most_of(rows: FloatArray, system: System, totals: FloatArray) -> FloatArray:
    """Most of each species or solid that the totals allow, protons apart. [mol/L]"""
    proton = system.index["H+"]
    with np.errstate(divide="ignore"):
        room = np.where(rows > 0.0, totals / np.where(rows > 0.0, rows, 1.0), np.inf)
    room[:, proton] = np.inf
    most = room.min(axis=1)
    return np.where(np.isfinite(most), most, max(1e-6, abs(totals[proton])))


def test_enough_waters_are_compared() -> None:
    assert len(CASES) >= 20
    assert len(GIBBS_CASES) >= 15
    assert max(len(c.system.components) for c in CASES) == 8


@pytest.mark.filterwarnings("ignore:Solution may be inaccurate")
@pytest.mark.parametrize("case", GIBBS_CASES, ids=str)
def test_the_least_gibbs_energy_gives_the_same_dissolved_totals(case: Case) -> None:
    state = equilibrate(case.system, case.totals)
    found = gibbs_dissolved(state)
    scale = state.species_mol_per_l[0] @ np.abs(state.system.formation)
    difference = np.abs(found - state.dissolved_mol_per_l[0])
    reference = np.abs(state.dissolved_mol_per_l[0])
    proton = state.system.index["H+"]
    reference[proton] = scale[proton]
    assert (difference / reference).max() < GIBBS_AGREES

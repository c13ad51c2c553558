"""Salty water: specific ion interaction against measured coefficients and written-out equations."""

from __future__ import annotations

import numpy as np
import pytest
from mpmath import mpf
from numpy.typing import NDArray

from catalogs import load_system
from catalogs.interactions import interaction_table
from chemistry import EquilibriumState, System, equilibrate
from chemistry.activity import (
    SALTY_FROM_MOL_PER_L,
    WATER_MOL_PER_KG,
    choose_activity,
    interaction_by_rule,
)
from tests.chemistry.oracle import Factors, solve_exact, water_of
from tests.chemistry.oracle_differences import Difference
from tests.chemistry.test_random_waters import assert_same_states
from tests.chemistry.waters import random_waters, replay

FloatArray = NDArray[np.float64]

LN10 = float(np.log(10.0))
MOLALITIES = np.array([0.1, 0.2, 0.5, 1.0, 2.0])

# Mean activity coefficients at these molalities and 25 C: Robinson & Stokes 1959, Electrolyte
# Solutions, appendix 8.10, from memory. Cation, its number, anion, its number; then how far the
# model may be off, which is what it was found to be, rounded up.
MEASURED: dict[str, tuple[str, int, str, int, tuple[float, ...], float]] = {
    "NaCl": ("Na+", 1, "Cl-", 1, (0.778, 0.735, 0.681, 0.657, 0.668), 0.03),
    "KCl": ("K+", 1, "Cl-", 1, (0.770, 0.718, 0.649, 0.604, 0.573), 0.04),
    "HCl": ("H+", 1, "Cl-", 1, (0.796, 0.767, 0.757, 0.809, 1.009), 0.03),
    "NaOH": ("Na+", 1, "OH-", 1, (0.766, 0.727, 0.690, 0.678, 0.709), 0.03),
    "KOH": ("K+", 1, "OH-", 1, (0.798, 0.760, 0.732, 0.756, 0.888), 0.03),
    "NH4Cl": ("NH4+", 1, "Cl-", 1, (0.770, 0.718, 0.649, 0.603, 0.570), 0.03),
    "NaCH3COO": ("Na+", 1, "CH3COO-", 1, (0.791, 0.757, 0.735, 0.757, 0.851), 0.02),
    "NaH2PO4": ("Na+", 1, "H2PO4-", 1, (0.744, 0.675, 0.563, 0.468, 0.371), 0.12),
    "CaCl2": ("Ca+2", 1, "Cl-", 2, (0.518, 0.472, 0.448, 0.500), 0.02),
    "MgCl2": ("Mg+2", 1, "Cl-", 2, (0.529, 0.489, 0.481, 0.570), 0.02),
    "BaCl2": ("Ba+2", 1, "Cl-", 2, (0.500, 0.444, 0.397, 0.395), 0.025),
    "AlCl3": ("Al+3", 1, "Cl-", 3, (0.337, 0.305, 0.331, 0.539), 0.09),
    "Na2SO4": ("Na+", 2, "SO4-2", 1, (0.445, 0.365, 0.266, 0.201, 0.152), 0.03),
    "(NH4)2SO4": ("NH4+", 2, "SO4-2", 1, (0.439, 0.356, 0.257, 0.189, 0.145), 0.05),
    "K2SO4": ("K+", 2, "SO4-2", 1, (0.441, 0.360, 0.264), 0.02),
    "H2SO4": ("H+", 2, "SO4-2", 1, (0.2655, 0.2090, 0.1557, 0.1316, 0.1276), 0.08),
    "MgSO4": ("Mg+2", 1, "SO4-2", 1, (0.150, 0.1075, 0.0675, 0.0485, 0.0417), 0.12),
    "ZnSO4": ("Zn+2", 1, "SO4-2", 1, (0.150, 0.104, 0.063, 0.0435, 0.0357), 0.15),
    "CuSO4": ("Cu+2", 1, "SO4-2", 1, (0.150, 0.104, 0.062, 0.0423), 0.06),
    "CdSO4": ("Cd+2", 1, "SO4-2", 1, (0.150, 0.103, 0.061, 0.0415, 0.0321), 0.14),
    "NiSO4": ("Ni+2", 1, "SO4-2", 1, (0.150, 0.105, 0.063, 0.0425, 0.0343), 0.16),
    "NiCl2": ("Ni+2", 1, "Cl-", 2, (0.522, 0.479, 0.464, 0.536, 0.906), 0.19),
    "CoCl2": ("Co+2", 1, "Cl-", 2, (0.522, 0.479, 0.462, 0.531, 0.864), 0.06),
    "MnCl2": ("Mn+2", 1, "Cl-", 2, (0.516, 0.469, 0.440, 0.479, 0.661), 0.10),
    "FeCl2": ("Fe+2", 1, "Cl-", 2, (0.518, 0.473, 0.450, 0.506, 0.785), 0.18),
    "CdCl2": ("Cd+2", 1, "Cl-", 2, (0.2280, 0.1638, 0.1006, 0.0669, 0.0441), 0.09),
    # Chloride of the metal itself is beyond the table above 0.2 mol/kg, see its header.
    "CuCl2": ("Cu+2", 1, "Cl-", 2, (0.508, 0.455), 0.10),
    "ZnCl2": ("Zn+2", 1, "Cl-", 2, (0.515, 0.462), 0.08),
}
OSMOTIC_SODIUM_CHLORIDE = (0.932, 0.925, 0.921, 0.936, 0.983)  # the same appendix, from memory


def carrier_of(ion: str) -> tuple[str, int]:
    """Component that brings an anion, and the protons it brings with it."""
    return {"OH-": ("H+", -1), "H2PO4-": ("PO4-3", 2)}.get(ion, (ion, 0))


def salt_in_water(salt: str, activity: str = "sit") -> tuple[EquilibriumState, FloatArray]:
    """A pure salt at the measured molalities, no solids; also those molalities."""
    cation, n, anion, k, measured, _ = MEASURED[salt]
    molality = MOLALITIES[: len(measured)]
    carrier, protons = carrier_of(anion)
    system = load_system(components=[cation, carrier], solids=[], activity=activity)
    totals = {c: np.zeros(molality.size) for c in system.components}
    totals[cation] += n * molality
    if anion == "OH-":
        totals["H+"] -= molality
    else:
        totals[carrier] += k * molality
        totals["H+"] += protons * molality
    return equilibrate(system, totals), molality


def ln_activity(state: EquilibriumState, species: str) -> FloatArray:
    """Natural log activity of any species, (n,)."""
    system = state.system
    row = system.species_names.index(species)
    known = state.log_activity @ system.formation[row] + system.ln_k[row]
    return known + system.water[row] * state.kernel.model.ln_water(state.surroundings)


def mean_coefficients(salt: str, activity: str = "sit") -> FloatArray:
    """Mean stoichiometric activity coefficients of a pure salt, (molalities,)."""
    cation, n, anion, k, _, _ = MEASURED[salt]
    state, m = salt_in_water(salt, activity)
    plus = ln_activity(state, cation) - np.log(n * m)
    minus = ln_activity(state, anion) - np.log(k * m)
    return np.exp((n * plus + k * minus) / (n + k))


# -- against measurement ---------------------------------------------------------------------------


@pytest.mark.parametrize("salt", list(MEASURED))
def test_mean_coefficients_are_the_measured_ones(salt: str) -> None:
    *_, measured, most = MEASURED[salt]
    off = mean_coefficients(salt) / np.array(measured) - 1.0
    assert np.abs(off).max() <= most


def test_the_frozen_term_of_davies_is_far_off_where_specific_interaction_is_not() -> None:
    for salt in ("KCl", "BaCl2", "Na2SO4", "MgSO4"):
        measured, most = MEASURED[salt][4:]
        davies = np.abs(mean_coefficients(salt, "davies")[3:4] / measured[3:4] - 1.0)
        assert davies > 0.2 > most


def test_concentrated_copper_and_zinc_chloride_are_known_to_be_beyond_the_table() -> None:
    """What the header of the table says: 20 to 60 % off above 0.2 mol/kg."""
    for metal, measured in (("Cu+2", 0.417), ("Zn+2", 0.339)):
        system = load_system(components=[metal, "Cl-"], solids=[], activity="sit")
        state = equilibrate(system, {metal: 1.0, "Cl-": 2.0})
        ln_g = ln_activity(state, metal)[0] + 2.0 * (ln_activity(state, "Cl-")[0] - np.log(2.0))
        assert 0.2 < 1.0 - np.exp(ln_g / 3.0) / measured < 0.6


def test_the_activity_of_water_gives_the_measured_osmotic_coefficients() -> None:
    state, m = salt_in_water("NaCl")
    ln_water = state.kernel.model.ln_water(state.surroundings)
    osmotic = -ln_water * WATER_MOL_PER_KG / (2.0 * m)
    np.testing.assert_allclose(osmotic, OSMOTIC_SODIUM_CHLORIDE, rtol=0.01)
    assert 0.978 <= osmotic[-1] <= 0.983


def test_salt_drives_dissolved_gases_out() -> None:
    """Setschenow coefficients of NaCl: CO2 0.10 (Harned & Davis 1943), H2S 0.07, NH3 0.015."""
    system = load_system(
        components=["Na+", "Cl-", "CO3-2", "HS-", "NH4+"], solids=[], activity="sit"
    )
    trace = dict.fromkeys(("CO3-2", "HS-", "NH4+"), 1e-6)
    totals = {c: np.full(2, v) for c, v in trace.items()}
    totals |= {"Na+": np.array([1e-5, 1.0]), "Cl-": np.array([1e-5, 1.0])}
    state = equilibrate(system, totals, ph=7.0)
    for gas, salting in (("CO2(aq)", 0.10), ("H2S(aq)", 0.07), ("NH3(aq)", 0.015)):
        m = state.species_mol_per_l[:, system.species_names.index(gas)]
        log10_g = (ln_activity(state, gas) - np.log(m)) / LN10
        assert log10_g[1] - log10_g[0] == pytest.approx(salting, abs=1e-4)


def test_dilute_waters_hardly_feel_which_model_is_taken() -> None:
    rinse = {
        "Na+": 4e-3, "Ca+2": 1e-3, "Cu+2": 6e-4, "Zn+2": 3e-4, "Cl-": 2e-3, "SO4-2": 3e-3,
        "CO3-2": 1e-3,
    }  # fmt: skip
    residuals = [
        equilibrate(load_system(components=rinse, activity=name), rinse, ph=9.0).dissolved
        for name in ("davies", "sit")
    ]
    for metal in ("Cu+2", "Zn+2"):
        davies, sit = (float(r[metal].iloc[0]) for r in residuals)
        assert sit == pytest.approx(davies, rel=0.02)


# -- which model -----------------------------------------------------------------------------------


def test_salty_waters_get_specific_interaction_and_dilute_ones_davies() -> None:
    assert choose_activity(0.0) == choose_activity(SALTY_FROM_MOL_PER_L) == "davies"
    assert choose_activity(SALTY_FROM_MOL_PER_L + 1e-9) == choose_activity(4.0) == "sit"


def test_each_model_says_how_far_it_is_trusted() -> None:
    reach = {
        name: load_system(components=["Na+"], activity=name).activity_model.trusted_to_mol_per_l
        for name in ("davies", "sit")
    }
    assert reach == {"davies": 0.5, "sit": 3.0}


# -- against equations written out -----------------------------------------------------------------

SITE = ("Na+", "Ca+2", "Cu+2", "Zn+2", "Cl-", "SO4-2", "CO3-2")
BRINE = {
    "Na+": 0.91, "Ca+2": 0.03, "Cu+2": 1e-3, "Zn+2": 1e-3, "Cl-": 0.8, "SO4-2": 0.08,
    "CO3-2": 4e-3, "H+": 0.0,
}  # fmt: skip


@pytest.fixture(scope="module")
def system() -> System:
    return load_system(components=SITE, activity="sit")


@pytest.fixture(scope="module")
def brine(system: System) -> EquilibriumState:
    charges = dict(zip(system.components, system.component_charges, strict=True))
    surplus = sum(amount * charges[c] for c, amount in BRINE.items())
    return equilibrate(system, BRINE | {"H+": -float(surplus)})


def test_the_groups_of_species_give_the_sum_over_all_pairs(brine: EquilibriumState) -> None:
    system, m = brine.system, brine.species_mol_per_l[0]
    names, z = system.species_names, system.charges
    table = {pair: row.coefficient_kg_per_mol for pair, row in interaction_table().items()}
    root = np.sqrt(0.5 * m @ z**2)
    expected = -(z**2) * 0.509 * root / (1.0 + 1.5 * root)
    for i, one in enumerate(names):
        for k, other in enumerate(names):
            rule = interaction_by_rule(one, other, z[i], z[k])
            expected[i] += table.get((one, other), table.get((other, one), rule)) * m[k]
    model = brine.kernel.model
    ln_water = model.ln_water(brine.surroundings)[0]
    found = -(model.offset(brine.surroundings)[0] - system.water * ln_water) / LN10
    np.testing.assert_allclose(found, expected, rtol=1e-11, atol=1e-12)
    assert model.width < 0.75 * len(names)


def test_fifty_digits_give_the_same_water_and_the_same_derivatives(
    brine: EquilibriumState,
) -> None:
    assert brine.active.sum() >= 3
    assert brine.ionic_strength[0] > 0.9
    names, slopes = brine.system.components, brine.sensitivity(np.eye(len(brine.totals[0])))
    water, start = water_of(brine)
    factors = Factors(water, start)
    exact, unknowns = solve_exact(water, start, factors=factors)
    for column, name in enumerate(names):
        found = brine.dissolved_mol_per_l[0, column]
        value = exact.dissolved[name]
        assert float(abs(value - mpf(float(found)))) < 1e-10 * max(abs(float(value)), 1e-4), name
        expected = Difference(water, unknowns, name, factors).dissolved(names)
        np.testing.assert_allclose(
            slopes.dissolved[0, :, column], expected, rtol=1e-8,
            atol=1e-9 * max(1.0, float(np.abs(expected).max())),
        )  # fmt: skip


# -- random salty waters ---------------------------------------------------------------------------

COUNT = 500
STARTED_TWICE = 150
SEED = 20_261_202


@pytest.fixture(scope="module")
def salty() -> tuple[System, FloatArray, EquilibriumState]:
    """Random waters with 0.1 to 1.5 mol/L of sodium, potassium, magnesium or calcium salts."""
    whole = load_system(activity="sit")
    rng = np.random.default_rng(SEED)
    totals = random_waters(whole, COUNT, SEED).totals
    proton = whole.index["H+"]
    for cation, anion in (("Na+", "Cl-"), ("Na+", "SO4-2"), ("K+", "Cl-"), ("Ca+2", "Cl-")):
        z = whole.component_charges[[whole.index[cation], whole.index[anion]]]
        salt = np.where(rng.random(COUNT) < 0.5, rng.uniform(0.1, 1.0, COUNT), 0.0)
        totals[:, whole.index[cation]] += salt * abs(z[1])
        totals[:, whole.index[anion]] += salt * abs(z[0])
    totals[:, proton] = 0.0
    totals[:, proton] = -(totals @ whole.component_charges)
    return whole, totals, equilibrate(whole, totals, on_failure="flag")


def test_every_random_salty_water_is_certified(
    salty: tuple[System, FloatArray, EquilibriumState],
) -> None:
    system, _, state = salty
    assert (state.ionic_strength > 0.5).mean() > 0.7
    assert (state.ionic_strength > 2.0).mean() > 0.2
    m, proof = state.species_mol_per_l, state.certificate_arrays
    strength = 0.5 * m @ system.charges**2
    good = (
        state.converged
        & (proof["mass_balance"] <= 1e-10)
        & (proof["supersaturation"] <= 1e-8)
        & (proof["presence"] <= 1e-8)
        & (np.abs(strength / state.ionic_strength - 1.0) <= 1e-10)
        & (np.abs(m @ state.kernel.functionals - state.surroundings).max(axis=1) <= 1e-10)
        & (state.solids_mol_per_l.min(axis=1) >= 0.0)
    )
    failed = [replay(system, state.totals[i]) for i in np.flatnonzero(~good)]
    assert not failed, "\n".join([f"{len(failed)} of {COUNT} waters failed:", *failed[:5]])


def test_a_water_of_neutral_species_alone_is_certified() -> None:
    """Ionic strength 1.6e-7 beside 3.7 mmol/L of mercury hydroxide: sums of unlike sizes."""
    water = {
        "Ca+2": 1.1402058973404794e-09, "Cl-": 7.146662097170147e-08,
        "Cr+3": 9.692282507766287e-06, "Hg+2": 0.003703821383457356,
        "H+": -0.007436650428228835,
    }  # fmt: skip
    state = equilibrate(load_system(activity="sit"), water)
    assert state.ionic_strength[0] < 1e-3 * state.species_mol_per_l[0].sum()


def test_two_starts_of_salty_waters_agree(
    salty: tuple[System, FloatArray, EquilibriumState],
) -> None:
    system, totals, state = salty
    totals = totals[:STARTED_TWICE]
    rng = np.random.default_rng(SEED + 1)
    moved = totals * 2.0 ** rng.uniform(-1.0, 1.0, totals.shape)
    proton = system.index["H+"]
    moved[:, proton] = 0.0
    moved[:, proton] = -(moved @ system.component_charges)
    again = equilibrate(system, totals, start=equilibrate(system, moved, on_failure="flag"))
    assert_same_states(again, state.rows(np.arange(STARTED_TWICE)))

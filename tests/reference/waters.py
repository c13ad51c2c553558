"""Small systems and waters that the published cases are computed on."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from chemistry import EquilibriumState, Solid, Species, System, equilibrate
from chemistry.formula import charge_of, molar_mass_g_per_mol
from chemistry.units import mol_per_l_to_mg_per_l

FloatArray = NDArray[np.float64]

# Far above any saturated water of the bare products, and small enough for double precision.
PLENTY_MOL_PER_L = 0.1


def bare_product(cation: str, anion: str, solid: str, ksp: float) -> System:
    """Two ions and their solid, ideal: no complexes, no protons."""
    n, k = _counts(cation, anion)
    reaction = f"{n} {cation} + {k} {anion} = {solid}(s)"
    return System(
        [cation, anion], [], [Solid.from_reaction(reaction, -np.log10(ksp))], activity="ideal"
    )


def saturated_with_bare_solid(cation: str, anion: str, solid: str, ksp: float) -> float:
    """Dissolved cation over the solid in pure water by its product alone. [mol/L]"""
    n, k = _counts(cation, anion)
    system = bare_product(cation, anion, solid, ksp)
    totals = {cation: n * PLENTY_MOL_PER_L, anion: k * PLENTY_MOL_PER_L}
    return dissolved(equilibrate(system, totals), cation)


def _counts(cation: str, anion: str) -> tuple[int, int]:
    plus, minus = charge_of(cation), -charge_of(anion)
    common = int(np.gcd(plus, minus))
    return minus // common, plus // common


def carbonate_water(pk1: float, pk2: float, pkw: float, *, activity: str) -> System:
    """Sodium and carbonate with the dissociation constants given, without solids."""
    return System(
        ["H+", "Na+", "CO3-2"],
        [
            Species.from_reaction("H2O = OH- + H+", -pkw),
            Species.from_reaction("CO3-2 + H+ = HCO3-", pk2),
            Species.from_reaction("CO3-2 + 2 H+ = CO2(aq) + H2O", pk1 + pk2, name="CO2(aq)"),
        ],
        activity=activity,
    )


def hydrolysing_metal(
    metal: str, hydroxide: str, log10_ks: float, log10_beta: Mapping[int, float]
) -> System:
    """Water, a metal with its hydroxo complexes and one solid, ideal.

    ``log10_ks`` per metal ion for ``solid + z H+ = metal + water``; ``log10_beta[n]`` for
    ``metal + n H2O = complex + n H+``.
    """
    z = charge_of(metal)
    symbol = metal.rstrip("+0123456789")
    species = [Species.from_reaction("H2O = OH- + H+", -14.0)]
    for n, log10_k in log10_beta.items():
        ligand = "OH" if n == 1 else f"(OH){n}"
        name = f"{symbol}{ligand}{_charge_text(z - n)}"
        species.append(
            Species.from_reaction(f"{metal} + {n} H2O = {name} + {n} H+", log10_k, name=name)
        )
    atoms = 2 if hydroxide == "Ag2O" else 1
    waters = 1 if hydroxide == "Ag2O" else z
    reaction = f"{atoms} {metal} + {waters} H2O = {hydroxide}(s) + {atoms * z} H+"
    solid = Solid.from_reaction(reaction, -atoms * log10_ks)
    return System(["H+", metal], species, [solid], activity="ideal")


def _charge_text(charge: int) -> str:
    if charge == 0:
        return "(aq)"
    size = "" if abs(charge) == 1 else str(abs(charge))
    return f"{'+' if charge > 0 else '-'}{size}"


def dissolved(state: EquilibriumState, component: str) -> float:
    """Dissolved total of a component in a single state. [mol/L]"""
    return float(dissolved_along(state, component)[0])


def dissolved_along(state: EquilibriumState, component: str) -> FloatArray:
    """Dissolved total of a component, (n,). [mol/L]"""
    return state.dissolved_mol_per_l[:, state.system.index[component]]


def free_ion(state: EquilibriumState, species: str) -> FloatArray:
    """Concentration of one species, (n,). [mol/L]"""
    return state.species_mol_per_l[:, state.system.species_names.index(species)]


def solid_amount(state: EquilibriumState, solid: str) -> FloatArray:
    """Amount of one solid, (n,). [mol/L]"""
    return state.solids_mol_per_l[:, state.system.solid_names.index(solid)]


def vector(system: System, components: Mapping[str, float]) -> FloatArray:
    """A reagent as moles of each component per mole."""
    row = np.zeros(len(system.components))
    for name, count in components.items():
        row[system.index[name]] = count
    return row


def mg_per_l(amount_mol_per_l: float, formula: str) -> float:
    """An amount as mass of the formula. [mg/L]"""
    return mol_per_l_to_mg_per_l(amount_mol_per_l, molar_mass_g_per_mol(formula))

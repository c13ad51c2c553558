"""Sludge: what the solids of a treated water weigh, dry and wet, and the metals in them.

Owns masses and metal contents per litre of water; classes and tariffs belong to the site. Arrays
run over states on axis 0.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import TypeVar

import numpy as np
from numpy.typing import NDArray

from chemistry.analysis import ANALYTES, METALS
from chemistry.errors import WaterError
from chemistry.formula import molar_mass_g_per_mol
from chemistry.system import System

FloatArray = NDArray[np.float64]
Mass = TypeVar("Mass", float, FloatArray)

# Dry hydroxide cakes weigh 1.1 to 1.4 times their formula (common practice).
BOUND_WATER_FACTOR = 1.2
# Press cake holds 25 to 35 % solids (common practice).
CAKE_SOLIDS_FRACTION = 0.30


def is_hydroxide(system: System) -> NDArray[np.bool_]:
    """Which candidate solids are metal hydroxides, (solids,).

    A hydroxide is made of metal cations, water and hydroxide alone and keeps hydrogen in its
    formula: ``Cu(OH)2``, ``Pb2O(OH)2``, not ``PbO`` and not ``Zn5(OH)6(CO3)2``.
    """
    stoichiometry, water = system.solid_formation, system.solid_water
    proton = system.index.get("H+", -1)
    if proton < 0:
        return np.zeros(len(system.solids), dtype=bool)
    cation = system.component_charges > 0.0
    cation[proton] = False
    other = ~cation
    other[proton] = False
    only_metal = np.all(stoichiometry[:, other] == 0.0, axis=1)
    hydrogen = 2.0 * water + stoichiometry[:, proton]
    return np.asarray(only_metal & (stoichiometry[:, proton] < 0.0) & (hydrogen > 0.5), dtype=bool)


def formula_masses_g_per_mol(system: System) -> FloatArray:
    """Molar mass of each solid summed over its components and water, (solids,). [g/mol]"""
    parts = np.array([molar_mass_g_per_mol(c) for c in system.components])
    water = molar_mass_g_per_mol("H2O")
    return np.asarray(system.solid_formation @ parts + water * system.solid_water, dtype=float)


def dry_masses_mg_per_l(
    solids_mol_per_l: FloatArray, system: System, *, bound_water_factor: float = BOUND_WATER_FACTOR
) -> FloatArray:
    """Dry mass of each solid, hydroxides with their bound water. [mg/L]

    Parameters
    ----------
    solids_mol_per_l : ndarray, shape (solids,) or (states, solids)
        Amounts of the system's candidate solids. [mol/L]
    system
        Names the solids.
    bound_water_factor
        Dry mass of a real hydroxide over its formula mass; 1 for the bare formula.

    Returns
    -------
    ndarray, same shape
        [mg/L]
    """
    if bound_water_factor < 1.0:
        raise WaterError(f"bound water factor {bound_water_factor:g} is below 1")
    factor = np.where(is_hydroxide(system), bound_water_factor, 1.0)
    weight = 1000.0 * formula_masses_g_per_mol(system) * factor
    return np.asarray(np.asarray(solids_mol_per_l, dtype=float) * weight, dtype=float)


def metals_of(system: System) -> tuple[str, ...]:
    """Metals whose component the system has, in the order of the metal columns."""
    return tuple(a for a in METALS if ANALYTES[a].component in system.index)


def metal_weights_mg_per_mol(system: System) -> FloatArray:
    """Mass of each metal per mole of each solid, (solids, metals of `metals_of`). [mg/mol]"""
    columns = [
        1000.0
        * ANALYTES[a].molar_mass_g_per_mol
        * system.solid_formation[:, system.index[ANALYTES[a].component]]
        for a in metals_of(system)
    ]
    return np.stack(columns, axis=1) if columns else np.zeros((len(system.solids), 0))


@dataclass(frozen=True, eq=False, kw_only=True)
class Sludge:
    """Solids of treated waters per litre of water.

    ``by_solid_mg_per_l`` (n, solids) is dry with bound water; ``metal_mg_per_l`` (n, metals) counts
    what the precipitated solids and the feed's particles hold, columns as in ``metals``.
    """

    system: System
    metals: tuple[str, ...]
    by_solid_mg_per_l: FloatArray
    unreacted_mg_per_l: FloatArray
    feed_particles_mg_per_l: FloatArray
    polymer_mg_per_l: FloatArray
    metal_mg_per_l: FloatArray
    cake_solids_fraction: float

    @property
    def precipitated_mg_per_l(self) -> FloatArray:
        """Dry mass of what the equilibrium precipitated, (n,). [mg/L]"""
        return np.asarray(self.by_solid_mg_per_l.sum(axis=1), dtype=float)

    @property
    def dry_mg_per_l(self) -> FloatArray:
        """Dry mass of everything that settles, (n,). [mg/L]"""
        return (
            self.precipitated_mg_per_l
            + self.unreacted_mg_per_l
            + self.feed_particles_mg_per_l
            + self.polymer_mg_per_l
        )

    @property
    def wet_mg_per_l(self) -> FloatArray:
        """Mass of the cake, (n,). [mg/L]"""
        return wet_mass(self.dry_mg_per_l, self.cake_solids_fraction)

    @property
    def metal_mg_per_kg_dry(self) -> FloatArray:
        """Metal content of the dry cake, (n, metals); 0 where there is no cake. [mg/kg]"""
        return metal_content_mg_per_kg(self.metal_mg_per_l, self.dry_mg_per_l)

    def masses_by_name(self, position: int = 0, *, least_mg_per_l: float = 0.0) -> dict[str, float]:
        """Dry mass by solid of one state, heaviest first, those above a least mass. [mg/L]"""
        row = self.by_solid_mg_per_l[position]
        order = np.argsort(-row, kind="stable")
        names = self.system.solid_names
        return {names[i]: float(row[i]) for i in order if row[i] > least_mg_per_l}


def sludge(
    solids_mol_per_l: FloatArray,
    system: System,
    *,
    cake_solids_fraction: float = CAKE_SOLIDS_FRACTION,
    bound_water_factor: float = BOUND_WATER_FACTOR,
    unreacted_mg_per_l: float | FloatArray = 0.0,
    feed_tss_mg_per_l: float = 0.0,
    feed_particulate_mg_per_l: Mapping[str, float] | None = None,
    polymer_g_per_kg: float = 0.0,
) -> Sludge:
    """Weigh the solids of treated waters.

    Parameters
    ----------
    solids_mol_per_l : ndarray, shape (solids,) or (states, solids)
        Amounts of the system's candidate solids. [mol/L]
    system
        Names the solids.
    cake_solids_fraction
        Dry mass per mass of cake.
    bound_water_factor
        Applied to hydroxides only.
    unreacted_mg_per_l
        Slurry fed beyond what reacts; it settles. [mg/L]
    feed_tss_mg_per_l
        Suspended solids of the feed. [mg/L]
    feed_particulate_mg_per_l
        Analytes on the feed's particles (`FeedWater.particulate_mg_per_l`). They are part of the
        feed's suspended solids, or all of them where those are not given or smaller. [mg/L]
    polymer_g_per_kg
        Polymer per kg of the other dry solids. [g/kg]

    Raises
    ------
    WaterError
        A cake fraction outside 0 to 1, or a bound water factor below 1.
    """
    amounts = np.atleast_2d(np.asarray(solids_mol_per_l, dtype=float))
    dry = dry_masses_mg_per_l(amounts, system, bound_water_factor=bound_water_factor)
    carried = dict(feed_particulate_mg_per_l or {})
    n = amounts.shape[0]
    particles = np.full(n, max(feed_tss_mg_per_l, sum(carried.values())))
    unreacted = np.broadcast_to(np.asarray(unreacted_mg_per_l, dtype=float), (n,)).copy()
    names = metals_of(system)
    metal = amounts @ metal_weights_mg_per_mol(system)
    metal = metal + np.array([carried.get(a, 0.0) for a in names])
    wet_mass(0.0, cake_solids_fraction)
    return Sludge(
        system=system, metals=names, by_solid_mg_per_l=dry, unreacted_mg_per_l=unreacted,
        feed_particles_mg_per_l=particles, metal_mg_per_l=metal,
        polymer_mg_per_l=(dry.sum(axis=1) + unreacted + particles) * (polymer_g_per_kg / 1000.0),
        cake_solids_fraction=cake_solids_fraction,
    )  # fmt: skip


def wet_mass(dry: Mass, cake_solids_fraction: float) -> Mass:
    """Mass of cake from its dry mass, in the unit of the dry mass."""
    if not 0.0 < cake_solids_fraction <= 1.0:
        raise WaterError(f"cake solids fraction {cake_solids_fraction:g} is outside 0 to 1")
    return dry / cake_solids_fraction


def metal_content_mg_per_kg(metal_mg_per_l: FloatArray, dry_mg_per_l: FloatArray) -> FloatArray:
    """Metal content of dry solids, (n, metals); 0 where there are no solids. [mg/kg]"""
    dry = np.asarray(dry_mg_per_l, dtype=float)[:, None]
    return np.where(dry > 0.0, 1e6 * metal_mg_per_l / np.where(dry > 0.0, dry, 1.0), 0.0)


def carried_fraction(
    dry_mg_per_l: FloatArray, *, tss_mg_per_l: float, capture_fraction: float
) -> FloatArray:
    """Share of the solids that slips past a separator, (n,).

    The carried solids are ``min(TSS of the separator, (1 - capture) x solids formed)``.

    Parameters
    ----------
    dry_mg_per_l : ndarray, shape (n,)
        Solids that reach the separator. [mg/L]
    tss_mg_per_l
        Suspended solids the separator lets through. [mg/L]
    capture_fraction
        Share of solids the separator holds back.
    """
    dry = np.asarray(dry_mg_per_l, dtype=float)
    share = tss_mg_per_l / np.where(dry > 0.0, dry, np.inf)
    return np.where(dry > 0.0, np.minimum(share, 1.0 - capture_fraction), 0.0)

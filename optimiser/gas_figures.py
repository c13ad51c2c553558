"""Gas over a plan's water: carbon dioxide that leaves it, pressures of CO2 and H2S, thresholds.

Owns these figures of a described point; the states come from `optimiser.evaluation`, thresholds in
air from the catalog.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np

from catalogs.practice_data import gas_thresholds
from chemistry.formula import molar_mass_g_per_mol
from chemistry.state import CO2_SPECIES, H2S_SPECIES, EquilibriumState
from optimiser.evaluation import Evaluation
from optimiser.plant import Plant
from optimiser.points import VENTED_FORMED, Block

Data = dict[str, Any]

PPM_PER_ATM = 1e6
TANK, TRIM = "tank", "after trim"


def gas_figures(
    plant: Plant, seen: Evaluation, point: int, state_text: Callable[[int, int], str]
) -> Data:
    """Return carbon dioxide and (where there is sulfide) hydrogen sulfide over a point's states.

    Parameters
    ----------
    plant
        The site's chemistry.
    seen
        What was evaluated.
    point
        Which of its points.
    state_text
        Words for an end and a row.

    Notes
    -----
    Pressures are those of air at rest with the water (Henry's law at the water's temperature); air
    that is moved off holds less. ``evolved_kg_per_d`` is what carbonate dosed into acid water gives
    off where it may vent, at the nominal doses.
    """
    found: Data = {
        "co2": {
            "evolved_kg_per_d": _evolved_kg_per_d(plant, seen, point),
            "vents_to_pco2_atm": plant.treatment.vent_pco2_atm,
            **_highest(seen, point, CO2_SPECIES, state_text),
            "thresholds": _thresholds("CO2"),
        }
    }
    if "HS-" in plant.system.index:
        found["h2s"] = {
            **_highest(seen, point, H2S_SPECIES, state_text),
            "site_limit_ppm": plant.treatment.h2s_limit_ppm,
            "thresholds": _thresholds("H2S"),
        }
    return found


def _thresholds(gas: str) -> list[Data]:
    rows = sorted((t for t in gas_thresholds() if t.gas == gas), key=lambda t: t.limit_ppm)
    return [
        {
            "threshold": t.threshold, "limit_ppm": t.limit_ppm, "averaging": t.averaging,
            "source": t.source,
        }
        for t in rows
    ]  # fmt: skip


def _evolved_kg_per_d(plant: Plant, seen: Evaluation, point: int) -> float:
    """Carbon dioxide lost at the vented end: carbonate fed and dosed less what is left."""
    block = next((b for b in seen.blocks if b.end == VENTED_FORMED), None)
    k = seen.nominal_row(block, point) if block is not None else None
    if block is None or k is None:
        return 0.0
    carbonate = plant.system.index["CO3-2"]
    row = block.rows[k]
    brought = plant.totals[carbonate] + seen.rows.doses[row] @ plant.reacting[:, carbonate]
    controller = int(seen.points.controller[point])
    if controller >= 0:
        brought += block.dose[k] * plant.reacting[controller, carbonate]
    lost_mol_per_l = max(float(brought - block.state.totals[k, carbonate]), 0.0)
    return lost_mol_per_l * molar_mass_g_per_mol("CO2") * plant.site.flow_m3_per_d


def _highest(
    seen: Evaluation, point: int, species: str, state_text: Callable[[int, int], str]
) -> Data:
    """Highest pressure over every state of a point, and where it is."""
    best = (-1.0, "", "")
    for block in seen.blocks:
        mine = np.flatnonzero(seen.rows.point[block.rows] == point)
        for stage, state, rows in _waters(block, mine):
            pressure = state.partial_pressure_atm(species)
            for place, k in rows:
                if pressure[place] > best[0]:
                    text = state_text(block.end, int(block.rows[k]))
                    best = (float(pressure[place]), stage, text)
    return {
        "highest_ppm": PPM_PER_ATM * best[0], "highest_pressure_atm": best[0],
        "highest_in": best[1], "highest_at": best[2],
    }  # fmt: skip


def _waters(
    block: Block, mine: np.ndarray[Any, np.dtype[np.int64]]
) -> list[tuple[str, EquilibriumState, list[tuple[int, int]]]]:
    """The waters of some rows: stage, states, and pairs (position in them, position in block)."""
    waters = [(TANK, block.state, [(int(k), int(k)) for k in mine])]
    if block.trim_state is not None:
        trimmed = np.flatnonzero(block.trimmed)
        pairs = [(i, int(k)) for i, k in enumerate(trimmed) if k in mine]
        waters.append((TRIM, block.trim_state, pairs))
    return waters

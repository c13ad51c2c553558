"""What is said of states that missed their certificate: the errors, and the water to try again."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from chemistry.gas import CO2_SPECIES, ln_henry
from chemistry.request import co2_formation_ln
from chemistry.system import LN10

if TYPE_CHECKING:
    from chemistry.state import EquilibriumState


def failure_text(state: EquilibriumState) -> str:
    """Errors and totals of the first missed states, and what was held."""
    rows = np.flatnonzero(~state.converged)
    proof = state.certificate_arrays
    lines = [
        f"state {i}: mass balance {proof['mass_balance'][i]:.1e}, supersaturation "
        f"{proof['supersaturation'][i]:.1e}, presence {proof['presence'][i]:.1e}; "
        f"totals {_water(state, i)!r}{_held_text(state, i)}"
        for i in rows[:3]
    ]
    count = f"{rows.size} of {state.converged.size} states missed their certificate"
    return "\n".join([count, *lines])


def _water(state: EquilibriumState, i: int) -> dict[str, float]:
    """Totals of one state as they were given, without the zeros."""
    values = zip(state.system.components, state.batch.totals[i], strict=True)
    return {name: float(value) for name, value in values if value != 0.0}


def _held_text(state: EquilibriumState, i: int) -> str:
    """What is held in one state, and that no water may be able to hold it."""
    batch, text = state.batch, ""
    if not np.isnan(batch.co2_ln[i]):
        solubility = ln_henry(CO2_SPECIES, state.system.temperature_degc)
        ln_pressure = batch.co2_ln[i] - solubility + co2_formation_ln(state.system)
        text += f", pCO2 {np.exp(ln_pressure):.17g} atm held"
    if not np.isnan(batch.ph_ln[i]):
        vector = zip(state.system.components, batch.titrant[i], strict=True)
        titrant = {name: float(value) for name, value in vector if value != 0.0}
        text += f", pH {-batch.ph_ln[i] / LN10:.17g} held with {titrant!r}"
    if text:
        text += ": perhaps no dose reaches it"
    return text

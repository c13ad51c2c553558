"""What callers hand to the equilibrium: totals, held pH and pressure, titrant, all checked.

Owns shapes and the messages about values that no water can have; solves nothing.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from chemistry.batch import FloatArray, pivots
from chemistry.errors import WaterError
from chemistry.gas import CO2_SPECIES, ln_henry
from chemistry.system import System

Totals = Mapping[str, float | FloatArray | Sequence[float]] | FloatArray
Held = float | FloatArray | Sequence[float] | None

LARGEST_TOTAL_MOL_PER_L = 60.0
MOST_PROBLEMS = 20  # of one kind told in one message
CHARGE_TOLERANCE = 1e-6  # net over gross charge of totals that count as electroneutral


@dataclass(frozen=True, slots=True)
class Request:
    """Checked arrays: totals (n, components), pH and ln CO2 product (n,) or nan, titrant."""

    totals: FloatArray
    ph: FloatArray
    ln_co2: FloatArray
    titrant: FloatArray


def read_request(
    system: System, totals: Totals, ph: Held, pco2_atm: Held, titrant: FloatArray | None,
    *, require_neutral: bool = False,
) -> Request:  # fmt: skip
    """Check what is asked and bring it to one shape.

    ``require_neutral`` refuses totals whose charges do not add up to zero where the pH is free.

    Raises
    ------
    WaterError
        Totals, pH, pressure or titrant that no water can have, or shapes that do not fit.
    """
    array, n = _states(read_totals(system, totals), ph, pco2_atm, titrant)
    ph_values, co2 = _held("ph", ph, n), _held("pco2_atm", pco2_atm, n)
    _check_held(system, ph_values, co2)
    vectors = _titrant(system, titrant, n)
    _check_titrant(system, vectors, ph_values, co2)
    if require_neutral:
        _check_charge(system, array, ph_values)
    solubility = ln_henry(CO2_SPECIES, system.temperature_degc)
    ln_co2 = np.log(co2) + solubility - co2_formation_ln(system)
    return Request(array, ph_values, ln_co2, vectors)


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
        columns = {n: np.atleast_1d(_numbers(f"total of {n}", v)) for n, v in totals.items()}
        for name, column in columns.items():
            if column.ndim != 1:
                raise WaterError(
                    f"total of {name} has shape {column.shape}: expected one value or one per state"
                )
        sizes = {v.shape[0] for v in columns.values()} - {1}
        if len(sizes) > 1:
            each = ", ".join(f"{n} has {v.shape[0]}" for n, v in columns.items())
            raise WaterError(f"totals of different lengths: {sorted(sizes)} ({each})")
        array = np.zeros((sizes.pop() if sizes else 1, len(system.components)))
        for name, column in columns.items():
            array[:, system.index[name]] = column
    else:
        array = np.array(_numbers("totals", totals), ndmin=2)
        if array.ndim != 2 or array.shape[1] != len(system.components):
            raise WaterError(
                f"totals have shape {np.shape(totals)}: expected (states, "
                f"{len(system.components)}) in the order of system.components"
            )
    _check_totals(system, array)
    return array


def _numbers(what: str, values: object) -> FloatArray:
    """Read numbers, or say which value is none."""
    try:
        return np.asarray(values, dtype=float)
    except (TypeError, ValueError) as error:
        raise WaterError(f"{what} is {values!r}: expected numbers ({error})") from error


def _check_totals(system: System, array: FloatArray) -> None:
    problems = []
    signed = np.array([name == "H+" for name in system.components])
    bad = ~np.isfinite(array) | ((array < 0.0) & ~signed)
    for state, component in np.argwhere(bad)[:MOST_PROBLEMS]:
        name = system.components[component]
        value = array[state, component]
        rule = "a finite number" if signed[component] else "a finite number, 0 or more"
        problems.append(f"state {state}: total of {name} is {value:g} mol/L, expected {rule}")
    large = np.abs(array) > LARGEST_TOTAL_MOL_PER_L
    for state, component in np.argwhere(large & np.isfinite(array))[:MOST_PROBLEMS]:
        problems.append(
            f"state {state}: total of {system.components[component]} is "
            f"{array[state, component]:g} mol/L, more than any water "
            f"holds ({LARGEST_TOTAL_MOL_PER_L:g} mol/L)"
        )
    if problems:
        raise WaterError("; ".join(problems))


def _held(name: str, values: Held, n: int) -> FloatArray:
    if values is None:
        return np.full(n, np.nan)
    array = np.atleast_1d(_numbers(name, values))
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
        raise WaterError(
            "totals, pH, pCO2 and titrant name different numbers of states: "
            + ", ".join(map(str, sorted(sizes)))
        )
    return np.broadcast_to(totals, (n, totals.shape[1])).copy(), n


def _check_held(system: System, ph: FloatArray, co2: FloatArray) -> None:
    bad = np.flatnonzero(~np.isnan(ph) & ~((ph > -3.0) & (ph < 17.0)))
    problems = [f"state {i}: pH {ph[i]:g} is outside -3 to 17" for i in bad[:MOST_PROBLEMS]]
    bad = np.flatnonzero(~np.isnan(co2) & ~((co2 > 0.0) & (co2 < 100.0)))
    problems += [
        f"state {i}: pCO2 {co2[i]:g} atm is outside 0 to 100 atm" for i in bad[:MOST_PROBLEMS]
    ]
    if problems:
        raise WaterError("; ".join(problems))
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
    array = np.atleast_2d(_numbers("titrant", titrant))
    if array.shape[1] != len(system.components) or array.shape[0] not in (1, n):
        raise WaterError(
            f"titrant has shape {np.shape(titrant)}: expected ({len(system.components)},) or "
            f"({n}, {len(system.components)}) in the order of system.components"
        )
    return np.broadcast_to(array, (n, array.shape[1])).copy()


def _check_titrant(system: System, titrant: FloatArray, ph: FloatArray, co2: FloatArray) -> None:
    bad = ~np.isfinite(titrant)
    problems = [
        f"state {i}: titrant holds {titrant[i, c]:g} of {system.components[c]}"
        for i, c in np.argwhere(bad)[:MOST_PROBLEMS]
    ]
    if problems:
        raise WaterError("; ".join(problems))
    held = ~np.isnan(ph)
    still = np.flatnonzero(held & (pivots(system, titrant, ~np.isnan(co2)) < 0))
    if still.size:
        raise WaterError(
            f"state {still[0]}: the titrant cannot hold the pH: it carries neither protons nor a "
            "component that takes up or gives off protons"
        )


def _check_charge(system: System, totals: FloatArray, ph: FloatArray) -> None:
    """Refuse totals that no electroneutral water can have: their charges add up to something."""
    if "H+" not in system.index:
        return
    net = totals @ system.component_charges
    gross = np.abs(totals) @ np.abs(system.component_charges)
    proton = totals[:, system.index["H+"]]
    bad = np.flatnonzero(np.isnan(ph) & (np.abs(net) > CHARGE_TOLERANCE * gross))
    problems = [
        f"state {i}: total of H+ is {proton[i]:g} mol/L, but with the other totals only "
        f"{proton[i] - net[i]:g} mol/L is electroneutral (net charge {net[i]:+g} mol/L)"
        for i in bad[:MOST_PROBLEMS]
    ]
    if problems:
        raise WaterError("; ".join(problems))


def co2_formation_ln(system: System) -> float:
    """Natural log K of CO2(aq) from the components, 0 where the system has no such species."""
    if CO2_SPECIES not in system.species_names:
        return 0.0
    return float(system.ln_k[system.species_names.index(CO2_SPECIES)])

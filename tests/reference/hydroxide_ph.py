"""pH of hydroxide precipitation: valleys scanned at held pH, start and end of precipitation."""

from __future__ import annotations

from collections.abc import Mapping
from functools import partial

import numpy as np
from numpy.typing import NDArray

from catalogs import load_system
from chemistry import System, equilibrate
from tests.reference.cases import Case, computes
from tests.reference.scans import first_true, least
from tests.reference.waters import PLENTY_MOL_PER_L, dissolved_along, hydrolysing_metal, mg_per_l

FloatArray = NDArray[np.float64]

START_MOL_PER_L = 0.01
COMPLETE_MOL_PER_L = 1e-5


def dissolved_at(system: System, metal: str, total_mol_per_l: float, ph: FloatArray) -> FloatArray:
    """Dissolved metal at held pH, (n,). [mol/L]"""
    return dissolved_along(equilibrate(system, {metal: total_mol_per_l}, ph=ph), metal)


@computes("B01")
def least_soluble(case: Case) -> Mapping[str, float]:
    found = {}
    for symbol in case.values:
        metal = "Cr+3" if symbol == "Cr" else f"{symbol}+2"
        system = load_system(components=[metal])
        valley = partial(dissolved_at, system, metal, case.inputs["total_mol_per_l"])
        found[symbol], _ = least(valley, 5.0, 13.5)
    return found


@computes("B03", "B04", "B06", "B08", "B09", "B11")
def start_and_end(case: Case) -> Mapping[str, float]:
    metal = case.inputs["metal"]
    low, high = case.inputs["search"]
    system = load_system(components=[metal])

    def solids(ph: FloatArray) -> NDArray[np.bool_]:
        state = equilibrate(system, {metal: START_MOL_PER_L}, ph=ph)
        return np.asarray(state.solids_mol_per_l.sum(axis=1) > 0.0)

    def remaining(ph: FloatArray) -> FloatArray:
        return dissolved_at(system, metal, START_MOL_PER_L, ph)

    found = {
        "start": first_true(solids, low, high),
        "complete": first_true(lambda ph: remaining(ph) < COMPLETE_MOL_PER_L, low, high),
    }
    if "returns" in case.values:
        after = found["complete"] + 1e-6
        found["returns"] = first_true(lambda ph: remaining(ph) > COMPLETE_MOL_PER_L, after, high)
    return found


def _valley(
    case: Case, log10_ks: float, log10_beta: Mapping[int, float]
) -> tuple[System, float, float]:
    """Return the system, the pH of its least residual and that residual. [mg/L]"""
    metal = case.inputs["metal"]
    system = hydrolysing_metal(metal, case.inputs["hydroxide"], log10_ks, log10_beta)
    ph, amount = least(
        lambda x: dissolved_at(system, metal, PLENTY_MOL_PER_L, x), *case.inputs["search"]
    )
    return system, ph, mg_per_l(amount, metal)


@computes("B13", "B17", "B19", "B21")
def valleys(case: Case) -> Mapping[str, float]:
    found = {}
    for name, log10_ks in case.inputs["log10_ks"].items():
        _, found["ph_of_minimum"], found[name] = _valley(case, log10_ks, case.inputs["log10_beta"])
    if "window_low" in case.values:
        found["window_low"], found["window_high"] = _window(case)
    return found


def _window(case: Case) -> tuple[float, float]:
    """pH between which the residual is within twice its least."""
    metal, (low, high) = case.inputs["metal"], case.inputs["search"]
    log10_ks = next(iter(case.inputs["log10_ks"].values()))
    system, ph, residual = _valley(case, log10_ks, case.inputs["log10_beta"])
    twice_mol_per_l = 2.0 * residual / mg_per_l(1.0, metal)

    def above(x: FloatArray) -> NDArray[np.bool_]:
        return np.asarray(dissolved_at(system, metal, PLENTY_MOL_PER_L, x) > twice_mol_per_l)

    return first_true(lambda x: ~above(x), low, ph), first_true(above, ph, high)


@computes("B14")
def copper(case: Case) -> Mapping[str, float]:
    found = dict(valleys(case))
    beta = {**case.inputs["log10_beta"], 2: case.inputs["other_log10_beta2"]}
    _, ph, residual = _valley(case, case.inputs["log10_ks"]["fresh"], beta)
    return {**found, "other_ph_of_minimum": ph, "other_fresh": residual}


@computes("B16")
def chromium(case: Case) -> Mapping[str, float]:
    found = {}
    for name in ("set_a", "set_b"):
        constants = case.inputs[name]
        _, ph, residual = _valley(case, constants["log10_ks"], constants["log10_beta"])
        found[f"{name}_ph_of_minimum"], found[name] = ph, residual
    return found

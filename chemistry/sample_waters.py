"""Many samples closed together: electroneutral totals of each, and of their mixture.

Owns closing a series of samples in one batch and the flow-weighted mean of a feed. The equations
are those of `chemistry.closure`, solved for all samples side by side.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from chemistry.analysis import ANALYTES, Measurement, WaterAnalysis, component_of
from chemistry.closure import ALKALINITY_LEVEL, MOST_MOL_PER_L
from chemistry.errors import ChemistryError, WaterError
from chemistry.feed import (
    charge_balance_error_percent,
    feed_water,
    measured_totals_mol_per_l,
    oxidise_iron,
)
from chemistry.samples import Samples
from chemistry.state import equilibrate
from chemistry.system import System
from chemistry.units import mg_per_l_as_caco3_to_meq_per_l

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

_Solved = tuple[FloatArray, FloatArray, NDArray[np.bool_]]
"""Totals, surplus charge before closing, and which rows settled."""

_ROUNDS = 12
_TOLERANCE = 1e-13  # of the gross charge


@dataclass(frozen=True, eq=False, kw_only=True)
class SampleWaters:
    """The waters of a series of samples, samples on axis 0.

    Parameters
    ----------
    sampled_mol_per_l
        Electroneutral totals as sampled, (samples, components). [mol/L]
    totals_mol_per_l
        The same as they enter treatment: iron(II) oxidised where the site aerates. [mol/L]
    ph
        pH as sampled, (samples,).
    charge_balance_error_percent
        Before closing, (samples,). [%]
    failures
        Sample number to the reason why it cannot be closed; its rows are nan.
    """

    system: System
    sampled_mol_per_l: FloatArray
    totals_mol_per_l: FloatArray
    ph: FloatArray
    charge_balance_error_percent: FloatArray
    failures: Mapping[int, str]


def close_samples(samples: Samples, system: System) -> SampleWaters:
    """Close the charge of every sample.

    Parameters
    ----------
    samples
        Complete samples.
    system
        Components at the temperature of the site; its solids play no part.

    Notes
    -----
    Samples with a pH alone, and those with an alkalinity beside it, are solved in two batches by
    the secant method on the equations of `chemistry.closure`; what does not settle there, and every
    sample with an acidity, is closed by `feed_water` on its own.
    """
    analyses = [sample.analysis for sample in samples.samples]
    width = len(system.components)
    measured = np.full((len(analyses), width), np.nan)
    failures: dict[int, str] = {}
    for i, analysis in enumerate(analyses):
        try:
            measured[i] = measured_totals_mol_per_l(analysis, system)
        except WaterError as error:
            failures[i] = str(error)
    closed = measured.copy()
    surplus = np.zeros(len(analyses))
    done = np.zeros(len(analyses), dtype=bool)
    for with_alkalinity in (False, True):
        rows = np.array(
            [
                i
                for i, a in enumerate(analyses)
                if i not in failures and _in_batch(a, with_alkalinity=with_alkalinity)
            ],
            dtype=np.int64,
        )
        if rows.size:
            batch = _Batch(system, [analyses[i] for i in rows], measured[rows])
            solve = batch.by_alkalinity if with_alkalinity else batch.by_ph
            closed[rows], surplus[rows], done[rows] = solve()
    for row in np.flatnonzero(~done).tolist():
        if row not in failures:
            _close_alone(analyses[row], system, closed, surplus, row, failures)
    return _waters(samples, system, measured, closed, surplus, failures)


def _in_batch(analysis: WaterAnalysis, *, with_alkalinity: bool) -> bool:
    if analysis.titration or analysis.acidity_meq_per_l is not None or analysis.ph is None:
        return False
    both = {"CO3", "HCO3"} & set(analysis.measurements)
    if both and analysis.alkalinity_mg_per_l_as_caco3:
        return False
    return bool(analysis.alkalinity_mg_per_l_as_caco3) == with_alkalinity


def _close_alone(
    analysis: WaterAnalysis, system: System, closed: FloatArray, surplus: FloatArray, i: int,
    failures: dict[int, str],
) -> None:  # fmt: skip
    try:
        water = feed_water(replace(analysis, aerated=False), system)
    except ChemistryError as error:
        failures[i] = str(error)
        closed[i] = np.nan
        return
    closed[i] = water.totals_mol_per_l
    surplus[i] = (water.cations_meq_per_l - water.anions_meq_per_l) / 1000.0


def _waters(
    samples: Samples, system: System, measured: FloatArray, closed: FloatArray,
    surplus: FloatArray, failures: Mapping[int, str],
) -> SampleWaters:  # fmt: skip
    """States of the closed samples, and their charge balance as `feed_water` counts it."""
    sound = np.array([i for i in range(len(closed)) if i not in failures], dtype=np.int64)
    ph, error, treated = np.full(len(closed), np.nan), np.full(len(closed), np.nan), closed.copy()
    if sound.size:
        state = equilibrate(system.narrowed(solids=()), closed[sound])
        ph[sound] = state.ph
        cations = measured[sound] @ np.maximum(system.component_charges, 0.0)
        cations = cations + state.species_mol_per_l[:, system.index["H+"]]
        error[sound] = [
            charge_balance_error_percent(c, c - s)
            for c, s in zip(cations, surplus[sound], strict=True)
        ]
        for i in sound:
            if samples.samples[i].analysis.aerated:
                treated[i] = oxidise_iron(system, closed[i])
    return SampleWaters(
        system=system, sampled_mol_per_l=closed, totals_mol_per_l=treated, ph=ph,
        charge_balance_error_percent=error, failures=failures,
    )  # fmt: skip


class _Batch:
    """Samples of known pH that are closed side by side."""

    def __init__(self, system: System, analyses: list[WaterAnalysis], measured: FloatArray) -> None:
        self.system = system
        self.bare = system.narrowed(solids=())
        self.measured = measured
        self.ph = np.array([a.ph for a in analyses], dtype=float)
        self.ion = np.array(
            [system.index[component_of(a.close_charge_with)] for a in analyses], dtype=np.int64
        )
        self.alkalinity = np.array(
            [mg_per_l_as_caco3_to_meq_per_l(a.alkalinity_mg_per_l_as_caco3 or 0.0) / 1000.0
             for a in analyses]
        )  # fmt: skip
        self.scale = np.abs(measured) @ np.abs(system.component_charges) + 1e-9

    def _with_protons(self, totals: FloatArray, rows: IntArray) -> FloatArray:
        proton = self.system.index["H+"]
        filled = totals.copy()
        filled[:, proton] = 0.0
        filled[:, proton] = equilibrate(self.bare, filled, ph=self.ph[rows]).totals[:, proton]
        return filled

    def by_ph(self) -> _Solved:
        """The closing ion and TOT-H from pH and charge."""
        charges = self.system.component_charges
        sign = np.sign(charges[self.ion])
        held = self.measured[np.arange(len(self.measured)), self.ion]

        def water(x: FloatArray, rows: IntArray) -> FloatArray:
            moved = self.measured[rows].copy()
            moved[np.arange(rows.size), self.ion[rows]] += x
            return self._with_protons(moved, rows)

        every = np.arange(len(held))
        surplus = water(np.zeros(held.size), every) @ charges
        x, settled = _secant(
            lambda x, rows: sign[rows] * (water(x, rows) @ charges),
            np.zeros(held.size), -surplus / charges[self.ion], -held, self.scale,
        )  # fmt: skip
        return water(np.where(settled, x, 0.0), every), surplus, settled

    def by_alkalinity(self) -> _Solved:
        """The same with the carbonate from a known alkalinity, see `close_with_alkalinity`."""
        carbonate, proton = self.system.index["CO3-2"], self.system.index["H+"]
        level = np.array([ALKALINITY_LEVEL.get(c, 0.0) for c in self.system.components])
        effective = self.system.component_charges + level
        effective[proton] = 0.0
        every = np.arange(len(self.measured))
        weight = effective[self.ion]
        surplus = self.measured @ effective - self.alkalinity
        added = np.divide(-surplus, weight, out=np.full(every.size, -np.inf), where=weight != 0.0)
        moved = self.measured.copy()
        possible = added >= -moved[every, self.ion]
        moved[every, self.ion] += np.where(possible, added, 0.0)

        def water(amount: FloatArray, rows: IntArray) -> FloatArray:
            filled = moved[rows].copy()
            filled[:, carbonate] = amount
            return self._with_protons(filled, rows)

        def miss(amount: FloatArray, rows: IntArray) -> FloatArray:
            filled = water(amount, rows)
            return np.asarray(
                filled @ level - level[proton] * filled[:, proton]
                - self.alkalinity[rows] - filled[:, proton]
            )  # fmt: skip

        x, settled = _secant(
            miss, np.zeros(every.size), self.alkalinity.copy(), np.zeros(every.size), self.scale
        )
        return water(np.where(settled, x, 0.0), every), surplus, settled & possible


def _secant(
    function: Callable[[FloatArray, IntArray], FloatArray], x0: FloatArray, x1: FloatArray,
    lowest: FloatArray, scale: FloatArray,
) -> tuple[FloatArray, NDArray[np.bool_]]:  # fmt: skip
    """Roots of rising functions, one for each row; rows that leave their range do not settle."""
    rows = np.arange(x0.size)
    before, value_before = x0.copy(), function(x0, rows)
    x = np.clip(x1, lowest, MOST_MOL_PER_L)
    same = x == before
    x[same] = before[same] + 1e-6
    settled = np.zeros(x.size, dtype=bool)
    active = rows
    for _ in range(_ROUNDS):
        value = function(x[active], active)
        good = np.abs(value) <= _TOLERANCE * scale[active]
        settled[active[good]] = True
        moved = value != value_before[active]
        slope = np.where(moved, value - value_before[active], 1.0)
        step = np.where(moved, value * (x[active] - before[active]) / slope, 0.0)
        # at a standstill rounding is all that is left
        still = np.abs(step) <= 1e-15 * np.maximum(np.abs(x[active]), scale[active])
        settled[active[still & moved]] = True
        before[active], value_before[active] = x[active], value
        going = ~settled[active]
        x[active[going]] = (x[active] - step)[going]
        inside = (x[active] >= lowest[active]) & (x[active] <= MOST_MOL_PER_L)
        active = active[going & inside]
        if active.size == 0:
            break
    return x, settled


def mean_analysis(samples: Samples, waters: SampleWaters | None = None) -> WaterAnalysis:
    """The flow-weighted mean of the samples as one analysis.

    Parameters
    ----------
    samples
        Complete samples.
    waters
        Their closed waters, none failed. With them the pH and, where an alkalinity was measured,
        the carbonate are those of the mixture; without them the pH is that of the mean H+, which
        buffers make wrong: good for choosing components only.

    Notes
    -----
    Totals mix linearly, pH and alkalinity of acid waters do not. The mean carries the mixture's pH,
    so that closing it with the same ion gives the mixture of the closed samples.
    """
    weights = np.array(samples.weights)
    analyses = [sample.analysis for sample in samples.samples]
    first = analyses[0]
    measurements = {name: _mean(name, analyses, weights) for name in first.measurements}
    ph = _rough_ph(analyses, weights)
    alkalinity = None
    if waters is not None:
        mixed = weights @ waters.sampled_mol_per_l
        ph = float(equilibrate(waters.system.narrowed(solids=()), mixed[None, :]).ph[0])
        if any(a.alkalinity_mg_per_l_as_caco3 for a in analyses):
            column = waters.system.index["CO3-2"]
            mass = 1000.0 * ANALYTES["CO3"].molar_mass_g_per_mol
            measurements.pop("HCO3", None)
            measurements["CO3"] = _exactly(float(mixed[column]) * mass)
    return WaterAnalysis(
        measurements=measurements, close_charge_with=first.close_charge_with,
        temperature_degc=float(weights @ [a.temperature_degc for a in analyses]), ph=ph,
        alkalinity_mg_per_l_as_caco3=alkalinity,
        tss_mg_per_l=float(weights @ [a.tss_mg_per_l for a in analyses]), aerated=first.aerated,
    )  # fmt: skip


def _exactly(mg_per_l: float) -> Measurement:
    return Measurement(
        dissolved_mg_per_l=mg_per_l, total_mg_per_l=mg_per_l, as_written=f"mean {mg_per_l:.4g} mg/L"
    )


def _mean(name: str, analyses: list[WaterAnalysis], weights: FloatArray) -> Measurement:
    """Mean of one analyte: half of a reporting limit counts, unless every sample is below."""
    found = [a.measurements[name] for a in analyses]
    if all(m.below_reporting_limit for m in found):
        dissolved = float(weights @ [m.dissolved_mg_per_l for m in found])
        total = float(weights @ [m.total_mg_per_l for m in found])
    else:
        dissolved = float(weights @ [m.balance_mg_per_l for m in found])
        total = dissolved + float(weights @ [m.particulate_mg_per_l for m in found])
    below = all(m.below_reporting_limit for m in found)
    sign = "<" if below else ""
    return Measurement(
        dissolved_mg_per_l=dissolved, total_mg_per_l=max(total, dissolved),
        below_reporting_limit=below,
        as_written=f"mean of {len(found)} samples {sign}{dissolved:.4g} mg/L",
    )  # fmt: skip


def _rough_ph(analyses: list[WaterAnalysis], weights: FloatArray) -> float:
    acid = [10.0 ** -(7.0 if a.ph is None else a.ph) for a in analyses]
    return float(-np.log10(weights @ np.array(acid)))

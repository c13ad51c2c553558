"""Results of laboratory tables in the units of the house, whatever unit they were written in.

Owns units and bases of concentrations, flows, temperatures, alkalinity and acidity, and the range
that each may have. What belongs together in a sample is `catalogs.sample_file`.
"""

from __future__ import annotations

from dataclasses import replace

from catalogs.problems import listed
from catalogs.quantities import (
    AMOUNT_UNITS_IN_MOL_PER_L,
    CHARGE_UNITS_IN_MEQ_PER_L,
    FLOW_UNITS_IN_M3_PER_D,
    MASS_UNITS_IN_MG_PER_L,
    Quantity,
    bases_of,
    to_mg_per_l,
)
from catalogs.sample_tables import RawSample, Result
from catalogs.sample_values import Findings
from catalogs.sample_words import ACIDITY, ALKALINITY, FLOW, PH, TEMPERATURE, TSS
from chemistry.analysis import ANALYTES
from chemistry.samples import Reported
from chemistry.units import (
    degf_to_degc,
    meq_per_l_to_mg_per_l_as_caco3,
    mg_per_l_as_caco3_to_meq_per_l,
)

_CONCENTRATIONS = (*MASS_UNITS_IN_MG_PER_L, *AMOUNT_UNITS_IN_MOL_PER_L, *CHARGE_UNITS_IN_MEQ_PER_L)
_MOST_MG_PER_L = 1e6
_TEMPERATURES_DEGC = (0.0, 60.0)
_PH_RANGE = (0.0, 14.0)


class Amounts:
    """Reads results of one table, recording what is wrong; ``unit`` holds where none is written."""

    def __init__(self, findings: Findings, unit: str) -> None:
        self.unit = unit
        self.notes: list[str] = []
        self._add = findings.add

    def mg_per_l(self, result: Result) -> Reported | None:
        """Concentration of the analyte itself; None when a problem was recorded. [mg/L]"""
        heading = result.heading
        unit = heading.unit or self.unit
        name = heading.name if heading.name in ANALYTES else f"{heading.name}(III)"
        analyte = ANALYTES[name]
        if unit not in _CONCENTRATIONS:
            self._add(result.cell, heading.text, *_no_unit(unit, heading.name))
            return None
        known = (*bases_of(analyte), heading.name)
        if heading.basis and (heading.basis not in known or unit not in MASS_UNITS_IN_MG_PER_L):
            self._add(
                result.cell, heading.text, f"{heading.name} in {unit} as {heading.basis}",
                f"a mass as one of: {listed(dict.fromkeys(known))}",
                "Correct the basis, or leave it out where the mass is that of the analyte itself.",
            )  # fmt: skip
            return None
        value = result.value
        written = f"{value.as_written} {unit}" + (f" as {heading.basis}" if heading.basis else "")
        quantity = Quantity(
            value=value.number, unit=unit, basis=heading.basis, is_below=value.is_below,
            as_written=written,
        )  # fmt: skip
        mg_per_l = to_mg_per_l(quantity, analyte)
        if mg_per_l > _MOST_MG_PER_L:
            self._add(result.cell, heading.text, written, "at most 1 kg/L", "Check the unit.")
            return None
        return Reported(value=mg_per_l, is_below=value.is_below, as_written=written)

    # -- flow, pH and sum parameters -------------------------------------------------------------

    def number(self, raw: RawSample, role: str) -> float | None:
        """Flow in m3/d, pH, or temperature in C."""
        result = raw.results.get((role, ""))
        if result is None:
            return None
        if result.value.is_below:
            self._add(
                result.cell, result.heading.text, result.value.as_written, "a measured value",
                "Write the value itself, or leave the cell empty.",
            )  # fmt: skip
            return None
        unit, number = result.heading.unit, result.value.number
        if role == FLOW:
            return self._flow(result, unit, number)
        if role == TEMPERATURE and unit == "degF":
            number = degf_to_degc(number)
        low, high = _PH_RANGE if role == PH else _TEMPERATURES_DEGC
        if low <= number <= high:
            return number
        shown = f"{result.value.as_written} {unit}".strip()
        self._add(
            result.cell, result.heading.text, shown,
            f"a {role} from {low:g} to {high:g}" + ("" if role == PH else " C"),
            "Correct the value" + ("." if role == PH else "; write F beside degrees Fahrenheit."),
        )  # fmt: skip
        return None

    def _flow(self, result: Result, unit: str, number: float) -> float | None:
        if unit in FLOW_UNITS_IN_M3_PER_D:
            return number * FLOW_UNITS_IN_M3_PER_D[unit]
        self._add(
            result.cell, result.heading.text,
            f"a flow in {unit!r}" if unit else "a flow without a unit",
            f"one of the units of flow: {', '.join(FLOW_UNITS_IN_M3_PER_D)}",
            "Write the unit into the header, such as flow (m3/d).",
        )  # fmt: skip
        return None

    def alkalinity(self, raw: RawSample) -> Reported | None:
        """Alkalinity of a sample. [mg/L as CaCO3]"""
        meq = self._equivalents(raw, ALKALINITY)
        if meq is None:
            return None
        return replace(meq, value=meq_per_l_to_mg_per_l_as_caco3(meq.value))

    def acidity(self, raw: RawSample) -> float | None:
        """Acidity of a sample; half of a reporting limit. [meq/L]"""
        meq = self._equivalents(raw, ACIDITY)
        return None if meq is None else meq.balance

    def _equivalents(self, raw: RawSample, role: str) -> Reported | None:
        """Alkalinity or acidity, whatever unit it was written in. [meq/L]"""
        result = raw.results.get((role, ""))
        if result is None:
            return None
        heading, value = result.heading, result.value
        written = f"{value.as_written} {heading.unit}"
        if heading.unit in CHARGE_UNITS_IN_MEQ_PER_L and not heading.basis:
            meq = value.number * CHARGE_UNITS_IN_MEQ_PER_L[heading.unit]
        elif heading.unit in AMOUNT_UNITS_IN_MOL_PER_L and not heading.basis:
            meq = 1000.0 * value.number * AMOUNT_UNITS_IN_MOL_PER_L[heading.unit]
            self.notes.append(f"{role}: {heading.unit} is read as that of acid or base, 1 meq each")
        elif heading.unit in MASS_UNITS_IN_MG_PER_L and heading.basis in ("", "CaCO3"):
            meq = mg_per_l_as_caco3_to_meq_per_l(
                value.number * MASS_UNITS_IN_MG_PER_L[heading.unit]
            )
            if not heading.basis:
                self.notes.append(f"{role}: no basis written, read as CaCO3")
        else:
            self._add(
                result.cell, heading.text, f"{role} in {heading.unit or 'no unit'}"
                + (f" as {heading.basis}" if heading.basis else ""),
                "mg/L as CaCO3 or meq/L", "Write the unit and the basis into the header.",
            )  # fmt: skip
            return None
        return Reported(value=meq, is_below=value.is_below, as_written=written)

    def tss(self, raw: RawSample) -> Reported | None:
        """Suspended solids of a sample. [mg/L]"""
        result = raw.results.get((TSS, ""))
        if result is None:
            return None
        unit = result.heading.unit or self.unit
        if unit not in MASS_UNITS_IN_MG_PER_L:
            self._add(result.cell, result.heading.text, *_no_unit(unit, "TSS"))
            return None
        scale = MASS_UNITS_IN_MG_PER_L[unit]
        return Reported(
            value=result.value.number * scale, is_below=result.value.is_below,
            as_written=f"{result.value.as_written} {unit}",
        )  # fmt: skip


def _no_unit(unit: str, name: str) -> tuple[str, str, str]:
    """What is said where a concentration has no unit or one that is none."""
    if unit in ("ppm", "ppb"):
        same = "mg/L" if unit == "ppm" else "ug/L"
        return (
            f"{name} in {unit}",
            "a concentration per litre",
            f"In a dilute water 1 {unit} is 1 {same}: write {same} into the header.",
        )
    return (
        f"{name} in {unit!r}" if unit else f"{name} without a unit",
        f"one of the units: {', '.join(_CONCENTRATIONS)}",
        "Write the unit into the header, a units row or a unit column; or write `unit: mg/L` under"
        " `samples` where it holds for all.",
    )

"""Published check values: reading them, and judging what the product computes against them.

The values stand in the YAML files beside this module, each case with its source. Tolerances are
those of the files and are never widened.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from functools import cache
from importlib import import_module
from math import isfinite, log10
from pathlib import Path
from types import MappingProxyType
from typing import Any

import yaml

FILES = (
    "pure_water_solubility.yaml",
    "hydroxide_ph.yaml",
    "ligands_and_salts.yaml",
    "acid_and_base.yaml",
    "sludge.yaml",
    "reagents.yaml",
    "practice.yaml",
    "effluents.yaml",
)
TOLERANCES = ("relative", "factor", "absolute", "within")
USES = ("hard", "soft", "info")


@dataclass(frozen=True, slots=True, kw_only=True)
class Expectation:
    """One published value, or a range, with the tolerance that it was published with."""

    unit: str
    expected: float | None = None
    relative: float | None = None
    factor: float | None = None
    absolute: float | None = None
    within: tuple[float, float] | None = None
    ends_are_results: bool = False
    not_asserted: str = ""

    @property
    def has_tolerance(self) -> bool:
        return any(getattr(self, name) is not None for name in TOLERANCES)

    def limits(self) -> tuple[float, float]:
        """Least and largest value that passes."""
        if self.within is not None:
            return self.within
        value = self.expected
        assert value is not None
        if self.relative is not None:
            reach = abs(value) * self.relative
        elif self.absolute is not None:
            reach = self.absolute
        else:
            assert self.factor is not None
            return value / self.factor, value * self.factor
        return value - reach, value + reach

    def met_by(self, measured: float) -> bool:
        """Whether a value lies within the tolerance.

        Ends of a range that are themselves rounded results are compared at their printed digits.
        """
        low, high = self.limits()
        if self.ends_are_results:
            return (
                round(measured, _decimals(low)) >= low and round(measured, _decimals(high)) <= high
            )
        return low <= measured <= high

    @property
    def reference(self) -> float:
        """What a ratio is taken to: the value, or the geometric middle of the range."""
        if self.expected is not None:
            return self.expected
        assert self.within is not None
        return float((self.within[0] * self.within[1]) ** 0.5)


@dataclass(frozen=True, slots=True, kw_only=True)
class Case:
    """A published case: its inputs, its values and where they come from."""

    case: str
    claim: str
    use: str
    seen: bool
    source: str
    inputs: Mapping[str, Any]
    values: Mapping[str, Expectation]
    note: str = ""

    @property
    def group(self) -> str:
        return self.case[0]


@dataclass(frozen=True, slots=True, kw_only=True)
class Reading:
    """One computed value beside the published one."""

    case: Case
    name: str
    expectation: Expectation
    measured: float

    @property
    def label(self) -> str:
        return f"{self.case.case} {self.name}"

    @property
    def passes(self) -> bool | None:
        """Whether the tolerance is met; None where the case gives none."""
        if not self.expectation.has_tolerance:
            return None
        return isfinite(self.measured) and self.expectation.met_by(self.measured)

    @property
    def asserted(self) -> bool:
        """Whether a test fails when it is not met."""
        return self.case.use == "hard" and not self.expectation.not_asserted

    @property
    def ratio(self) -> float:
        return self.measured / self.expectation.reference

    @property
    def log10_ratio(self) -> float:
        """How far off in decades: for a pH the difference, nan where the ratio is not positive."""
        if self.expectation.unit == "pH":
            return self.measured - self.expectation.reference
        return log10(self.ratio) if self.ratio > 0.0 else float("nan")

    def __str__(self) -> str:
        low, high = self.expectation.limits()
        return (
            f"{self.label}: {self.measured:.5g} {self.expectation.unit}, "
            f"published {self.expectation.reference:.5g}, passes from {low:.5g} to {high:.5g}"
        )


Computation = Callable[[Case], Mapping[str, float]]
_COMPUTATIONS: dict[str, Computation] = {}


def computes(*cases: str) -> Callable[[Computation], Computation]:
    """Register the function that computes the values of these cases."""

    def register(function: Computation) -> Computation:
        for name in cases:
            _COMPUTATIONS[name] = function
        return function

    return register


@cache
def load_cases() -> dict[str, Case]:
    """Every case by its name, in the order of the files."""
    found: dict[str, Case] = {}
    for file in FILES:
        for row in yaml.safe_load((Path(__file__).parent / file).read_text(encoding="utf-8")):
            case = _case(row)
            assert case.case not in found, f"{file}: {case.case} twice"
            found[case.case] = case
    return found


def readings() -> tuple[Reading, ...]:
    """Every reading of every case, in the order of the files."""
    return tuple(reading for name in load_cases() for reading in readings_of(name).values())


@cache
def readings_of(name: str) -> Mapping[str, Reading]:
    """Readings of one case by the name of the value, computed once."""
    case = load_cases()[name]
    computed = computations()[name](case)
    assert set(computed) == set(case.values), f"{name}: computed {sorted(computed)}"
    return MappingProxyType(
        {
            key: Reading(
                case=case, name=key, expectation=expectation, measured=float(computed[key])
            )
            for key, expectation in case.values.items()
        }
    )


def computations() -> Mapping[str, Computation]:
    """The function of every case; they register when their modules are imported."""
    import_module("tests.reference.computations")
    return MappingProxyType(_COMPUTATIONS)


def _case(row: dict[str, Any]) -> Case:
    values = {str(name): _expectation(value) for name, value in row.pop("values").items()}
    case = Case(values=values, **row)
    assert case.use in USES
    assert case.source.strip()
    return case


def _expectation(row: dict[str, Any]) -> Expectation:
    if "within" in row:
        low, high = row["within"]
        row = {**row, "within": (float(low), float(high))}
    return Expectation(**row)


def _decimals(value: float) -> int:
    digits = repr(value)
    return len(digits.split(".")[1]) if "." in digits and "e" not in digits else 0

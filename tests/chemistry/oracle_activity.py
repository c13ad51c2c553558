"""Activity coefficients in 50 digits for the oracle, written from the equations.

The surroundings of a species are the ionic strength for Davies' equation, and the molality of
every species for specific ion interaction, whose water follows by Gibbs-Duhem.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property
from itertools import pairwise

from mpmath import mp, mpf

from chemistry import System

# Debye and Hueckel's A, (kg/mol)^0.5 by C: Freeze & Cherry 1979, Groundwater, Appendix IV.
A_TABLE = (
    (0, "0.4883"), (10, "0.4960"), (15, "0.5000"), (20, "0.5042"), (25, "0.5090"),
    (30, "0.5130"), (40, "0.5221"), (50, "0.5319"), (60, "0.5425"),
)  # fmt: skip
WATER_MOL_PER_KG = "55.508"
SIMPLE_CATIONS = {"Na+", "K+", "NH4+"}


def a_at(temperature_degc: float) -> mpf:
    """A between the two temperatures of the table that enclose one."""
    for (low, at_low), (high, at_high) in pairwise(A_TABLE):
        if low <= temperature_degc <= high:
            share = (mpf(temperature_degc) - low) / (high - low)
            return (1 - share) * mpf(at_low) + share * mpf(at_high)
    raise ValueError(f"{temperature_degc} C is off the table of A")


@dataclass(frozen=True)
class Coefficients:
    """The model of a system for species with names, charges and water of formation."""

    system: System
    names: Sequence[str]
    charges: Sequence[int]
    waters: Sequence[mpf]

    @cached_property
    def a_ln(self) -> mpf:
        """A in natural-log units."""
        return a_at(self.system.temperature_degc) * mp.log(10)

    @property
    def is_sit(self) -> bool:
        return self.system.activity == "sit"

    @property
    def width(self) -> int:
        """Number of surroundings."""
        return len(self.names) if self.is_sit else 1

    def weights(self, species: int) -> dict[int, mpf]:
        """How a species counts in the surroundings."""
        if self.is_sit:
            return {species: mpf(1)}
        return {0: mpf(self.charges[species]) ** 2 / 2}

    def epsilon(self, one: int, other: int) -> mpf:
        """Interaction coefficient in natural-log units: the table's, else the documented rule's."""
        assert self.system.interactions is not None
        table, names, z = self.system.interactions.pairs, self.names, self.charges
        for pair in ((names[one], names[other]), (names[other], names[one])):
            if pair in table:
                return mp.log(10) * mpf(str(table[pair]))
        cation, anion = (one, other) if z[one] > z[other] else (other, one)
        if not z[cation] > 0 > z[anion]:
            return mpf(0)
        if names[cation] in SIMPLE_CATIONS:
            return mp.log(10) * mpf("-0.05") * abs(z[anion])
        return mp.log(10) * (mpf("0.1") * z[cation] - mpf("0.05")) if z[anion] == -1 else mpf(0)

    @cached_property
    def pairs(self) -> list[list[mpf]]:
        """Interaction coefficients of every species with every other."""
        count = range(len(self.names))
        return [[self.epsilon(i, j) for j in count] for i in count]

    def evaluate(self, y: Sequence[mpf]) -> Evaluated:
        """Offsets ``-ln g + w ln a_w`` and ln a_w with their slopes, at some surroundings."""
        if not self.is_sit:
            value, slope = self._davies(y[0])
            squares = [mpf(z) ** 2 for z in self.charges]
            return Evaluated(
                [q * value for q in squares], [[q * slope] for q in squares], mpf(0), [mpf(0)]
            )
        return self._sit(y)

    def _davies(self, strength: mpf) -> tuple[mpf, mpf]:
        if self.system.activity == "ideal":
            return mpf(0), mpf(0)
        a = self.a_ln
        held = min(strength, mpf("0.5"))
        root = mp.sqrt(held)
        value = a * (root / (1 + root) - mpf("0.3") * held)
        slope = a * (1 / (2 * root * (1 + root) ** 2) - mpf("0.3"))
        return value, slope if strength < mpf("0.5") else mpf(0)

    def _sit(self, y: Sequence[mpf]) -> Evaluated:
        a, pairs, count = self.a_ln, self.pairs, len(self.names)
        squares = [mpf(z) ** 2 for z in self.charges]
        root = mp.sqrt(sum(q * m for q, m in zip(squares, y, strict=True)) / 2)
        value = a * root / (1 + mpf("1.5") * root)
        slope = a / (2 * root * (1 + mpf("1.5") * root) ** 2)
        crowd = [sum(e * m for e, m in zip(row, y, strict=True)) for row in pairs]
        x = mpf("1.5") * root
        term = 1 + x - 2 * mp.log(1 + x) - 1 / (1 + x)
        rise = (x / (1 + x)) ** 2 * mpf("1.5") / (2 * root)
        factor = 2 * a / mpf("1.5") ** 3
        both = sum(c * m for c, m in zip(crowd, y, strict=True)) / 2
        n = mpf(WATER_MOL_PER_KG)
        ln_water = -(sum(y) - factor * term + both) / n
        by_water = [-(1 - factor * rise * squares[j] / 2 + crowd[j]) / n for j in range(count)]
        offsets, slopes = [], []
        for i in range(count):
            offsets.append(squares[i] * value - crowd[i] + self.waters[i] * ln_water)
            slopes.append(
                [
                    squares[i] * slope * squares[j] / 2 - pairs[i][j] + self.waters[i] * by_water[j]
                    for j in range(count)
                ]
            )
        return Evaluated(offsets, slopes, ln_water, by_water)


@dataclass(frozen=True)
class Evaluated:
    """Offsets of ln m per species, their slopes with the surroundings, and those of water."""

    offsets: list[mpf]
    slopes: list[list[mpf]]
    ln_water: mpf
    by_water: list[mpf]

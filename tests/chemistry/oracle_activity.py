"""Activity coefficients in 50 digits for the oracle, written from the equations.

The surroundings of a species are the ionic strength for Davies' equation, and the molality of
every species for specific ion interaction, whose water follows by Gibbs-Duhem.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from mpmath import mp, mpf

from chemistry import System

A_AT_25_DEGC = "0.509"
WATER_MOL_PER_KG = "55.508"


@dataclass(frozen=True)
class Coefficients:
    """The model of a system for species with names, charges and water of formation."""

    system: System
    names: Sequence[str]
    charges: Sequence[int]
    waters: Sequence[mpf]

    def __post_init__(self) -> None:
        if self.system.activity != "ideal" and self.system.temperature_degc != 25.0:
            raise ValueError("the oracle knows Debye and Hueckel's A at 25 C alone")

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
        """Interaction coefficient in natural-log units."""
        assert self.system.interactions is not None
        z = self.charges
        value = self.system.interactions.of(
            self.names[one], self.names[other], float(z[one]), float(z[other])
        )
        return mp.log(10) * mpf(value)

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
        a = mpf(A_AT_25_DEGC) * mp.log(10)
        held = min(strength, mpf("0.5"))
        root = mp.sqrt(held)
        value = a * (root / (1 + root) - mpf("0.3") * held)
        slope = a * (1 / (2 * root * (1 + root) ** 2) - mpf("0.3"))
        return value, slope if strength < mpf("0.5") else mpf(0)

    def _sit(self, y: Sequence[mpf]) -> Evaluated:
        a, count = mpf(A_AT_25_DEGC) * mp.log(10), len(self.names)
        squares = [mpf(z) ** 2 for z in self.charges]
        root = mp.sqrt(sum(q * m for q, m in zip(squares, y, strict=True)) / 2)
        value = a * root / (1 + mpf("1.5") * root)
        slope = a / (2 * root * (1 + mpf("1.5") * root) ** 2)
        pairs = [[self.epsilon(i, j) for j in range(count)] for i in range(count)]
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

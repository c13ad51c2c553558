"""Activity coefficients as smooth functions of a water's surroundings: Davies, SIT and ideal.

The surroundings ``y`` are a few sums over the species, ``y = m L``: the ionic strength for Davies,
and for specific ion interaction (SIT) also the total molality and every interacting ion. Owns the
coefficients, the activity of water and their slopes; ``y`` itself is found with the equilibrium.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from chemistry.errors import SystemDefinitionError

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

LN10 = float(np.log(10.0))
WATER_MOL_PER_KG = 55.508

# Debye-Hueckel A, (kg/mol)^0.5: Freeze & Cherry 1979, Groundwater, Appendix IV; 25 C rounded to
# the usual 0.509 so that it is the value the constants were reduced with.
_A_TEMPERATURES_DEGC = np.array([0.0, 10.0, 15.0, 20.0, 25.0, 30.0, 40.0, 50.0, 60.0])
_A_VALUES = np.array([0.4883, 0.4960, 0.5000, 0.5042, 0.5090, 0.5130, 0.5221, 0.5319, 0.5425])

# Davies 1962, Ion Association: log10 g = -A z^2 (sqrt(I)/(1+sqrt(I)) - 0.3 I).
DAVIES_LINEAR = 0.3
# Above this ionic strength the Davies term keeps its value: the equation holds to about 0.5.
DAVIES_FROZEN_ABOVE = 0.5
# SIT: log10 g = -z^2 A sqrt(I)/(1 + 1.5 sqrt(I)) + sum eps m (Ciavatta 1980; IUPAC recommends 1.5).
SIT_BA = 1.5
# Surroundings below this molality are left out of Newton's matrix (never out of the coefficients).
NEGLIGIBLE_MOLALITY = 1e-3

ACTIVITY_NAMES = ("auto", "davies", "sit", "ideal")


def debye_hueckel_a(temperature_degc: float) -> float:
    """Debye-Hueckel A at a temperature, interpolated in the published table. [(kg/mol)^0.5]

    References
    ----------
    Freeze & Cherry 1979, Groundwater, Appendix IV.
    """
    return float(np.interp(temperature_degc, _A_TEMPERATURES_DEGC, _A_VALUES))


@dataclass(frozen=True, slots=True)
class Interactions:
    """Specific ion interaction coefficients, kg/mol (log10 units).

    ``pairs`` holds published and estimated coefficients by the two names in either order; every
    other pair follows `interaction_by_rule`.
    """

    pairs: Mapping[tuple[str, str], float]

    def of(self, one: str, other: str, charge_one: float, charge_other: float) -> float:
        """Coefficient of two species."""
        known = self.pairs.get((one, other), self.pairs.get((other, one)))
        if known is not None:
            return known
        return interaction_by_rule(one, other, charge_one, charge_other)

    def has(self, one: str, other: str) -> bool:
        """Whether the pair is tabulated."""
        return (one, other) in self.pairs or (other, one) in self.pairs


def interaction_by_rule(one: str, other: str, charge_one: float, charge_other: float) -> float:
    """Coefficient of a pair without a published value. [kg/mol]

    Cations of charge z with an anion of charge -1: -0.05 + 0.1 z; Na+, K+ or NH4+ with an anion of
    charge -z: -0.05 z; other pairs of multivalent ions 0, since ion pairs carry them; equal signs
    and neutral species 0.

    References
    ----------
    Hummel 2009 (from memory) and analogy; uncertain by about 0.1 per charge.
    """
    if charge_one * charge_other >= 0.0:
        return 0.0
    cation, z, anion = (
        (one, charge_one, -charge_other) if charge_one > 0 else (other, charge_other, -charge_one)
    )
    if cation in ("Na+", "K+", "NH4+"):
        return -0.05 * anion
    return -0.05 + 0.1 * z if anion == 1.0 else 0.0


@dataclass(frozen=True, eq=False)
class ActivityModel:
    """The model for the species of one system: offsets ``ln m - (ln K + A l)`` and their slopes.

    ``functionals`` L has shape (species, width), column 0 giving the ionic strength. Davies and
    ideal keep neutral species and water at an activity coefficient of 1, as in the review that the
    shipped constants come from.
    """

    name: str
    a_ln: float
    charges: FloatArray
    water: FloatArray
    interactions: FloatArray  # (species, interacting ions), natural log; empty for Davies
    ions: IntArray  # species that are interacting ions

    @cached_property
    def squared_charges(self) -> FloatArray:
        """z^2 of every species."""
        return np.square(self.charges)

    @cached_property
    def functionals(self) -> FloatArray:
        """L, (species, width)."""
        columns = [0.5 * self.squared_charges]
        if self.name == "sit":
            columns.append(np.ones_like(self.charges))
            columns += list(np.eye(self.charges.size)[self.ions])
        return np.ascontiguousarray(np.stack(columns, axis=1))

    @property
    def width(self) -> int:
        """Number of surroundings."""
        return int(self.functionals.shape[1])

    def screening(self, ionic_strength: FloatArray) -> tuple[FloatArray, FloatArray]:
        """D(I) and dD/dI with ``ln g = -z^2 D``, in natural-log units. [-], [kg/mol]"""
        if self.name == "ideal":
            zero = np.zeros_like(ionic_strength)
            return zero, zero
        if self.name == "sit":
            root = np.sqrt(np.maximum(ionic_strength, 1e-30))
            value = self.a_ln * root / (1.0 + SIT_BA * root)
            return value, self.a_ln * 0.5 / (root * (1.0 + SIT_BA * root) ** 2)
        held = np.minimum(ionic_strength, DAVIES_FROZEN_ABOVE)
        root = np.sqrt(np.maximum(held, 1e-30))
        value = self.a_ln * (root / (1.0 + root) - DAVIES_LINEAR * held)
        slope = self.a_ln * (0.5 / (root * (1.0 + root) ** 2) - DAVIES_LINEAR)
        return value, np.where(ionic_strength < DAVIES_FROZEN_ABOVE, slope, 0.0)

    def offset(self, y: FloatArray) -> FloatArray:
        """ln(m / (K prod a)) = -ln g + w ln a_w of every species, (n, species)."""
        value, _ = self.screening(y[:, 0])
        offset = value[:, None] * self.squared_charges
        if self.name == "sit":
            offset -= y[:, 2:] @ self.interactions.T
            offset += self.ln_water(y)[:, None] * self.water
        return offset

    def offset_slope(self, y: FloatArray, columns: IntArray) -> FloatArray:
        """Change of `offset` with some of the surroundings, (n, species, columns)."""
        _, slope = self.screening(y[:, 0])
        first = slope[:, None] * self.squared_charges
        if self.name != "sit":
            return first[:, :, None]
        n, size = y.shape[0], self.charges.size
        result = np.zeros((n, size, columns.size))
        water = self.ln_water_slope(y)[:, columns]
        for position, column in enumerate(columns):
            if column == 0:
                result[:, :, position] += first
            elif column >= 2:
                result[:, :, position] -= self.interactions[:, column - 2]
        result += water[:, None, :] * self.water[:, None]
        return result

    def ln_water(self, y: FloatArray) -> FloatArray:
        """Natural log of the activity of water, (n,); 0 but for SIT.

        Notes
        -----
        From the coefficients by Gibbs-Duhem: ``ln a_w = -(M + ln10 (-2A/1.5^3 t(x) + sum_ca eps m_c
        m_a + sum_ni eps m_n m_i)) / 55.508`` with ``x = 1.5 sqrt(I)`` and
        ``t = 1 + x - 2 ln(1 + x) - 1/(1 + x)``.
        """
        if self.name != "sit":
            return np.zeros(y.shape[0])
        x = SIT_BA * np.sqrt(np.maximum(y[:, 0], 0.0))
        screening = 1.0 + x - 2.0 * np.log1p(x) - 1.0 / (1.0 + x)
        ions = y[:, 2:]
        pairs = 0.5 * ((ions @ self._among_ions) * ions).sum(axis=1)
        total = y[:, 1] - 2.0 * self.a_ln / SIT_BA**3 * screening + pairs
        return np.asarray(-total / WATER_MOL_PER_KG, dtype=float)

    def ln_water_slope(self, y: FloatArray) -> FloatArray:
        """Change of `ln_water` with the surroundings, (n, width)."""
        result = np.zeros_like(y)
        if self.name != "sit":
            return result
        x = SIT_BA * np.sqrt(np.maximum(y[:, 0], 1e-30))
        # dt/dx = (x / (1 + x))^2, dx/dI = 1.5^2 / (2 x)
        rise = (x / (1.0 + x)) ** 2 * SIT_BA**2 / (2.0 * x)
        result[:, 0] = 2.0 * self.a_ln / SIT_BA**3 * rise
        result[:, 1] = -1.0
        result[:, 2:] = -(y[:, 2:] @ self._among_ions)
        return result / WATER_MOL_PER_KG

    @cached_property
    def _among_ions(self) -> FloatArray:
        return np.ascontiguousarray(self.interactions[self.ions])

    def leading(self, y: FloatArray, *, least: float = NEGLIGIBLE_MOLALITY) -> IntArray:
        """Surroundings above a molality somewhere in a batch, ionic strength first.

        The default suits Newton's matrix: what is left out only slows it by a digit or two.
        """
        if self.name != "sit":
            return np.array([0])
        seen = y.max(axis=0, initial=0.0) > least
        seen[0] = True
        return np.flatnonzero(seen)


def build_activity(
    name: str,
    charges: FloatArray,
    temperature_degc: float = 25.0,
    *,
    names: Sequence[str] = (),
    water: FloatArray | None = None,
    interactions: Interactions | None = None,
) -> ActivityModel:
    """Build the model by name for the species of a system.

    Parameters
    ----------
    name
        ``davies``, ``sit``, ``ideal``, or ``auto`` (Davies).
    charges : ndarray, shape (species,)
    names, water
        Names of the species and moles of water each is formed with; needed for SIT.
    interactions
        Coefficients; needed for SIT.

    Raises
    ------
    SystemDefinitionError
        The name is unknown, or SIT is asked for without coefficients.
    """
    if name not in ACTIVITY_NAMES:
        raise SystemDefinitionError(
            f"unknown activity model {name!r}: use one of {', '.join(ACTIVITY_NAMES)}"
        )
    chosen = "davies" if name == "auto" else name
    a_ln = debye_hueckel_a(temperature_degc) * LN10
    z = np.asarray(charges, dtype=float)
    formed_with = np.zeros_like(z) if water is None else np.asarray(water, dtype=float)
    if chosen != "sit":
        return ActivityModel(
            chosen, a_ln, z, formed_with, np.zeros((z.size, 0)), np.zeros(0, dtype=np.int64)
        )
    if interactions is None:
        raise SystemDefinitionError("the activity model sit needs interaction coefficients")
    ions = np.flatnonzero(z != 0.0)
    table = np.zeros((z.size, ions.size))
    for i, one in enumerate(names):
        for k, j in enumerate(ions):
            table[i, k] = interactions.of(one, names[int(j)], z[i], z[j])
    return ActivityModel(chosen, a_ln, z, formed_with, LN10 * table, ions)

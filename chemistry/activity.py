"""Activity coefficients as smooth functions of a water's surroundings: Davies, SIT and ideal.

The surroundings ``y`` are a few sums over the species, ``y = m L``: the ionic strength for Davies,
and for specific ion interaction (SIT) also the total molality and the groups of species that act
alike on all others. Owns the coefficients, the activity of water and their slopes; ``y`` itself is
found with the equilibrium.
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

# Ionic strength from which `choose_activity` takes SIT. [mol/L]
SALTY_FROM_MOL_PER_L = 0.3
# Ionic strength to which each model is trusted: Davies 1962; SIT from the mean coefficients that
# its table was compared with (2:1 chlorides are off by 13 % at I = 6, gypsum in sodium chloride
# by a quarter at 2.5). [mol/L]
TRUSTED_TO_MOL_PER_L: Mapping[str, float] = {"davies": 0.5, "sit": 3.0, "ideal": 0.0}

# Surroundings below this molality are left out of Newton's matrix (never out of the coefficients).
NEGLIGIBLE_MOLALITY = 1e-6

ALKALI_LIKE = ("Na+", "K+", "NH4+")
ACTIVITY_NAMES = ("auto", "davies", "sit", "ideal")


def debye_hueckel_a(temperature_degc: float) -> float:
    """Debye-Hueckel A at a temperature, interpolated in the published table. [(kg/mol)^0.5]

    References
    ----------
    Freeze & Cherry 1979, Groundwater, Appendix IV.
    """
    return float(np.interp(temperature_degc, _A_TEMPERATURES_DEGC, _A_VALUES))


def choose_activity(ionic_strength_mol_per_l: float) -> str:
    """Model that suits waters up to an ionic strength: ``davies``, or ``sit`` above about 0.3.

    One model serves all states of a site, so the strength to ask for is that of its saltiest water.

    Notes
    -----
    Davies' coefficients depend on charge and ionic strength alone. Against measured mean
    coefficients (Robinson & Stokes, from memory), ion pairs counted, the chlorides and sulfates of
    Na, K, Mg, Ca and Ba are within 8 % at I = 0.3, 21 % at I = 0.6 and 36 % at I = 1.5; with SIT
    within 3 %, 4 % and 7 %. Below 0.3 the two differ by less than most constants are known to,
    and Davies is the model that those were reduced with, and the faster one.

    Examples
    --------
    >>> choose_activity(0.08), choose_activity(0.9)
    ('davies', 'sit')
    """
    return "sit" if ionic_strength_mol_per_l > SALTY_FROM_MOL_PER_L else "davies"


@dataclass(frozen=True, slots=True)
class Interactions:
    """Specific ion interaction coefficients, kg/mol (log10 units).

    ``pairs`` holds published and estimated coefficients by the two names in either order; every
    other pair follows `interaction_by_rule`.
    """

    pairs: Mapping[tuple[str, str], float]

    def of(self, one: str, other: str, charge_one: float, charge_other: float) -> float:
        """Coefficient of two species. [kg/mol]"""
        known = self.pairs.get((one, other), self.pairs.get((other, one)))
        if known is not None:
            return known
        return interaction_by_rule(one, other, charge_one, charge_other)

    def has(self, one: str, other: str) -> bool:
        """Whether the pair is tabulated."""
        return (one, other) in self.pairs or (other, one) in self.pairs

    def matrix(self, names: Sequence[str], charges: FloatArray) -> FloatArray:
        """Coefficients of all species with each other, symmetric, (species, species). [kg/mol]"""
        index = {name: i for i, name in enumerate(names)}
        cation, anion = np.maximum(charges, 0.0), np.maximum(-charges, 0.0)
        alkali = np.array([name in ALKALI_LIKE for name in names], dtype=bool)
        single = np.where(anion[None, :] == 1.0, -0.05 + 0.1 * cation[:, None], 0.0)
        value = np.where(alkali[:, None], -0.05 * anion[None, :], single)
        half = np.where((cation[:, None] > 0.0) & (anion[None, :] > 0.0), value, 0.0)
        found: FloatArray = half + half.T
        for (one, other), coefficient in self.pairs.items():
            if one in index and other in index:
                found[index[one], index[other]] = found[index[other], index[one]] = coefficient
        return found


def interaction_by_rule(one: str, other: str, charge_one: float, charge_other: float) -> float:
    """Coefficient of a pair without a published value. [kg/mol]

    Cations of charge z with an anion of charge -1: -0.05 + 0.1 z; Na+, K+ or NH4+ with an anion of
    charge -z: -0.05 z; other pairs 0, since ion pairs carry them; equal signs and neutral
    species 0.

    References
    ----------
    Hummel 2009 (from memory) and analogy; uncertain by about 0.1 per charge.
    """
    if charge_one * charge_other >= 0.0:
        return 0.0
    cation, z, anion = (
        (one, charge_one, -charge_other) if charge_one > 0 else (other, charge_other, -charge_one)
    )
    if cation in ALKALI_LIKE:
        return -0.05 * anion
    return -0.05 + 0.1 * z if anion == 1.0 else 0.0


@dataclass(frozen=True, eq=False)
class ActivityModel:
    """The model for the species of one system: offsets ``ln m - (ln K + A l)`` and their slopes.

    ``functionals`` L has shape (species, width), column 0 giving the ionic strength. Davies and
    ideal keep neutral species and water at an activity coefficient of 1, as in the review that the
    shipped constants come from.

    Species whose coefficients with all others are the same (hydroxo complexes of one charge, most
    of them by the rule) are one group: only the sum of their molalities matters to the others. That
    is exact, and makes two or three dozen groups of a hundred species. Neutral species take part
    where a coefficient is tabulated, on both sides, as the Gibbs-Duhem equation asks.
    """

    name: str
    a_ln: float
    charges: FloatArray
    water: FloatArray
    interactions: FloatArray  # of every species with each group, (species, groups), natural log
    groups: FloatArray  # which species are in each group, 1 or 0, (species, groups)

    @cached_property
    def squared_charges(self) -> FloatArray:
        """z^2 of every species."""
        return np.square(self.charges)

    @cached_property
    def functionals(self) -> FloatArray:
        """L, (species, width): ionic strength; with SIT also total molality and the groups."""
        columns = [0.5 * self.squared_charges[:, None]]
        if self.name == "sit":
            columns += [np.ones((self.charges.size, 1)), self.groups]
        return np.ascontiguousarray(np.concatenate(columns, axis=1))

    @property
    def width(self) -> int:
        """Number of surroundings."""
        return int(self.functionals.shape[1])

    @property
    def trusted_to_mol_per_l(self) -> float:
        """Ionic strength to which the model is trusted. [mol/L]"""
        return TRUSTED_TO_MOL_PER_L[self.name]

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
        """Change of `offset` with some of the surroundings, (n, species, columns).

        Notes
        -----
        ``z^2 dD/dI`` in column 0, ``-eps`` in those of the groups, and ``w d ln a_w / dy`` in all.
        """
        _, slope = self.screening(y[:, 0])
        water = self.ln_water_slope(y)[:, columns]
        result = water[:, None, :] * self.water[:, None] + self.steady_slope[:, columns]
        first = np.flatnonzero(columns == 0)
        result[:, :, first] += (slope[:, None] * self.squared_charges)[:, :, None]
        return result

    @cached_property
    def steady_slope(self) -> FloatArray:
        """The steady part of `offset_slope`: -eps in the groups' columns, (species, width)."""
        before = np.zeros((self.charges.size, self.width - self.interactions.shape[1]))
        return np.concatenate([before, -self.interactions], axis=1)

    def ln_water(self, y: FloatArray) -> FloatArray:
        """Natural log of the activity of water, (n,); 0 but for SIT.

        Notes
        -----
        From the coefficients by Gibbs-Duhem: ``ln a_w = -(M + ln10 (-2A/1.5^3 t(x) + sum eps m m))
        / 55.508``, the sum over all pairs of species, with ``x = 1.5 sqrt(I)`` and ``t = 1 + x -
        2 ln(1 + x) - 1/(1 + x)``.
        """
        if self.name != "sit":
            return np.zeros(y.shape[0])
        x = SIT_BA * np.sqrt(np.maximum(y[:, 0], 0.0))
        screening = 1.0 + x - 2.0 * np.log1p(x) - 1.0 / (1.0 + x)
        groups = y[:, 2:]
        pairs = 0.5 * ((groups @ self.among_groups) * groups).sum(axis=1)
        total = y[:, 1] - 2.0 * self.a_ln / SIT_BA**3 * screening + pairs
        return np.asarray(-total / WATER_MOL_PER_KG, dtype=float)

    def ln_water_slope(self, y: FloatArray) -> FloatArray:
        """Change of `ln_water` with the surroundings, (n, width)."""
        result = np.zeros_like(y)
        if self.name != "sit":
            return result
        x = SIT_BA * np.sqrt(np.maximum(y[:, 0], 0.0))
        # dt/dx = (x / (1 + x))^2, dx/dI = 1.5^2 / (2 x)
        rise = x / (1.0 + x) ** 2 * SIT_BA**2 / 2.0
        result[:, 0] = 2.0 * self.a_ln / SIT_BA**3 * rise
        result[:, 1] = -1.0
        result[:, 2:] = -(y[:, 2:] @ self.among_groups)
        return result / WATER_MOL_PER_KG

    @cached_property
    def among_groups(self) -> FloatArray:
        """Coefficients of the groups with each other, natural log, (groups, groups)."""
        members = np.argmax(self.groups, axis=0)
        return np.ascontiguousarray(self.interactions[members])

    def leading(self, y: FloatArray, *, least: float = NEGLIGIBLE_MOLALITY) -> IntArray:
        """Surroundings above a molality somewhere in a batch, ionic strength first.

        The default suits Newton's matrix: what is left out follows a step later, which costs it
        no digit that could be seen.
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
        none = np.zeros((z.size, 0))
        return ActivityModel(chosen, a_ln, z, formed_with, none, none)
    if interactions is None:
        raise SystemDefinitionError("the activity model sit needs interaction coefficients")
    table = LN10 * interactions.matrix(names, z)
    first, groups = _groups_of(table)
    return ActivityModel(chosen, a_ln, z, formed_with, table[:, first], groups)


def _groups_of(table: FloatArray) -> tuple[IntArray, FloatArray]:
    """First member of each group of equal columns, and membership (species, groups).

    Columns of zeros belong to no group.
    """
    seen: dict[bytes, list[int]] = {}
    for species, column in enumerate(table.T + 0.0):
        if column.any():
            seen.setdefault(column.tobytes(), []).append(species)
    groups = np.zeros((table.shape[0], len(seen)))
    for k, members in enumerate(seen.values()):
        groups[members, k] = 1.0
    return np.array([members[0] for members in seen.values()], dtype=np.int64), groups

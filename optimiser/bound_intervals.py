"""Intervals that hold for every equilibrium of a cell: log activities, species, ionic strength.

Owns interval propagation from ranges of totals, pH and dissolved ceilings; rows of the relaxation
are built from its result in `optimiser.bound_rows`. Davies and ideal activity only.

Notes
-----
With ``l`` the natural log activities, ``e_s = b_s + A_s l + z_s^2 D(I)`` the natural log of the
concentration of species ``s`` and ``I = 1/2 sum z^2 m``, each rule below narrows an interval by one
necessary condition of equilibrium:

- mass balance from above: ``A_sc m_s <= T_c - sum of the others' least amounts``;
- mass action: ``l_c = (e_s - b_s - other terms) / A_sc``, with the others at their ends;
- saturation: ``k_p + G_p l <= 0`` for every candidate solid, whether it is present or not;
- from below: either no solid holds component ``c``, and then its species add up to ``T_c``; or
  some solid does, and then its saturation index is 0. The weaker of the two is taken; what no
  solid can take up, for want of its other components, stays dissolved in any case.

All stoichiometry but the proton's is positive, which `supported` checks.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from chemistry.activity import ActivityModel
from chemistry.system import System

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

LOWEST_LN = -250.0
"""Log activities below this are put at it: what they stand for is far below any row's scale."""

ROUNDS = 12
EMPTY_BY = 1e-6
ROOT_ROUNDS = 60


@dataclass(frozen=True, slots=True, eq=False)
class Water:
    """What is known beforehand of one state: ranges of totals, ln activity of H+, ceilings.

    ``low`` and ``high`` (components,) are totals including solids, mol/L; ``dissolved`` ceilings of
    dissolved totals (inf where none). The entries of H+ are not used.
    """

    system: System
    low: FloatArray
    high: FloatArray
    proton_low: float
    proton_high: float
    dissolved: FloatArray


@dataclass(frozen=True, slots=True, eq=False)
class Ranges:
    """Intervals of one state; see the module.

    ``present`` (components,) tells which components there are, ``species`` and ``solids`` which can
    be there at all; ``e_low`` and ``e_high`` are ln mol/L, ``solid_high`` mol/L, ``must``
    which solids are there for certain; ``protons_low``
    and ``protons_high`` the proton total that pH and the other totals allow, mol/L.
    """

    present: BoolArray
    species: BoolArray
    solids: BoolArray
    l_low: FloatArray
    l_high: FloatArray
    e_low: FloatArray
    e_high: FloatArray
    solid_high: FloatArray
    must: BoolArray
    strength_low: float
    strength_high: float
    screen_low: float
    screen_high: float
    protons_low: float
    protons_high: float

    @property
    def empty(self) -> bool:
        """Whether no water fits."""
        crossed = (self.l_low > self.l_high + EMPTY_BY) & self.present
        gone = (self.e_low > self.e_high + EMPTY_BY) & self.species
        return bool(crossed.any() or gone.any())


def supported(system: System) -> str:
    """Why a system cannot be bounded, or nothing where it can."""
    model = system.activity_model
    if model.name not in ("davies", "ideal"):
        return "bounds need an activity model of ionic strength alone, and this site's is not"
    others = np.array([c != "H+" for c in system.components])
    if "H+" not in system.index or (system.formation[:, others] < 0.0).any():
        return "bounds need species made of components and protons alone"
    if (system.solid_formation[:, others] < 0.0).any():
        return "bounds need solids made of components and protons alone"
    return ""


def screening_range(model: ActivityModel, low: float, high: float) -> tuple[float, float]:
    """Least and largest D over an interval of ionic strength.

    Davies' D rises to one maximum, falls, and stays from 0.5 mol/L on, so the least value is at an
    end and the largest at an end or that maximum.
    """
    ends, _ = model.screening(np.array([low, high]))
    inside = np.array([p for p in (_peak(model),) if low < p < high])
    values = np.concatenate([ends, model.screening(inside)[0]])
    return float(values.min()), float(values.max())


def _peak(model: ActivityModel) -> float:
    """Ionic strength of the largest D, by bisection on its slope."""
    low, high = 1e-6, 0.5 - 1e-9
    if model.name == "ideal" or model.screening(np.array([high]))[1][0] > 0.0:
        return high
    for _ in range(ROOT_ROUNDS):
        middle = 0.5 * (low + high)
        if model.screening(np.array([middle]))[1][0] > 0.0:
            low = middle
        else:
            high = middle
    return 0.5 * (low + high)


def propagate(water: Water, known: Ranges | None = None) -> Ranges:
    """Narrow the intervals of a state; start from those of a larger cell where known."""
    work = _Work(water, known)
    for _ in range(ROUNDS):
        before = work.l_high.sum() - work.l_low.sum()
        work.round()
        if work.crossed or before - (work.l_high.sum() - work.l_low.sum()) < 1e-3:
            break
    return work.result()


class _Work:
    """The intervals while they are narrowed."""

    def __init__(self, water: Water, known: Ranges | None) -> None:
        system = water.system
        self.water, self.model = water, system.activity_model
        self.a, self.g = system.formation, system.solid_formation
        self.b, self.k = system.ln_k, system.solid_ln_k
        self.z2 = self.model.squared_charges
        self.proton = system.index["H+"]
        self.low, self.high = np.maximum(water.low, 0.0), np.maximum(water.high, 0.0)
        self.present = self.high > 0.0
        self.present[self.proton] = True
        absent = ~self.present
        self.species = ~((self.a[:, absent] != 0.0).any(axis=1))
        self.solids = ~((self.g[:, absent] != 0.0).any(axis=1))
        count = len(system.components)
        self.must = np.zeros(self.g.shape[0], dtype=bool)
        self.l_low, self.l_high = np.full(count, LOWEST_LN), np.full(count, 5.0)
        self.strength = [0.0, 20.0]
        if known is not None:
            self.l_low = np.maximum(self.l_low, known.l_low)
            self.l_high = np.minimum(self.l_high, known.l_high)
            self.strength = [known.strength_low, known.strength_high]
            self.solids &= known.solids
            self.must |= known.must
        self._set_proton()
        self.screen = (0.0, 0.0)
        self.e_low, self.e_high = np.full(self.b.size, -np.inf), np.full(self.b.size, 5.0)
        self.solid_high = np.zeros(self.k.size)
        self.others = np.ones(count, dtype=bool)
        self.others[self.proton] = False

    def _set_proton(self) -> None:
        p = self.proton
        self.l_low[p] = max(self.l_low[p], self.water.proton_low)
        self.l_high[p] = min(self.l_high[p], self.water.proton_high)

    @property
    def crossed(self) -> bool:
        return bool(((self.l_low > self.l_high + EMPTY_BY) & self.present).any())

    def round(self) -> None:
        self.screen = screening_range(self.model, *self.strength)
        self._mass_action()
        self._from_above()
        self._saturation()
        self._activities_from_species()
        self._from_below()
        self._strength()

    def _sums(self, rows: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Least and largest ``rows l``."""
        plus, minus = np.maximum(rows, 0.0), np.minimum(rows, 0.0)
        low = plus @ self.l_low + minus @ self.l_high
        return low, plus @ self.l_high + minus @ self.l_low

    def _mass_action(self) -> None:
        low, high = self._sums(self.a)
        self.e_low = np.maximum(self.e_low, self.b + low + self.z2 * self.screen[0])
        self.e_high = np.minimum(self.e_high, self.b + high + self.z2 * self.screen[1])

    def _from_above(self) -> None:
        """Each species by what its components leave when the others take their least."""
        least = np.where(self.species, np.exp(np.minimum(self.e_low, 5.0)), 0.0)
        ceiling = np.minimum(self.high, self.water.dissolved)
        used = least @ self.a
        for c in np.flatnonzero(self.present & self.others):
            has = self.a[:, c] > 0.0
            left = ceiling[c] - used[c] + self.a[has, c] * least[has]
            most = np.maximum(left, ceiling[c] * 1e-12) / self.a[has, c] * (1.0 + 1e-9)
            self.e_high[has] = np.minimum(self.e_high[has], np.log(np.maximum(most, 1e-300)))

    def _saturation(self) -> None:
        low, high = self._sums(self.g)
        self.solids &= self.k + high >= -EMPTY_BY
        for p in np.flatnonzero(~((self.g[:, ~self.present] != 0.0).any(axis=1))):
            for c in np.flatnonzero((self.g[p] > 0.0) & self.others):
                rest = low[p] - self.g[p, c] * self.l_low[c]
                self.l_high[c] = min(self.l_high[c], -(self.k[p] + rest) / self.g[p, c])
        with np.errstate(divide="ignore"):
            share = np.where(self.g > 0.0, self.high / np.where(self.g > 0.0, self.g, 1.0), np.inf)
        share[:, self.proton] = np.inf
        self.solid_high = np.where(self.solids, share.min(axis=1, initial=np.inf), 0.0)

    def _activities_from_species(self) -> None:
        low, _ = self._sums(self.a)
        for c in np.flatnonzero(self.present & self.others):
            has = np.flatnonzero((self.a[:, c] > 0.0) & self.species)
            rest = low[has] - self.a[has, c] * self.l_low[c]
            room = self.e_high[has] - self.b[has] - rest - self.z2[has] * self.screen[0]
            self.l_high[c] = min(self.l_high[c], float((room / self.a[has, c]).min()))

    def _from_below(self) -> None:
        _, high = self._sums(self.a)
        _, solid_high = self._sums(self.g)
        most = np.where(self.species, np.exp(np.minimum(self.e_high, 5.0)), 0.0)
        ceiling = np.minimum(self.high, self.water.dissolved)
        for c in np.flatnonzero(self.present & self.others):
            bounds = []
            if self.low[c] <= ceiling[c] * (1.0 + 1e-9):
                bounds.append(self._dissolved_root(int(c), float(self.low[c]), high, most))
            for p in np.flatnonzero(self.solids & (self.g[:, c] > 0.0)):
                rest = solid_high[p] - self.g[p, c] * self.l_high[c]
                bounds.append(-(self.k[p] + rest) / self.g[p, c])
            least = min(bounds) if bounds else np.inf
            for p in np.flatnonzero(self.must & (self.g[:, c] > 0.0)):
                rest = solid_high[p] - self.g[p, c] * self.l_high[c]
                least = max(least, -(self.k[p] + rest) / self.g[p, c])
            left = self.low[c] - float(self.solid_high @ self.g[:, c])
            if left > 0.0:
                least = max(least, self._dissolved_root(int(c), left, high, most))
            self.l_low[c] = max(self.l_low[c], min(least, self.l_high[c] + 1.0))

    def _dissolved_root(self, c: int, amount: float, high: FloatArray, most: FloatArray) -> float:
        """Least l_c at which the species of c can add up to an amount, by bisection."""
        has = np.flatnonzero((self.a[:, c] > 0.0) & self.species)
        count = self.a[has, c]
        rest = self.b[has] + high[has] - count * self.l_high[c] + self.z2[has] * self.screen[1]
        low, top = LOWEST_LN, self.l_high[c] + 1e-9
        for _ in range(ROOT_ROUNDS):
            middle = 0.5 * (low + top)
            made = np.minimum(np.exp(np.minimum(rest + count * middle, 5.0)), most[has])
            if float(count @ made) < amount * (1.0 - 1e-9):
                low = middle
            else:
                top = middle
        return low

    def _strength(self) -> None:
        least = np.where(self.species, np.exp(np.minimum(self.e_low, 5.0)), 0.0)
        most = np.where(self.species, np.exp(np.minimum(self.e_high, 5.0)), 0.0)
        self._least_amounts(least, most)
        low = 0.5 * float(self.z2 @ least) * (1.0 - 1e-9)
        self.strength[0] = max(self.strength[0], min(low, self.strength[1]))
        high = 0.5 * self._largest_charges() * (1.0 + 1e-9)
        self.strength[1] = max(min(self.strength[1], high), self.strength[0])

    def _least_amounts(self, least: FloatArray, most: FloatArray) -> None:
        """Raise least amounts by what a component without solids leaves for one species."""
        solid = self.solid_high @ self.g
        made = most @ self.a
        for c in np.flatnonzero(self.present & self.others):
            has = (self.a[:, c] > 0.0) & self.species
            rest = self.low[c] * (1.0 - 1e-9) - solid[c] - made[c] + self.a[has, c] * most[has]
            least[has] = np.maximum(least[has], rest / self.a[has, c])
        with np.errstate(divide="ignore"):
            self.e_low = np.maximum(self.e_low, np.where(self.species, np.log(least), -np.inf))

    @property
    def owner(self) -> NDArray[np.int64]:
        """The scarcest component of each species and solid, to which it is charged; -1 for none."""
        rows = np.concatenate([self.a, self.g])
        scarce = np.where(rows > 0.0, self.high, np.inf)
        scarce[:, self.proton] = np.inf
        return np.where(np.isfinite(scarce.min(axis=1)), np.argmin(scarce, axis=1), -1)

    def most_amounts(self) -> FloatArray:
        """Largest amount of each species and solid. [mol/L]"""
        species = np.where(self.species, np.exp(np.minimum(self.e_high, 5.0)), 0.0)
        return np.concatenate([species, self.solid_high])

    def most_of(self, worth: FloatArray) -> float:
        """Upper end of a weighted sum of amounts of species and solids.

        Each is charged to its scarcest component. Per component, those of highest worth per mole
        of it are taken first; those of negative worth only as far as the component's least total
        asks for, less what species charged elsewhere may hold of it.
        """
        rows, most, owner = np.concatenate([self.a, self.g]), self.most_amounts(), self.owner
        alone = owner < 0
        total = float(np.maximum(worth[alone], 0.0) @ most[alone])
        for c in np.flatnonzero(self.present & self.others):
            mine = np.flatnonzero(owner == c)
            per_mole = worth[mine] / rows[mine, c]
            elsewhere = float(most @ rows[:, c]) - float(most[mine] @ rows[mine, c])
            room, need = self.high[c], max(0.0, self.low[c] - elsewhere)
            for k in np.argsort(-per_mole, kind="stable"):
                available = rows[mine[k], c] * most[mine[k]]
                taken = min(available, room if per_mole[k] > 0.0 else need)
                total += per_mole[k] * taken
                room, need = max(room - taken, 0.0), max(need - taken, 0.0)
        return total

    def _largest_charges(self) -> float:
        """Largest sum of z^2 m."""
        return self.most_of(np.concatenate([self.z2, np.zeros(self.k.size)]))

    @property
    def protons(self) -> FloatArray:
        """Protons per mole of each species and solid."""
        return np.concatenate([self.a[:, self.proton], self.g[:, self.proton]])

    def result(self) -> Ranges:
        self.screen = screening_range(self.model, *self.strength)
        self._mass_action()
        low, high = self.strength
        return Ranges(
            self.present, self.species, self.solids, self.l_low, self.l_high, self.e_low,
            self.e_high, self.solid_high, self.must, low, high, *self.screen,
            -self.most_of(-self.protons), self.most_of(self.protons),
        )  # fmt: skip

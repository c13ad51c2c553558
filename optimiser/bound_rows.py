"""Rows of the relaxation: one equilibrium state as linear conditions with a binary per solid.

Owns the linear relaxation of mass action, balances and saturation over the intervals of a cell;
which states there are and what is asked of them is `optimiser.bound_cells`.

Notes
-----
Variables of a state: ``l_c``, ``D`` and ``I``; ``x_s = m_s / S_s`` with ``S_s`` the largest amount
of the species in the cell; amounts of solids over their largest, and a binary for each solid that
tells whether it is present. With ``e_s = b_s + A_s l + z_s^2 D`` every equilibrium in the cell
meets:

- balances ``sum A_sc m_s + sum G_pc n_p = T_c``, ``I = 1/2 sum z^2 m``, exact and linear;
- ``m_s = exp(e_s)``, convex in ``e_s``: above every tangent, below the secant of the interval;
- species that differ by protons alone: ``m_s / m_r = exp(b_s - b_r + dA_H l_H + dz^2 D)`` lies
  between its values at the ends of the (narrow) intervals of ``l_H`` and ``D``;
- ``D(I)`` concave: below every tangent, above the chord;
- ``k_p + G_p l <= 0``, and ``>= -M_p (1 - y_p)``, ``n_p <= N_p y_p``: a solid that is present is
  saturated, ``M_p`` being its largest undersaturation in the cell.

Every row is loosened by `LOOSENED` of its own scale, ten times what solvers take for satisfied, so
that rounding cannot make a solver call a cell empty that is not. Species whose largest amount is
below `NEGLIGIBLE` of all balances they stand in get no variable; their sum widens the balances.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from optimiser.bound_intervals import Ranges, Water
from optimiser.linear_model import Expression, Model, Sense

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]
IntArray = NDArray[np.int64]

LOOSENED = 1e-6
NEGLIGIBLE = 1e-9
VISIBLE = 1e-3  # share of a balance from which a species gets many tangents from the start
TANGENTS_BELOW = (0.0, 0.5, 1.2, 2.5, 5.0)
FEW_TANGENTS = (0.0, 2.0)
WIDEST_SECANT = 25.0
WIDEST_RATIO = 6.0
DAVIES_CONCAVE_TO = 0.5


@dataclass(eq=False)
class StateRows:
    """Variables and rows of one state in a model.

    ``totals`` maps every component but H+ and H+ itself to its total, mol/L, as an expression of
    doses; ``scale`` (components,) is the size of each balance.
    """

    model: Model
    tag: str
    water: Water
    ranges: Ranges
    totals: Mapping[int, Expression]
    kept: BoolArray = field(init=False)
    scale: FloatArray = field(init=False)
    tangents: int = 0

    def __post_init__(self) -> None:
        self._sizes()
        self._variables()
        self._balances()
        self._screening()
        self._mass_action()
        self._ratios()
        self._solids()

    # -- names and expressions ---------------------------------------------------------------------

    def key(self, kind: str, name: str) -> str:
        """Name of a variable or row."""
        return f"{kind} {name} @{self.tag}"

    def l_key(self, component: int) -> str:
        """Variable of a log activity."""
        return self.key("ln", self.system.components[component])

    def m_key(self, species: int) -> str:
        """Variable of a species, in units of its largest amount."""
        return self.key("m", self.system.species_names[species])

    def n_key(self, solid: int) -> str:
        """Variable of a solid, in units of its largest amount."""
        return self.key("n", self.system.solid_names[solid])

    def y_key(self, solid: int) -> str:
        """Binary of a solid."""
        return self.key("y", self.system.solid_names[solid])

    def dissolved(self, weights: FloatArray) -> Expression:
        """Weighted sum of dissolved totals; what is negligible counts nothing."""
        per_species = self.system.formation @ weights
        return self._sum_species(per_species)

    def solids(self, weights: FloatArray) -> Expression:
        """Weighted sum of the amounts of solids."""
        most = self.ranges.solid_high
        terms = {
            self.n_key(int(p)): float(weights[p] * most[p])
            for p in np.flatnonzero(self.ranges.solids & (weights != 0.0))
        }
        return Expression(terms)

    def log_concentration(self, species: int) -> Expression:
        """``e_s`` of a species."""
        row = self.system.formation[species]
        terms = {self.l_key(int(c)): float(row[c]) for c in np.flatnonzero(row)}
        terms[self.d_key] = float(self.z2[species])
        return Expression(terms, float(self.system.ln_k[species]))

    @property
    def d_key(self) -> str:
        """Variable of the screening D."""
        return self.key("D", "")

    @property
    def i_key(self) -> str:
        """Variable of the ionic strength, in units of its largest value."""
        return self.key("I", "")

    def _sum_species(self, weights: FloatArray) -> Expression:
        terms = {
            self.m_key(int(s)): float(weights[s] * self.most[s])
            for s in np.flatnonzero(self.kept & (weights != 0.0))
        }
        return Expression(terms)

    # -- building ----------------------------------------------------------------------------------

    def _sizes(self) -> None:
        water, ranges = self.water, self.ranges
        self.system = water.system
        self.z2 = self.system.activity_model.squared_charges
        self.proton = self.system.index["H+"]
        self.most = np.where(ranges.species, np.exp(ranges.e_high), 0.0)
        a = self.system.formation
        scale = np.where(ranges.present, np.maximum(water.high, 0.0), 0.0)
        scale[self.proton] = max(
            abs(ranges.protons_low), abs(ranges.protons_high), abs(water.low[self.proton]),
            abs(water.high[self.proton]), 1e-6,
        )  # fmt: skip
        self.scale = scale
        visible = np.minimum(scale, water.dissolved)
        with np.errstate(divide="ignore", invalid="ignore"):
            share = np.where(a != 0.0, np.abs(a) * self.most[:, None] / visible, 0.0)
        self.share = np.nan_to_num(share, posinf=1.0).max(axis=1)
        self.kept = ranges.species & (self.share > NEGLIGIBLE)
        self.lost = np.abs(a[~self.kept]).T @ self.most[~self.kept]

    def _variables(self) -> None:
        model, ranges = self.model, self.ranges
        for c in np.flatnonzero(ranges.present):
            low, high = float(ranges.l_low[c]) - LOOSENED, float(ranges.l_high[c]) + LOOSENED
            model.add_variable(self.l_key(int(c)), low=min(low, high), high=max(low, high))
        low, high = ranges.screen_low - LOOSENED, ranges.screen_high + LOOSENED
        model.add_variable(self.d_key, low=low, high=high)
        model.add_variable(
            self.i_key,
            low=ranges.strength_low / ranges.strength_high * (1.0 - 1e-9),
            high=1.0 + 1e-9,
        )
        for s in np.flatnonzero(self.kept):
            low = np.exp(min(0.0, float(ranges.e_low[s] - ranges.e_high[s])))
            model.add_variable(self.m_key(int(s)), low=float(low) * (1.0 - 1e-9), high=1.0 + 1e-9)
        for p in np.flatnonzero(ranges.solids):
            model.add_variable(self.n_key(int(p)), high=1.0)
            low = float(ranges.must[p])
            model.add_variable(self.y_key(int(p)), low=low, high=1.0, integer=True)

    def _between(self, key: str, expression: Expression, low: float, high: float) -> None:
        """Add ``low <= expression <= high`` as two rows."""
        at = expression.constant
        if np.isfinite(high):
            self.model.add_row(f"{key} most", expression.terms, Sense.AT_MOST, high - at)
        if np.isfinite(low):
            self.model.add_row(f"{key} least", expression.terms, Sense.AT_LEAST, low - at)

    def _balances(self) -> None:
        a, g = self.system.formation, self.system.solid_formation
        for c in np.flatnonzero(self.ranges.present):
            total = self.totals[int(c)]
            left = self._sum_species(a[:, c]).plus(self.solids(g[:, c])).plus(total.times(-1.0))
            size = self.scale[c]
            lost = float(self.lost[c]) / size
            self._between(
                self.key("balance", self.system.components[c]), left.times(1.0 / size),
                -lost - LOOSENED, (lost if c == self.proton else 0.0) + LOOSENED,
            )  # fmt: skip

    def _screening(self) -> None:
        ranges, model = self.ranges, self.system.activity_model
        size = ranges.strength_high
        left = self._sum_species(0.5 * self.z2).times(1.0 / size)
        left = left.plus(Expression({self.i_key: -1.0}))
        lost = 0.5 * float(self.z2[~self.kept] @ self.most[~self.kept]) / size
        self._between(self.key("strength", ""), left, -lost - LOOSENED, LOOSENED)
        low, high = ranges.strength_low, ranges.strength_high
        if high > DAVIES_CONCAVE_TO or high - low < 1e-9 or model.name == "ideal":
            return
        ends, slopes = model.screening(np.array([low, high, 0.5 * (low + high)]))
        for k, at in enumerate((low, high, 0.5 * (low + high))):
            if at <= 1e-8:
                continue
            row = {self.d_key: 1.0, self.i_key: -float(slopes[k]) * size}
            rhs = float(ends[k] - slopes[k] * at) + LOOSENED
            self.model.add_row(self.key("screening below", str(k)), row, Sense.AT_MOST, rhs)
        chord = float(ends[1] - ends[0]) / (high - low)
        row = {self.d_key: 1.0, self.i_key: -chord * size}
        rhs = float(ends[0]) - chord * low - LOOSENED
        self.model.add_row(self.key("screening above", ""), row, Sense.AT_LEAST, rhs)

    def _mass_action(self) -> None:
        for s in np.flatnonzero(self.kept):
            width = float(self.ranges.e_high[s] - self.ranges.e_low[s])
            chosen = TANGENTS_BELOW if self.share[s] > VISIBLE else FEW_TANGENTS
            for below in chosen:
                if below <= max(width, 0.0):
                    self.add_tangent(int(s), float(self.ranges.e_high[s]) - below)
            if 1e-9 < width < WIDEST_SECANT:
                self._add_secant(int(s), width)

    def add_tangent(self, species: int, at: float) -> None:
        """Add the row ``m_s >= exp(at) (1 + e_s - at)``."""
        self.tangents += 1
        top = float(self.ranges.e_high[species])
        weight = float(np.exp(at - top))
        e = self.log_concentration(species)
        row = Expression({self.m_key(species): 1.0}).plus(e.times(-weight))
        name = self.key(f"tangent {self.tangents}", self.system.species_names[species])
        rhs = weight * (1.0 - at) - LOOSENED - row.constant
        self.model.add_row(name, row.terms, Sense.AT_LEAST, rhs)

    def _add_secant(self, species: int, width: float) -> None:
        top = float(self.ranges.e_high[species])
        slope = -float(np.expm1(-width)) / width
        e = self.log_concentration(species)
        row = Expression({self.m_key(species): 1.0}).plus(e.times(-slope))
        name = self.key("secant", self.system.species_names[species])
        rhs = 1.0 - slope * top + LOOSENED - row.constant
        self.model.add_row(name, row.terms, Sense.AT_MOST, rhs)

    def _ratios(self) -> None:
        """Bind species that differ by protons alone to the largest of them."""
        a = self.system.formation
        others = np.arange(a.shape[1]) != self.proton
        groups: dict[bytes, list[int]] = {}
        for s in np.flatnonzero(self.kept):
            groups.setdefault(a[s, others].tobytes(), []).append(int(s))
        for members in groups.values():
            if len(members) < 2 or not a[members[0], others].any():
                continue
            lead = max(members, key=lambda s: self.most[s])
            for member in members:
                if member != lead:
                    self._ratio(member, lead)

    def _ratio(self, s: int, lead: int) -> None:
        ranges, a = self.ranges, self.system.formation
        step = float(a[s, self.proton] - a[lead, self.proton])
        by_screen = float(self.z2[s] - self.z2[lead])
        ends = sorted((step * ranges.l_low[self.proton], step * ranges.l_high[self.proton]))
        screens = sorted((by_screen * ranges.screen_low, by_screen * ranges.screen_high))
        if ends[1] - ends[0] + screens[1] - screens[0] > WIDEST_RATIO:
            return
        shift = float(self.system.ln_k[s] - self.system.ln_k[lead])
        shift += float(ranges.e_high[lead] - ranges.e_high[s])
        low, high = (float(np.exp(shift + ends[k] + screens[k])) for k in (0, 1))
        name = self.key("ratio", self.system.species_names[s])
        mine, of = self.m_key(s), self.m_key(lead)
        for bound, sense, way in ((high, Sense.AT_MOST, 1.0), (low, Sense.AT_LEAST, -1.0)):
            size = max(1.0, bound)
            if bound > 1e-9:
                row = {mine: 1.0 / size, of: -bound / size}
                label = f"{name} {'most' if way > 0 else 'least'}"
                self.model.add_row(label, row, sense, way * LOOSENED)

    def _solids(self) -> None:
        ranges, g = self.ranges, self.system.solid_formation
        plus, minus = np.maximum(g, 0.0), np.minimum(g, 0.0)
        lowest = self.system.solid_ln_k + plus @ ranges.l_low + minus @ ranges.l_high
        for p in np.flatnonzero(~((g[:, ~ranges.present] != 0.0).any(axis=1))):
            row = {self.l_key(int(c)): float(g[p, c]) for c in np.flatnonzero(g[p])}
            name, k = self.system.solid_names[p], float(self.system.solid_ln_k[p])
            self.model.add_row(self.key("saturation", name), row, Sense.AT_MOST, LOOSENED - k)
            if not ranges.solids[p]:
                continue
            n, y, most = self.n_key(int(p)), self.y_key(int(p)), max(-float(lowest[p]), 0.0)
            self.model.add_row(self.key("present", name), {n: 1.0, y: -1.0}, Sense.AT_MOST, 0.0)
            rhs = -most - k - LOOSENED
            self.model.add_row(self.key("saturated", name), {**row, y: -most}, Sense.AT_LEAST, rhs)

    # -- refinement --------------------------------------------------------------------------------

    def cut(self, values: Mapping[str, float], *, least_share: float, miss: float) -> int:
        """Add tangents where a solution lies below mass action; return how many."""
        added = 0
        for s in np.flatnonzero(self.kept):
            e = self.log_concentration(int(s)).value(values)
            at = min(e, float(self.ranges.e_high[s]))
            true = float(np.exp(at - self.ranges.e_high[s]))
            short = true - values[self.m_key(int(s))]
            if short * self.share[s] > least_share and short > miss * true:
                self.add_tangent(int(s), at)
                added += 1
        return added

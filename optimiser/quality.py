"""What leaves the plant: predictions, limits and safety rules at every state, with slopes.

Owns residual plus carry-over, practical floors, variability and margin; each becomes a check whose
``ratio`` (natural log of value over target) must not exceed 0. States come from `optimiser.plant`.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from chemistry.analysis import ANALYTES, METALS
from chemistry.burden import BURDENS, burden_weights, water_burden
from chemistry.sludge import formula_masses_g_per_mol
from chemistry.state import H2S_SPECIES
from optimiser.feeds import SUMMED_STATES, Feeds
from optimiser.plant import Plant
from optimiser.points import Block, Points, Rows
from optimiser.quality_slopes import RULE, SMALLEST_MG_PER_L, fill_slopes
from optimiser.residual_factors import ResidualFactors
from optimiser.site import Limit
from optimiser.surcharges import Surcharge, surcharges_of

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]
IntArray = NDArray[np.int64]

UNREACHED_RATIO = 50.0  # ratio of every check of a state whose set point no dose reaches
LN10 = float(np.log(10.0))

DAILY, MONTHLY, LOAD, MONTHLY_LOAD = "daily", "monthly", "daily load", "monthly load"
LOADS, MONTHLIES = (LOAD, MONTHLY_LOAD), (MONTHLY, MONTHLY_LOAD)


@dataclass(frozen=True, slots=True, kw_only=True)
class Check:
    """One ceiling in one averaging: ``target`` is what the mean prediction must not exceed.

    ``target = margin x limit / variability factor``, mg/L (ppm for gas, pH units for pH rules).
    """

    label: str
    averaging: str
    limit: float
    unit: str
    target: float
    variability: float = 1.0
    source: str = ""
    metals: tuple[int, ...] = ()
    burden: str = ""
    margin: float = 1.0
    limit_number: int = -1  # position among the site's limits, -1 for a rule


@dataclass(frozen=True, eq=False)
class Judged:
    """Values of one block's rows, with slopes by (set point, paced doses...).

    ``value`` and ``ratio`` are (rows, checks); ``slope`` (rows, checks, 1 + reagents) the change of
    ``ratio``; ``residual``, ``carried`` and ``floor`` (rows, metals) in mg/L, ``theory`` the
    residual without factors of jar tests, ``at_most`` where all in the tank dissolves;
    ``metal_slope`` (rows, metals, 1 + reagents) the change of residual plus carried;
    ``dose_slope`` (rows, 1 + reagents) the change of the controller's dose, ``trim_slope`` of the
    trim dose, ``solid_slope`` (rows, solids, 1 + reagents) of the amounts of solids,
    ``effluent_slope`` of the discharged totals.
    """

    block: Block
    value: FloatArray
    ratio: FloatArray
    residual: FloatArray
    theory: FloatArray
    at_most: BoolArray
    carried: FloatArray
    floor: FloatArray
    burden: dict[str, FloatArray]
    slope: FloatArray
    metal_slope: FloatArray
    dose_slope: FloatArray
    trim_slope: FloatArray
    solid_slope: FloatArray
    effluent_slope: FloatArray


class Judge:
    """Compiles a site's limits and judges states by them."""

    def __init__(self, plant: Plant) -> None:
        self.plant = plant
        site = plant.site
        wanted = [m for limit in site.limits for m in (limit.of or (limit.parameter,))]
        names = [m for m in dict.fromkeys(wanted) if _parts(m)]
        self.metals: tuple[str, ...] = tuple(names)
        self.weights = np.array([self._weights(m) for m in names]).reshape(
            len(names), len(plant.system.components)
        )
        particles = plant.feed.particulate_mg_per_l
        self.particles = np.array([sum(particles.get(p, 0.0) for p in _parts(m)) for m in names])
        self.dissolved_only = np.array(
            [sum(plant.feed.unmodelled_mg_per_l.get(p, 0.0) for p in _parts(m)) for m in names]
        )
        self.solid_metal = plant.system.solid_formation @ self.weights.T
        self.jar = ResidualFactors(site, names, self.weights)
        self.solid_mass = self._credited_mass()
        self.feed_particle_mass = max(site.analysis.tss_mg_per_l, sum(particles.values(), 0.0))
        self.waters = _Waters(plant.feeds, [_parts(m) for m in names], self.weights)
        self.floors = self._floors()
        self.families = self._families()
        self.burden_weights = burden_weights(plant.system)
        self.checks: tuple[Check, ...] = tuple(self._compile())
        self.surcharges: tuple[Surcharge, ...] = surcharges_of(site.limits, names)

    # -- compile -------------------------------------------------------------------------------

    def _weights(self, metal: str) -> FloatArray:
        weights = np.zeros(len(self.plant.system.components))
        for part in _parts(metal):
            analyte = ANALYTES[part]
            if analyte.component in self.plant.system.index:
                weights[self.plant.system.index[analyte.component]] = (
                    1000.0 * analyte.molar_mass_g_per_mol
                )
        return weights

    def _credited_mass(self) -> FloatArray:
        """Mass per mole of each solid that dilutes the floc's metals, (solids,). [mg/mol]

        Solids that hold a metal of the feed count; gypsum, calcite, brucite and the like are made
        by excess reagent and count only where the site allows it.
        """
        plant = self.plant
        mass = 1000.0 * formula_masses_g_per_mol(plant.system)
        if plant.treatment.inert_solids_dilute:
            return mass
        feed = plant.totals > 0.0
        metal = np.array(
            [
                any(ANALYTES[m].component == c for m in METALS) and bool(feed[i])
                for i, c in enumerate(plant.system.components)
            ]
        )
        holds = (plant.system.solid_formation[:, metal] > 0.0).any(axis=1)
        return np.where(holds, mass, 0.0)

    def _floors(self) -> list[dict[str, float]]:
        known = self.plant.site.floors_mg_per_l
        return [dict(known.get(m, {})) for m in self.metals]

    def _families(self) -> tuple[str, ...]:
        system = self.plant.system
        found = []
        for solid in system.solids:
            parts = solid.stoichiometry
            # basic chlorides and sulfates are what a hydroxide plant makes: they release protons
            basic = parts.get("H+", 0.0) < 0.0
            for component, family in (
                ("HS-", "sulfide"), ("SO4-2", "sulfate"), ("CO3-2", "carbonate"),
                ("Cl-", "chloride"), ("PO4-3", "phosphate"), ("F-", "fluoride"),
            ):  # fmt: skip
                if component in parts and not (basic and family in ("sulfate", "chloride")):
                    found.append(family)
                    break
            else:
                found.append("hydroxide")
        return tuple(found)

    def _compile(self) -> list[Check]:
        checks = []
        for number, limit in enumerate(self.plant.site.limits):
            checks += self._limit_checks(limit, number)
        if "HS-" in self.plant.system.index:
            for place in ("tank", "after trim"):
                checks.append(
                    Check(
                        label=f"H2S over the water, {place}",
                        averaging=RULE,
                        unit="ppm",
                        limit=self.plant.treatment.h2s_limit_ppm,
                        target=self.plant.treatment.h2s_limit_ppm,
                        source="site rule",
                    )
                )
        return checks

    def _limit_checks(self, limit: Limit, number: int) -> list[Check]:
        site = self.plant.site
        margin = site.design_margin if limit.design_margin is None else limit.design_margin
        parts = limit.of or (limit.parameter,)
        metals = tuple(self.metals.index(m) for m in parts if m in self.metals)
        burden = limit.parameter if limit.parameter in BURDENS else ""
        daily, monthly = self._variability(parts, burden)
        per_flow = 1000.0 / site.flow_m3_per_d
        made = []
        for averaging, value, factor, scale, unit in (
            (DAILY, limit.daily_mg_per_l, daily, 1.0, "mg/L"),
            (MONTHLY, limit.monthly_mg_per_l, monthly, 1.0, "mg/L"),
            (LOAD, limit.daily_load_kg_per_d, daily, per_flow, "kg/d"),
            (MONTHLY_LOAD, limit.monthly_load_kg_per_d, monthly, per_flow, "kg/d"),
        ):
            if value is None:
                continue
            target = margin * value * scale / factor
            made.append(
                Check(
                    label=limit.label,
                    averaging=averaging,
                    limit=value,
                    unit=unit,
                    target=target,
                    variability=factor,
                    source=limit.source,
                    metals=metals,
                    burden=burden,
                    margin=margin,
                    limit_number=number,
                )
            )
        return made

    def _variability(self, parts: Sequence[str], burden: str) -> tuple[float, float]:
        site = self.plant.site
        if site.stands_for == "peak":
            return 1.0, 1.0
        known = {p: site.variability[p] for p in parts if p in site.variability}
        if burden and not known:
            return 1.0, 1.0
        if not known:
            known = dict.fromkeys(parts, site.variability.get("default", (4.0, 2.0)))
        shown = self.plant.feeds.peaks or {}
        left = [
            [max(1.0, factor / peak) for factor, peak in zip(both, shown.get(p, (1.0, 1.0)),
                                                             strict=True)]
            for p, both in known.items()
        ]  # fmt: skip
        return max(k[0] for k in left), max(k[1] for k in left)

    # -- judge ---------------------------------------------------------------------------------

    def judge(self, points: Points, rows: Rows, block: Block, *, slopes: bool = False) -> Judged:
        """Values, ratios and (if ``slopes``) their derivatives for one block of states."""
        state = block.state
        sample = rows.sample[block.rows]
        untouched = self.waters.dissolved_only[sample]
        residual, theory, at_most = self.jar.residual(state, self.solid_metal)
        residual, theory = residual + untouched, theory + untouched
        solids = state.solids_mol_per_l
        share, share_by_mass = self._share(solids, sample)
        held = solids @ self.solid_metal + self.waters.particles[sample]
        carried = share[:, None] * held
        floor = self._floor_values(solids, sample)
        total = np.maximum(residual + carried, floor)
        burden = self._burden(block.effluent + block.surplus)
        value = self._values(total, burden, block)
        target = np.array([c.target for c in self.checks])
        ratio = np.log(np.maximum(value, SMALLEST_MG_PER_L) / target)
        bad = ~block.reached
        ratio[bad] = UNREACHED_RATIO
        self._of_samples(ratio, rows, block)
        width = 1 + len(self.plant.names)
        n, count = value.shape
        judged = Judged(
            block, value, ratio, residual, theory, at_most, carried, floor, burden,
            np.zeros((n, count, width if slopes else 0)),
            np.zeros((n, residual.shape[1], width if slopes else 0)), np.zeros((n, width)),
            np.zeros((n, width)), np.zeros((n, solids.shape[1], width if slopes else 0)),
            np.zeros((n, block.effluent.shape[1], width if slopes else 0)),
        )  # fmt: skip
        if slopes:
            fill_slopes(self, points, rows, judged, total, held, share, share_by_mass)
        return judged

    def _of_samples(self, ratio: FloatArray, rows: Rows, block: Block) -> None:
        """Loads by the flow of each sample's day; months and what is only shown left out."""
        feeds = self.plant.feeds
        if not feeds.many:
            return
        flow = np.log(feeds.flow_ratio[rows.sample[block.rows]])
        for number, check in enumerate(self.checks):
            if check.averaging == LOAD:
                ratio[:, number] += flow
            elif check.averaging in MONTHLIES:
                ratio[:, number] = -np.inf
        ratio[~rows.counts[block.rows]] = -np.inf

    def _share(self, solids: FloatArray, sample: IntArray) -> tuple[FloatArray, FloatArray]:
        """Share of the metals' solids that is carried over, and its change with their mass."""
        separator = self.plant.treatment.separator
        mass = solids @ self.solid_mass + self.waters.particle_mass[sample]
        most = 1.0 - separator.capture_fraction
        by_tss = separator.tss_mg_per_l / np.maximum(mass, 1e-12)
        slope = np.where(by_tss < most, -by_tss / np.maximum(mass, 1e-12), 0.0)
        return np.minimum(by_tss, most), slope

    def _floor_values(self, solids: FloatArray, sample: IntArray) -> FloatArray:
        """Practical floor of each metal by the family of the solid that holds most of it."""
        n = solids.shape[0]
        result = np.zeros((n, len(self.metals)))
        families = sorted(set(self.families))
        member = np.array([[f == name for f in self.families] for name in families], dtype=float)
        feed = self.waters.in_feed[sample]
        for j in range(len(self.metals)):
            floors = self.floors[j]
            if not floors:
                continue
            held = (solids * self.solid_metal[:, j]) @ member.T
            worst = max(floors.values())
            by_family = np.array([floors.get(name, worst) for name in families])
            chosen = by_family[np.argmax(held, axis=1)] if families else np.full(n, worst)
            result[:, j] = np.minimum(np.where(held.sum(axis=1) > 0, chosen, worst), feed[:, j])
        return result

    def _burden(self, effluent: FloatArray) -> dict[str, FloatArray]:
        return water_burden(effluent, self.plant.system)

    def _values(self, total: FloatArray, burden: dict[str, FloatArray], block: Block) -> FloatArray:
        columns = []
        gas = iter(self._gas_ppm(block))
        for check in self.checks:
            if check.metals:
                columns.append(total[:, list(check.metals)].sum(axis=1))
            elif check.burden:
                columns.append(np.maximum(burden[check.burden], 0.0))
            elif check.averaging == RULE:
                columns.append(next(gas))
            else:
                columns.append(np.zeros(total.shape[0]))
        return np.stack(columns, axis=1) if columns else np.zeros((total.shape[0], 0))

    def _gas_ppm(self, block: Block) -> list[FloatArray]:
        tank = 1e6 * block.state.partial_pressure_atm(H2S_SPECIES)
        trimmed = tank.copy()
        if block.trim_state is not None:
            trimmed[block.trimmed] = 1e6 * block.trim_state.partial_pressure_atm(H2S_SPECIES)
        return [tank, trimmed]


class _Waters:
    """What of each sample's metals and solids no equilibrium touches, samples on axis 0."""

    def __init__(self, feeds: Feeds, parts: Sequence[tuple[str, ...]], weights: FloatArray) -> None:
        empty = np.zeros((len(feeds), 0))
        self.particles = np.column_stack(
            [empty, *(feeds.by_part(feeds.particulate_mg_per_l, p) for p in parts)]
        )
        self.dissolved_only = np.column_stack(
            [empty, *(feeds.by_part(feeds.unmodelled_mg_per_l, p) for p in parts)]
        )
        self.in_feed = feeds.totals_mol_per_l @ weights.T + self.particles
        self.particle_mass = feeds.particle_mass_mg_per_l


def _parts(metal: str) -> tuple[str, ...]:
    if metal in SUMMED_STATES:
        return SUMMED_STATES[metal]
    known = ANALYTES.get(metal)
    return (metal,) if known is not None and known.is_metal else ()

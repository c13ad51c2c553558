"""The plant as arrays: what each reagent brings, which ends are planned at, and the tank's states.

Owns the step from doses and set points to certified equilibrium states at every corner and end;
what those states mean for limits and money is `optimiser.quality` and `optimiser.costing`.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace
from functools import cached_property
from itertools import product

import numpy as np
from numpy.typing import NDArray

from catalogs.reagents import Reagent
from chemistry.feed import FeedWater, feed_water
from chemistry.state import EquilibriumState, equilibrate
from chemistry.system import System
from chemistry.titration import StartValues, titrate
from optimiser.feeds import Feeds, mean_feed
from optimiser.points import (
    CLOSED_FORMED,
    CLOSED_HELD,
    VENTED_FORMED,
    VENTED_HELD,
    Block,
    Points,
    Rows,
    WarmStart,
)
from optimiser.site import Site

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]
IntArray = NDArray[np.int64]


class Plant:
    """A site's chemistry ready to be evaluated many times."""

    def __init__(self, site: Site, feeds: Feeds | None = None) -> None:
        self.site = site
        self.treatment = site.treatment
        self.system = site.system
        self.feed: FeedWater = feed_water(site.analysis, site.system)
        self.totals = np.asarray(self.feed.totals_mol_per_l, dtype=float)
        self.feeds: Feeds = mean_feed(site, self.feed) if feeds is None else feeds
        wanted = dict.fromkeys((*site.treatment.reagents, *site.treatment.trim_reagents))
        self.names: tuple[str, ...] = tuple(wanted)
        self.reagents: tuple[Reagent, ...] = tuple(site.reagents[name] for name in self.names)
        self.index: Mapping[str, int] = {name: i for i, name in enumerate(self.names)}
        self.factors = np.array([self.dose_factor(r) for r in self.reagents])
        self.vectors = np.array([self._vector(r) for r in self.reagents])
        self.reacting = self.vectors / self.factors[:, None]
        self.slurry = np.array([r.is_slurry for r in self.reagents])
        self.unreacted = np.where(self.slurry, 1.0 - 1.0 / self.factors, 0.0)
        # the excess of a soluble reagent stays in the water: it reacts with nothing here, but
        # burdens count it
        excess = np.where(self.slurry, 0.0, 1.0 - 1.0 / self.factors)
        self.surplus = self.vectors * excess[:, None]
        self.surplus[:, self.system.index["H+"]] = 0.0
        self.states_solved = self.states_failed = 0

    def dose_factor(self, reagent: Reagent) -> float:
        """Fed over reacting: the site's own factor, else the reagent's."""
        return float(self.treatment.dose_factors.get(reagent.reagent, reagent.dose_factor))

    def _vector(self, reagent: Reagent) -> FloatArray:
        """Moles of each component per mg of pure compound. [mol/mg]"""
        vector = np.zeros(len(self.system.components))
        for component, moles in reagent.components.items():
            vector[self.system.index[component]] = moles
        return vector / (1000.0 * reagent.molar_mass_g_per_mol)

    @cached_property
    def held_system(self) -> System | None:
        """The system with scale formers held back, None where none can form."""
        shift = {
            s.name: self.treatment.scale_supersaturation_si
            for s in self.system.solids
            if s.scale_former
        }
        return self.system.shifted_solids(shift) if shift else None

    @cached_property
    def liquid_system(self) -> System:
        """The system without solids: the separated water."""
        return self.system.liquid

    @cached_property
    def co2(self) -> FloatArray:
        """Components that a mole of carbon dioxide takes along as it leaves, (components,)."""
        parts = {"CO3-2": 1.0, "H+": 2.0}
        return np.array([parts.get(name, 0.0) for name in self.system.components])

    @cached_property
    def scale_columns(self) -> BoolArray:
        """Which candidate solids are scale formers, (solids,)."""
        return np.array([s.scale_former for s in self.system.solids], dtype=bool)

    @cached_property
    def is_carbonate(self) -> BoolArray:
        """Which reagents bring carbonate, (reagents,)."""
        return np.array(["CO3-2" in r.components for r in self.reagents])

    @cached_property
    def is_sulfide(self) -> BoolArray:
        """Which reagents bring sulfide, (reagents,)."""
        return np.array(["HS-" in r.components for r in self.reagents])

    # -- corners ---------------------------------------------------------------------------------

    def corners(self, points: Points, *, full: bool = True) -> Rows:
        """Expand points into rows: each sample's nominal one and, if ``full``, every corner."""
        counted = self.feeds.counted
        point, sample, shift, factors, nominal = [], [], [], [], []
        for i in range(len(points)):
            moves, signs = self._corners_of(points, i, full=full)
            # a water that is not judged is shown at its nominal state
            kept = [np.arange(moves.size if counts else 1) for counts in counted]
            picked = np.concatenate(kept)
            point.append(np.full(picked.size, i, dtype=np.int64))
            sample.append(np.repeat(np.arange(counted.size), [k.size for k in kept]))
            shift.append(moves[picked])
            factors.append(signs[picked])
            nominal.append(picked == 0)
        index, samples = np.concatenate(point), np.concatenate(sample)
        factor, shifts = np.concatenate(factors), np.concatenate(shift)
        return Rows(
            point=index, sample=samples, counts=counted[samples], ph=points.ph[index] + shifts,
            doses=points.doses[index] * factor, factor=factor, shift=shifts,
            nominal=np.concatenate(nominal),
        )  # fmt: skip

    def _corners_of(
        self, points: Points, point: int, *, full: bool
    ) -> tuple[FloatArray, FloatArray]:
        """Shifts of the set point and factors on the doses of one point, the nominal first."""
        one = np.ones(len(self.names))
        shift, factors = [0.0], [one]
        tolerance = self.treatment.dose_tolerance_fraction
        paced = np.flatnonzero(points.doses[point] > 0.0)
        steps = (-1.0, 1.0) if points.controller[point] >= 0 else (0.0,)
        for move, signs in product(steps, product((-1.0, 1.0), repeat=paced.size)):
            if not full or (move == 0.0 and not signs):
                continue
            factor = one.copy()
            factor[paced] += tolerance * np.array(signs)
            shift.append(move * self.treatment.ph_tolerance)
            factors.append(factor)
        return np.array(shift), np.array(factors)

    # -- states ----------------------------------------------------------------------------------

    def blocks(
        self, points: Points, rows: Rows, *, all_ends: bool = True,
        warm: WarmStart | None = None,
    ) -> list[Block]:  # fmt: skip
        """States of the rows at every end that differs from the first."""
        base = self.feeds.totals_mol_per_l[rows.sample] + rows.doses @ self.reacting
        everything = np.arange(len(rows))
        none_lost = np.zeros(len(self.names))
        start = warm.start(CLOSED_FORMED, everything) if warm else None
        first = self._block(points, rows, base, everything, CLOSED_FORMED, none_lost, start)
        found = [first]
        if not all_ends:
            return found
        found += self._held(points, rows, base, first, CLOSED_HELD, none_lost, warm)
        doses = self.fed_doses(points, rows, found)
        lost, slope, unknown = self._vented(points, rows, doses)
        if unknown.any():  # an end that cannot be looked at is no end that holds
            first = found[0] = replace(first, reached=first.reached & ~unknown)
        venting = np.flatnonzero(lost > 1e-9)
        if venting.size:
            vented = base - lost[:, None] * self.co2
            start = _or_state(warm, VENTED_FORMED, venting, first)
            block = self._block(points, rows, vented, venting, VENTED_FORMED, slope, start)
            found.append(block)
            found += self._held(points, rows, vented, block, VENTED_HELD, slope, warm)
        return found

    def _held(
        self, points: Points, rows: Rows, base: FloatArray, formed: Block, end: int,
        lost_slope: FloatArray, warm: WarmStart | None,
    ) -> list[Block]:  # fmt: skip
        if self.held_system is None:
            return []
        scaling = formed.state.active[:, self.scale_columns].any(axis=1)
        some = formed.rows[scaling & formed.reached]
        if not some.size:
            return []
        start = _or_state(warm, end, some, formed)
        return [self._block(points, rows, base, some, end, lost_slope, start)]

    def _block(
        self, points: Points, rows: Rows, base: FloatArray, some: IntArray, end: int,
        lost_slope: FloatArray, start: StartValues | None = None,
    ) -> Block:  # fmt: skip
        held = end in (CLOSED_HELD, VENTED_HELD)
        system = self.held_system if held and self.held_system is not None else self.system
        controller = points.controller[rows.point[some]]
        vectors = np.where(
            (controller >= 0)[:, None], self.reacting[np.maximum(controller, 0)], 0.0
        )
        totals = np.maximum(base[some], np.where(self._signed, -np.inf, 0.0))
        able = np.maximum(controller, 0)
        upward = np.array([r.ph_control != "down" for r in self.reagents])[able]
        state, dose, held_rows, reached = self._solve(
            system, totals, rows.ph[some], vectors, upward, start
        )
        self.states_solved += some.size
        liquid = state.dissolved_mol_per_l
        fed = rows.doses[some].copy()
        fed[np.arange(some.size), able] += np.where(controller >= 0, dose, 0.0)
        return self._trim(
            points, rows,
            Block(
                end=end, rows=some, state=state, dose=dose, held=held_rows, reached=reached,
                lost_slope=np.broadcast_to(lost_slope, (len(self.names),)),
                liquid=liquid, effluent=liquid, surplus=fed @ self.surplus,
                trim_dose=np.zeros(some.size),
                trimmed=np.zeros(some.size, dtype=bool), trim_state=None,
                trim_missing=np.zeros(some.size, dtype=bool),
            ),
        )  # fmt: skip

    @cached_property
    def _signed(self) -> BoolArray:
        return np.array([c == "H+" for c in self.system.components])

    def _solve(
        self, system: System, totals: FloatArray, ph: FloatArray, vectors: FloatArray,
        upward: BoolArray, start: StartValues | None,
    ) -> tuple[EquilibriumState, FloatArray, BoolArray, BoolArray]:  # fmt: skip
        """States, controller doses, which rows it holds, and which are as they should be."""
        controlled = (vectors != 0.0).any(axis=1)
        dose = np.zeros(totals.shape[0])
        held, failed = np.zeros((2, totals.shape[0]), dtype=bool)
        if controlled.all():
            result = titrate(system, totals, ph, vectors, start=start, upward=upward)
            state, dose, held = result.state, result.dose, result.reached
            failed = result.failed
        else:
            if controlled.any():
                begin = start.rows(controlled) if start is not None else None
                part = titrate(
                    system, totals[controlled], ph[controlled], vectors[controlled], start=begin,
                    upward=upward[controlled],
                )  # fmt: skip
                dose[controlled], held[controlled] = part.dose, part.reached
                failed[controlled] = part.failed
            dosed = totals + dose[:, None] * vectors
            state = equilibrate(system, dosed, on_failure="flag", start=start)
        self.states_failed += int(np.count_nonzero(failed | ~state.converged))
        overshot = np.where(upward, state.ph > ph, state.ph < ph)
        return state, dose, held, state.converged & (held | ~controlled | overshot)

    def fed_doses(self, points: Points, rows: Rows, blocks: Sequence[Block]) -> FloatArray:
        """Doses fed at nominal rows, dearest end, (points, samples, reagents). [mg/L]"""
        doses = np.repeat(points.doses[:, None, :], len(self.feeds), axis=1)
        for block in blocks:
            point = rows.point[block.rows]
            reagent = points.controller[point]
            some = rows.nominal[block.rows] & block.reached & (reagent >= 0)
            place = (point[some], rows.sample[block.rows[some]], reagent[some])
            np.maximum.at(doses, place, block.dose[some])
        return doses

    def _vented(
        self, points: Points, rows: Rows, doses: FloatArray
    ) -> tuple[FloatArray, FloatArray, BoolArray]:
        """Carbon dioxide that carbonate dosed into the feed may lose, (rows,) [mol/L].

        The feed and all carbonate reagents of a row meet before other alkali and come to rest with
        air of the site's CO2 pressure; what leaves is lost. ``doses`` (points, samples, reagents)
        are the nominal ones, from which the controller's is taken. Also returned: the change per
        mg/L of each carbonate reagent at the mean row, (reagents,) [mol/mg]; and the rows whose
        vented water could not be solved, (rows,).
        """
        lost, unknown = np.zeros(len(rows)), np.zeros(len(rows), dtype=bool)
        slope = np.zeros(len(self.names))
        nominal = doses[rows.point, rows.sample]
        fed = np.where(rows.doses > 0.0, rows.doses, nominal) * self.is_carbonate
        dosed = np.flatnonzero(fed.any(axis=1))
        if not dosed.size or "CO2(aq)" not in self.system.species_names:
            return lost, slope, unknown
        added = fed[dosed] @ self.reacting
        mixed = self.feeds.totals_mol_per_l[rows.sample[dosed]] + added
        carbonate = self.system.index["CO3-2"]
        state = equilibrate(
            self.liquid_system, mixed, pco2_atm=self.treatment.vent_pco2_atm, on_failure="flag"
        )
        unknown[dosed] = ~state.converged
        self.states_failed += int(np.count_nonzero(unknown))
        gone = mixed[:, carbonate] - state.totals[:, carbonate]
        lost[dosed] = np.where(state.converged, np.clip(gone, 0.0, mixed[:, carbonate]), 0.0)
        share = np.clip(lost[dosed] / np.maximum(added[:, carbonate], 1e-12), 0.0, 1.0)
        slope[self.is_carbonate] = float(share.mean()) * self.reacting[self.is_carbonate, carbonate]
        return lost, slope, unknown

    # -- trim ------------------------------------------------------------------------------------

    def needs_trim(self, points: Points, rows: Rows, ph: FloatArray, some: IntArray) -> FloatArray:
        """Target pH of the final trim for each row, nan where none is needed."""
        window, tolerance = self.site.ph_window, self.treatment.ph_tolerance
        target = np.full(some.size, np.nan)
        point = rows.point[some]
        controlled = points.controller[point] >= 0
        set_point = np.where(controlled, points.ph[point], ph)
        # where a controller rests the pH may leave the window though its set point lies inside
        high = np.maximum(set_point + tolerance, ph) > window.high + 1e-9
        low = np.minimum(set_point - tolerance, ph) < window.low - 1e-9
        target = np.where(high & (ph > window.high - tolerance), window.high - tolerance, target)
        return np.where(low & (ph < window.low + tolerance), window.low + tolerance, target)

    def _trim(self, points: Points, rows: Rows, block: Block) -> Block:
        """Add the final trim: to the window's edge, or by the dose that is fixed."""
        point = rows.point[block.rows]
        ph, reagent = block.state.ph, points.trim[point]
        fixed = ~np.isnan(points.trim_dose[point]) & (reagent >= 0)
        target = self.needs_trim(points, rows, ph, block.rows)
        needed = ~np.isnan(target) & block.reached & np.isfinite(ph) & ~fixed
        wanted = np.where(target < ph, "down", "up")
        offers = np.array([r.ph_control for r in self.reagents] + [""])[reagent]
        able = needed & (reagent >= 0) & (offers == wanted)
        dose = np.where(fixed, points.trim_dose[point], 0.0)
        missing = needed & ~able
        work = np.flatnonzero(able)
        if work.size:
            begin = StartValues.of(block.state).rows(work).without_solids()
            result = titrate(
                self.liquid_system, block.liquid[work], target[work],
                self.reacting[reagent[work]], start=begin,
            )  # fmt: skip
            dose[work] = result.dose
            missing[work] |= ~result.reached
            self.states_failed += int(np.count_nonzero(result.failed))
        trimmed = (dose > 0.0) & ~missing & block.reached
        some = np.flatnonzero(trimmed)
        if not some.size:
            return self._window(points, rows, replace(block, trim_missing=missing))
        effluent = block.liquid.copy()
        effluent[some] += dose[some, None] * self.reacting[reagent[some]]
        self.states_solved += some.size
        state = equilibrate(
            self.liquid_system, effluent[some], on_failure="flag",
            start=StartValues.of(block.state).rows(some).without_solids(),
        )  # fmt: skip
        missing[some] |= ~state.converged
        self.states_failed += int(np.count_nonzero(~state.converged))
        block = replace(
            block, trim_dose=np.where(trimmed, dose, 0.0), effluent=effluent, trimmed=trimmed,
            trim_state=state, trim_missing=missing,
        )  # fmt: skip
        return self._window(points, rows, block)

    def _window(self, points: Points, rows: Rows, block: Block) -> Block:
        """Mark rows whose discharge pH a fixed trim dose leaves outside the window."""
        point = rows.point[block.rows]
        fixed = ~np.isnan(points.trim_dose[point]) & (points.trim[point] >= 0)
        if not fixed.any():
            return block
        ph = block.state.ph.copy()
        if block.trim_state is not None:
            ph[block.trimmed] = block.trim_state.ph
        window = self.site.ph_window
        outside = (ph < window.low - 1e-6) | (ph > window.high + 1e-6)
        return replace(block, trim_missing=block.trim_missing | (fixed & outside))


def _or_state(
    warm: WarmStart | None, end: int, rows: IntArray, formed: Block
) -> StartValues | None:
    """The known iterates, else those of the same rows at another end."""
    known = warm.start(end, rows) if warm else None
    if known is not None:
        return known
    return StartValues.of(formed.state).rows(np.searchsorted(formed.rows, rows))

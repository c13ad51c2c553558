"""Curves of a site's water: residual against dose, residual against pH, and alkali demand.

Owns the grids and the tables made of them. The curves are plain equilibrium of the whole water,
without carry-over, practical floors, tolerances or margins; those belong to plans.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import asdict, dataclass, field
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from chemistry.analysis import ANALYTES, METALS
from chemistry.feed import feed_water
from chemistry.state import EquilibriumState, equilibrate
from chemistry.system import System
from chemistry.titration import titrate
from optimiser.site import Site

if TYPE_CHECKING:
    import pandas as pd

    from catalogs.reagents import Reagent

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

PH_STEP = 0.5
SWEEP_TOP_MG_PER_L = 5000.0
_SWEEP_DIGITS = (1.0, 2.0, 5.0)
_STEP_DIGITS = (1.0, 2.0, 2.5, 5.0)
_LEAST_STEPS = 10
# An alkali that buffers needs ever more for the last steps of pH; its sweep ends at this multiple
# of the dose that reaches the lowest pH of the grid.
_SWEEP_MULTIPLE = 5.0


@dataclass(frozen=True, slots=True, kw_only=True)
class CurvePoint:
    """One equilibrium state of a curve; doses are mg/L of the pure compound, fed."""

    dose_mg_per_l: float
    controller: str
    controller_dose_mg_per_l: float
    ph: float
    residual_mg_per_l: Mapping[str, float]
    solids: tuple[str, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class Curve:
    """States along one reagent's dose or along the pH.

    ``kind`` is ``residual-versus-dose`` or ``residual-versus-ph``; where ``held_ph`` is given the
    ``controller`` of each point held it, and ``controller_dose_mg_per_l`` is what that took.
    """

    kind: str
    reagent: str
    held_ph: float | None
    points: tuple[CurvePoint, ...]
    unreached: tuple[float, ...]
    """Doses or pH values of the grid that no controller of the site could bring about."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Curves:
    """All curves of a site; ``demand_mg_per_l``: per pH the dose of each alkali or acid alone."""

    site: str
    feed_ph: float
    metals: tuple[str, ...]
    curves: tuple[Curve, ...]
    demand_mg_per_l: Mapping[float, Mapping[str, float | None]] = field(default_factory=dict)

    def to_dict(self) -> dict[str, Any]:
        """Return plain data, ready for JSON."""
        demand = [
            {"ph": ph, "dose_mg_per_l": dict(doses)} for ph, doses in self.demand_mg_per_l.items()
        ]
        return {
            "site": self.site,
            "feed_ph": self.feed_ph,
            "metals": list(self.metals),
            "curves": [_plain(asdict(curve)) for curve in self.curves],
            "demand": demand,
        }

    def to_frame(self) -> pd.DataFrame:
        """Return every state of every curve as one row, residuals in columns per metal."""
        import pandas as pd

        rows = [
            {
                "curve": curve.kind,
                "reagent": curve.reagent,
                "dose_mg_per_l": point.dose_mg_per_l,
                "controller": point.controller,
                "controller_dose_mg_per_l": point.controller_dose_mg_per_l,
                "ph": point.ph,
                **{f"{name}_mg_per_l": point.residual_mg_per_l[name] for name in self.metals},
                "solids": "; ".join(point.solids),
            }
            for curve in self.curves
            for point in curve.points
        ]
        return pd.DataFrame(rows)


@dataclass(frozen=True, eq=False, kw_only=True)
class _Bench:
    """The water on the bench and what may be dosed into it."""

    system: System
    totals: FloatArray
    feed_ph: float
    metals: tuple[str, ...]
    up: tuple[Reagent, ...]
    down: tuple[Reagent, ...]
    others: tuple[Reagent, ...]
    factors: Mapping[str, float]
    ceilings: Mapping[str, float]

    def movers(self, grid: FloatArray) -> tuple[Reagent, ...]:
        """Alkalis where the grid lies above the feed's pH, acids where it lies below."""
        up = self.up if grid.max() > self.feed_ph else ()
        return (*up, *(self.down if grid.min() < self.feed_ph else ()))

    def vector(self, reagent: Reagent) -> FloatArray:
        """Moles of each component per mg fed, (components,). [mol/mg]"""
        row = np.zeros(len(self.system.components))
        for component, count in reagent.components.items():
            row[self.system.index[component]] = count
        return row / (1000.0 * reagent.molar_mass_g_per_mol * self.factors[reagent.reagent])


@dataclass(frozen=True, eq=False)
class _Held:
    """Waters (n,) brought to a pH by one controller each. [mg/L], [mol/L]"""

    dose: FloatArray
    reached: BoolArray
    state: EquilibriumState


def build_curves(site: Site, held_ph: float | None = None) -> Curves:
    """Compute the curves of a site.

    Parameters
    ----------
    site
        The problem as read.
    held_ph
        pH at which reagents that do not control it are swept; the middle of the set-point window
        when not given.

    Raises
    ------
    chemistry.errors.ChemistryError
        The feed cannot be made electroneutral, or a state missed its certificate.
    """
    bench = _build_bench(site)
    window = site.treatment.ph_set_point
    target = 0.5 * (window.low + window.high) if held_ph is None else held_ph
    grid = _ph_grid(window.low, window.high)
    by_ph = [_along_ph(bench, mover, grid) for mover in bench.movers(grid)]
    by_dose = [_along_own_dose(bench, curve) for curve in by_ph]
    by_dose += [_along_dose(bench, reagent, target, site) for reagent in bench.others]
    demand = {
        float(ph): {curve.reagent: _dose_at(curve, float(ph)) for curve in by_ph} for ph in grid
    }
    return Curves(
        site=site.name,
        feed_ph=bench.feed_ph,
        metals=bench.metals,
        curves=(*(curve for curve in by_dose if curve.points), *by_ph),
        demand_mg_per_l=demand,
    )


def _build_bench(site: Site) -> _Bench:
    feed = feed_water(site.analysis, site.system)
    metals = [
        name
        for name in METALS
        if (column := feed.system.index.get(ANALYTES[name].component)) is not None
        and feed.totals_mol_per_l[column] > 0.0
    ]
    allowed = [site.reagents[name] for name in site.treatment.reagents]
    acids = [site.reagents[name] for name in site.treatment.trim_reagents]
    known = set(site.system.components)
    allowed = [reagent for reagent in allowed if set(reagent.components) <= known]
    ceilings = {
        reagent.reagent: reagent.ph_ceiling for reagent in allowed if reagent.ph_ceiling is not None
    }
    if site.treatment.magnesia_ph_ceiling is not None:
        ceilings["magnesium_hydroxide"] = site.treatment.magnesia_ph_ceiling
    return _Bench(
        system=feed.system,
        totals=feed.totals_mol_per_l,
        feed_ph=feed.ph,
        metals=tuple(metals),
        up=_controllers(allowed, "up"),
        down=_controllers([*allowed, *(acid for acid in acids if acid not in allowed)], "down"),
        others=tuple(reagent for reagent in allowed if not reagent.ph_control),
        factors={
            reagent.reagent: site.treatment.dose_factors.get(reagent.reagent, reagent.dose_factor)
            for reagent in (*allowed, *acids)
        },
        ceilings=ceilings,
    )


def _controllers(reagents: Sequence[Reagent], way: str) -> tuple[Reagent, ...]:
    chosen = [reagent for reagent in reagents if reagent.ph_control == way]
    return tuple(sorted(chosen, key=lambda reagent: reagent.control_rank))


def _ph_grid(low: float, high: float) -> FloatArray:
    inner = np.arange(np.ceil(low / PH_STEP), np.floor(high / PH_STEP) + 1.0) * PH_STEP
    return np.unique(np.round(np.concatenate([[low], inner, [high]]), 6))


def _along_ph(bench: _Bench, mover: Reagent, grid: FloatArray) -> Curve:
    """Move the pH with one alkali or acid alone."""
    ceiling = bench.ceilings.get(mover.reagent, np.inf)
    away = grid > bench.feed_ph if mover in bench.up else grid < bench.feed_ph
    wanted = grid[away & (grid <= ceiling)]
    points: tuple[CurvePoint, ...] = ()
    if wanted.size:
        held = _bring_to(bench, np.tile(bench.totals, (wanted.size, 1)), wanted, mover)
        points = _points(bench, held.state, held.dose, held.reached)
    reached = [point.ph for point in points]
    return Curve(
        kind="residual-versus-ph", reagent=mover.reagent, held_ph=None,
        points=points,
        unreached=tuple(float(ph) for ph in grid if not np.isclose(ph, reached, atol=1e-6).any()),
    )  # fmt: skip


def _along_own_dose(bench: _Bench, by_ph: Curve) -> Curve:
    """Sweep an alkali or acid in even steps up to the dose that reaches the end of its pH curve."""
    mover = next(r for r in (*bench.up, *bench.down) if r.reagent == by_ph.reagent)
    needed = [point.dose_mg_per_l for point in by_ph.points]
    points: tuple[CurvePoint, ...] = ()
    if needed:
        doses = even_doses_mg_per_l(min(max(needed), _SWEEP_MULTIPLE * min(needed)))
        state = equilibrate(bench.system, bench.totals + doses[:, None] * bench.vector(mover))
        points = _points(bench, state, doses, state.converged)
    return Curve(
        kind="residual-versus-dose", reagent=mover.reagent, held_ph=None,
        points=points, unreached=(),
    )  # fmt: skip


def _along_dose(bench: _Bench, reagent: Reagent, ph: float, site: Site) -> Curve:
    """Sweep a reagent that does not control the pH, while a controller holds it."""
    ceiling = site.treatment.dose_ceilings_mg_per_l.get(reagent.reagent, SWEEP_TOP_MG_PER_L)
    doses = sweep_doses_mg_per_l(ceiling)
    totals = bench.totals + doses[:, None] * bench.vector(reagent)
    free = equilibrate(bench.system, totals)
    points: dict[float, CurvePoint] = {}
    for rows, controllers in ((free.ph < ph, bench.up), (free.ph >= ph, bench.down)):
        if rows.any() and controllers:
            held = _bring_to(bench, totals[rows], np.full(int(rows.sum()), ph), controllers[0])
            found = _points(
                bench, held.state, doses[rows], held.reached, controllers[0].reagent, held.dose
            )
            points |= {point.dose_mg_per_l: point for point in found}
    return Curve(
        kind="residual-versus-dose", reagent=reagent.reagent, held_ph=ph,
        points=tuple(points[dose] for dose in sorted(points)),
        unreached=tuple(float(dose) for dose in doses if float(dose) not in points),
    )  # fmt: skip


def _bring_to(bench: _Bench, totals: FloatArray, ph: FloatArray, controller: Reagent) -> _Held:
    mass = 1000.0 * controller.molar_mass_g_per_mol * bench.factors[controller.reagent]
    found = titrate(bench.system, totals, ph, bench.vector(controller) * mass)
    return _Held(found.dose * mass, found.reached, found.state)


def _points(
    bench: _Bench,
    state: EquilibriumState,
    doses: FloatArray,
    keep: BoolArray,
    controller: str = "",
    controller_doses: FloatArray | None = None,
) -> tuple[CurvePoint, ...]:
    residual = {
        name: state.dissolved_mol_per_l[:, bench.system.index[ANALYTES[name].component]]
        * (1000.0 * ANALYTES[name].molar_mass_g_per_mol)
        for name in bench.metals
    }
    names = np.array(bench.system.solid_names)
    return tuple(
        CurvePoint(
            dose_mg_per_l=float(doses[row]),
            controller=controller,
            controller_dose_mg_per_l=0.0
            if controller_doses is None
            else float(controller_doses[row]),
            ph=float(state.ph[row]),
            residual_mg_per_l={name: float(values[row]) for name, values in residual.items()},
            solids=tuple(str(name) for name in names[state.solids_mol_per_l[row] > 0.0]),
        )
        for row in np.flatnonzero(keep)
    )


def sweep_doses_mg_per_l(top: float) -> FloatArray:
    """Doses of 1, 2, 5, 10, ... up to ``top``, zero first. [mg/L]

    Examples
    --------
    >>> sweep_doses_mg_per_l(30.0).tolist()
    [0.0, 1.0, 2.0, 5.0, 10.0, 20.0, 30.0]
    """
    steps = [digit * 10.0**power for power in range(7) for digit in _SWEEP_DIGITS]
    return np.array([0.0, *(step for step in steps if step < top), top])


def even_doses_mg_per_l(top: float) -> FloatArray:
    """Doses in round even steps from zero, the last at or above ``top``. [mg/L]

    Examples
    --------
    >>> even_doses_mg_per_l(408.0)[[0, 1, -1]].tolist()
    [0.0, 25.0, 425.0]
    """
    power = 10.0 ** np.floor(np.log10(top / _LEAST_STEPS))
    step = max(digit * power for digit in _STEP_DIGITS if digit * power <= top / _LEAST_STEPS)
    return np.asarray(step * np.arange(np.ceil(top / step) + 1.0))


def _dose_at(curve: Curve, ph: float) -> float | None:
    near = [point.dose_mg_per_l for point in curve.points if abs(point.ph - ph) < 1e-6]
    return near[0] if near else None


def _plain(value: Any) -> Any:
    """Tuples as lists, all the way down."""
    if isinstance(value, dict):
        return {key: _plain(inner) for key, inner in value.items()}
    if isinstance(value, tuple | list):
        return [_plain(inner) for inner in value]
    return value

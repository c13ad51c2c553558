"""Polish: successive linearisation of operating points inside a trust region.

Each step linearises every check in its logarithm with exact derivatives, adds the purchasing block
and lets the mixed-integer solver move set point and doses; the full equilibrium judges the move.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from optimiser.costing import EQUIPMENT, SEPARATOR
from optimiser.errors import SolverFault
from optimiser.evaluation import Evaluator, Place
from optimiser.points import Points
from optimiser.polish_step import (
    BACK_OFF,
    PENALTY,
    Bounds,
    build_step,
    cost_unit,
    in_cost_units,
)
from optimiser.solver import SolverPort, Termination

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

FIRST_RADIUS = 0.5
LAST_RADIUS = 2e-4
MOST_STEPS = 14
MORE_STEPS, FAST_GAIN = 26, 5e-3  # further steps of tracks that gain as much by each
PATIENCE = 3
STALLS = 2  # steps with hardly any gain after which a track is at rest
NO_GAIN = 2e-7  # gain, relative to the cost, that is none
REST_EARLY, REST_LATE = 2, 4  # steps after which dear candidates are rested
DEARER_EARLY, DEARER_LATE = 1.12, 1.04
HOPELESS_RATIO = 5e-3
SHRINKS_BY = 0.8
HOPELESS_RADIUS = 5e-3
MISS_FIRST = 1e4 * PENALTY
RESTORING_STEPS = 4
RESTORING_RADIUS = 0.02


@dataclass(slots=True)
class Track:
    """One candidate on its way: its best point so far and how far the next step may go.

    ``gain`` is what the last step gained, relative to the merit; ``complied`` the cheapest point on
    the way that met everything, for a track that ends at one that misses by a hair.
    """

    place: Place
    radius: float = FIRST_RADIUS
    alive: bool = True
    steps: int = 0
    stalls: int = 0
    missed: tuple[float, ...] = ()
    penalty: float = PENALTY
    patient: bool = False
    gain: float = 0.0
    complied: Place | None = None

    @property
    def point(self) -> Points:
        """The best point, a set of one."""
        return self.place.seen.points.take([self.place.point])

    @property
    def total(self) -> float:
        """Cost of the best point."""
        return float(self.place.seen.total[self.place.point])

    @property
    def violation(self) -> float:
        """Largest ratio of the best point."""
        return float(self.place.seen.violation[self.place.point])

    @property
    def merit(self) -> float:
        """Cost with a penalty on what is missed."""
        return self.total * (1.0 + self.penalty * max(0.0, self.violation + BACK_OFF))

    @property
    def feasible(self) -> bool:
        """Whether the point meets everything."""
        return bool(self.place.seen.feasible[self.place.point])


def polish(
    evaluator: Evaluator, starts: Points | Sequence[Place], solver: SolverPort, *, bounds: Bounds,
    steps: int = MOST_STEPS, radius: float = FIRST_RADIUS, rival: float | None = np.inf,
    near: Sequence[Place] | None = None,
) -> list[Track]:  # fmt: skip
    """Polish all starts side by side; returns a track for each.

    Starts that are places have been evaluated in full with slopes. Once it is late by ``bounds``,
    every track stays at the best point it has verified.
    Candidates that stay dearer than the best feasible one, or than the plan of cost ``rival`` that
    is known already, are rested early. With ``rival`` None the largest ratio counts before any cost
    and nobody is rested: the end is the nearest miss, where the checks that clash are all at it.
    """
    if isinstance(starts, Points):
        seen = evaluator.evaluate(starts, slopes=True, near=near)
        starts = [Place(seen, i) for i in range(len(starts))]
    penalty = MISS_FIRST if rival is None else PENALTY
    tracks = [Track(place, radius, penalty=penalty, patient=rival is None) for place in starts]
    for turn in range(steps + MORE_STEPS):
        if turn >= steps:
            _leave_slow(tracks)
        if bounds.late or not _advance(evaluator, tracks, solver, bounds):
            break
        if rival is not None:
            _rest_dear(tracks, rival)
    _restore(evaluator, tracks, solver, bounds)
    for track in tracks:
        if not track.feasible and track.complied is not None and not track.patient:
            track.place = track.complied
    return tracks


def polish_each(
    evaluator: Evaluator, near: Sequence[Place], solver: SolverPort, *, bounds: Bounds, steps: int,
    radius: float,
) -> list[Track]:  # fmt: skip
    """Polish places side by side, each to its own end whatever the others cost."""
    starts = Points.join([place.seen.points.take([place.point]) for place in near])
    seen = evaluator.evaluate(starts, slopes=True, near=near)
    tracks = [Track(Place(seen, i), radius) for i in range(len(starts))]
    for _ in range(steps):
        if not _advance(evaluator, tracks, solver, bounds):
            break
    _restore(evaluator, tracks, solver, bounds)
    return tracks


def _advance(
    evaluator: Evaluator, tracks: Sequence[Track], solver: SolverPort, bounds: Bounds
) -> bool:
    """Move every track that is alive by one step; False where none could be moved."""
    trials: list[Points] = []
    moving: list[Track] = []
    for track in tracks:
        if not track.alive:
            continue
        trial = step(evaluator, track, solver, bounds)
        if trial is None:
            track.alive = False
        else:
            trials.append(trial)
            moving.append(track)
    if not trials:
        return False
    tried = evaluator.evaluate(Points.join(trials), slopes=True, near=[t.place for t in moving])
    for row, track in enumerate(moving):
        _accept(track, Place(tried, row))
    return True


def _restore(
    evaluator: Evaluator, tracks: Sequence[Track], solver: SolverPort, bounds: Bounds
) -> None:
    """Bring tracks that miss by a hair inside: small steps, aimed further in by what is missed."""
    for track in tracks:
        track.radius = max(track.radius, RESTORING_RADIUS)
    for _ in range(RESTORING_STEPS):
        near = [t for t in tracks if not t.feasible and t.violation < HOPELESS_RATIO]
        pairs = [(t, _inward(evaluator, t, solver, bounds)) for t in near]
        moving = [(track, trial) for track, trial in pairs if trial is not None]
        if not moving or bounds.late:
            return
        tried = evaluator.evaluate(
            Points.join([trial for _, trial in moving]), slopes=True,
            near=[track.place for track, _ in moving],
        )  # fmt: skip
        for row, (track, _) in enumerate(moving):
            track.steps += 1
            if tried.violation[row] < track.violation:
                track.place = Place(tried, row)
            else:
                track.radius *= 0.3


def _inward(
    evaluator: Evaluator, track: Track, solver: SolverPort, bounds: Bounds
) -> Points | None:
    aim = 2.0 * max(track.violation, 0.0)
    return step(evaluator, track, solver, bounds, inward=aim)


def at_rest(track: Track) -> bool:
    """Whether steps no longer gain anything, so that the track was not left on its way."""
    return track.radius < LAST_RADIUS or track.stalls >= STALLS


def _leave_slow(tracks: Sequence[Track]) -> None:
    """Leave tracks that have had their steps and gain little by each."""
    for track in tracks:
        track.alive &= track.gain > FAST_GAIN and not track.patient


def _accept(track: Track, place: Place) -> None:
    fresh = Track(place, penalty=track.penalty)
    track.steps += 1
    gain = (track.merit - fresh.merit) / max(track.merit, 1e-12)
    track.gain = gain if np.isfinite(gain) else 0.0
    if fresh.feasible and (track.complied is None or fresh.total < Track(track.complied).total):
        track.complied = place
    if np.isfinite(fresh.merit) and gain > 0.0:
        track.place = place
        track.radius = min(track.radius * (1.6 if gain > 1e-3 else 1.0), 1.0)
        track.stalls = track.stalls + 1 if gain < 2e-5 else 0
        track.missed = (*track.missed, max(0.0, track.violation))
    else:
        track.radius *= 0.3
        track.stalls = 0
    if at_rest(track):
        track.alive = False
    if track.violation > HOPELESS_RATIO and not track.patient:
        # a candidate whose worst miss hardly shrinks will not become feasible
        stuck = len(track.missed) >= PATIENCE and (
            track.violation > SHRINKS_BY * track.missed[-PATIENCE]
        )
        track.alive &= not stuck and track.radius > HOPELESS_RADIUS


def _rest_dear(tracks: list[Track], rival: float) -> None:
    """Rest candidates that fall behind: far dearer early on, a little dearer later."""
    best = min([rival, *(t.total for t in tracks if t.feasible)])
    for track in tracks:
        if track.alive and track.steps >= REST_EARLY:
            late = track.steps >= REST_LATE
            track.alive = track.total <= (DEARER_LATE if late else DEARER_EARLY) * best


def _is_stationary(track: Track, cost_ahead: float) -> bool:
    """Whether the best point of the linear model costs as much as the track's own point.

    The model counts all but equipment and separator, which a step does not change.
    """
    if track.patient:
        return False
    seen, row = track.place.seen, track.place.point
    fixed = sum(float(seen.priced.by_cause[cause][row]) for cause in (EQUIPMENT, SEPARATOR))
    promised = (track.merit - fixed - cost_ahead) / max(track.total, 1e-12)
    return abs(promised) < NO_GAIN


def step(
    evaluator: Evaluator, track: Track, solver: SolverPort, bounds: Bounds, *, inward: float = 0.0
) -> Points | None:
    """Solve one linearised step from a track's point; None where nothing is gained by it.

    That is where the time limit leaves no solution, and where the linear model promises no gain
    within the trust region, which a smaller region cannot do either.

    ``inward`` asks the checks to hold by that much more than the usual back-off.

    Raises
    ------
    SolverFault
        The solver finds no solution: staying at the point is always one.
    """
    seen, row = track.place.seen, track.place.point
    model = build_step(
        evaluator, seen, row, track.radius, bounds, inward=inward, miss_only=track.patient
    )
    report = solver.solve(in_cost_units(model, cost_unit(seen, row)))
    if report.termination in {Termination.INFEASIBLE, Termination.UNBOUNDED}:
        said = "found no best solution where staying at the point is a solution of finite cost"
        raise SolverFault(report.solver, model.name, said)
    if not report.termination.has_solution:
        return None
    if not inward and _is_stationary(track, report.objective * cost_unit(seen, row)):
        track.stalls = STALLS
        return None
    point = seen.points.take([row])
    doses = point.doses.copy()
    for j in np.flatnonzero(doses[0] > 0.0):
        doses[0, j] = report.values[f"dose {evaluator.plant.names[j]}"]
    ph = point.ph.copy()
    if "set point" in report.values:
        ph[0] = report.values["set point"]
    return Points(doses, point.controller, ph, point.trim)

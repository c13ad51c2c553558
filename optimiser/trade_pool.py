"""A pool of good recipes that is polished again under a changed site, in place of a new search.

Owns which of the known points start a polish and what is learnt from it; what changes, and when a
new search is due, is for `optimiser.trade_curve`.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, field, replace

import numpy as np

from optimiser.evaluation import Evaluator, Place
from optimiser.nearby import NEAR_STEPS, repolish
from optimiser.points import Points
from optimiser.polish import Track, polish
from optimiser.polish_step import PENALTY
from optimiser.recipes import recipe_of, set_point_bounds, trim_for
from optimiser.solver import SolverPort

STARTS = 8  # points that are polished for one cap
STARTS_PER_RECIPE = 3
NEAR_MISS = 0.3  # largest ratio of a point that may come to comply under another cap
RADIUS = 0.3


@dataclass(slots=True)
class Pool:
    """Known points by recipe, the newest first."""

    solver: SolverPort
    places: dict[tuple[str, ...], list[Place]] = field(default_factory=dict)

    def add(self, recipes_and_tracks: Iterable[tuple[tuple[str, ...], Track]]) -> None:
        """Keep points that comply or miss by little."""
        for recipe, track in recipes_and_tracks:
            if track.feasible or track.violation < NEAR_MISS:
                known = self.places.setdefault(recipe, [])
                known.insert(0, track.place)
                del known[STARTS_PER_RECIPE:]

    def solve(self, evaluator: Evaluator, set_point: float | None = None) -> Track | None:
        """Polish the most promising points under a changed site; None where none complies.

        Parameters
        ----------
        evaluator
            That of the changed site.
        set_point
            The pH that every start is moved to; points that nothing controls are left out.
        """
        starts = [place for places in self.places.values() for place in places]
        if set_point is not None:
            starts = [p for p in starts if p.seen.points.controller[p.point] >= 0]
        if not starts:
            return None
        points = Points.join([place.seen.points.take([place.point]) for place in starts])
        if set_point is not None:
            points = _moved_to(evaluator, points, set_point)
        seen = evaluator.evaluate(points, full=False, near=starts)
        total = np.where(np.isfinite(seen.total), seen.total, np.inf)
        merit = total * (1.0 + PENALTY * np.clip(seen.violation, 0.0, 60.0))
        order = [int(k) for k in np.argsort(merit, kind="stable")[:STARTS]]
        tracks = polish(
            evaluator, points.take(order), self.solver, bounds=set_point_bounds(evaluator),
            radius=RADIUS, near=[starts[k] for k in order],
        )  # fmt: skip
        return self._learn(evaluator, tracks)

    def _learn(self, evaluator: Evaluator, tracks: list[Track]) -> Track | None:
        """Keep what came of a polish; the cheapest is polished until it rests."""
        best = cheapest(tracks)
        if best is not None:
            again = repolish(evaluator, best.place, self.solver, steps=NEAR_STEPS)
            best = again if again.feasible and again.total < best.total else best
            tracks = [*tracks, best]
        found: dict[tuple[str, ...], Track] = {}
        for track in tracks:
            recipe = recipe_of(evaluator.plant, track.point, 0)
            other = found.get(recipe)
            if other is None or (not track.feasible, track.merit) < (
                not other.feasible, other.merit,
            ):  # fmt: skip
                found[recipe] = track
        self.add(found.items())
        return best


def cheapest(tracks: Iterable[Track]) -> Track | None:
    """The cheapest track that complies."""
    return min((t for t in tracks if t.feasible), key=lambda t: t.total, default=None)


def _moved_to(evaluator: Evaluator, points: Points, ph: float) -> Points:
    """Points at another set point, each with the trim that it needs there."""
    trims = [trim_for(evaluator, ph, int(trim)) for trim in points.trim]
    return replace(points, ph=np.full(len(points), ph), trim=np.array(trims, dtype=np.int64))

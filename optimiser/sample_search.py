"""Plans for many samples: recipes found on their mean are polished on few waters, judged on all.

Owns the rounds of a cutting-plane method: polish on mixtures and extremes, verify on every sample
at every corner and end, take the samples that miss out of their mixtures, polish again.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from chemistry.representatives import representatives
from optimiser.errors import NoPlan
from optimiser.evaluation import FEASIBLE_RATIO, Evaluation, Evaluator, Place
from optimiser.feeds import Feeds, distinct_samples, mixed_feeds
from optimiser.monthly import monthly_label
from optimiser.points import Points
from optimiser.polish import Track, polish, polish_each
from optimiser.polish_step import BACK_OFF, PENALTY, Bounds
from optimiser.quality import MONTHLIES
from optimiser.recipes import recipe_of
from optimiser.search import Findings
from optimiser.solver import SolverPort

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

MOST_WATERS = 8  # asked of the first reduction; extremes are kept even where they are more
RECIPES = 4  # polished on the samples
CERTIFIED = 3  # verified on every sample
ROUNDS = 8
SCALES = (1.0, 1.15, 1.3, 1.5, 1.75, 2.1, 2.6)  # of the mean's paced doses
SHIFTS = (-0.3, 0.0, 0.3)  # of the mean's set point
ADDED = 2  # samples that a check adds in a round at most
AGAIN_STEPS, AGAIN_RADIUS = 6, 0.05
SLACK = 2e-3  # a monthly limit that binds on mixtures and leaves this much on all samples
OUTSIDE = 2e-5  # kept clear of a month that mixtures hide


def has_many(evaluator: Evaluator) -> bool:
    """Whether a site's feed is more than one distinct sample."""
    site = evaluator.site
    return site.sample_waters is not None and len(distinct_samples(site)) > 1


def on_every_sample(evaluator: Evaluator) -> Evaluator:
    """The evaluator of a site on each of its samples; itself where there is one water."""
    if not has_many(evaluator):
        return evaluator
    site = evaluator.site
    return Evaluator(site, mixed_feeds(site, evaluator.plant.feed, distinct_samples(site)))


@dataclass(frozen=True, eq=False)
class Verified:
    """A track judged on every sample."""

    track: Track
    seen: Evaluation

    @property
    def holds(self) -> bool:
        """Whether every sample is certified."""
        return bool(self.seen.feasible[0])


class SampleSearch:
    """One run over the samples of a site, after the search on their mean."""

    def __init__(
        self, evaluator: Evaluator, found: Findings, solver: SolverPort, *, bounds: Bounds,
        progress: Callable[[str], None] | None = None,
    ) -> None:  # fmt: skip
        self.mean = evaluator
        self.found = found
        self.solver = solver
        self.progress = progress or (lambda _text: None)
        self.bounds = bounds
        self.whole = on_every_sample(evaluator)
        self.groups = _first_groups(evaluator)
        self.hidden = np.zeros(len(evaluator.judge.checks))
        self.evaluator = self._mixed()
        self.findings = replace(found, best={}, lowest=None, lowest_point=[])
        self.findings.whole = self.whole

    def run(self) -> tuple[Evaluator, Findings]:
        """Polish and verify by turns; what is found was certified on every sample."""
        with self.findings.timed("polish on samples"):
            tracks = self._polish()
        certified: list[Verified] = []
        for _ in range(ROUNDS):
            with self.findings.timed("verify on samples"):
                checked = self._verify(tracks)
                certified = [one for one in checked if one.holds]
                changed = self._learn(checked)
            if not changed or self.bounds.late:
                break
            with self.findings.timed("polish on samples"):
                tracks = self._again(tracks)
        self.findings.stopped_early |= self.bounds.late
        kept = certified or [Verified(t, self.whole_seen(t)) for t in tracks[:1]]
        for one in kept:
            self.findings.keep(recipe_of(self.mean.plant, one.track.point, 0), one.track)
        self.findings.certified = {
            recipe_of(self.mean.plant, one.track.point, 0): one.seen for one in kept
        }
        self.mean.plant.states_solved += self.whole.plant.states_solved
        self.evaluator.plant.states_solved += self.mean.plant.states_solved
        return self.evaluator, self.findings

    def whole_seen(self, track: Track) -> Evaluation:
        """A track's point on every sample."""
        return self.whole.evaluate(track.point, near=[track.place])

    def _mixed(self) -> Evaluator:
        site = self.mean.site
        feeds = mixed_feeds(site, self.mean.plant.feed, self.groups)
        return Evaluator(site, replace(feeds, hidden=tuple(self.hidden.tolist())))

    def _polish(self) -> list[Track]:
        """The best recipes of the mean, polished on the first waters."""
        ranked = sorted(self.found.best.values(), key=lambda t: (not t.feasible, t.merit))
        starts = [self._start(track) for track in ranked[:RECIPES]]
        self.progress(f"polishing {len(starts)} recipes on {len(self.groups)} waters")
        tracks = self._polish_from(starts, np.inf)
        if any(track.feasible for track in tracks):
            return tracks
        # where none complies, what is missed comes before any cost, then the cost from there
        nearest = self._polish_from([track.place for track in tracks], None)
        return self._polish_from([track.place for track in nearest], np.inf)

    def _polish_from(self, starts: Sequence[Place], rival: float | None) -> list[Track]:
        points = [place.seen.points.take([place.point]) for place in starts]
        return _ranked(
            polish(
                self.evaluator, Points.join(points), self.solver,
                bounds=self.bounds, near=starts, rival=rival,
            )
        )  # fmt: skip

    def _start(self, track: Track) -> Place:
        """The best nominal point around a plan of the mean: strong samples want larger doses."""
        bounds, point = self.bounds, track.point
        controller = int(point.controller[0])
        low = bounds.ph_low(controller, point.doses[0])
        high = bounds.ph_high(controller, point.doses[0])
        tries = [
            replace(
                point, doses=np.clip(point.doses * scale, 0.0, bounds.dose_high),
                ph=np.clip(point.ph + shift, low, high) if controller >= 0 else point.ph,
            )
            for scale in SCALES for shift in SHIFTS
        ]  # fmt: skip
        seen = self.evaluator.evaluate(
            Points.join(tries), full=False, near=[track.place] * len(tries)
        )
        miss = np.clip(seen.violation + BACK_OFF, 0.0, 60.0)
        return Place(seen, int(np.argmin(seen.total * (1.0 + PENALTY * miss))))

    def _again(self, tracks: Sequence[Track]) -> list[Track]:
        """Polish from where the tracks stand, on the waters as they are now."""
        before = self.evaluator.plant.states_solved
        self.evaluator = self._mixed()
        self.evaluator.plant.states_solved += before
        near = [track for track in tracks if track.feasible][:CERTIFIED]
        self.progress(f"polishing {len(near)} recipes on {len(self.groups)} waters")
        found = polish_each(
            self.evaluator, [t.place for t in near], self.solver, bounds=self.bounds,
            steps=AGAIN_STEPS, radius=AGAIN_RADIUS,
        )  # fmt: skip
        lost = [track for track in found if not track.feasible]
        if lost and not self.bounds.late:
            # a sample may lie beyond an edge that no small step crosses
            found = [track for track in found if track.feasible]
            found += self._polish_from([self._start(track) for track in lost], np.inf)
        return _ranked(found)

    def _verify(self, tracks: Sequence[Track]) -> list[Verified]:
        some = tracks[:CERTIFIED]
        self.progress(f"verifying {len(some)} recipes on {len(self.whole.plant.feeds) - 1} samples")
        return [Verified(track, self.whole_seen(track)) for track in some]

    # -- what the samples teach --------------------------------------------------------------------

    def _learn(self, checked: Sequence[Verified]) -> bool:
        """Take missing samples out of their mixtures and correct hidden months."""
        wanted: dict[int, None] = {}
        for one in checked:
            if not one.holds and one.track.feasible:
                wanted |= dict.fromkeys(_missing(self.whole, one.seen))
        new = [n for n in wanted if not self._is_alone(n)]
        for number in new:
            self._take_out(self.whole.plant.feeds.members[number])
        return self._months(checked) or bool(new)

    def _is_alone(self, number: int) -> bool:
        members = set(self.whole.plant.feeds.members[number])
        return any(set(group.tolist()) == members for group in self.groups)

    def _take_out(self, members: tuple[int, ...]) -> None:
        rest = [group[~np.isin(group, members)] for group in self.groups]
        self.groups = [group for group in rest if group.size]
        self.groups.append(np.array(members, dtype=np.int64))

    def _months(self, checked: Sequence[Verified]) -> bool:
        """Set what the mixtures hide of monthly means; True where it matters."""
        matters = False
        checks = self.evaluator.judge.checks
        monthly = [n for n, check in enumerate(checks) if check.averaging in MONTHLIES]
        for number in monthly:
            label = monthly_label(checks[number])
            found = []
            for one in (one for one in checked if one.track.feasible):
                place = one.track.place
                on_few = _worst_rule(place.seen, place.point, label)
                on_all = _worst_rule(one.seen, 0, label)
                short = on_all > FEASIBLE_RATIO or (on_few > -SLACK / 4.0 and on_all < -SLACK)
                found.append((on_all - on_few, short))
            if any(short for _, short in found):
                self.hidden[number] += max(gap for gap, _ in found) + OUTSIDE
                matters = True
        return matters


def _first_groups(evaluator: Evaluator) -> list[IntArray]:
    """Mixtures and extremes to begin with; samples that are alike stay together."""
    site = evaluator.site
    assert site.samples is not None
    assert site.sample_waters is not None
    distinct = distinct_samples(site)
    first = np.array([group[0] for group in distinct])
    samples = replace(
        site.samples, samples=tuple(site.samples.samples[int(number)] for number in first)
    )
    waters = site.sample_waters
    waters = replace(
        waters, totals_mol_per_l=waters.totals_mol_per_l[first],
        sampled_mol_per_l=waters.sampled_mol_per_l[first], ph=waters.ph[first],
    )  # fmt: skip
    reduced = representatives(samples, waters, most=MOST_WATERS)
    return [np.concatenate([distinct[i] for i in members]) for members in reduced.members]


def no_plan_on_samples(findings: Findings) -> NoPlan:
    """Build the error that names the samples and limits that the nearest recipe misses."""
    whole = findings.whole
    assert whole is not None
    recipe, seen = min(findings.certified.items(), key=lambda one: float(one[1].violation[0]))
    reasons = [f"nearest: {' + '.join(recipe)}, whose worst samples are named here"]
    clashes: list[dict[str, object]] = []
    for number, check in enumerate(whole.judge.checks):
        found = worst_sample(whole, seen, 0, number)
        if found is None or found.ratio <= FEASIBLE_RATIO:
            continue
        value = check.target * float(np.exp(found.ratio)) * check.variability
        clashes.append(
            {
                "limit": f"{check.label}, {check.averaging}", "lowest_reachable": np.inf,
                "target": check.target * check.variability, "reachable_alone": False,
                "best_compromise": value, "stopped_by": f"sample of {found.sample}",
            }
        )  # fmt: skip
        more = f" and {found.others} more" if found.others else ""
        reasons.append(f"{check.label}, {check.averaging}, is missed by {found.sample}{more}")
    rules = [r.label for r in seen.rules if r.ratio[0] > FEASIBLE_RATIO]
    reasons += [f"missed: {label}" for label in dict.fromkeys(rules)]
    count = len(whole.plant.feeds) - 1
    message = f"no plan: no recipe was found that meets every limit on each of {count} samples"
    return NoPlan(message, reasons=reasons, clashes=clashes)


@dataclass(frozen=True, slots=True)
class WorstSample:
    """The sample that is worst under a check: its name, its ratio, and how many others miss."""

    sample: str
    ratio: float
    others: int


def worst_sample(whole: Evaluator, seen: Evaluation, point: int, number: int) -> WorstSample | None:
    """The worst sample of a point under a check of every state; None for monthly averages."""
    feeds = whole.plant.feeds
    worst = np.full(len(feeds), -np.inf)
    for part in seen.judged:
        mine = seen.rows.counts[part.block.rows] & (seen.rows.point[part.block.rows] == point)
        np.maximum.at(worst, seen.rows.sample[part.block.rows[mine]], part.ratio[mine, number])
    if not np.isfinite(worst).any():
        return None
    first = int(np.argmax(worst))
    misses = int(np.count_nonzero(worst > FEASIBLE_RATIO))
    return WorstSample(feeds.labels[first], float(worst[first]), max(misses - 1, 0))


def _ranked(tracks: Sequence[Track]) -> list[Track]:
    return sorted(tracks, key=lambda track: (not track.feasible, track.merit))


def _worst_rule(seen: Evaluation, point: int, label: str) -> float:
    return max((float(r.ratio[point]) for r in seen.rules if r.label == label), default=-np.inf)


def _missing(whole: Evaluator, seen: Evaluation) -> list[int]:
    """Samples of one point that miss, the worst of each check and rule first."""
    feeds: Feeds = whole.plant.feeds
    worst = np.full((len(feeds), len(whole.judge.checks) + 1), -np.inf)
    for part in seen.judged:
        mine = part.block.rows
        sample, counts = seen.rows.sample[mine], seen.rows.counts[mine]
        np.maximum.at(worst[:, :-1], sample[counts], part.ratio[counts])
        missing = counts & (part.block.trim_missing | ~part.block.reached)
        np.maximum.at(worst[:, -1], sample[missing], 1.0)
    found: dict[int, None] = {}
    for column in worst.T:
        order = np.argsort(-column, kind="stable")[:ADDED]
        found |= dict.fromkeys(int(s) for s in order if column[s] > FEASIBLE_RATIO)
    rules = [r for r in seen.rules if r.ratio[0] > FEASIBLE_RATIO and "monthly" not in r.label]
    if rules:
        counted = np.flatnonzero(feeds.counted)
        fed = seen.priced.fed[0, counted, :]
        found |= dict.fromkeys(int(s) for s in counted[np.argmax(fed, axis=0)])
        for _, state in seen.before.values():
            ph = state.ph[counted]
            found |= dict.fromkeys(int(counted[k]) for k in (np.argmin(ph), np.argmax(ph)))
    return list(found)

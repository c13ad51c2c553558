"""Envelopes: two piecewise-linear curves in ln(residual), one never above and one never below.

Owns where their breakpoints lie and how far they are moved off the curve; the curve itself and its
exact slope come from `chemistry.response`.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from chemistry.errors import WaterError

if TYPE_CHECKING:
    from chemistry.response import Response

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]
IntArray = NDArray[np.int64]

# Intervals narrower than this share of the dose, or of the ladder, are one breakpoint.
LEAST_WIDTH_OF_DOSE = 1e-12
LEAST_WIDTH_OF_LADDER = 1e-15
MOST_STATES = 40_000
CHECK_POINTS = np.array([0.25, 0.5, 0.75])
SAFETY = 4.0  # times the misfit of the cubic at the check points
BALANCE_CLOSURE = 1e-12  # mass balances close to this share of the amounts
LN_ROUNDING = 1e-9


@dataclass(frozen=True, slots=True, kw_only=True)
class ActiveSetChange:
    """A dose at which solids appear or disappear. [mol/L]"""

    dose_mol_per_l: float
    appears: tuple[str, ...]
    disappears: tuple[str, ...]


@dataclass(frozen=True, eq=False, kw_only=True)
class Envelope:
    """Straight lines below and above a response in ln(residual).

    Parameters
    ----------
    component
        Whose dissolved total is enclosed.
    doses_mol_per_l
        Breakpoints, rising, (k,). [mol/L]
    optimistic_ln, safe_ln
        Values at the breakpoints of the line never above and the line never below, (k,).
        [ln(mol/L)]
    largest_error_ln
        Largest distance between the two lines: neither is further than this from the curve.
    tolerance_ln
        What was asked for; met unless `within_tolerance` is False.
    changes
        Onsets and ends of solids.
    states_solved
        Equilibria that it took.
    """

    component: str
    doses_mol_per_l: FloatArray
    optimistic_ln: FloatArray
    safe_ln: FloatArray
    largest_error_ln: float
    tolerance_ln: float
    changes: tuple[ActiveSetChange, ...]
    states_solved: int

    @property
    def within_tolerance(self) -> bool:
        """Whether the tolerance was reached before the finest step and the most states."""
        return self.largest_error_ln <= self.tolerance_ln

    def optimistic_at(self, doses_mol_per_l: FloatArray) -> FloatArray:
        """Line never above the curve, at doses inside the ladder. [ln(mol/L)]"""
        return self._at(doses_mol_per_l, self.optimistic_ln)

    def safe_at(self, doses_mol_per_l: FloatArray) -> FloatArray:
        """Line never below the curve, at doses inside the ladder. [ln(mol/L)]"""
        return self._at(doses_mol_per_l, self.safe_ln)

    def _at(self, doses_mol_per_l: FloatArray, values: FloatArray) -> FloatArray:
        doses = np.asarray(doses_mol_per_l, dtype=float)
        low, high = self.doses_mol_per_l[0], self.doses_mol_per_l[-1]
        if np.any((doses < low) | (doses > high)):
            raise WaterError(f"a dose is outside the envelope, {low:g} to {high:g} mol/L")
        return np.asarray(np.interp(doses, self.doses_mol_per_l, values), dtype=float)


@dataclass(slots=True)
class _Points:
    """Everything solved so far: doses, ln(residual), slopes and solids present."""

    response: Response
    component: str
    dose: FloatArray = field(default_factory=lambda: np.zeros(0))
    ln: FloatArray = field(default_factory=lambda: np.zeros(0))
    slope: FloatArray = field(default_factory=lambda: np.zeros(0))
    present: BoolArray = field(default_factory=lambda: np.zeros((0, 0), dtype=bool))

    def add(self, doses: FloatArray) -> IntArray:
        """Solve these doses and return their positions."""
        ln, slope, present = self.response.ln_residual(self.component, doses)
        before = self.dose.size
        self.dose = np.concatenate([self.dose, doses])
        self.ln = np.concatenate([self.ln, ln])
        self.slope = np.concatenate([self.slope, slope])
        self.present = np.concatenate([self.present, present]) if before else present
        return np.arange(before, self.dose.size)

    def too_narrow(self, left: IntArray, right: IntArray) -> BoolArray:
        """Whether intervals are not to be cut any more, all of them after the most states."""
        span = float(self.response.doses_mol_per_l[-1] - self.response.doses_mol_per_l[0])
        least = np.maximum(LEAST_WIDTH_OF_DOSE * self.dose[right], LEAST_WIDTH_OF_LADDER * span)
        narrow = self.dose[right] - self.dose[left] <= least
        return np.asarray(narrow | (self.dose.size > MOST_STATES), dtype=bool)

    def differ(self, a: IntArray, b: IntArray) -> BoolArray:
        """Whether other solids are present at a than at b."""
        return np.asarray(np.any(self.present[a] != self.present[b], axis=-1), dtype=bool)


@dataclass(slots=True)
class _Pieces:
    """Finished intervals: end positions and the reach of the curve below and above the chord."""

    left: IntArray
    right: IntArray
    below: FloatArray
    above: FloatArray

    def joined(self, other: _Pieces) -> _Pieces:
        """Both together."""
        return _Pieces(
            np.concatenate([self.left, other.left]), np.concatenate([self.right, other.right]),
            np.concatenate([self.below, other.below]), np.concatenate([self.above, other.above]),
        )  # fmt: skip


def linearise(response: Response, component: str, tolerance_ln: float = 0.05) -> Envelope:
    """Enclose a residual between two piecewise-linear curves in its natural log.

    Parameters
    ----------
    response
        Ladder that spans the doses; its states are the first breakpoints.
    component
        Whose dissolved total is enclosed.
    tolerance_ln
        Largest distance between the two curves; 0.05 is 5 % of the residual.

    Returns
    -------
    Envelope

    Raises
    ------
    WaterError
        The component is not in the water, or the tolerance is not positive.

    Notes
    -----
    With ``y(d)`` the natural log of the residual:

    1. *Kinks.* Where a solid appears or disappears ``y`` is continuous but its slope jumps. Every
       interval whose ends hold different solids is bisected until it is narrower than 1e-12 of its
       dose, and becomes one breakpoint; its width times the slopes is added on both sides.
    2. *Smooth pieces.* Between kinks the balances are analytic and their Jacobian regular, so ``y``
       is analytic. With ``y`` and the exact ``y'`` at both ends of ``[a, b]``, ``h = b - a``, the
       cubic ``H`` through them misses ``y`` by ``y''''(e) (d-a)^2 (d-b)^2 / 24``, at most
       ``h^4 max|y''''| / 384``. ``H`` less the chord has its extremes at the roots of a quadratic;
       they are how far the curve reaches below and above the chord, up to that misfit.
    3. *Check.* ``y`` is solved at the quarter points. Other solids there split the piece. Else the
       largest misfit of ``H`` there, times 4, plus rounding, widens the reach. A piece is done when
       its reach is half of the tolerance, else it is halved. Where the curve is so steep that the
       closure of the mass balances (1e-12 of the amounts) alone is more than that, as at the exact
       equivalence of a sulfide, halving gains nothing: a piece over which the curve moves by less
       than the tolerance is then done, its rounding is in the lines, and the tolerance is missed.
    4. *Lines.* At a breakpoint the lower line takes the lowest reach of the two pieces that meet,
       the upper line the highest: each line then lies outside the curve on both sides. Their
       distance is linear between breakpoints, so the largest distance at breakpoints bounds the
       error of both everywhere.

    What is proven and what is estimated: given the misfit bound of step 2 the lines enclose the
    curve. The bound itself needs the fourth derivative over the whole piece; step 3 measures it at
    three inner points and takes 4 times as much, which is an estimate, as is the finding of solids:
    one that appears and vanishes again between two neighbouring check points goes unseen. States
    are those of a cold start; where the activity model allows several, the curve is theirs.
    """
    if not tolerance_ln > 0.0:
        raise WaterError(f"tolerance {tolerance_ln} is not above 0")
    points = _Points(response, component)
    rungs = points.add(response.doses_mol_per_l)
    left, right = rungs[:-1], rungs[1:]
    none = np.zeros(0, dtype=np.int64)
    done = _Pieces(none, none, np.zeros(0), np.zeros(0))
    kinks: list[tuple[int, int]] = []
    while left.size:
        left, right, found = _cut_at_kinks(points, left, right)
        kinks += found
        finished, left, right = _examine(points, left, right, tolerance_ln)
        done = done.joined(finished)
    return _assemble(points, done, kinks, tolerance_ln)


def _cut_at_kinks(
    points: _Points, left: IntArray, right: IntArray
) -> tuple[IntArray, IntArray, list[tuple[int, int]]]:
    """Cut intervals where solids come or go; return the smooth rest and the cuts."""
    cuts: list[tuple[int, int]] = []
    differ = points.differ(left, right)
    low, high = left[differ], right[differ]
    while low.size:
        stop = points.too_narrow(low, high)
        cuts += list(zip(low[stop].tolist(), high[stop].tolist(), strict=True))
        low, high = low[~stop], high[~stop]
        if low.size:
            middle = points.add(0.5 * (points.dose[low] + points.dose[high]))
            low, high = np.concatenate([low, middle]), np.concatenate([middle, high])
            differ = points.differ(low, high)
            low, high = low[differ], high[differ]
    starts = np.concatenate([left, np.array([j for _, j in cuts], dtype=np.int64)])
    ends = np.concatenate([right, np.array([i for i, _ in cuts], dtype=np.int64)])
    starts = starts[np.argsort(points.dose[starts], kind="stable")]
    ends = ends[np.argsort(points.dose[ends], kind="stable")]
    wide = points.dose[ends] > points.dose[starts]
    return starts[wide], ends[wide], cuts


def _examine(
    points: _Points, left: IntArray, right: IntArray, tolerance_ln: float
) -> tuple[_Pieces, IntArray, IntArray]:
    """Check smooth pieces; return the finished ones and the ends of those to look at again."""
    count = left.size
    if count == 0:
        return _Pieces(left, right, np.zeros(0), np.zeros(0)), left, right
    width = points.dose[right] - points.dose[left]
    doses = points.dose[left, None] + width[:, None] * CHECK_POINTS
    inner = points.add(doses.ravel()).reshape(count, CHECK_POINTS.size)
    same = ~np.any([points.differ(left, inner[:, k]) for k in range(CHECK_POINTS.size)], axis=0)
    below, above = _reach(points, left, right, inner)
    rounding = _rounding(points, left, right)
    below, above = below - rounding, above + rounding
    flat = np.abs(points.ln[right] - points.ln[left]) <= tolerance_ln
    small = above - below - 2.0 * rounding * flat <= 0.5 * tolerance_ln
    accept = (same & small) | points.too_narrow(left, right)
    pieces = _Pieces(left[accept], right[accept], below[accept], above[accept])
    halve = ~accept & same
    chain = np.column_stack([left, inner, right])
    quarters = chain[~accept & ~same]
    again_left = np.concatenate([left[halve], inner[halve, 1], quarters[:, :-1].ravel()])
    again_right = np.concatenate([inner[halve, 1], right[halve], quarters[:, 1:].ravel()])
    return pieces, again_left, again_right


def _reach(
    points: _Points, left: IntArray, right: IntArray, inner: IntArray
) -> tuple[FloatArray, FloatArray]:
    """How far the curve may lie below (negative) and above its chord, (pieces,)."""
    width = points.dose[right] - points.dose[left]
    rise = points.ln[right] - points.ln[left]
    a = points.slope[left] * width - rise
    b = points.slope[right] * width - rise
    share = np.broadcast_to(CHECK_POINTS, inner.shape)
    chord = points.ln[left, None] + share * rise[:, None]
    cubic = _over_chord(share, a[:, None], b[:, None])
    misfit = np.abs(points.ln[inner] - chord - cubic).max(axis=1)
    roots = _extremes(a, b)
    extreme = _over_chord(roots, a[:, None], b[:, None])
    pad = SAFETY * misfit
    return np.minimum(extreme.min(axis=1), 0.0) - pad, np.maximum(extreme.max(axis=1), 0.0) + pad


def _over_chord(share: FloatArray, a: FloatArray, b: FloatArray) -> FloatArray:
    """Cubic less chord at a share of the piece; a, b: end slopes times width less the rise."""
    rest = 1.0 - share
    return np.asarray(share * rest * (rest * a - share * b), dtype=float)


def _extremes(a: FloatArray, b: FloatArray) -> FloatArray:
    """Shares where the cubic less chord is stationary, kept inside the piece, (pieces, 2).

    Its derivative is ``3 (a + b) t^2 - (4 a + 2 b) t + a``.
    """
    second, first = 3.0 * (a + b), -(4.0 * a + 2.0 * b)
    root = np.sqrt(np.maximum(first**2 - 4.0 * second * a, 0.0))
    stable = -0.5 * (first + np.where(first >= 0.0, root, -root))
    safe_second = np.where(second == 0.0, 1.0, second)
    safe_stable = np.where(stable == 0.0, 1.0, stable)
    one = np.where(second == 0.0, 0.5, stable / safe_second)
    two = np.where(stable == 0.0, 0.5, a / safe_stable)
    return np.asarray(np.clip(np.stack([one, two], axis=1), 0.0, 1.0), dtype=float)


def _rounding(points: _Points, left: IntArray, right: IntArray) -> FloatArray:
    """What the closure of the mass balances leaves open in ln(residual), (pieces,)."""
    steepest = np.maximum(np.abs(points.slope[left]), np.abs(points.slope[right]))
    amounts = np.abs(points.response.totals_mol_per_l).max(initial=0.0) + points.dose[right]
    return np.asarray(LN_ROUNDING + BALANCE_CLOSURE * amounts * steepest, dtype=float)


def _assemble(
    points: _Points, pieces: _Pieces, kinks: list[tuple[int, int]], tolerance_ln: float
) -> Envelope:
    """Join pieces and kinks into two lines, one breakpoint for the two ends that meet."""
    order = np.argsort(points.dose[pieces.left], kind="stable")
    left, right = pieces.left[order], pieces.right[order]
    chord = np.abs(points.ln[right] - points.ln[left]) / (points.dose[right] - points.dose[left])
    # Each breakpoint sees the piece that ends there and the one that begins there; the outermost
    # see one piece and the first or last rung of the ladder, which a kink may have cut off.
    ends = points.response.doses_mol_per_l.size - 1
    before = np.concatenate([[0], right])
    after = np.concatenate([left, [ends]])
    low, high = pieces.below[order], pieces.above[order]
    gap = points.dose[after] - points.dose[before]
    steep = np.abs(points.slope[before]) + np.abs(points.slope[after])
    steep = steep + np.concatenate([chord[:1], chord]) + np.concatenate([chord, chord[-1:]])
    slack = 2.0 * gap * steep
    low_before, low_after = np.concatenate([low[:1], low]), np.concatenate([low, low[-1:]])
    high_before, high_after = np.concatenate([high[:1], high]), np.concatenate([high, high[-1:]])
    optimistic = np.minimum(points.ln[before] + low_before, points.ln[after] + low_after) - slack
    safe = np.maximum(points.ln[before] + high_before, points.ln[after] + high_after) + slack
    doses = points.dose[after].copy()
    doses[0] = points.dose[0]
    return Envelope(
        component=points.component, doses_mol_per_l=doses, optimistic_ln=optimistic, safe_ln=safe,
        largest_error_ln=float(np.max(safe - optimistic)), tolerance_ln=tolerance_ln,
        changes=_changes(points, kinks), states_solved=int(points.dose.size),
    )  # fmt: skip


def _changes(points: _Points, kinks: list[tuple[int, int]]) -> tuple[ActiveSetChange, ...]:
    names = np.array(points.response.system.solid_names)
    found = []
    for i, j in sorted(kinks, key=lambda pair: float(points.dose[pair[0]])):
        before, after = points.present[i], points.present[j]
        found.append(
            ActiveSetChange(
                dose_mol_per_l=0.5 * float(points.dose[i] + points.dose[j]),
                appears=tuple(names[after & ~before].tolist()),
                disappears=tuple(names[before & ~after].tolist()),
            )
        )
    return tuple(found)

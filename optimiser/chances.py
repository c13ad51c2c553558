"""How likely a plan meets its limits when constants, analysis and carried solids are not exact.

Every draw is solved by the full equilibrium at every corner and end of the plan; a limit counts as
met in a draw when it holds in all of them, without design margin: the margin is there for what the
draws say.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from chemistry.errors import ChemistryError
from optimiser.draws import ANALYSIS, CARRY_OVER, CONSTANTS, JAR, Draw, draw_sites
from optimiser.evaluation import DOSE_RULE, FEASIBLE_RATIO, Evaluation, Evaluator, Place
from optimiser.points import Points
from optimiser.quality import LOADS
from optimiser.quality_slopes import RULE
from optimiser.site import Site

if TYPE_CHECKING:
    import pandas as pd

FloatArray = NDArray[np.float64]
Data = dict[str, Any]

DRAWS = 400
INTERVAL_Z = 1.645  # two-sided 90 % interval of an estimated probability
DRIVERS = 5
NO_ANSWER_RATIO = 50.0  # ratio of a draw whose water could not be solved: counted as missed


@dataclass(frozen=True, eq=False, kw_only=True)
class Chances:
    """Outcome of the draws of one plan.

    ``ratio`` (draws, checks) is the worst natural log of value over limit, ``joint`` (draws,)
    whether everything holds, ``nominal`` (checks,) the ratio without any draw.
    """

    site: Site
    seed: int
    labels: tuple[str, ...]
    limits: tuple[tuple[float, str], ...]
    limit_numbers: tuple[int, ...]
    ratio: FloatArray
    nominal: FloatArray
    joint: NDArray[np.bool_]
    unsolved: int
    numbers: FloatArray
    number_names: tuple[str, ...]

    @property
    def probability(self) -> tuple[float, float, float]:
        """Chance that everything holds, with the 90 % interval of the estimate."""
        return estimate(int(self.joint.sum()), self.joint.size)

    def rows(self) -> list[Data]:
        """Each limit: chance, interval, and what the draws predict in its own unit."""
        found = []
        for number, (limit, unit) in enumerate(self.limits):
            met = int((self.ratio[:, number] <= FEASIBLE_RATIO).sum())
            chance, low, high = estimate(met, self.joint.size)
            middle, upper = np.exp(np.quantile(self.ratio[:, number], [0.5, 0.95])) * limit
            found.append(
                {
                    "limit": self.labels[number], "value": limit, "unit": unit,
                    "chance": chance, "low": low, "high": high,
                    "predicted": float(np.exp(self.nominal[number]) * limit),
                    "median": float(middle), "percentile_95": float(upper),
                }
            )  # fmt: skip
        return found

    def drivers(self) -> list[Data]:
        """What moves the worst limit most: share of the variance of its rank, by unknown."""
        worst = self.ratio.max(axis=1)
        if self.joint.size < 3 or np.ptp(worst) == 0.0:
            return []
        share = _ranks(self.numbers).T @ _ranks(worst[:, None])[:, 0] / worst.size
        order = np.argsort(-(share**2), kind="stable")[:DRIVERS]
        return [
            {"unknown": self.number_names[i], "share_percent": 100.0 * float(share[i] ** 2)}
            for i in order
        ]

    def to_dict(self) -> Data:
        """Plain data: what `dosewright chances --json` prints."""
        chance, low, high = self.probability
        unsure = self.site.uncertainty
        return {
            "site": self.site.name, "draws": int(self.joint.size), "seed": self.seed,
            "unsolved_draws": self.unsolved,
            "joint": {"chance": chance, "low": low, "high": high},
            "limits": self.rows(), "drivers": self.drivers(),
            "assumed": {
                "analysis_percent": unsure.analysis_percent, "ph": unsure.ph,
                "carried_solids_percent": unsure.carried_solids_percent,
                "constants": "published ranges as the middle 90 %, one number per metal and review",
                "jar_tests": self._jar_text(),
            },
        }  # fmt: skip

    def _jar_text(self) -> str:
        jar = self.site.jar
        if jar is None or not any(name.startswith(JAR) for name in self.number_names):
            return ""
        return (
            f"factors of the jar tests within their intervals of {100.0 * jar.confidence:g} %,"
            " apart from the constants, which is rather too wide than too narrow"
        )

    def frame(self) -> pd.DataFrame:
        """Each limit with its chance as a pandas frame."""
        import pandas as pd

        return pd.DataFrame(self.rows())


def estimate(met: int, count: int) -> tuple[float, float, float]:
    """Share and its 90 % score interval (Wilson 1927, J. Am. Stat. Assoc. 22, 209).

    Examples
    --------
    >>> [round(v, 3) for v in estimate(95, 100)]
    [0.95, 0.901, 0.975]
    """
    share, z2 = met / count, INTERVAL_Z**2
    middle = (share + z2 / (2 * count)) / (1.0 + z2 / count)
    half = INTERVAL_Z * np.sqrt(share * (1.0 - share) / count + z2 / (4.0 * count**2))
    half /= 1.0 + z2 / count
    return share, max(0.0, float(middle - half)), min(1.0, float(middle + half))


def explain_chances(
    site: Site, *, draws: int = DRAWS, seed: int = 1,
    progress: Callable[[str], None] | None = None,
) -> Chances:  # fmt: skip
    """Plan a site and tell how likely the plan meets each limit.

    Parameters
    ----------
    site
        A problem from `optimiser.load_site`.
    draws, seed
        How many draws of what is not known for sure, and where the random numbers start.
    progress
        Called with a line of text now and then.

    Raises
    ------
    NoPlan, FeedRefused, Interrupted
        As `optimiser.plan` does.
    """
    from optimiser.planning import find

    evaluator, findings = find(site, progress)
    best = findings.feasible[0][1]
    return chances_of(evaluator, best.place, draws=draws, seed=seed, progress=progress)


def chances_of(
    evaluator: Evaluator, place: Place, *, draws: int = DRAWS, seed: int = 1,
    progress: Callable[[str], None] | None = None,
) -> Chances:  # fmt: skip
    """Judge one verified point of a site under draws of what is not known for sure.

    Parameters
    ----------
    evaluator
        The site, as the point was planned.
    place
        The point: its recipe, set point and paced doses stay, the pH controller follows.
    draws, seed
        How many, and where the random numbers start.
    """
    site = evaluator.site
    counted = [n for n, c in enumerate(evaluator.judge.checks) if c.averaging != RULE]
    point = place.seen.points.take([place.point])
    nominal, _ = _judged(without_margin(site), point, place)
    assert nominal is not None, "a verified plan has its states"
    met: list[bool] = []
    ratios: list[FloatArray] = []
    numbers: list[list[float]] = []
    names: tuple[str, ...] = ()
    unsolved = 0
    for number, draw in enumerate(draw_sites(without_margin(site), draws, seed)):
        if progress is not None and number % 20 == 0:
            progress(f"draw {number} of {draws}")
        ratio, holds = _judged(draw.site, point, place)
        unsolved += ratio is None
        ratios.append(
            np.full(len(evaluator.judge.checks), NO_ANSWER_RATIO) if ratio is None else ratio
        )
        met.append(holds)
        names, values = _numbers(draw)
        numbers.append(values)
    return Chances(
        site=site, seed=seed,
        labels=tuple(_label(evaluator, n) for n in counted),
        limits=tuple((evaluator.judge.checks[n].limit, _unit(evaluator, n)) for n in counted),
        limit_numbers=tuple(evaluator.judge.checks[n].limit_number for n in counted),
        ratio=np.array(ratios)[:, counted], nominal=nominal[counted],
        joint=np.array(met), unsolved=unsolved, numbers=np.array(numbers), number_names=names,
    )  # fmt: skip


def _label(evaluator: Evaluator, number: int) -> str:
    check = evaluator.judge.checks[number]
    return f"{check.label}, {check.averaging}"


def _unit(evaluator: Evaluator, number: int) -> str:
    check = evaluator.judge.checks[number]
    return "kg/d" if check.averaging in LOADS else check.unit


def without_margin(site: Site) -> Site:
    """The site with its limits as written, no design margin before them."""
    limits = tuple(replace(limit, design_margin=None) for limit in site.limits)
    return replace(site, design_margin=1.0, limits=limits)


def _judged(site: Site, point: Points, near: Place) -> tuple[FloatArray | None, bool]:
    """Worst ratios of a drawn site, and whether all holds; None where a water has no solution."""
    try:
        seen = Evaluator(site).evaluate(point, near=[near])
    except ChemistryError:
        return None, False
    if not all(part.block.reached.all() for part in seen.judged):
        return None, False
    worst = _worst(seen, 0)
    trimmed = not any(part.block.trim_missing.any() for part in seen.judged)
    rules = max((float(r.ratio[0]) for r in seen.rules if r.label != DOSE_RULE), default=-np.inf)
    holds = trimmed and worst.max(initial=rules) <= FEASIBLE_RATIO
    return worst, bool(holds)


def _worst(seen: Evaluation, point: int) -> FloatArray:
    found = []
    for part in seen.judged:
        mine = seen.rows.point[part.block.rows] == point
        if mine.any():
            found.append(part.ratio[mine].max(axis=0))
    return np.asarray(np.max(found, axis=0), dtype=float)


def _numbers(draw: Draw) -> tuple[tuple[str, ...], list[float]]:
    named = {f"{CONSTANTS}: {k}": v for k, v in draw.constants.items()}
    named |= {f"{ANALYSIS}: {k}": v for k, v in draw.analysis.items()}
    named[CARRY_OVER] = draw.carried
    named |= {f"{JAR}: {k}": v for k, v in draw.jar.items()}
    return tuple(named), list(named.values())


def _ranks(columns: FloatArray) -> FloatArray:
    """Ranks of each column, centred and scaled to variance 1."""
    ranks = np.argsort(np.argsort(columns, axis=0, kind="stable"), axis=0, kind="stable")
    centred = ranks - ranks.mean(axis=0)
    return np.asarray(centred / np.maximum(centred.std(axis=0), 1e-12), dtype=float)

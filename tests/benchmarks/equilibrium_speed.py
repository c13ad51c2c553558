"""Speed of the equilibrium: cold and warm, against a general root finder, and what it grows with.

``OPENBLAS_NUM_THREADS=1 python -m tests.benchmarks.equilibrium_speed [--csv FILE]
[--chart FILE.svg]``. Speeds are states per second of processor time on one core. The root finder
solves one state at a time in log activities and without solids; ours finds the solids too.
"""

from __future__ import annotations

import argparse
import sys
import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from catalogs import load_system
from catalogs.constants import COMPONENTS as CATALOG
from catalogs.constants import solid_table
from chemistry import EquilibriumState, System, equilibrate
from tests.benchmarks.speed_chart import chart
from tests.chemistry.waters import random_waters

FloatArray = NDArray[np.float64]

COMPONENTS = (
    "H+", "Na+", "Ca+2", "Mg+2", "Cl-", "SO4-2", "CO3-2", "HS-",
    "Cu+2", "Ni+2", "Zn+2", "Pb+2", "Cd+2", "Cr+3", "Fe+3",
)  # fmt: skip
SOLIDS = 30
COLD_FLOOR, WARM_FLOOR, RATIO_FLOOR = 1000.0, 5000.0, 10.0
STATES = 1024
ROOT_STATES = 100
LADDER_STEP = 1.02
SEED = 11
HEADER = "axis,value,components,species,solids,batch,cold_states_per_s,warm_states_per_s"


@dataclass(frozen=True)
class Speed:
    """States per second of processor time."""

    cold: float
    warm: float


def the_system() -> System:
    """15 components and 30 solids: those that form by default, then slow ones."""
    names = list(load_system(components=COMPONENTS, activity="davies").solid_names)
    every = load_system(components=CATALOG, solids=solid_table(), activity="davies")
    every = every.narrowed(COMPONENTS)
    names += [name for name in every.solid_names if name not in names]
    return every.narrowed(solids=names[:SOLIDS])


def waters_of(system: System, count: int) -> FloatArray:
    """Waters with a total for every component, plain and heavy, acid to alkaline."""
    rng = np.random.default_rng(SEED)
    totals = 10.0 ** rng.uniform(-6.0, -1.0, (count, len(system.components)))
    proton = system.index["H+"]
    totals[:, proton] = 0.0
    totals[:, proton] = -(totals @ system.component_charges)
    return totals


def seconds_of(work: Callable[[], EquilibriumState], repeats: int) -> float:
    """Least processor time of some repeats."""
    times = []
    for _ in range(repeats):
        begin = time.process_time()
        work()
        times.append(time.process_time() - begin)
    return min(times)


def speed_of(system: System, totals: FloatArray, repeats: int = 3) -> Speed:
    """Cold, and warm from the same waters before a step of the ladder."""
    before = equilibrate(system, totals)
    stepped = totals * LADDER_STEP
    cold = seconds_of(lambda: equilibrate(system, totals), repeats)
    warm = seconds_of(lambda: equilibrate(system, stepped, start=before), repeats)
    return Speed(totals.shape[0] / cold, totals.shape[0] / warm)


@dataclass(frozen=True)
class RootSpeed:
    """A general root finder without solids: states tried and solved per second."""

    label: str
    tried: float
    solved: float


ROOT_METHODS = (
    ("root(), its default method", {"method": "hybr"}),
    ("root(), default method, exact slopes", {"method": "hybr", "jac": True}),
    ("root(), Levenberg-Marquardt", {"method": "lm"}),
    ("root(), Levenberg-Marquardt, exact slopes", {"method": "lm", "jac": True}),
)


def root_speeds(system: System, totals: FloatArray) -> list[RootSpeed]:
    """Methods of ``scipy.optimize.root`` on log activities, one state at a time, no solids.

    From a plain guess none arrives in these waters, so it is spared the way: it starts from the
    solution without solids, every log activity moved by up to 1.
    """
    from scipy.optimize import root

    clear = equilibrate(system.narrowed(solids=[]), totals)
    starts = np.column_stack([clear.log_activity, np.log(clear.ionic_strength)])
    starts += np.random.default_rng(SEED).uniform(-1.0, 1.0, starts.shape)
    speeds = []
    for label, settings in ROOT_METHODS:
        solved, begin = 0, time.process_time()
        with np.errstate(all="ignore"):
            for total, first in zip(totals, starts, strict=True):
                scale = np.maximum(np.abs(total), 1e-7)
                given = (system, total, scale, bool(settings.get("jac")))
                found = root(balances, first, args=given, **settings)
                solved += bool(np.abs(found.fun).max() < 1e-8)
        seconds = time.process_time() - begin
        speeds.append(RootSpeed(label, totals.shape[0] / seconds, solved / seconds))
    return speeds


def balances(
    x: FloatArray, system: System, total: FloatArray, scale: FloatArray, with_slopes: bool
) -> FloatArray | tuple[FloatArray, FloatArray]:
    """Errors of the balances and of the log ionic strength, with their slopes if asked."""
    a, z2 = system.formation, system.charges**2
    strength = np.exp(np.minimum(x[-1:], 3.0))
    value, slope = system.activity_model.screening(strength)
    m = np.exp(np.minimum(a @ x[:-1] + system.ln_k + z2 * value, 30.0))
    own = max(0.5 * m @ z2, 1e-300)
    errors = np.append((a.T @ m - total) / scale, np.log(own / strength[0]))
    if not with_slopes:
        return errors
    by_strength = m * z2 * slope * strength
    slopes = np.empty((x.size, x.size))
    slopes[:-1, :-1] = (a.T * m) @ a / scale[:, None]
    slopes[:-1, -1] = a.T @ by_strength / scale
    slopes[-1, :-1] = 0.5 * (m * z2) @ a / own
    slopes[-1, -1] = 0.5 * by_strength @ z2 / own - 1.0
    return errors, slopes


def sweep() -> list[str]:
    """Rows of cost against components, solids and batch size."""
    rows = [HEADER]

    def row(axis: str, value: int, system: System, totals: FloatArray) -> None:
        speed = speed_of(system, totals, repeats=2)
        rows.append(
            f"{axis},{value},{len(system.components)},{len(system.species_names)},"
            f"{len(system.solids)},{totals.shape[0]},{speed.cold:.0f},{speed.warm:.0f}"
        )

    whole = load_system(activity="davies")
    others = [c for c in (*COMPONENTS, *whole.components) if c != "H+"]
    ordered = ["H+", *dict.fromkeys(others)]
    for count in (4, 6, 8, 10, 12, 15, 18, 21, 24, 28):
        system = whole.narrowed(ordered[:count])
        row("components", count, system, waters_of(system, STATES))
    system = the_system()
    for count in (0, 5, 10, 15, 20, 25, 30):
        narrow = system.narrowed(solids=system.solid_names[:count])
        row("solids", count, narrow, waters_of(narrow, STATES))
    for batch in (1, 2, 4, 16, 64, 256, 1024, 4096):
        row("batch", batch, system, waters_of(system, batch))
    return rows


def main(arguments: Sequence[str] | None = None) -> int:
    """Run; the exit code is 1 below a floor."""
    parser = argparse.ArgumentParser(prog="python -m tests.benchmarks.equilibrium_speed")
    parser.add_argument("--csv", type=Path, help="write the sweep there instead of printing it")
    parser.add_argument("--chart", type=Path, help="draw the sweep there, as SVG")
    parser.add_argument("--no-sweep", action="store_true", help="only the floors")
    options = parser.parse_args(arguments)
    if options.no_sweep and (options.csv or options.chart):
        parser.error("--csv and --chart need the sweep: leave --no-sweep out")
    system = the_system()
    totals = waters_of(system, STATES)
    speed = speed_of(system, totals)
    roots = root_speeds(system, totals[:ROOT_STATES])
    ratio = speed.cold / max(roots[0].solved, 1e-9)
    random = random_waters(load_system(activity="davies"), STATES, SEED).totals
    mixed = speed_of(load_system(activity="davies"), random, repeats=1)
    sys.stdout.write(
        f"{len(system.components)} components, {len(system.species_names)} species, "
        f"{len(system.solids)} solids, {STATES} states at once\n"
        f"cold: {speed.cold:.0f} states/s (floor {COLD_FLOOR:.0f})\n"
        f"warm, every total up by 2 %: {speed.warm:.0f} states/s (floor {WARM_FLOOR:.0f})\n"
        + "".join(
            f"{r.label}, no solids: {r.tried:.0f} tried/s, {r.solved:.0f} solved/s\n" for r in roots
        )
        + f"cold against root() as it comes, states solved: {ratio:.0f} x "
        f"(floor {RATIO_FLOOR:.0f})\n"
        f"random waters of the whole catalog: {mixed.cold:.0f} cold, {mixed.warm:.0f} warm\n"
    )
    if not options.no_sweep:
        rows = sweep()
        text = "\n".join(rows) + "\n"
        if options.chart is not None:
            options.chart.write_text(chart(rows), encoding="utf-8")
        if options.csv is None:
            sys.stdout.write(text)
        else:
            options.csv.write_text(text, encoding="utf-8")
    slow = speed.cold < COLD_FLOOR or speed.warm < WARM_FLOOR or ratio < RATIO_FLOOR
    return 1 if slow else 0


if __name__ == "__main__":
    sys.exit(main())

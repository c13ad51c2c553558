"""Compare `optimiser.plan` with an exhaustive reference: the demo sites and the seeded sites.

Use::

    python -m tests.benchmarks.plan_reference [instance ...]            compare, some seconds each
    python -m tests.benchmarks.plan_reference --prove 20                with a bound, 20 s each
    python -m tests.benchmarks.plan_reference --keep                    and keep the table
    python -m tests.benchmarks.plan_reference --build [instance ...]    make missing references

Instances are the demos (``silver_rinse``) and the seeds (``seed_07``), all where none is named.

A reference takes minutes. ``--build`` makes those that are missing or stale, one after the other,
and keeps each in ``tests/reference/plan_reference_results.csv`` as soon as it is there, so that it
may be stopped and started again. For every recipe of up to three reagents a grid over pH set point,
ligand doses and alkali split is examined with the pH held, refined and polished by a general
optimiser (`tests.benchmarks.reference`, `tests.benchmarks.scipy_polish`). A reference that is
dearer than the plan by more than `REFINE_ABOVE` is made again with denser grids, and the better of
the two is kept.

Comparing evaluates each kept point again (a point that no longer holds makes its reference stale),
plans the site and prints the signed gap, plan / reference - 1. Not counted are instances for which
neither finds a feasible recipe, and those whose reference stayed dearer than the plan by more than
`REFINE_ABOVE` (``no test``). Floors: median of the gaps at most `MEDIAN_GAP`, worst at most
`WORST_GAP`, at least `LEAST_COUNTED` instances counted, no lower bound above its reference or plan.
The exit code is 1 where one of them is missed.
"""

from __future__ import annotations

import argparse
import csv
import sys
import tempfile
import time
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np

from optimiser import load_site, plan
from optimiser.errors import NoPlan, OptimiserError
from optimiser.evaluation import Evaluator
from tests.benchmarks.reference import Reference
from tests.benchmarks.reference_rows import (
    ROOT,
    ReferenceRow,
    keep_rows,
    read_rows,
    rows_of,
    stale,
)
from tests.benchmarks.scipy_polish import polish_reference
from tests.benchmarks.seeded_sites import SEEDS, seeded_site, write_site

SITES = ROOT / "catalogs" / "sites"
DEMOS = ("barium_glaze", "lead_battery", "mercury_lab", "plating_rinse", "silver_rinse")
GAPS = ROOT / "tests" / "reference" / "plan_reference_gaps.csv"
MEDIAN_GAP, WORST_GAP = 0.001, 0.005
REFINE_ABOVE = 0.001  # share by which a reference may be dearer than the plan
DENSER = 1.6
LEAST_COUNTED = 24
BOUND_SLACK = 1e-9
COUNTED = ("test",)


@dataclass(frozen=True, slots=True)
class Compared:
    """One instance: its plan beside its reference; costs are inf where there is none.

    ``status`` is ``test``, ``no test``, ``no recipe``, ``stale``, ``not built`` or ``fault``, with
    the ``reason``; ``bound_cost_per_year`` is nan where none was given.
    """

    instance: str
    kind: str
    status: str
    reason: str = ""
    plan_cost_per_year: float = np.inf
    plan_recipe: str = ""
    plan_cpu_seconds: float = 0.0
    reference_cost_per_year: float = np.inf
    reference_recipe: str = ""
    bound_cost_per_year: float = np.nan

    @property
    def gap(self) -> float:
        """Plan over reference less one: positive where the plan is dearer, inf without a plan."""
        if not np.isfinite(self.reference_cost_per_year):
            return -np.inf
        return self.plan_cost_per_year / self.reference_cost_per_year - 1.0

    @property
    def bound_holds(self) -> bool:
        """Whether the bound, where there is one, is no higher than the reference and the plan."""
        least = min(self.reference_cost_per_year, self.plan_cost_per_year)
        return not self.bound_cost_per_year > least * (1.0 + BOUND_SLACK)


# -- instances -------------------------------------------------------------------------------------


def instances() -> tuple[str, ...]:
    """Names of all instances."""
    return (*DEMOS, *(f"seed_{seed:02d}" for seed in SEEDS))


def kind_of(name: str) -> str:
    """What an instance is about."""
    return seeded_site(int(name[5:])).kind if name.startswith("seed_") else "demo"


def path_of(name: str, folder: Path) -> Path:
    """The site file of an instance; a seeded one is written below the folder first."""
    if name.startswith("seed_"):
        return write_site(int(name[5:]), folder / name)
    return SITES / name / "site.yaml"


# -- references ------------------------------------------------------------------------------------


def build(name: str, folder: Path) -> list[ReferenceRow]:
    """Make the reference of an instance, denser grids where the plan is cheaper."""
    path = path_of(name, folder)
    rows = _reference(name, path, density=1.0)
    cost = _planned(path).cost
    if cost < rows[0].cost * (1.0 - REFINE_ABOVE):
        _note(name)(f"{rows[0].cost:,.2f} is dearer than the plan, {cost:,.2f}: denser grids")
        spent = int(rows[0].cpu_seconds)
        denser = _reference(name, path, density=DENSER)
        spent += int(denser[0].cpu_seconds)
        better = min(denser, rows, key=lambda made: made[0].cost)
        rows = [replace(row, cpu_seconds=str(spent)) for row in better]
    return rows


def _reference(name: str, path: Path, *, density: float) -> list[ReferenceRow]:
    reference = Reference(Evaluator(load_site(path)), density=density, progress=_note(name))
    reference.run()
    polish_reference(reference)
    return rows_of(name, path, reference)


def _note(name: str) -> Callable[[str], None]:
    def write(text: str) -> None:
        sys.stderr.write(f"{name}: {text}\n")
        sys.stderr.flush()

    return write


@dataclass(frozen=True, slots=True)
class _Planned:
    """What planning gave: inf where there is no plan, ``fault`` where the search broke off."""

    cost: float = np.inf
    doses: str = "no plan"
    fault: str = ""
    bound: float = np.nan


def _planned(path: Path, prove_s: float | None = None) -> _Planned:
    try:
        found = plan(load_site(path), prove_s=prove_s)
    except NoPlan:
        return _Planned()
    except OptimiserError as error:
        return _Planned(fault=str(error).splitlines()[0])
    doses = ";".join(f"{name}={dose:.5g}" for name, dose in found.doses.items())
    return _Planned(float(found.cost["total"]), doses, bound=lower_bound_of(found.proof))


def lower_bound_of(proof: Mapping[str, Any]) -> float:
    """The lower bound on the yearly cost of any plan that a proof states, nan where it has none."""
    return float(proof.get("lower_bound_per_year", np.nan))


# -- comparison ------------------------------------------------------------------------------------


def compare(
    name: str, kept: Mapping[str, Sequence[ReferenceRow]], folder: Path,
    *, prove_s: float | None = None,
) -> Compared:  # fmt: skip
    """Plan an instance and hold it against its kept reference; ``prove_s`` seconds for a bound."""
    path, kind = path_of(name, folder), kind_of(name)
    if name not in kept:
        return Compared(name, kind, "not built", "run with --build")
    best = kept[name][0]
    why = stale(best, path, Evaluator(load_site(path)))
    if why:
        return Compared(name, kind, "stale", f"{why}: run with --build")
    begun = time.process_time()
    found = _planned(path, prove_s)
    one = Compared(
        name, kind, "test", "", found.cost, found.doses, time.process_time() - begun,
        best.cost, best.recipe, found.bound,
    )  # fmt: skip
    if found.fault:
        return replace(one, status="fault", reason=found.fault)
    if not np.isfinite(min(found.cost, best.cost)):
        return replace(one, status="no recipe", reason="neither finds one that is feasible")
    if one.gap < -REFINE_ABOVE:
        return replace(
            one, status="no test", reason=f"reference of density {best.density} dearer than plan"
        )
    return one


@dataclass(frozen=True, slots=True)
class Verdict:
    """The floors: gaps of the instances that count, and what is missed."""

    gaps: tuple[float, ...]
    missed: tuple[str, ...]

    @property
    def median(self) -> float:
        """Median of the signed gaps."""
        return float(np.median(self.gaps)) if self.gaps else np.nan

    @property
    def worst(self) -> float:
        """Largest of the signed gaps."""
        return max(self.gaps, default=np.nan)


def judge(compared: Sequence[Compared], *, least_counted: int = LEAST_COUNTED) -> Verdict:
    """Hold the instances that count against the floors."""
    gaps = tuple(one.gap for one in compared if one.status in COUNTED)
    verdict = Verdict(gaps, ())
    missed = [
        f"{one.instance}: {one.status}, {one.reason}"
        for one in compared
        if one.status in ("fault", "stale", "not built")
    ]
    if len(gaps) < least_counted:
        missed.append(f"{len(gaps)} instances count, {least_counted} are wanted")
    if gaps and verdict.median > MEDIAN_GAP:
        missed.append(f"median gap {100 * verdict.median:+.3f} %, at most {100 * MEDIAN_GAP:g} %")
    if gaps and verdict.worst > WORST_GAP:
        missed.append(f"worst gap {100 * verdict.worst:+.3f} %, at most {100 * WORST_GAP:g} %")
    missed += [
        f"{one.instance}: bound {one.bound_cost_per_year:,.2f} above the reference or the plan"
        for one in compared
        if not one.bound_holds
    ]
    return replace(verdict, missed=tuple(missed))


# -- text ------------------------------------------------------------------------------------------


def line_of(one: Compared) -> str:
    """An instance as one printed line."""
    bound = one.bound_cost_per_year
    below = 1.0 - bound / one.reference_cost_per_year
    return (
        f"{one.instance:<14} {one.kind:<17} {one.plan_cost_per_year:>12,.2f} "
        f"{one.reference_cost_per_year:>12,.2f} {100 * one.gap:>+8.3f} "
        f"{'-' if np.isnan(bound) else f'{100 * below:.2f}':>8} {one.plan_cpu_seconds:>6.1f}  "
        f"{one.status}{': ' if one.reason else ''}{one.reason} {one.plan_recipe}"
    )


HEAD = (
    f"{'instance':<14} {'kind':<17} {'plan':>12} {'reference':>12} {'gap %':>8} {'bound %':>8} "
    f"{'cpu s':>6}  status, doses in mg/L"
)


def text_of(compared: Sequence[Compared], verdict: Verdict) -> str:
    """Closing lines: counts, median, worst and what is missed."""
    counts = {one.status: 0 for one in compared}
    for one in compared:
        counts[one.status] += 1
    bounds = [
        1.0 - one.bound_cost_per_year / one.reference_cost_per_year
        for one in compared
        if np.isfinite(one.bound_cost_per_year)
    ]
    lines = [
        ", ".join(f"{count} {status}" for status, count in counts.items()),
        f"median gap {100 * verdict.median:+.4f} %, worst {100 * verdict.worst:+.4f} %",
    ]
    if bounds:
        lines.append(
            f"{len(bounds)} bounds below the reference by {100 * float(np.median(bounds)):.2f} % "
            f"(median), {100 * max(bounds):.2f} % (most)"
        )
    lines += [f"missed: {text}" for text in verdict.missed]
    return "\n".join(lines) + "\n"


def keep_gaps(compared: Sequence[Compared], path: Path = GAPS) -> None:
    """Write what was measured."""
    with path.open("w", encoding="utf-8", newline="") as file:
        file.write(
            "# Plans beside their exhaustive references; gap is plan / reference - 1, in percent.\n"
            "# Made by: python -m tests.benchmarks.plan_reference --keep,\n"
            "# with --prove SECONDS where there are bounds\n"
        )
        writer = csv.writer(file, lineterminator="\n")
        writer.writerow(
            ("instance", "kind", "status", "reason", "gap_percent", "plan_cost_per_year",
             "reference_cost_per_year", "bound_cost_per_year", "plan_recipe", "reference_recipe")
        )  # fmt: skip
        for one in compared:
            bound = "" if np.isnan(one.bound_cost_per_year) else f"{one.bound_cost_per_year:.2f}"
            writer.writerow(
                (one.instance, one.kind, one.status, one.reason, f"{100 * one.gap:+.4f}",
                 f"{one.plan_cost_per_year:.2f}", f"{one.reference_cost_per_year:.2f}", bound,
                 one.plan_recipe, one.reference_recipe)
            )  # fmt: skip


# -- command ---------------------------------------------------------------------------------------


def main(arguments: Sequence[str] | None = None) -> int:
    """Build references or compare plans with them; see the module."""
    parser = argparse.ArgumentParser(prog="python -m tests.benchmarks.plan_reference")
    parser.add_argument("instances", nargs="*", metavar="instance", help="all if none is named")
    parser.add_argument("--build", action="store_true", help="make missing or stale references")
    parser.add_argument("--keep", action="store_true", help="write the table of gaps")
    parser.add_argument("--prove", type=float, metavar="SECONDS", help="bound each plan as well")
    options = parser.parse_args(arguments)
    unknown = sorted(set(options.instances) - set(instances()))
    if unknown:
        parser.error(f"unknown instance {', '.join(unknown)}: one of {', '.join(instances())}")
    names = options.instances or instances()
    with tempfile.TemporaryDirectory() as folder:
        if options.build:
            return _build_all(names, Path(folder))
        return _compare_all(names, Path(folder), prove_s=options.prove, keep=options.keep)


def _build_all(names: Sequence[str], folder: Path) -> int:
    for name in names:
        known = read_rows().get(name)
        path = path_of(name, folder)
        if known and not stale(known[0], path, Evaluator(load_site(path))):
            continue
        keep_rows(build(name, folder))
    return 0


def _compare_all(names: Sequence[str], folder: Path, *, prove_s: float | None, keep: bool) -> int:
    kept, compared = read_rows(), list[Compared]()
    sys.stdout.write(HEAD + "\n")
    for name in names:
        compared.append(compare(name, kept, folder, prove_s=prove_s))
        sys.stdout.write(line_of(compared[-1]) + "\n")
        sys.stdout.flush()
    verdict = judge(compared, least_counted=min(LEAST_COUNTED, len(names)))
    sys.stdout.write(text_of(compared, verdict))
    if keep:
        keep_gaps(compared)
    return 1 if verdict.missed else 0


if __name__ == "__main__":
    sys.exit(main())

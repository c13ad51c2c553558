"""Compare `optimiser.plan` with an exhaustive reference on the demo sites.

Use: ``python -m tests.benchmarks.plan_reference [--polish] [--keep] [demo ...]`` (all demos where
none is named; some minutes each). For every recipe of up to three reagents that a site allows, a
grid over pH set point, ligand doses and alkali split is examined with the pH held (the
controller's dose follows from it). Nominal states come first; points that are nominally feasible
and not far dearer than the recipe's best are judged with all corners and ends. The grid is then
refined around each recipe's best feasible points (or the nearly feasible ones) until at least 20
feasible points are known and the best cost moves by less than 0.2 %. ``--polish`` adds a general
optimiser of scipy from the five best points of each recipe within 15 % of the cheapest.

Printed per demo: cost of the plan and of the reference, signed gap (plan / reference - 1), recipes
feasible, points examined, seconds of each; then each feasible recipe. ``--keep`` writes the results
to ``tests/reference/plan_reference_results.csv``. The exit code is 1 where a reference point is
cheaper than the plan by more than 2 %.
"""

from __future__ import annotations

import argparse
import csv
import sys
import time
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from optimiser import load_site, plan
from optimiser.errors import NoPlan
from optimiser.evaluation import Evaluator
from tests.benchmarks.reference import LEAST_FEASIBLE, RecipeRecord, Reference

ROOT = Path(__file__).resolve().parent.parent.parent
SITES = ROOT / "catalogs" / "sites"
RESULTS = ROOT / "tests" / "reference" / "plan_reference_results.csv"
WORST_GAP = 0.02
HEADER = (
    "site", "plan_cost_per_year", "plan_recipe", "reference_cost_per_year", "gap_percent", "recipe",
    "recipe_cost_per_year", "recipe_gap_percent", "found_cost_per_year", "ph_set_point",
    "doses_mg_per_l", "feasible_points", "points_in_full", "points", "polished",
    "reference_seconds", "plan_seconds",
)  # fmt: skip


@dataclass(frozen=True, slots=True)
class Compared:
    """One demo: its plan (inf where there is none) beside its reference."""

    site: str
    plan_cost_per_year: float
    plan_recipe: str
    plan_seconds: float
    found: Mapping[frozenset[str], float]  # costs of the plan and its runners-up by recipe
    reference: Reference
    polished: bool

    @property
    def gap(self) -> float:
        """Plan over reference less one; negative where the plan is cheaper."""
        best = self.reference.best
        return self.plan_cost_per_year / best - 1.0 if np.isfinite(best) else -np.inf


def compare(name: str, *, polished: bool) -> Compared:
    """Plan a demo and build its reference."""
    site = load_site(SITES / name / "site.yaml")
    begun = time.perf_counter()
    try:
        found = plan(site)
        cost, recipe = float(found.cost["total"]), _doses_text(found.doses)
        by_recipe = {frozenset(r["reagents"]): float(r["total"]) for r in found.data["runners_up"]}
        by_recipe[frozenset(name.split("@")[0] for name in found.doses)] = cost
    except NoPlan:
        cost, recipe, by_recipe = np.inf, "no plan", {}
    spent = time.perf_counter() - begun
    reference = Reference(Evaluator(site), progress=_note(name))
    reference.run()
    if polished:
        from tests.benchmarks.scipy_polish import polish_reference

        polish_reference(reference)
    return Compared(name, cost, recipe, spent, by_recipe, reference, polished)


def _note(name: str) -> Callable[[str], None]:
    def write(text: str) -> None:
        sys.stderr.write(f"{name}: {text}\n")
        sys.stderr.flush()

    return write


# -- rows ------------------------------------------------------------------------------------------


def _doses_text(doses: Mapping[str, float]) -> str:
    return ";".join(f"{name}={dose:.5g}" for name, dose in doses.items())


def _point_text(reference: Reference, record: RecipeRecord) -> tuple[str, str]:
    """Set point and fed doses of a recipe's best point."""
    points = record.grid.points(record.x[record.feasible[:1]])
    fed = reference.evaluator.evaluate(points).priced.doses[0]
    names = reference.evaluator.plant.names
    ph = f"{points.ph[0]:.3f}" if record.grid.controller >= 0 else ""
    return ph, _doses_text({n: d for n, d in zip(names, fed, strict=True) if d > 0.0})


def rows_of(one: Compared) -> list[dict[str, str]]:
    """A row per feasible recipe, the cheapest first."""
    rows = []
    for record in one.reference.ranked:
        found = one.found.get(frozenset(record.grid.names))
        ph, doses = _point_text(one.reference, record)
        rows.append(
            {
                "site": one.site,
                "plan_cost_per_year": f"{one.plan_cost_per_year:.2f}",
                "plan_recipe": one.plan_recipe,
                "reference_cost_per_year": f"{one.reference.best:.2f}",
                "gap_percent": f"{100.0 * one.gap:+.3f}",
                "recipe": "+".join(record.grid.names),
                "recipe_cost_per_year": f"{record.best:.2f}",
                "recipe_gap_percent": f"{100.0 * (one.plan_cost_per_year / record.best - 1):+.3f}",
                "found_cost_per_year": f"{found:.2f}" if found is not None else "",
                "ph_set_point": ph,
                "doses_mg_per_l": doses,
                "feasible_points": str(record.feasible.size),
                "points_in_full": str(record.examined),
                "points": str(record.x.shape[0]),
                "polished": "yes" if one.polished else "no",
                "reference_seconds": f"{one.reference.seconds:.0f}",
                "plan_seconds": f"{one.plan_seconds:.1f}",
            }
        )
    return rows


def text_of(one: Compared, rows: Sequence[Mapping[str, str]]) -> str:
    """What is printed of a demo."""
    records = one.reference.records
    few = [r for r in one.reference.ranked if r.feasible.size < LEAST_FEASIBLE]
    cheaper = [r for r in rows if float(r["recipe_gap_percent"]) > 0.0]
    lines = [
        f"{one.site}: plan {one.plan_cost_per_year:,.2f} ({one.plan_recipe}), reference "
        f"{one.reference.best:,.2f}, gap {100.0 * one.gap:+.3f} %",
        f"  {len(rows)} of {len(records)} recipes feasible, {len(few)} of them with fewer than "
        f"{LEAST_FEASIBLE} feasible points, {len(cheaper)} with a point cheaper than the plan",
        f"  {sum(r.x.shape[0] for r in records)} points, {sum(r.examined for r in records)} of "
        f"them in full; plan {one.plan_seconds:.1f} s, reference {one.reference.seconds:.0f} s",
        "  found: cost of the plan or runner-up of the same recipe",
        f"  {'gap %':>8} {'cost':>10} {'found':>10} {'pH':>7} {'feasible':>8}  doses, mg/L",
    ]
    known = {frozenset(record.grid.names) for record in one.reference.ranked}
    missed = sorted("+".join(sorted(r)) for r in one.found if r not in known)
    if missed:
        lines.append(f"  found by the plan's search but not by the reference: {', '.join(missed)}")
    lines += [
        f"  {row['recipe_gap_percent']:>8} {float(row['recipe_cost_per_year']):>10,.0f} "
        f"{row['found_cost_per_year'] or '-':>10} "
        f"{row['ph_set_point'] or '-':>7} {row['feasible_points']:>8}  {row['doses_mg_per_l']}"
        for row in rows
    ]
    return "\n".join(lines) + "\n"


def keep(rows: Sequence[dict[str, str]], path: Path = RESULTS) -> None:
    """Write rows, and those of sites that were not run as they were."""
    sites = {row["site"] for row in rows}
    kept: list[dict[str, str]] = []
    if path.exists():
        lines = [x for x in path.read_text(encoding="utf-8").splitlines() if not x.startswith("#")]
        kept = [row for row in csv.DictReader(lines) if row["site"] not in sites]
    ordered = sorted([*kept, *rows], key=lambda row: row["site"])
    with path.open("w", encoding="utf-8", newline="") as file:
        file.write(
            "# Plans of the demo sites beside exhaustive references; gaps are plan / reference - 1."
            "\n# Made by: python -m tests.benchmarks.plan_reference --polish --keep\n"
        )
        writer = csv.DictWriter(file, HEADER, lineterminator="\n")
        writer.writeheader()
        writer.writerows(ordered)


def main(arguments: Sequence[str] | None = None) -> int:
    """Run the comparison; see the module."""
    parser = argparse.ArgumentParser(prog="python -m tests.benchmarks.plan_reference")
    known = sorted(path.parent.name for path in SITES.glob("*/site.yaml"))
    parser.add_argument("demos", nargs="*", metavar="demo", help=f"of {', '.join(known)}")
    parser.add_argument("--polish", action="store_true", help="polish each recipe's best points")
    parser.add_argument("--keep", action="store_true", help="write the results file")
    options = parser.parse_args(arguments)
    unknown = sorted(set(options.demos) - set(known))
    if unknown:
        parser.error(f"unknown demo {', '.join(unknown)}: expected one of {', '.join(known)}")
    worst = -np.inf
    for name in options.demos or known:
        one = compare(name, polished=options.polish)
        rows = rows_of(one)
        sys.stdout.write(text_of(one, rows))
        sys.stdout.flush()
        if options.keep:
            keep(rows)
        worst = max(worst, one.gap)
    return 1 if worst > WORST_GAP else 0


if __name__ == "__main__":
    sys.exit(main())

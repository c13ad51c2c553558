"""References as they are kept: rows of a file, and the check that they still hold.

A row is the best point of one recipe, written so that it can be evaluated again. An instance's
fingerprint is that of its files; a kept reference whose files or whose cost have changed since is
stale and has to be made again.
"""

from __future__ import annotations

import csv
import hashlib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, fields
from pathlib import Path

import numpy as np

from optimiser.evaluation import Evaluator
from optimiser.points import Points
from tests.benchmarks.reference import RecipeRecord, Reference

ROOT = Path(__file__).resolve().parent.parent.parent
RESULTS = ROOT / "tests" / "reference" / "plan_reference_results.csv"
MADE_BY = "python -m tests.benchmarks.plan_reference --build"
KEPT_WITHIN = 1.15  # of the cheapest: dearer recipes have no row
SAME_COST = 1e-6


@dataclass(frozen=True, slots=True)
class ReferenceRow:
    """One recipe's best point in a reference; the first row of an instance is the cheapest.

    ``paced`` are the doses paced with the flow, ``controller`` the reagent that holds the pH (empty
    where none does). ``points`` were examined nominally or in full, ``points_in_full`` with every
    corner and end. The last four belong to the instance.
    """

    instance: str
    recipe: str
    cost_per_year: str
    controller: str
    ph_set_point: str
    paced: str
    trim: str
    feasible_points: str
    points_in_full: str
    points: str
    recipes: str
    density: str
    cpu_seconds: str
    fingerprint: str

    @property
    def cost(self) -> float:
        """Cost of the point, per year."""
        return float(self.cost_per_year)


HEADER = tuple(f.name for f in fields(ReferenceRow))


def fingerprint(path: Path) -> str:
    """Short hash of a site file and of the price book beside it."""
    digest = hashlib.sha256()
    for file in (path, path.parent / "offers.csv"):
        digest.update(file.read_bytes())
    return digest.hexdigest()[:12]


def rows_of(instance: str, path: Path, reference: Reference) -> list[ReferenceRow]:
    """Rows of a reference's recipes, the cheapest first; one row without a recipe if none is."""
    ranked = [r for r in reference.ranked if r.best <= KEPT_WITHIN * reference.best]
    common = {
        "instance": instance,
        "recipes": str(len(reference.records)),
        "density": f"{reference.density:g}",
        "cpu_seconds": f"{reference.seconds:.0f}",
        "fingerprint": fingerprint(path),
    }
    if not ranked:
        points = str(sum(r.x.shape[0] for r in reference.records))
        examined = str(sum(r.examined for r in reference.records))
        empty = dict.fromkeys(HEADER, "")
        return [
            ReferenceRow(**{**empty, **common, "recipe": "none", "cost_per_year": "inf",
                            "points": points, "points_in_full": examined, "feasible_points": "0"})
        ]  # fmt: skip
    return [ReferenceRow(**common, **_own_fields(reference.evaluator, r)) for r in ranked]


def _own_fields(evaluator: Evaluator, record: RecipeRecord) -> dict[str, str]:
    names = evaluator.plant.names
    point = record.grid.points(record.x[record.feasible[:1]])
    controller, trim = int(point.controller[0]), int(point.trim[0])
    doses = zip(names, point.doses[0], strict=True)
    return {
        "recipe": "+".join(record.grid.names),
        "cost_per_year": f"{record.best:.4f}",
        "controller": names[controller] if controller >= 0 else "",
        "ph_set_point": f"{point.ph[0]:.12g}",
        "paced": ";".join(f"{name}={dose:.12g}" for name, dose in doses if dose > 0.0),
        "trim": names[trim] if trim >= 0 else "",
        "feasible_points": str(record.feasible.size),
        "points_in_full": str(record.examined),
        "points": str(record.x.shape[0]),
    }


def stale(row: ReferenceRow, path: Path, evaluator: Evaluator) -> str:
    """Why a kept row no longer holds, empty where it does: its point is evaluated again."""
    if row.fingerprint != fingerprint(path):
        return "the instance's files have changed"
    if row.recipe == "none":
        return ""
    seen = evaluator.evaluate(_point(row, evaluator))
    if not seen.feasible[0]:
        return f"its point misses a limit by {float(seen.violation[0]):.1e}"
    change = float(seen.total[0]) / row.cost - 1.0
    return "" if abs(change) <= SAME_COST else f"its point costs {100 * change:+.4f} % more"


def _point(row: ReferenceRow, evaluator: Evaluator) -> Points:
    index = evaluator.plant.index
    doses = np.zeros((1, len(evaluator.plant.names)))
    for part in filter(None, row.paced.split(";")):
        name, dose = part.split("=")
        doses[0, index[name]] = float(dose)
    controller, trim = (index[n] if n else -1 for n in (row.controller, row.trim))
    return Points(
        doses, np.array([controller]), np.array([float(row.ph_set_point)]), np.array([trim])
    )


def read_rows(path: Path = RESULTS) -> dict[str, list[ReferenceRow]]:
    """Kept rows by instance, in their order."""
    kept: dict[str, list[ReferenceRow]] = {}
    if path.exists():
        lines = [x for x in path.read_text(encoding="utf-8").splitlines() if not x.startswith("#")]
        for cells in csv.DictReader(lines):
            kept.setdefault(cells["instance"], []).append(ReferenceRow(**cells))
    return kept


def keep_rows(rows: Sequence[ReferenceRow], path: Path = RESULTS) -> None:
    """Write rows; those of other instances stay as they were."""
    kept: Mapping[str, Sequence[ReferenceRow]] = {**read_rows(path), rows[0].instance: rows}
    with path.open("w", encoding="utf-8", newline="") as file:
        file.write(
            "# Exhaustive references of the optimality benchmark: the best point of each recipe.\n"
            f"# Made by: {MADE_BY}\n"
        )
        writer = csv.DictWriter(file, HEADER, lineterminator="\n")
        writer.writeheader()
        for name in sorted(kept):
            writer.writerows({n: getattr(row, n) for n in HEADER} for row in kept[name])

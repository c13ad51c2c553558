"""Time `optimiser.plan` on the demo sites, split by phase, with the proof.

Use: ``python -m tests.benchmarks.plan_speed [--repeat 3] [demo ...]`` (all demos where none is
named). Every plan runs in this process after one that warms the imports; the fastest of the repeats
counts. Printed per demo: cost, seconds by phase, processor seconds, equilibrium states, solver
calls, the proof, and the seconds as a ratio to those of the exhaustive reference (grid and scipy
polish) where `tests/reference/plan_reference_results.csv` keeps one of the site. The exit code is 1
where a plan takes more than 3 s.
"""

from __future__ import annotations

import argparse
import csv
import sys
import time
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

from optimiser import load_site, plan
from optimiser.linear_model import Model
from optimiser.outcome import Plan
from optimiser.render_proof import proof_lines
from optimiser.solver import Solver, SolveReport

ROOT = Path(__file__).resolve().parent.parent.parent
SITES = ROOT / "catalogs" / "sites"
RESULTS = ROOT / "tests" / "reference" / "plan_reference_results.csv"
LONGEST_S = 3.0


@dataclass(frozen=True, slots=True)
class Timed:
    """One plan: wall and processor seconds, and how often the solver was called."""

    plan: Plan
    seconds: float
    processor_seconds: float
    solver_calls: int


def timed(name: str) -> Timed:
    """Read and plan a demo, counting solver calls."""
    site = load_site(SITES / name / "site.yaml")
    calls = 0
    honest = Solver.solve

    def counted(self: Solver, model: Model) -> SolveReport:
        nonlocal calls
        calls += 1
        return honest(self, model)

    Solver.solve = counted  # type: ignore[method-assign]
    try:
        wall, processor = time.perf_counter(), time.process_time()
        found = plan(site)
        spent = time.perf_counter() - wall, time.process_time() - processor
    finally:
        Solver.solve = honest  # type: ignore[method-assign]
    return Timed(found, *spent, calls)


def reference_seconds() -> dict[str, float]:
    """Seconds of the exhaustive reference by site, of those that are kept."""
    lines = [x for x in RESULTS.read_text(encoding="utf-8").splitlines() if not x.startswith("#")]
    found: dict[str, float] = {}
    for row in csv.DictReader(lines):
        if row.get("reference_seconds"):
            found[row["site"]] = float(row["reference_seconds"])
    return found


def main(arguments: Sequence[str] | None = None) -> int:
    """Time the demos; 1 where one takes longer than it may."""
    names = sorted(path.parent.name for path in SITES.glob("*/site.yaml"))
    parser = argparse.ArgumentParser(description=__doc__, allow_abbrev=False)
    parser.add_argument("--repeat", type=int, default=3)
    parser.add_argument("demo", nargs="*", default=names)
    options = parser.parse_args(arguments)
    peers = reference_seconds()
    timed(options.demo[0])
    slow = []
    for name in options.demo:
        best = min((timed(name) for _ in range(options.repeat)), key=lambda t: t.seconds)
        data = best.plan.to_dict()
        peer = f", 1/{peers[name] / best.seconds:.0f} of the reference's" if name in peers else ""
        _say(
            f"{name}: {data['cost']['total']:,.2f} {data['site']['currency']} a year in "
            f"{best.seconds:.2f} s{peer} ({best.processor_seconds:.2f} s of processor, "
            f"{best.solver_calls} solver calls)"
        )
        for line in proof_lines(data):
            _say(f"  {line}")
        if best.seconds > LONGEST_S:
            slow.append(name)
    if slow:
        _say(f"longer than {LONGEST_S:g} s: {', '.join(slow)}")
    return int(bool(slow))


def _say(text: str) -> None:
    sys.stdout.write(f"{text}\n")


if __name__ == "__main__":
    sys.exit(main())

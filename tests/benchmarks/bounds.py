"""Lower bounds of the demo sites: plan, bound, gap, seconds and cells.

Use: ``python -m tests.benchmarks.bounds [--seconds S] [demo ...]`` (all demos where none is named).
The gap is 1 - bound/plan. The exit code is 1 where a bound exceeds its plan.
"""

from __future__ import annotations

import argparse
import sys
import time
from pathlib import Path

from optimiser import load_site
from optimiser.bound_tree import prove
from optimiser.planning import find

SITES = Path(__file__).resolve().parent.parent.parent / "catalogs" / "sites"


def main() -> int:
    """Print one line per demo."""
    parser = argparse.ArgumentParser()
    parser.add_argument("demos", nargs="*", default=sorted(p.name for p in SITES.iterdir()))
    parser.add_argument("--seconds", type=float, default=60.0)
    options = parser.parse_args()
    _say("demo                   plan      bound  gap %  plan s bound s  cells")
    wrong = False
    for name in options.demos:
        begun = time.perf_counter()
        evaluator, findings = find(load_site(SITES / name / "site.yaml"))
        cost, spent = findings.feasible[0][1].total, time.perf_counter() - begun
        found = prove(evaluator, cost, seconds=options.seconds)
        wrong |= found.lower_per_year > cost
        closed = ", ".join(f"{count} {why}" for why, count in found.closed.items())
        _say(
            f"{name:16} {cost:10.0f} {found.lower_per_year:10.0f} {100.0 * found.gap:6.2f} "
            f"{spent:7.1f} {found.seconds:7.1f}  {found.cells} ({closed}; {found.open_cells} open)"
        )
    return int(wrong)


def _say(line: str) -> None:
    sys.stdout.write(line + "\n")
    sys.stdout.flush()


if __name__ == "__main__":
    sys.exit(main())

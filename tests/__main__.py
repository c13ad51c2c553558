"""Run every check of the house: layout, lint, types, tests. Use: ``python -m tests [pytest args]``.

The exit code is the first one that is not zero; pytest runs last, so its closing line is last.
"""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

ROOT = Path(__file__).resolve().parent.parent
WORKERS = "2"  # processes that share the tests: the suite is planned for two cores
# the matrices are far too small for threads of the linear algebra to help: they only wait
ENVIRONMENT = {"OPENBLAS_NUM_THREADS": "1", **os.environ}
CHECKS = (
    ("ruff", "format", "--check", "."),
    ("ruff", "check", "."),
    ("mypy",),
)


def main(arguments: list[str]) -> int:
    """Run the checks in order, all of them, and return the first exit code that is not zero."""
    commands = [*CHECKS, ("pytest", "-n", WORKERS, *arguments)]
    codes = []
    for command in commands:
        sys.stderr.write(f"== {' '.join(command)}\n")
        sys.stderr.flush()
        codes.append(
            subprocess.run(
                [sys.executable, "-m", *command], cwd=ROOT, env=ENVIRONMENT, check=False
            ).returncode
        )
    for command, code in zip(commands, codes, strict=True):
        if code:
            sys.stderr.write(f"failed: {' '.join(command)} (exit code {code})\n")
    return next((code for code in codes if code), 0)


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))

"""Runs of the command line in processes of their own, with one thing arranged to go wrong."""

from __future__ import annotations

import os
import subprocess
import sys
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import yaml

from tests.optimiser.small_sites import COPPER_ZINC, OFFERS, merged, price_book

ROOT = Path(__file__).resolve().parents[2]
SITES = ROOT / "catalogs" / "sites"
REPORT = (
    "Please run the command again with --debug and send the output with the site file to the "
    "maintainers."
)
MAIN = "from optimiser.cli import main\nsys.exit(main())\n"


def write_site(folder: Path, *changes: Mapping[str, Any]) -> Path:
    """Write the small copper and zinc site, one reagent at a time; returns its site file."""
    tree = merged(COPPER_ZINC, {"treatment": {"most_reagents": 1}})
    for change in changes:
        tree = merged(tree, change)
    folder.mkdir(parents=True, exist_ok=True)
    (folder / "offers.csv").write_text(price_book(OFFERS), encoding="utf-8")
    path = folder / "site.yaml"
    path.write_text(yaml.safe_dump(tree, sort_keys=False), encoding="utf-8")
    return path


def run(
    *arguments: str | Path, arranged: str = "", environment: Mapping[str, str] | None = None,
    **options: Any,
) -> subprocess.CompletedProcess[str]:  # fmt: skip
    """Run a command after ``arranged``, code that may replace parts of the program."""
    settings: dict[str, Any] = {
        "stdout": subprocess.PIPE, "stderr": subprocess.PIPE, "timeout": 300, **options,
    }  # fmt: skip
    return subprocess.run(
        [sys.executable, "-c", f"import os, signal, sys\n{arranged}\n{MAIN}", *map(str, arguments)],
        env={
            **os.environ, "PYTHONPATH": str(ROOT), "OPENBLAS_NUM_THREADS": "1",
            **(environment or {}),
        },
        text=True, check=False, **settings,
    )  # fmt: skip


def program(path: Path, script: str) -> Path:
    """Write a shell script that stands in for a solver."""
    path.write_text(f"#!/bin/sh\n{script}\n", encoding="utf-8")
    path.chmod(0o755)
    return path


def with_cbc(path: Path) -> str:
    """Code that lets another program stand in for CBC."""
    return f"import pulp\npulp.PULP_CBC_CMD.pulp_cbc_path = {str(path)!r}\n"

"""The data files that ship with the package: reading them as rows of text.

Owns the way to `catalogs/data`; files of a user, with positions and gathered problems, are read by
`catalogs.positions`.
"""

from __future__ import annotations

import csv
from importlib.resources import files
from typing import Any


class CatalogDataError(Exception):
    """A shipped data file is damaged: missing, or a row that breaks the table's own rules."""


def read_text(name: str) -> str:
    """Return the text of a shipped file in `catalogs/data`.

    Raises
    ------
    CatalogDataError
        The file is not part of this installation.
    """
    path = files("catalogs") / "data" / name
    if not path.is_file():
        raise CatalogDataError(f"the data file {name} is missing from this installation")
    return path.read_text(encoding="utf-8")


def read_rows(name: str) -> list[dict[str, str]]:
    """Return the rows of a shipped CSV file, comment lines at its top left out.

    Raises
    ------
    CatalogDataError
        The file is missing, or a row has more or fewer cells than the header.
    """
    lines = [line for line in read_text(name).splitlines() if not line.startswith("#")]
    table = list(csv.reader(lines))
    header = table[0]
    for row in table[1:]:
        if len(row) != len(header):
            raise CatalogDataError(f"{name}: {len(row)} cells, {len(header)} columns: {row}")
    return [dict(zip(header, row, strict=True)) for row in table[1:]]


def read_tree(name: str) -> dict[str, Any]:
    """Return a shipped YAML file, whose top level is a table.

    Raises
    ------
    CatalogDataError
        The file is missing or its top level is no table.
    """
    import yaml

    tree = yaml.safe_load(read_text(name))
    if not isinstance(tree, dict):
        raise CatalogDataError(f"{name}: expected a table at the top level")
    return tree


def number_or_none(text: str) -> float | None:
    """Return the number in a cell, None for an empty one."""
    return float(text) if text.strip() else None

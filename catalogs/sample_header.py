"""The header of a table of samples: which row it is, what its columns stand for, its units row.

Owns nothing beneath the header; the rows are `catalogs.sample_tables`.
"""

from __future__ import annotations

import datetime
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace

from catalogs.cells import Cell, Sheet
from catalogs.problems import echo
from catalogs.sample_values import Findings
from catalogs.sample_words import (
    ANALYTE,
    DATE,
    IGNORE,
    MEASURED_ROLES,
    PARAMETER,
    TIME,
    VALUE,
    Heading,
    basis_spelled,
    fold,
    read_heading,
    read_unit,
)

MEASURED = (ANALYTE, *MEASURED_ROLES)


@dataclass(frozen=True, slots=True, kw_only=True)
class TableOptions:
    """What the site says about its file: names of columns, order of dates, a unit for all."""

    columns: Mapping[str, str] = field(default_factory=dict)
    date_order: str = ""
    unit: str = ""
    latest: datetime.date | None = None


Columns = list[tuple[Heading, Cell]]


def find_header(sheet: Sheet, options: TableOptions) -> tuple[Columns, int, list[str]] | None:
    """The first row that names a date and something measured: its columns and its index."""
    for index, row in enumerate(sheet.rows):
        columns = [(heading_of(cell.text, options), cell) for cell in row]
        roles = [heading.role for heading, _ in columns]
        measured = any(role in MEASURED for role in roles)
        if DATE in roles and (measured or (PARAMETER in roles and VALUE in roles)):
            return columns, index, list(sheet.notes)
    return None


def heading_of(text: str, options: TableOptions) -> Heading:
    """What a name stands for, the site's own meaning before the usual one."""
    said = {fold(name): meaning for name, meaning in options.columns.items()}
    bare = read_unit(text)[1].strip(" ()[],;:")
    meaning = said.get(fold(text)) or said.get(bare)
    if meaning is None:
        return read_heading(text) if text else Heading(role=IGNORE)
    if fold(meaning) == IGNORE:
        return Heading(role=IGNORE, text=text)
    found = read_heading(meaning)
    unit, _ = read_unit(text)
    return replace(found, text=text, unit=found.unit or unit)


def check_columns(columns: Columns, findings: Findings) -> None:
    """Record merged header cells and columns that are there twice."""
    first: dict[tuple[str, str], Heading] = {}
    for heading, cell in columns:
        if cell.trouble and not cell.text:
            findings.add(
                cell, "", cell.trouble, "a name for every column",
                "Unmerge the header and write the full name above each column.",
            )  # fmt: skip
        if heading.role in (*MEASURED, DATE, TIME):
            if heading.key in first:
                findings.add(
                    cell, heading.text,
                    f"a second column for {named(heading)}",
                    "one column each",
                    f"The column {echo(first[heading.key].text)} is the same: delete one, name them"
                    " dissolved and total, or write `columns: {NAME: ignore}` in the site file.",
                )  # fmt: skip
            first.setdefault(heading.key, heading)


def with_units_row(
    columns: Columns, rows: Sequence[tuple[Cell, ...]]
) -> tuple[Columns, Sequence[tuple[Cell, ...]]]:
    """Columns with the units of a row that holds nothing but units."""
    if not rows:
        return columns, rows
    units = {cell.column: read_unit(cell.text) for cell in rows[0] if cell.text}
    if not any(unit for unit, _ in units.values()):
        return columns, rows
    if any(cell.stamp or cell.is_number or cell.text[:1].isdigit() for cell in rows[0]):
        return columns, rows
    merged = []
    for heading, cell in columns:
        unit, left = units.get(cell.column, ("", ""))
        basis = basis_spelled(left.replace("as ", "").strip(" ()[]")) if unit and left else ""
        merged.append(
            (replace(heading, unit=heading.unit or unit, basis=heading.basis or basis), cell)
        )
    return merged, rows[1:]


def named(heading: Heading) -> str:
    """What is measured, for a message: ``Cu dissolved``."""
    return f"{heading.name or heading.role} {heading.fraction}".strip()

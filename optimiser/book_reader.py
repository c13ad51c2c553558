"""Price books in workbooks: the rows of the sheet ``offers``, every cell with its place.

Owns finding the header and turning cells into the entries that `optimiser.offers_reader` reads; the
workbook itself is opened by `catalogs.workbooks`.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path

from catalogs.cells import MERGED, NO_STORED_VALUE, Cell, Sheet, column_letters
from catalogs.entries import Entry
from catalogs.positions import Scalar, Table
from catalogs.problems import ProblemLog, Spot, closest, echo
from catalogs.sheets import load_sheet
from optimiser.offer_rows import OFFER_COLUMNS, TERM_COLUMNS

OFFERS_SHEET = "offers"
_HEADER_WITHIN = 20
_FAULTY_VALUES = ("#REF!", "#N/A", "#NAME?", "#VALUE!", "#DIV/0!", "#NUM!", "#NULL!")
_UNREADABLE = "=?"  # stands for a cell in trouble: no kind of value may begin with =
_PERCENT = ("_percent", "_percent_per_point")

_REMEDIES = {
    NO_STORED_VALUE: "Open the workbook in a spreadsheet program and save it, or write the value.",
    MERGED: "Split the merged cells and fill each of them.",
}


@dataclass(frozen=True, slots=True, kw_only=True)
class _TroubledSpot(Spot):
    """A cell that holds no value: whatever is wrong with the value, this is why."""

    trouble: str

    def problem(self, found: str, expected: str, remedy: str) -> None:
        """Record why the cell cannot be read, once."""
        remedy = _REMEDIES.get(self.trouble, "Correct the formula, or write the value.")
        Spot.problem(self, self.trouble, "a value", remedy)


@dataclass(frozen=True, slots=True, kw_only=True)
class _RowSpot(Spot):
    """A row of a sheet; the places inside it are cells."""

    cells: Mapping[str, str]
    troubles: Mapping[str, str]

    def at(self, key: str, line: int | None = None) -> Spot:
        """Return the place of a column's cell: ``offers!H7 (price)``."""
        field = f"{self.cells.get(key, self.field)} ({key})" if key else self.field
        if key in self.troubles:
            return _TroubledSpot(
                log=self.log, file=self.file, line=self.line, field=field,
                trouble=self.troubles[key],
            )  # fmt: skip
        return Spot(log=self.log, file=self.file, line=self.line, field=field)


def sheet_entries(path: Path, log: ProblemLog) -> tuple[Entry, ...]:
    """Rows of a workbook's price book, in the order of the sheet.

    The sheet is the one called `OFFERS_SHEET`, or the only one with content. Rows above the one
    that holds the names of the columns are for people, as are rows whose first cell begins with
    ``#``. Cells that show a percentage are read as they are shown.

    Parameters
    ----------
    path
        The workbook.
    log
        Takes the problems.
    """
    sheet = load_sheet(path, log, usual=OFFERS_SHEET)
    if sheet is None:
        return ()
    position = next((k for k, row in enumerate(sheet.rows) if _is_head(row)), None)
    if position is None or position >= _HEADER_WITHIN:
        sheet.whole().problem(
            f"no row with the names of the columns in the first {_HEADER_WITHIN} rows",
            f"the columns {', '.join(OFFER_COLUMNS)}",
            "Start from a workbook of `dosewright new DIR --xlsx`.",
        )
        return ()
    columns = _columns(sheet, sheet.rows[position])
    if columns is None:
        return ()
    rows = [row for row in sheet.rows[position + 1 :] if not _is_comment(row)]
    return tuple(entry for row in rows for entry in _entry(sheet, row, columns))


def _is_head(row: tuple[Cell, ...]) -> bool:
    return {"offer", "reagent"} <= {cell.text for cell in row}


def _is_comment(row: tuple[Cell, ...]) -> bool:
    first = next((cell.text for cell in row if not cell.is_blank), "")
    return first.startswith("#") and first not in _FAULTY_VALUES


def _columns(sheet: Sheet, head: tuple[Cell, ...]) -> dict[int, str] | None:
    """Names of the columns by their position; None when a problem was recorded."""
    before = len(sheet.log.problems)
    known = (*OFFER_COLUMNS, *TERM_COLUMNS)
    columns: dict[int, str] = {}
    for cell in head:
        if cell.text in columns.values():
            sheet.spot(cell).problem(
                f"the column {echo(cell.text)} twice", "each column once", "Delete one of them."
            )
        elif cell.text in known:
            columns[cell.column] = cell.text
        elif not cell.is_blank:
            near = closest(cell.text, known)
            sheet.spot(cell).problem(
                f"the column {echo(cell.text)}", "only known columns",
                (f"Did you mean `{near}`? " if near else "")
                + "Columns of your own go on another sheet, or begin their row with #.",
            )  # fmt: skip
    for column in OFFER_COLUMNS:
        if column not in columns.values():
            sheet.whole(head[0].row).problem(
                f"no column {column!r}", f"the column {column!r}",
                f"Write its name into row {head[0].row}.",
            )  # fmt: skip
    return columns if len(sheet.log.problems) == before else None


def _entry(sheet: Sheet, row: tuple[Cell, ...], columns: Mapping[int, str]) -> Iterator[Entry]:
    """One row as an entry; nothing for a row without a value under any column."""
    number = row[0].row
    cells: dict[str, str] = {}
    troubles: dict[str, str] = {}
    nodes: dict[str, Scalar] = {key: Scalar("", number) for key in columns.values()}
    for cell in row:
        if cell.column not in columns:
            if not cell.is_blank:
                sheet.spot(cell).problem(
                    echo(cell.text), "nothing beside the table", "Empty the cell, or move it."
                )
            continue
        key = columns[cell.column]
        cells[key] = f"{sheet.name}!{column_letters(cell.column)}{number}"
        trouble = cell.text if cell.text in _FAULTY_VALUES else cell.trouble
        if trouble:
            troubles[key] = trouble
        nodes[key] = Scalar(_UNREADABLE if trouble else _shown(cell, key), number)
    if not any(node.text for node in nodes.values()):
        return
    spot = _RowSpot(
        log=sheet.log, file=sheet.file, line=number, field=f"{sheet.name} row {number}",
        cells=cells, troubles=troubles,
    )  # fmt: skip
    yield Entry(Table(nodes, dict.fromkeys(nodes, number), number), spot)


def _shown(cell: Cell, key: str) -> str:
    """The text of a cell; a percentage in a column of per cent as it is shown."""
    if cell.is_percent and any(key.endswith(end) for end in _PERCENT):
        return f"{100.0 * float(cell.text):.15g}"
    return cell.text

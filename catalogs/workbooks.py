"""Sheets of XLSX workbooks as tables of cells.

Owns what is special about workbooks: which sheet, stored values behind formulas, merged cells,
hidden rows, and files that are no workbook at all. The library that opens them loads only here.
"""

from __future__ import annotations

import datetime
import warnings
import zipfile
import zlib
from typing import TYPE_CHECKING, Any
from xml.etree.ElementTree import ParseError

from catalogs.cells import MERGED, NO_STORED_VALUE, Cell, Sheet, column_letters
from catalogs.problems import Spot, did_you_mean, echo, listed

if TYPE_CHECKING:
    from pathlib import Path

    from openpyxl.workbook.workbook import Workbook
    from openpyxl.worksheet.worksheet import Worksheet

MAX_WORKBOOK_BYTES = 20_000_000
MAX_UNPACKED_BYTES = 200_000_000
MAX_CELLS = 2_000_000

# What damaged or hostile files make the library raise while it takes them apart.
_DAMAGE = (
    zipfile.BadZipFile, zlib.error, ParseError, EOFError, KeyError, ValueError, TypeError,
    IndexError, AttributeError, NotImplementedError, RuntimeError,
)  # fmt: skip


def load_workbook_sheet(path: Path, spot: Spot, sheet: str, usual: str = "") -> Sheet | None:
    """Read one sheet of a workbook; None when a problem was recorded.

    Parameters
    ----------
    path
        The workbook.
    spot
        The file's place, with the log that takes the problems.
    sheet
        Name of the sheet; may be empty where only one sheet holds anything.
    usual
        Sheet that is read where none is named and it is there.
    """
    if not _may_be_opened(path, spot):
        return None
    opened = _open(path, spot)
    if opened is None:
        return None
    values, formulas = opened
    name = _choose(values, sheet, usual, spot)
    if not name:
        return None
    stored, written = values[name], formulas[name]
    if stored.max_row * stored.max_column > MAX_CELLS:
        spot.at(f"sheet {name}").problem(
            f"{stored.max_row} rows by {stored.max_column} columns",
            f"at most {MAX_CELLS} cells",
            "Delete the empty rows and columns that only carry a format, and save again.",
        )
        return None
    return _sheet(name, stored, written, spot)


def _may_be_opened(path: Path, spot: Spot) -> bool:
    try:
        size = path.stat().st_size
        if path.is_dir() or not path.is_file():
            spot.problem("no file", "a workbook", "Name an .xlsx or .csv file.")
            return False
        if size > MAX_WORKBOOK_BYTES:
            spot.problem(
                f"a file of {size / 1e6:.1f} MB", f"at most {MAX_WORKBOOK_BYTES / 1e6:g} MB",
                "Nothing was read. Keep the sheet with the samples only.",
            )  # fmt: skip
            return False
        with zipfile.ZipFile(path) as archive:
            unpacked = sum(info.file_size for info in archive.infolist())
    except OSError as error:
        reason = error.strerror or type(error).__name__
        spot.problem(f"no readable file ({reason})", "a file", "Check the path and its rights.")
        return False
    except (zipfile.BadZipFile, ValueError):
        _refuse_damage(spot)
        return False
    if unpacked > MAX_UNPACKED_BYTES:
        spot.problem(
            f"a workbook that unpacks to {unpacked / 1e6:.0f} MB",
            f"at most {MAX_UNPACKED_BYTES / 1e6:g} MB",
            "Nothing was read. Copy the sheet with the samples into a workbook of its own.",
        )
        return False
    return True


def _refuse_damage(spot: Spot) -> None:
    spot.problem(
        "no workbook that can be opened",
        "an XLSX file",
        "Open it in a spreadsheet program (remove a password) and save it again as .xlsx or .csv.",
    )


def _open(path: Path, spot: Spot) -> tuple[Workbook, Workbook] | None:
    """The workbook twice: with the values stored behind formulas, and as written."""
    from openpyxl import load_workbook
    from openpyxl.utils.exceptions import InvalidFileException

    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")  # about charts, validations: nothing that is read here
            return load_workbook(path, data_only=True), load_workbook(path, data_only=False)
    except (*_DAMAGE, InvalidFileException):
        _refuse_damage(spot)
        return None


def _choose(book: Workbook, wanted: str, usual: str, spot: Spot) -> str:
    """Name of the sheet to read; empty when a problem was recorded."""
    names = [sheet.title for sheet in book.worksheets]
    wanted = wanted or (usual if usual in names else "")
    if wanted:
        if wanted in names:
            if _is_empty(book[wanted]):
                spot.at(f"sheet {wanted}").problem(
                    "an empty sheet", "a header row and samples", f"Name another: {listed(names)}."
                )
                return ""
            return wanted
        spot.at("sheet").problem(
            f"no sheet {echo(wanted)}", "a sheet of this workbook",
            did_you_mean(wanted, names, what="sheets"),
        )  # fmt: skip
        return ""
    filled = [name for name in names if not _is_empty(book[name])]
    if len(filled) == 1:
        return filled[0]
    if filled:
        spot.problem(
            f"{len(filled)} sheets with content ({listed(filled)})",
            "one sheet, or the name of the one to read",
            f"Name the sheet to read `{usual}`."
            if usual
            else f"Write `sheet: {filled[0]}` under `samples`.",
        )
    else:
        spot.problem("only empty sheets", "a header row and samples", "Check the file.")
    return ""


def _is_empty(sheet: Worksheet) -> bool:
    return all(
        value is None or not str(value).strip()
        for row in sheet.iter_rows(max_row=min(sheet.max_row, 1000), values_only=True)
        for value in row
    )


def _sheet(name: str, stored: Worksheet, written: Worksheet, spot: Spot) -> Sheet:
    merged = _merged_cells(written)
    rows: list[tuple[Cell, ...]] = []
    for values, texts in zip(stored.iter_rows(values_only=True), written.iter_rows(), strict=True):
        number = len(rows) + 1
        cells = [
            _cell(value, text, number, column, is_merged=(number, column) in merged)
            for column, (value, text) in enumerate(zip(values, texts, strict=True), start=1)
        ]
        rows.append(tuple(cells))
    notes = [f"sheet {name}: hidden rows are read like the others"] if _hides_rows(written) else []
    kept = tuple(row for row in rows if any(not cell.is_blank for cell in row))
    return Sheet(file=spot.file, name=name, rows=kept, log=spot.log, notes=tuple(notes))


def _hides_rows(sheet: Worksheet) -> bool:
    return any(dimension.hidden for dimension in sheet.row_dimensions.values())


def _merged_cells(sheet: Worksheet) -> dict[tuple[int, int], str]:
    """Every cell of a merged block, (row, column), with the block's name."""
    return {
        (row, column): f"{column_letters(block.min_col)}{block.min_row}"
        for block in sheet.merged_cells.ranges
        for row in range(block.min_row, block.max_row + 1)
        for column in range(block.min_col, block.max_col + 1)
    }


def _cell(value: Any, written: Any, row: int, column: int, *, is_merged: bool) -> Cell:
    is_formula = isinstance(written.value, str) and written.value.startswith("=")
    trouble = MERGED if is_merged else ""
    if value is None:
        if is_formula:
            trouble = NO_STORED_VALUE
        return Cell("", row, column, trouble=trouble)
    if isinstance(value, datetime.datetime):
        return Cell(_stamp_text(value), row, column, stamp=value, trouble=trouble)
    if isinstance(value, bool):
        return Cell(str(value).upper(), row, column, trouble=trouble)
    if isinstance(value, (int, float)):
        percent = "%" in written.number_format
        text = f"{value:.15g}"
        return Cell(text, row, column, is_number=True, trouble=trouble, is_percent=percent)
    return Cell(_printable(str(value)), row, column, trouble=trouble)


def _stamp_text(value: datetime.datetime) -> str:
    if value.time() == datetime.time():
        return value.date().isoformat()
    return value.strftime("%Y-%m-%d %H:%M")


def _printable(text: str) -> str:
    return "".join(c if c.isprintable() or c in "\n\t" else " " for c in text).strip()

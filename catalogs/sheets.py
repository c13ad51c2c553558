"""Tables of cells from comma-separated files and workbooks, every cell with its place.

Owns the step from a plain file to rows of text, its delimiter found by looking; workbooks are
opened by `catalogs.workbooks`. What the cells mean is the caller's affair.
"""

from __future__ import annotations

import csv
import io
from collections.abc import Iterator, Sequence
from pathlib import Path

from catalogs.cells import Cell, Sheet
from catalogs.file_text import read_text
from catalogs.positions import MAX_CSV_BYTES
from catalogs.problems import ProblemLog, Spot

DELIMITERS = (",", ";", "\t")
_LINES_LOOKED_AT = 40
_WORKBOOKS = (".xlsx", ".xlsm")
_OTHER_WORKBOOKS = (".xls", ".xlsb", ".ods", ".numbers")


def is_workbook(path: Path) -> bool:
    """Tell by its ending whether a file is a workbook, of a kind that can be read or not."""
    return path.suffix.lower() in (*_WORKBOOKS, *_OTHER_WORKBOOKS)


def load_sheet(
    path: Path, log: ProblemLog, *, sheet: str = "", name: str = "", usual: str = ""
) -> Sheet | None:
    """Read one table from a CSV file or an XLSX workbook.

    Parameters
    ----------
    path
        The file; its ending decides how it is read.
    log
        Takes the problems.
    sheet
        Sheet of a workbook; may be left out where only one holds anything.
    name
        How messages call the file; the path when empty.
    usual
        Sheet of a workbook that is read where none is named and it is there.

    Returns
    -------
    Sheet or None
        None when nothing usable could be read; the reasons are in ``log``.
    """
    shown = name or str(path)
    spot = Spot(log=log, file=shown, line=1)
    ending = path.suffix.lower()
    if ending in _OTHER_WORKBOOKS:
        spot.problem(f"a {ending} file", "CSV or XLSX", "Save it as .xlsx or .csv and name that.")
        return None
    if ending in _WORKBOOKS:
        from catalogs.workbooks import load_workbook_sheet

        return load_workbook_sheet(path, spot, sheet, usual)
    if sheet:
        spot.problem(f"sheet {sheet!r} of a plain file", "a workbook", "Leave out `sheet`.")
    return _load_csv_sheet(path, log, shown)


def _load_csv_sheet(path: Path, log: ProblemLog, name: str) -> Sheet | None:
    text = read_text(path, log, max_bytes=MAX_CSV_BYTES, name=name)
    if text is None:
        return None
    spot = Spot(log=log, file=name, line=1)
    delimiter = _delimiter(text)
    rows: list[tuple[Cell, ...]] = []
    for number, parts in _csv_rows(text, delimiter, spot):
        cells = tuple(Cell(part.strip(), number, i) for i, part in enumerate(parts, start=1))
        if any(cell.text for cell in cells) and not cells[0].text.startswith("#"):
            rows.append(cells)
    if not rows:
        spot.problem("no rows", "a header row and samples", "Check that this is the right file.")
        return None
    return Sheet(file=name, name="", rows=tuple(rows), log=log)


def _csv_rows(text: str, delimiter: str, spot: Spot) -> Iterator[tuple[int, list[str]]]:
    """Rows with the line that each begins on; quoted cells may hold line feeds."""
    reader = csv.reader(
        io.StringIO(text, newline=""), delimiter=delimiter, strict=True, skipinitialspace=True
    )
    begin = 1
    while True:
        try:
            parts = next(reader)
        except StopIteration:
            return
        except csv.Error as error:
            spot.at("row", begin).problem(
                f"a row that cannot be read ({error})",
                "cells with a delimiter between them",
                'Close every double quote; write a quote inside a cell as "".',
            )
            begin = reader.line_num + 1
            continue
        yield begin, parts
        begin = reader.line_num + 1


def _delimiter(text: str) -> str:
    """The delimiter that cuts most lines into the same number of cells, more than one."""
    lines = [line for line in text.split("\n") if line.strip() and not line.startswith("#")]
    return max(DELIMITERS, key=lambda mark: _evenness(lines[:_LINES_LOOKED_AT], mark))


def _evenness(lines: Sequence[str], mark: str) -> tuple[float, int]:
    widths = [len(_cut(line, mark)) for line in lines]
    wide = [width for width in widths if width > 1]
    if not wide:
        return 0.0, 0
    usual = max(set(wide), key=lambda width: (wide.count(width), width))
    return wide.count(usual) / len(widths), usual


def _cut(line: str, mark: str) -> list[str]:
    try:
        return next(csv.reader([line], delimiter=mark, skipinitialspace=True), [])
    except csv.Error:
        return line.split(mark)

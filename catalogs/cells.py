"""Cells of a table and their places, whether the table came from a plain file or a workbook."""

from __future__ import annotations

import datetime
from dataclasses import dataclass

from catalogs.problems import ProblemLog, Spot

NO_STORED_VALUE = "a formula without a stored value"
MERGED = "merged with its neighbours"


@dataclass(frozen=True, slots=True)
class Cell:
    """One cell as text.

    ``stamp`` is the date that a workbook stores behind it; ``trouble`` says why the cell holds no
    value that can be read (a formula without a stored value, a cell inside a merged block).
    ``is_percent`` marks a number that its workbook shows times 100 with a per cent sign.
    """

    text: str
    row: int
    column: int
    stamp: datetime.datetime | None = None
    is_number: bool = False
    trouble: str = ""
    is_percent: bool = False

    @property
    def is_blank(self) -> bool:
        """Whether there is nothing in the cell, neither text nor trouble."""
        return not self.text and not self.trouble


@dataclass(frozen=True, slots=True, kw_only=True)
class Sheet:
    """A table: its cells by row, blank rows left out; ``name`` is empty for plain files."""

    file: str
    name: str
    rows: tuple[tuple[Cell, ...], ...]
    log: ProblemLog
    notes: tuple[str, ...] = ()

    def spot(self, cell: Cell, label: str = "") -> Spot:
        """Return the place of a cell: ``Results!C7 (Cu)`` or ``column 3 (Cu)``."""
        where = f"column {cell.column}"
        if self.name:
            where = f"{self.name}!{column_letters(cell.column)}{cell.row}"
        shown = " ".join(label.split())
        field = f"{where} ({shown})" if shown else where
        return Spot(log=self.log, file=self.file, line=cell.row, field=field)

    def whole(self, line: int = 1) -> Spot:
        """Return the place of the whole table."""
        field = f"sheet {self.name}" if self.name else "file"
        return Spot(log=self.log, file=self.file, line=line, field=field)


def column_letters(column: int) -> str:
    """Name a column the way workbooks do.

    Examples
    --------
    >>> column_letters(1), column_letters(28)
    ('A', 'AB')
    """
    letters = ""
    while column > 0:
        column, rest = divmod(column - 1, 26)
        letters = chr(ord("A") + rest) + letters
    return letters

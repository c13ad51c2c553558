"""Plain text for a terminal: numbers as people read them, tables, wrapped paragraphs, colour.

Owns the shape of printed text and its width; knows nothing of plans.
"""

from __future__ import annotations

import textwrap
from collections.abc import Sequence
from dataclasses import dataclass

WIDTH = 100
INDENT = "  "
_GAP = "  "
_LEAST_TEXT_WIDTH = 9
_SMALLEST_SHOWN = 1e-4


@dataclass(frozen=True, slots=True)
class Ink:
    """Colour for a terminal, or none: every method returns its text unchanged when off."""

    on: bool = False

    def _wrap(self, code: str, text: str) -> str:
        return f"\x1b[{code}m{text}\x1b[0m" if self.on and text else text

    def heading(self, text: str) -> str:
        """Text that opens a section."""
        return self._wrap("1", text)

    def good(self, text: str) -> str:
        """Text that says all is well."""
        return self._wrap("32", text)

    def bad(self, text: str) -> str:
        """Text that says something fails."""
        return self._wrap("1;31", text)


PLAIN = Ink()


def number(value: float | None, digits: int = 3) -> str:
    """Write a quantity with this many significant digits, without exponents.

    Examples
    --------
    >>> [number(x) for x in (1234.6, 41.23, 0.04126, 3e-7, 0.0, None)]
    ['1,235', '41.2', '0.0413', '<0.0001', '0', '-']
    """
    if value is None:
        return "-"
    size = abs(value)
    if size == 0.0:
        return "0"
    if size < _SMALLEST_SHOWN:
        return "<0.0001" if value > 0 else ">-0.0001"
    exponent = int(f"{size:.{digits - 1}e}".split("e")[1])
    return f"{value:,.{max(digits - 1 - exponent, 0)}f}"


def given(value: float) -> str:
    """Write a number that a user gave, without zeros that were not there.

    Examples
    --------
    >>> [given(x) for x in (0.5, 20.0, 1500.0, 0.26)]
    ['0.5', '20', '1,500', '0.26']
    """
    return f"{value:,.6g}"


def flow(value: float) -> str:
    """Write a flow to four digits, trailing zeros left out.

    Examples
    --------
    >>> flow(95.5417), flow(180.0)
    ('95.54', '180')
    """
    return given(float(f"{value:.4g}"))


def money(value: float) -> str:
    """Write an amount of money: whole units, two decimals below one.

    Examples
    --------
    >>> [money(x) for x in (48213.4, 812.0, 0.456, 0.0)]
    ['48,213', '812', '0.46', '0']
    """
    return f"{value:,.2f}" if 0.0 < abs(value) < 1.0 else f"{value:,.0f}"


def paragraph(text: str, *, indent: str = INDENT, first: str | None = None) -> list[str]:
    """Wrap a text to the width; ``first`` opens its first line in place of the indent."""
    return textwrap.wrap(
        text,
        WIDTH,
        initial_indent=indent if first is None else first,
        subsequent_indent=indent,
        break_long_words=False,
        break_on_hyphens=False,
    )


def bullets(texts: Sequence[str]) -> list[str]:
    """Wrap each text as a point of a list."""
    return [line for text in texts for line in paragraph(text, indent="    ", first="  - ")]


def table(
    headers: Sequence[str],
    rows: Sequence[Sequence[str]],
    *,
    text_columns: Sequence[int] = (0,),
    last_is_total: bool = False,
) -> list[str]:
    """Lay out rows under headers within the width.

    Parameters
    ----------
    headers
        One per column; a line feed starts a second header line.
    rows
        Cells as text, one sequence per row.
    text_columns
        Columns set to the left, which may wrap; all others are numbers, set to the right.
    last_is_total
        Draw a rule above the last row.

    Returns
    -------
    list of str
        Lines no longer than `WIDTH`, as long as the numbers alone fit into it.
    """
    widths = _column_widths(headers, rows, text_columns)
    lines = _header_lines(headers, widths, text_columns)
    rule = INDENT + _GAP.join("-" * width for width in widths)
    lines.append(rule)
    for index, row in enumerate(rows):
        if last_is_total and index == len(rows) - 1:
            lines.append(rule)
        lines += _row_lines(row, widths, text_columns)
    return lines


def _column_widths(
    headers: Sequence[str], rows: Sequence[Sequence[str]], text_columns: Sequence[int]
) -> list[int]:
    widths = [max(len(part) for part in header.split("\n")) for header in headers]
    for row in rows:
        widths = [max(width, len(cell)) for width, cell in zip(widths, row, strict=True)]
    spare = WIDTH - len(INDENT) - len(_GAP) * (len(widths) - 1) - sum(widths)
    while spare < 0:
        widest = max(text_columns, key=lambda column: widths[column])
        take = min(-spare, widths[widest] - _LEAST_TEXT_WIDTH)
        if take <= 0:
            break
        step = max(1, min(take, 4))
        widths[widest] -= step
        spare += step
    return widths


def _header_lines(
    headers: Sequence[str], widths: Sequence[int], text_columns: Sequence[int]
) -> list[str]:
    parts = [header.split("\n") for header in headers]
    height = max(len(part) for part in parts)
    padded = [[""] * (height - len(part)) + part for part in parts]
    return [
        _line([part[level] for part in padded], widths, text_columns) for level in range(height)
    ]


def _row_lines(row: Sequence[str], widths: Sequence[int], text_columns: Sequence[int]) -> list[str]:
    cells = [
        textwrap.wrap(cell, width) or [""] if column in text_columns else [cell]
        for column, (cell, width) in enumerate(zip(row, widths, strict=True))
    ]
    height = max(len(cell) for cell in cells)
    return [
        _line([cell[level] if level < len(cell) else "" for cell in cells], widths, text_columns)
        for level in range(height)
    ]


def _line(cells: Sequence[str], widths: Sequence[int], text_columns: Sequence[int]) -> str:
    aligned = [
        cell.ljust(width) if column in text_columns else cell.rjust(width)
        for column, (cell, width) in enumerate(zip(cells, widths, strict=True))
    ]
    return (INDENT + _GAP.join(aligned)).rstrip()

"""The sheets of a price book's workbook: offers, examples, columns, reagents.

Owns cells, formats, drop-downs and the look; which rows are written is `optimiser.book_writer`.
The library that writes workbooks loads only here.
"""

from __future__ import annotations

import datetime
import io
import textwrap
from collections.abc import Mapping, Sequence
from itertools import groupby
from typing import TYPE_CHECKING, Any, Literal, cast

from catalogs.entries import parse_number
from catalogs.reagents import load_reagents
from optimiser.book_columns import (
    CHOICE,
    CHOICES,
    DAY,
    FREE_CHOICES,
    NUMBER,
    TEXT,
    BookColumn,
    book_columns,
)

if TYPE_CHECKING:
    from openpyxl.cell.cell import Cell
    from openpyxl.worksheet.worksheet import Worksheet

Row = Mapping[str, str]

GROUP_ROW, TITLE_ROW, KEY_ROW = 1, 2, 3
SPARE_ROWS = 400  # rows below the last offer that have drop-downs
DAY_FORMAT = "yyyy-mm-dd"
_MONEY_DECIMALS = 2
_LINE_HEIGHT_PT = 13.5
_LETTERS_PER_WIDTH = 1.1  # small letters are narrower than the digits that widths count
_FIXED_COLUMNS = 2  # offer and supplier stay in sight

FORMULA_MARKS = ("=", "+", "-", "@", "\t", "\r")

INK, PAPER, GREY, LINE = "1F2A33", "FFFFFF", "6B7780", "D5DBE0"
BANDS = (("2F5D62", "E8F0F0"), ("6B4E2E", "F4EEE6"))  # heading and title of alternate groups

HOW_TO = (
    "One row is one offer. A further row of the same offer carries only tier_from_t, tier_to_t,"
    " price and a note.",
    "An empty cell is a term that the offer does not have. Columns marked * are always needed.",
    "Tonnes are product as delivered. Money is in the site's currency unless `currency` says"
    " otherwise.",
    "The row of names above the offers tells the columns apart: keep it. Columns may be moved, and"
    " those without a * deleted.",
    "Rows that begin with # are skipped. Formulas are read by the value that was saved with them.",
)


def workbook_bytes(
    rows: Sequence[Row], examples: Sequence[Row] = (), comments: Sequence[str] = ()
) -> bytes:
    """Build the workbook of a price book.

    Parameters
    ----------
    rows
        Filled cells by column, one mapping a row.
    examples
        Rows of a sheet that shows what terms look like.
    comments
        Lines kept on the guide's sheet.

    Returns
    -------
    bytes
        An XLSX file.
    """
    from openpyxl import Workbook

    book = Workbook()
    book.properties.creator = "dosewright"
    for sheet in book.worksheets:
        book.remove(sheet)
    _fill_offers(book.create_sheet("offers"), rows, SPARE_ROWS)
    _fill_guide(book.create_sheet("guide"), comments)
    _fill_columns(book.create_sheet("columns"))
    _fill_offers(book.create_sheet("examples"), examples, 0)
    _fill_reagents(book.create_sheet("reagents"))
    stream = io.BytesIO()
    book.save(stream)
    return stream.getvalue()


def _fill_offers(sheet: Worksheet, rows: Sequence[Row], spare: int) -> None:
    from openpyxl.utils import get_column_letter

    columns = tuple(book_columns().values())
    _head(sheet, columns)
    last = KEY_ROW + len(rows) + spare
    for position, column in enumerate(columns, start=1):
        texts = [row.get(column.key, "") for row in rows]
        pattern = _format(texts, column)
        for number, text in enumerate(texts, start=KEY_ROW + 1):
            _put(_at(sheet, number, position), text, column, pattern)
        if column.kind == DAY:
            for number in range(KEY_ROW + 1 + len(rows), last + 1):
                _at(sheet, number, position).number_format = DAY_FORMAT
        letter = get_column_letter(position)
        sheet.column_dimensions[letter].width = max(column.width, 0.8 * len(column.key) + 2)
        if spare:
            _validate(sheet, f"{letter}{KEY_ROW + 1}:{letter}{last}", column)
    sheet.freeze_panes = f"{get_column_letter(_FIXED_COLUMNS + 1)}{KEY_ROW + 1}"
    _print_setup(sheet, f"1:{KEY_ROW}", f"A:{get_column_letter(_FIXED_COLUMNS)}", pages_wide=5)


def _head(sheet: Worksheet, columns: Sequence[BookColumn]) -> None:
    """Three rows: groups, titles with units, and the names that the reader goes by."""
    from openpyxl.styles import Alignment

    position = 1
    for k, (title, group) in enumerate(groupby(columns, key=lambda column: column.group)):
        dark, pale = BANDS[k % len(BANDS)]
        _text(_at(sheet, GROUP_ROW, position), title)
        for column in group:
            band, name, key = (_at(sheet, row, position) for row in (1, 2, 3))
            band.fill, name.fill, key.fill = _solid(dark), _solid(pale), _solid(pale)
            band.font = _font(bold=True, color=PAPER)
            needed = " *" if column.key in NEEDED else ""
            _text(name, f"{column.title}{needed}" + (f"\n[{column.unit}]" if column.unit else ""))
            name.font = _font(bold=True, color=INK)
            name.alignment = Alignment(
                wrap_text=True, vertical="top", horizontal=_side(column), indent=1
            )
            _text(key, column.key)
            key.font = _font(size=8, italic=True, color=GREY)
            key.alignment = Alignment(horizontal=_side(column), indent=1)
            position += 1
    sheet.row_dimensions[TITLE_ROW].height = 46


NEEDED = frozenset({
    "offer", "supplier", "reagent", "product", "form", "strength_percent", "density_kg_per_l",
    "price", "price_per", "price_for",
})  # fmt: skip
"""Columns that every offer fills (the strength may be in g/L instead)."""


def _side(column: BookColumn) -> Literal["left", "right"]:
    return "right" if column.kind in (NUMBER, DAY) else "left"


def _put(cell: Cell, text: str, column: BookColumn, pattern: str) -> None:
    """Write a value as what it is: a number, a date, or a text that is no formula."""
    from openpyxl.styles import Alignment

    number = parse_number(text) if column.kind == NUMBER else None
    cell.font = _font(color=INK)
    cell.alignment = Alignment(horizontal=_side(column), indent=1)
    cell.number_format = pattern
    if number is not None:
        cell.value = int(number) if number.is_integer() and abs(number) < 1e15 else number
    elif column.kind == DAY and (day := _day(text)) is not None:
        cell.value = day
    elif text:
        _text(cell, text)


def _day(text: str) -> datetime.date | None:
    try:
        return datetime.date.fromisoformat(text)
    except ValueError:
        return None


def _format(texts: Sequence[str], column: BookColumn) -> str:
    """How a column shows its values; numbers with as many decimals as the longest needs."""
    if column.kind != NUMBER:
        return {DAY: DAY_FORMAT, TEXT: "@"}.get(column.kind, "General")
    values = [value for text in texts if (value := parse_number(text)) is not None]
    if not values:
        return "General"
    most = column.decimals
    has = max(next((n for n in range(most) if round(v, n) == v), most) for v in values)
    if "money" in column.unit and has:
        has = max(has, _MONEY_DECIMALS)
    return "#,##0" + ("." + "0" * has if has else "")


def _at(sheet: Worksheet, row: int, column: int) -> Cell:
    return cast("Cell", sheet.cell(row, column))


def _text(cell: Cell, text: str) -> None:
    """Write a text as a text, whatever it begins with."""
    cell.value = text
    cell.data_type = "s"
    if text.startswith(FORMULA_MARKS):
        cell.quotePrefix = True  # stays a text when somebody edits the cell


def _font(**more: Any) -> Any:
    from openpyxl.styles import Font

    return Font(name="Calibri", **{"size": 10, **more})


def _solid(colour: str) -> Any:
    from openpyxl.styles import PatternFill

    return PatternFill("solid", start_color=colour, end_color=colour)


def _validate(sheet: Worksheet, cells: str, column: BookColumn) -> None:
    from openpyxl.worksheet.datavalidation import DataValidation

    if column.kind == CHOICE:
        count = len(load_reagents())
        words = CHOICES.get(column.key)
        source = f"reagents!$A$2:$A${count + 1}" if words is None else f'"{",".join(words)}"'
        rule = DataValidation(type="list", formula1=source, allow_blank=True)
        rule.errorStyle = "warning" if column.key in FREE_CHOICES else "stop"
        rule.error = "Choose one of the list."
    elif column.kind == NUMBER:
        rule = DataValidation(type="decimal", operator="greaterThanOrEqual", formula1="0")
        rule.error = f"{column.head}: a number of 0 or more, without its unit."
    elif column.kind == DAY:
        rule = DataValidation(type="date", operator="greaterThan", formula1="36526")
        rule.error = "A date, such as 2027-06-30."
    else:
        return
    rule.errorTitle = column.title[:30]
    rule.showErrorMessage = True
    rule.add(cells)
    sheet.add_data_validation(rule)


def _fill_guide(sheet: Worksheet, comments: Sequence[str]) -> None:
    """How the workbook works, and the comments that the book had."""
    rows = [(line,) for line in HOW_TO]
    rows += [("Comments of the book:",)] * bool(comments) + [(line,) for line in comments]
    _plain_table(sheet, ("How this workbook is filled",), rows, (110,))


def _fill_columns(sheet: Worksheet) -> None:
    """What each column means and how it is costed."""
    titles = ("Column", "Title", "Unit", "What to write", "Meaning", "How it is costed")
    rows = [
        (
            column.key + (" *" if column.key in NEEDED else ""), column.title, column.unit,
            _written_as(column), column.meaning, column.costing,
        )
        for column in book_columns().values()
    ]  # fmt: skip
    _plain_table(sheet, titles, rows, (28, 18, 21, 36, 60, 52))


def _written_as(column: BookColumn) -> str:
    words = CHOICES.get(column.key)
    if column.key == "reagent":
        return "a name of the sheet reagents"
    if words is not None:
        return ("such as " if column.key in FREE_CHOICES else "") + ", ".join(words)
    return {NUMBER: "a number", DAY: "a date", TEXT: "text"}[column.kind]


def _fill_reagents(sheet: Worksheet) -> None:
    rows = [(key, reagent.name, reagent.formula) for key, reagent in load_reagents().items()]
    _plain_table(sheet, ("reagent", "Name", "Formula"), rows, (28, 36, 24))


def _plain_table(
    sheet: Worksheet, titles: Sequence[str], rows: Sequence[Sequence[str]], widths: Sequence[int]
) -> None:
    from openpyxl.styles import Alignment, Border, Side
    from openpyxl.utils import get_column_letter

    for position, (title, width) in enumerate(zip(titles, widths, strict=True), start=1):
        head = _at(sheet, 1, position)
        _text(head, title)
        head.font, head.fill = _font(bold=True, color=PAPER), _solid(BANDS[0][0])
        sheet.column_dimensions[get_column_letter(position)].width = width
    for number, row in enumerate(rows, start=2):
        for position, text in enumerate(row, start=1):
            cell = _at(sheet, number, position)
            _text(cell, text)
            cell.font = _font(color=INK)
            cell.alignment = Alignment(wrap_text=True, vertical="top")
            cell.border = Border(bottom=Side("thin", color=LINE))
        lines = max(
            len(textwrap.wrap(text, int(_LETTERS_PER_WIDTH * width))) or 1
            for text, width in zip(row, widths, strict=True)
        )
        sheet.row_dimensions[number].height = _LINE_HEIGHT_PT * lines + 2
    sheet.freeze_panes = "B2"
    _print_setup(sheet, "1:1", "", pages_wide=1)


def _print_setup(sheet: Worksheet, rows: str, columns: str, *, pages_wide: int) -> None:
    from openpyxl.worksheet.properties import PageSetupProperties

    sheet.page_setup.orientation = "landscape"
    sheet.page_setup.paperSize = 9  # A4
    sheet.print_title_rows = rows
    if columns:
        sheet.print_title_cols = columns
    sheet.sheet_properties.pageSetUpPr = PageSetupProperties(fitToPage=True)
    sheet.page_setup.fitToWidth, sheet.page_setup.fitToHeight = pages_wide, 0

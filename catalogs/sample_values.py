"""Cells of laboratory tables as numbers: reporting limits, blanks, and what is no number.

Owns the reading of one value and the gathering of problems by column, so that a slip that runs
through a column is told once. Units and names are `catalogs.sample_words`.
"""

from __future__ import annotations

import re
import unicodedata
from dataclasses import dataclass

from catalogs.cells import NO_STORED_VALUE, Cell, Sheet
from catalogs.entries import number_remedy, parse_number
from catalogs.problems import echo
from catalogs.sample_words import fold, read_unit

_SHOWN_PER_COLUMN = 3
_BLANKS = {
    "", "-", "--", "---", ".", "n/a", "na", "n.a.", "nm", "n.m.", "ns", "n.s.", "nt", "null",
    "none", "blank", "not measured", "not analysed", "not analyzed", "not tested", "not sampled",
    "no sample", "no data", "not available", "not applicable", "pending",
}  # fmt: skip
_NOT_DETECTED = {
    "nd", "n.d.", "n.d", "bdl", "bld", "bql", "blq", "not detected", "non detect", "non-detect",
    "below detection", "below detection limit", "below reporting limit", "u", "<rl", "<lor",
    "<loq", "<lod", "<mdl", "<dl", "< rl", "< lor", "< loq", "< lod", "< mdl", "< dl", "<",
}  # fmt: skip
_VALUE = re.compile(
    r"(?P<sign><=|>=|<|>|~|\N{LESS-THAN OR EQUAL TO})?\s*"
    r"(?P<number>[-+]?(?:[0-9][0-9 .,']*|\.[0-9]+)(?:[eE][-+]?[0-9]+)?)\s*(?P<rest>.*)"
)
_GROUPED = re.compile(r"[-+]?[0-9]{1,3}(,[0-9]{3})+(\.[0-9]+)?")
_POINTED = re.compile(r"[-+]?[0-9]{1,3}(\.[0-9]{3}){2,}|[-+]?[0-9]{1,3}(\.[0-9]{3})+,[0-9]+")
EXPECTED = "a number, or < and the reporting limit"


@dataclass(frozen=True, slots=True, kw_only=True)
class Value:
    """One number as written; with ``is_below`` it is the reporting limit."""

    number: float
    is_below: bool
    unit: str
    as_written: str


@dataclass(frozen=True, slots=True)
class _Finding:
    cell: Cell
    label: str
    found: str
    expected: str
    remedy: str


class Findings:
    """Problems of cells: the first of a kind in a column are shown, the rest are counted."""

    def __init__(self, sheet: Sheet) -> None:
        self.sheet = sheet
        self._by_kind: dict[tuple[int, str], list[_Finding]] = {}

    def add(self, cell: Cell, label: str, found: str, expected: str, remedy: str) -> None:
        """Record that a cell holds something else than it should."""
        kind = (cell.column, expected)
        finding = _Finding(cell, label, found, expected, remedy)
        self._by_kind.setdefault(kind, []).append(finding)

    def report(self) -> None:
        """Hand the problems to the log of the sheet."""
        for findings in self._by_kind.values():
            for finding in findings[:_SHOWN_PER_COLUMN]:
                self.sheet.spot(finding.cell, finding.label).problem(
                    finding.found, finding.expected, finding.remedy
                )
            rest = findings[_SHOWN_PER_COLUMN:]
            if rest:
                first = rest[0]
                self.sheet.spot(first.cell, first.label).problem(
                    f"{len(rest)} more such cells of this column, down to row {rest[-1].cell.row}",
                    first.expected,
                    "Correct the whole column.",
                )
        self._by_kind.clear()


def is_blank(cell: Cell) -> bool:
    """Tell whether a cell stands for no result."""
    return not cell.trouble and fold(cell.text) in _BLANKS


def read_value(
    cell: Cell, label: str, findings: Findings, *, limit: float | None = None, sign: str = ""
) -> Value | None:
    """Read a result.

    Parameters
    ----------
    cell, label
        The cell and the name of its column.
    findings
        Takes what is wrong.
    limit
        Reporting limit of the column, which stands in for "not detected".
    sign
        A sign that stands in a cell of its own, such as ``<``.

    Returns
    -------
    Value or None
        None where the cell is blank or a problem was recorded.
    """
    if cell.trouble:
        findings.add(cell, label, cell.trouble, "a stored value", _trouble_remedy(cell))
        return None
    if is_blank(cell):
        return None
    text = " ".join(unicodedata.normalize("NFKC", cell.text).split())
    if text.lower() in _NOT_DETECTED:
        return _not_detected(cell, label, findings, limit)
    match = _VALUE.fullmatch(text)
    if match is None:
        findings.add(cell, label, echo(cell.text), EXPECTED, _word_remedy(text))
        return None
    return _checked(match, cell, label, findings, sign)


def _trouble_remedy(cell: Cell) -> str:
    if cell.trouble == NO_STORED_VALUE:
        return "Open the workbook in a spreadsheet program and save it, or write the number."
    return "Unmerge the cells and write the value into each of them."


def _word_remedy(text: str) -> str:
    if text.startswith("#"):
        return "The formula of this cell fails: correct it or write the number."
    return "Write the number; leave the cell empty where nothing was measured."


def _not_detected(cell: Cell, label: str, findings: Findings, limit: float | None) -> Value | None:
    if limit is not None:
        return Value(number=limit, is_below=True, unit="", as_written=f"<{limit:g}")
    findings.add(
        cell, label, echo(cell.text), "< and the reporting limit",
        "Write the laboratory's reporting limit, such as <0.05, or add it as a row or column.",
    )  # fmt: skip
    return None


def _checked(
    match: re.Match[str], cell: Cell, label: str, findings: Findings, sign: str
) -> Value | None:
    number, mark = match["number"].strip(), match["sign"] or sign
    unit, left = read_unit(match["rest"])
    value = parse_number(number)
    problem: tuple[str, str] | None = None
    if value is None:
        problem = EXPECTED, _number_remedy(number)
    elif left.strip(" ()[]"):
        problem = (
            EXPECTED, f"Write the number alone; {echo(match['rest'])} belongs into a remark column."
        )  # fmt: skip
    elif mark in (">", ">=", "~"):
        problem = "a measured value", "Give the result of the diluted sample, or leave it empty."
    elif value < 0.0 or (mark and value == 0.0):
        problem = (
            "a number of 0 or more",
            "A result below the reporting limit is written as < and that limit, such as <0.05.",
        )
    if problem is not None or value is None:
        expected, remedy = problem or (EXPECTED, "")
        findings.add(cell, label, echo(cell.text), expected, remedy)
        return None
    return Value(number=value, is_below=bool(mark), unit=unit, as_written=f"{mark}{number}")


def _number_remedy(number: str) -> str:
    if _GROUPED.fullmatch(number):
        plain = number.replace(",", "")
        if number.count(",") == 1 and "." not in number:
            return (
                f"Write {plain} where the comma parts thousands, {number.replace(',', '.')} where "
                "it is a decimal comma."
            )
        return f"Write it without thousands separators: {plain}."
    if _POINTED.fullmatch(number):
        plain = number.replace(".", "").replace(",", ".")
        return f"Write it without thousands separators: {plain}."
    if " " in number or "'" in number:
        plain = number.replace(" ", "").replace("'", "").replace(",", ".")
        return f"Write it without thousands separators (some spaces cannot be seen): {plain}."
    return number_remedy(number)

"""Workbooks of samples: sheets, stored values, merged cells, and files that are no workbook."""

from __future__ import annotations

import datetime
import zipfile
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import openpyxl
import pytest

from catalogs.problems import ProblemLog
from catalogs.sample_file import SampleFile, SampleFileOptions, load_samples

HEADER = ["Date", "Flow (m3/d)", "pH", "Cu mg/L", "Zn mg/L"]
ROW = [datetime.datetime(2025, 3, 1), 120, 2.8, 31.5, "<0.05"]


@pytest.fixture(autouse=True)
def _folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)


def book(rows: Sequence[Sequence[Any]], *, merge: str = "", sheets: Sequence[str] = ()) -> Path:
    """Write a workbook with these rows on its first sheet."""
    work = openpyxl.Workbook()
    sheet = work.active
    assert sheet is not None
    sheet.title = "Results"
    for row in rows:
        sheet.append(list(row))
    for name in sheets:
        work.create_sheet(name).append(["Date", "Cu mg/L"])
    if merge:
        sheet.merge_cells(merge)
    work.save("lab.xlsx")
    return Path("lab.xlsx")


def read(path: Path, sheet: str = "") -> tuple[SampleFile | None, list[str]]:
    log = ProblemLog()
    found = load_samples(path, log, SampleFileOptions(sheet=sheet))
    return found, [f"{p.field}: {p.found} / {p.expected}" for p in log.problems]


def test_dates_numbers_and_texts_of_cells_are_read() -> None:
    found, told = read(book([["Invented report 7"], HEADER, ROW, [None] * 5]))
    assert told == []
    assert found is not None
    (record,) = found.records
    assert record.day == datetime.date(2025, 3, 1)
    assert (record.flow_m3_per_d, record.ph) == (120.0, 2.8)
    assert record.dissolved["Cu"].value == 31.5
    assert record.dissolved["Zn"].is_below
    assert found.spots[0].field == "Results!A3"


def test_a_formula_without_a_stored_value_is_told_by_its_cell() -> None:
    _, told = read(book([HEADER, [*ROW[:3], "=15+16", 4]]))
    assert told == ["Results!D2 (Cu mg/L): a formula without a stored value / a stored value"]


def test_merged_values_are_refused_and_merged_titles_are_not() -> None:
    _, told = read(book([HEADER, ROW, ROW[:1]], merge="D2:D3"))
    assert told[:2] == [
        "Results!D2 (Cu mg/L): merged with its neighbours / a stored value",
        "Results!D3 (Cu mg/L): merged with its neighbours / a stored value",
    ]
    _, told = read(book([["Report", None], HEADER, ROW], merge="A1:C1"))
    assert told == []


def test_a_header_merged_over_two_columns_is_refused() -> None:
    _, told = read(book([["Date", "Cu mg/L", None], [ROW[0], 1, 2]], merge="B1:C1"))
    assert told[0] == "Results!C1: merged with its neighbours / a name for every column"


def test_one_of_several_sheets_has_to_be_named() -> None:
    path = book([HEADER, ROW], sheets=["Old"])
    assert read(path)[1] == [
        "file: 2 sheets with content (Results, Old) / one sheet, or the name of the one to read"
    ]
    assert read(path, "Results")[1] == []
    assert read(path, "Result")[1] == ["sheet: no sheet 'Result' / a sheet of this workbook"]


def test_empty_sheets_are_said() -> None:
    assert read(book([]))[1] == ["file: only empty sheets / a header row and samples"]
    assert read(book([]), "Results")[1] == [
        "sheet Results: an empty sheet / a header row and samples"
    ]


def test_a_file_that_is_no_workbook_is_refused() -> None:
    Path("lab.xlsx").write_text("Date,Cu\n")
    assert read(Path("lab.xlsx"))[1] == ["file: no workbook that can be opened / an XLSX file"]
    with zipfile.ZipFile("lab.xlsx", "w") as archive:
        archive.writestr("xl/workbook.xml", "<broken")
    assert read(Path("lab.xlsx"))[1] == ["file: no workbook that can be opened / an XLSX file"]


def test_a_workbook_that_unpacks_to_too_much_is_not_opened() -> None:
    with zipfile.ZipFile("lab.xlsx", "w", zipfile.ZIP_DEFLATED) as archive:
        archive.writestr("xl/worksheets/sheet1.xml", b"0" * 201_000_000)
    found, told = read(Path("lab.xlsx"))
    assert found is None
    assert told == ["file: a workbook that unpacks to 201 MB / at most 200 MB"]


def test_workbooks_load_only_where_one_is_read() -> None:
    import subprocess
    import sys

    root = Path(__file__).resolve().parents[2]
    code = "import sys, catalogs.sample_file; print('openpyxl' in sys.modules)"
    done = subprocess.run(
        [sys.executable, "-c", code], cwd=root, capture_output=True, text=True, check=True
    )
    assert done.stdout.strip() == "False"

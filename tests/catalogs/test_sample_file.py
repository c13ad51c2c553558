"""Files of dated samples: what laboratories send is read, what is wrong is told all at once."""

from __future__ import annotations

import datetime
from pathlib import Path

import pytest

from catalogs.problems import ProblemLog
from catalogs.sample_file import SampleFile, SampleFileOptions, load_samples

Problems = list[tuple[int, str, str, str]]


@pytest.fixture(autouse=True)
def _folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)


def read(text: str, options: SampleFileOptions | None = None) -> SampleFile:
    """Records of a sound file."""
    Path("lab.csv").write_text(text, encoding="utf-8")
    log = ProblemLog()
    found = load_samples(Path("lab.csv"), log, options)
    assert [str(problem) for problem in log.problems] == []
    assert found is not None
    return found


def problems(text: str, options: SampleFileOptions | None = None) -> Problems:
    """Line, field, found and expected of every problem."""
    Path("lab.csv").write_text(text, encoding="utf-8")
    log = ProblemLog()
    load_samples(Path("lab.csv"), log, options)
    return [(p.line, p.field, p.found, p.expected) for p in log.problems]


WIDE = """\
Mill Race Laboratory (invented),,,,,,,
Date,Flow (L/s),pH,Copper (dissolved) ug/L,Cu total ug/L,Zn mg/L,NH4-N mg/L,Alkalinity (meq/L)
2025-03-01 08:00,2,6.8,3000,3100,12,3,1.2
2025-03-02,2.5,2.7,<50,60,<0.05,n/a,
"""


def test_one_row_a_sample_is_read_with_units_bases_and_reporting_limits() -> None:
    first, second = read(WIDE).records
    assert (first.day, first.time) == (datetime.date(2025, 3, 1), "08:00")
    assert first.flow_m3_per_d == pytest.approx(172.8)
    assert first.ph == 6.8
    assert first.dissolved["Cu"].value == pytest.approx(3.0)
    assert first.total["Cu"].value == pytest.approx(3.1)
    assert first.dissolved["Zn"] is first.total["Zn"]
    assert first.dissolved["NH4"].value == pytest.approx(3.0 * 18.039 / 14.007, rel=1e-4)
    assert first.alkalinity_mg_per_l_as_caco3 is not None
    assert first.alkalinity_mg_per_l_as_caco3.value == pytest.approx(60.05, abs=0.01)
    assert second.dissolved["Cu"].is_below
    assert second.dissolved["Cu"].value == pytest.approx(0.05)
    assert not second.total["Cu"].is_below
    assert "NH4" not in second.dissolved
    assert second.alkalinity_mg_per_l_as_caco3 is None


def test_rows_above_the_header_are_left_out_and_said() -> None:
    assert read(WIDE).notes == ("1 row(s) above the header were not read",)


def test_one_row_a_result_is_read() -> None:
    found = read(
        "Sampled;Sample ID;Parameter;Qualifier;Result;Unit;Fraction;RL\n"
        "2025-03-01;A;Copper;;30;mg/L;dissolved;0.1\n"
        "2025-03-01;A;Copper;;31000;ug/L;total;0.1\n"
        "2025-03-01;A;Cd;<;0.02;mg/L;total;0.02\n"
        "2025-03-01;A;Pb;;ND;mg/L;total;0.01\n"
        "2025-03-01;A;pH;;2.8;;;\n"
        "2025-03-01;A;Molybdenum;;0.2;mg/L;total;\n"
        "2025-03-01;A;Ammonia;;2;mg/L as N;;\n"
        "2025-03-02;A;Cu;;1;mmol/L;;\n"
    )
    first, second = found.records
    assert first.dissolved["Cu"].value == 30.0
    assert first.total["Cu"].value == pytest.approx(31.0)
    assert first.total["Cd"].is_below
    assert (first.total["Pb"].value, first.total["Pb"].is_below) == (0.01, True)
    assert first.ph == 2.8
    assert dict(first.other) == {"Molybdenum": "0.2"}
    assert first.dissolved["NH4"].value == pytest.approx(2.5757, rel=1e-3)
    assert second.dissolved["Cu"].value == pytest.approx(63.546)
    assert dict(found.unknown) == {"Molybdenum": ""}


def test_units_may_stand_in_a_row_of_their_own_or_in_the_cells() -> None:
    by_row = read("Date,Flow,Cu,Ca\n,m3/d,ug/L,mg/L as CaCO3\n2025-03-01,50,400,100\n").records[0]
    assert by_row.flow_m3_per_d == 50.0
    assert by_row.dissolved["Cu"].value == pytest.approx(0.4)
    assert by_row.dissolved["Ca"].value == pytest.approx(40.05, abs=0.01)
    in_cells = read("Date,Cu\n2025-03-01,<0.4 mg/L\n2025-03-02,0.5 mg/L\n").records[0]
    assert in_cells.dissolved["Cu"].value == pytest.approx(0.4)
    everywhere = read("Date,Cu\n2025-03-01,400\n", SampleFileOptions(unit="ug/L")).records[0]
    assert everywhere.dissolved["Cu"].value == pytest.approx(0.4)


def test_a_row_of_reporting_limits_stands_in_for_not_detected() -> None:
    found = read("Date,Cu mg/L\nReporting limit,0.02\n2025-03-01,ND\n2025-03-02,1\n")
    assert found.records[0].dissolved["Cu"].is_below
    assert found.records[0].dissolved["Cu"].value == 0.02


def test_chromium_and_iron_are_split_into_their_states() -> None:
    found = read(
        "Date,Cr mg/L,Cr(VI) mg/L,Fe mg/L,Fe(II) mg/L\n"
        "2025-03-01,18,<0.02,5,3\n2025-03-02,18,0.5,5,\n"
    )
    first, second = found.records
    assert first.dissolved["Cr(III)"].value == 18.0
    assert second.dissolved["Cr(III)"].value == pytest.approx(17.5)
    assert first.dissolved["Fe(III)"].value == pytest.approx(2.0)
    assert "Fe(III)" not in second.dissolved
    assert "Fe" not in first.dissolved
    assert set(found.notes) == {
        "Cr(III): Cr less Cr(VI)", "Fe(III): Fe less Fe(II)", "Fe: left out where Fe(II) is blank",
    }  # fmt: skip


def test_the_site_may_say_what_a_column_means() -> None:
    options = SampleFileOptions(columns={"Kupfer": "Cu dissolved", "Fe": "Fe(III)", "X": "ignore"})
    first = read("Date,Kupfer mg/L,Fe mg/L,X\n2025-03-01,3,4,5\n", options).records[0]
    assert first.dissolved["Cu"].value == 3.0
    assert first.dissolved["Fe(III)"].value == 4.0
    assert dict(first.other) == {}


def test_unknown_columns_are_listed_and_kept() -> None:
    found = read("Date,Cu mg/L,As mg/L,COD,S mg/L\n2025-03-01,3,0.1,120,40\n")
    assert list(found.unknown) == ["As mg/L", "COD", "S mg/L"]
    assert "sulfide" in found.unknown["S mg/L"]
    assert found.records[0].other == {"As mg/L": "0.1", "COD": "120", "S mg/L": "40"}


def test_every_problem_of_a_file_is_told_at_once() -> None:
    found = problems(
        "Date,Flow m3/d,pH,Cu mg/L,Zn mg/L,Ni dissolved mg/L,Ni total mg/L,Pb,Cd ug/L\n"
        '2025-02-30,"1,200",2.8,"0,5",12,1,2,1 mg/L,5\n'
        "2025-03-02,1200,28,-3,1 200,3,2,4 ug/L,6\n"
        "03/04/2025,1200,2.8,1,\N{NO-BREAK SPACE}1\N{NO-BREAK SPACE}200,1,2,1 mg/L,ND\n"
        ",1200,2.8,>50,1,1,2,1 mg/L,1\n"
        "2025-03-04,1200,2.8,5 J,1.234.567,1,2,1 mg/L,1\n"
        "2025-03-04,1200,2.8,abc,1,1,2,1 mg/L,#DIV/0!\n"
    )
    number = "a number, or < and the reporting limit"
    assert sorted(found) == sorted([
        (2, "column 1 (Date)", "'2025-02-30'", "a day that exists"),
        (2, "column 2 (Flow m3/d)", "'1,200'", number),
        (2, "column 4 (Cu mg/L)", "'0,5'", number),
        (3, "column 3 (pH)", "28", "a ph from 0 to 14"),
        (3, "column 4 (Cu mg/L)", "'-3'", "a number of 0 or more"),
        (3, "column 5 (Zn mg/L)", "'1 200'", number),
        (3, "column 6 (Ni dissolved mg/L)", "dissolved 3 mg/L above total 2 mg/L",
         "dissolved at most total"),
        (4, "column 1 (Date)", "'03/04/2025'", "a date that can be read one way only"),
        (4, "column 5 (Zn mg/L)", "'1\\xa0200'", number),
        (4, "column 9 (Cd ug/L)", "'ND'", "< and the reporting limit"),
        (5, "column 1 (Date)", "no date", "a date such as 2025-05-04 or 4 May 2025"),
        (5, "column 4 (Cu mg/L)", "'>50'", "a measured value"),
        (6, "column 4 (Cu mg/L)", "'5 J'", number),
        (6, "column 5 (Zn mg/L)", "'1.234.567'", number),
        (7, "column 1 (date)", "a second sample of 2025-03-04", "each sample once"),
        (7, "column 4 (Cu mg/L)", "'abc'", number),
        (7, "column 9 (Cd ug/L)", "'#DIV/0!'", number),
        (3, "column 8 (Pb)", "4 ug/L", "one unit in the whole column (mg/L)"),
    ])  # fmt: skip


@pytest.mark.parametrize(
    ("cell", "remedy"),
    [
        ('"0,5"', "Use a decimal point, no unit and no thousands separator: 0.5"),
        ('"1,200"', "Write 1200 where the comma parts thousands, 1.200 where it is a decimal "
         "comma."),
        ('"1,200.5"', "Write it without thousands separators: 1200.5."),
        ('"1.234,5"', "Write it without thousands separators: 1234.5."),
        ("1'200", "Write it without thousands separators (some spaces cannot be seen): 1200."),
        ("-0.1", "A result below the reporting limit is written as < and that limit, such as "
         "<0.05."),
        ("5 J", "Write the number alone; 'J' belongs into a remark column."),
    ],
)  # fmt: skip
def test_each_slip_of_a_number_has_its_own_remedy(cell: str, remedy: str) -> None:
    Path("lab.csv").write_text(f"Date,Cu mg/L\n2025-03-01,{cell}\n", encoding="utf-8")
    log = ProblemLog()
    load_samples(Path("lab.csv"), log)
    assert [problem.remedy for problem in log.problems] == [remedy]


def test_a_slip_that_runs_through_a_column_is_told_once() -> None:
    rows = "".join(f"2025-03-{day:02d};0,{day}\n" for day in range(1, 29))
    found = problems("Date;Cu mg/L\n" + rows)
    assert [line for line, *_ in found] == [2, 3, 4, 5]
    assert found[3][2] == "25 more such cells of this column, down to row 29"


@pytest.mark.parametrize(
    ("text", "found", "expected"),
    [
        ("", "no rows", "a header row and samples"),
        ("Date,Cu mg/L\n", "no samples", "rows beneath the header"),
        ("a,b\n1,2\n", "no header row among 2 rows",
         "a row that names a date column and at least one analyte"),
        ("Date,Cu mg/L,Cu mg/L\n2025-03-01,1,2\n", "a second column for Cu", "one column each"),
        ("Date,Cu mg/L,Copper total mg/L\n2025-03-01,1,2\n", "Cu beside Cu total",
         "names that tell dissolved from total"),
        ("Date,Fe mg/L\n2025-03-01,1\n", "Fe without its oxidation state", "Fe(II) or Fe(III)"),
        ("Date,Cr mg/L,Cr(VI) mg/L\n2025-03-01,1,2\n", "Cr 1 mg/L below Cr(VI) 2 mg/L",
         "Cr(VI) at most Cr"),
        ("Date,Cu\n2025-03-01,1\n", "Cu without a unit", "one of the units: "),
        ("Date,Cu ppm\n2025-03-01,1\n", "Cu in ppm", "a concentration per litre"),
        ("Date,Flow,Cu mg/L\n2025-03-01,1,1\n", "a flow without a unit", "one of the units of"),
        ("Date,Ammonia mg/L\n2025-03-01,1\n", "'Ammonia mg/L'", "a name with its basis"),
        ("Date,Cu mg/L as N\n2025-03-01,1\n", "Cu in mg/L as N", "a mass as one of: Cu"),
        ("Date,pH,Cu mg/L,Alkalinity mg/L\n2025-03-01,3,1,50\n", "50 mg/L at pH 3",
         "no alkalinity below pH 4.3"),
        ("Date,Temp C,Cu mg/L\n2025-03-01,70,1\n", "70 degC", "a temperature from 0 to 60 C"),
        ("Date,pH,Cu mg/L\n2025-03-01,<3,1\n", "<3", "a measured value"),
        ("Date,Cu mg/L\n2025-03-01,1,2\n", "3 cells", "2 cells, as in the header"),
        ("Date,Cu mg/L\n2025-03-01,2000000\n", "2000000 mg/L", "at most 1 kg/L"),
        ("Date,Cu g/L\n2025-03-01,1\n2024-03-01,\"1\n", "a row that cannot be read",
         "cells with a delimiter"),
    ],
)  # fmt: skip
def test_what_is_wrong_with_a_table_is_said(text: str, found: str, expected: str) -> None:
    (told,) = problems(text)
    assert told[2].startswith(found)
    assert told[3].startswith(expected)


def test_results_of_one_analyte_twice_in_a_sample_are_refused() -> None:
    found = problems("Date,Parameter,Result,Unit\n2025-03-01,Cu,1,mg/L\n2025-03-01,Copper,2,mg/L\n")
    assert [(line, text) for line, _, text, _ in found] == [
        (3, "a second result for Cu of 2025-03-01")
    ]


def test_scatter_of_the_analysis_may_be_taken_as_equal() -> None:
    text = "Date,Cu dissolved mg/L,Cu total mg/L\n2025-03-01,1.05,1\n"
    assert problems(text)[0][3] == "dissolved at most total"
    found = read(text, SampleFileOptions(dissolved_above_total_percent=10.0))
    assert found.records[0].total["Cu"].value == 1.05
    assert len(found.notes) == 1


def test_a_sample_after_today_is_refused() -> None:
    options = SampleFileOptions(latest=datetime.date(2025, 3, 1))
    found = problems("Date,Cu mg/L\n2025-03-02,1\n", options)
    assert found[0][3] == "a day between 1970 and 2025-03-01"


@pytest.mark.parametrize("name", ["lab.xls", "lab.ods"])
def test_other_spreadsheets_are_to_be_saved_as_xlsx(name: str) -> None:
    Path(name).write_bytes(b"x")
    log = ProblemLog()
    assert load_samples(Path(name), log) is None
    assert log.problems[0].remedy == "Save it as .xlsx or .csv and name that."

"""Values by declared kind: numbers, dates, names, lists, blocks, and their messages in full."""

from __future__ import annotations

import math
from pathlib import Path

import pytest

from catalogs.entries import (
    FRACTION,
    NON_NEGATIVE,
    PH,
    POSITIVE,
    Entry,
    Range,
    parse_number,
)
from catalogs.positions import load_yaml
from catalogs.problems import ProblemLog


def entry_of(tmp_path: Path, text: str) -> tuple[Entry, ProblemLog]:
    path = tmp_path / "a.yaml"
    path.write_text(text)
    log = ProblemLog()
    table = load_yaml(path, log, name="a.yaml")
    assert table is not None
    return Entry.top(table, "a.yaml", log), log


def said(log: ProblemLog) -> list[str]:
    return [str(problem) for problem in log.problems]


@pytest.mark.parametrize(
    ("text", "value"),
    [("12", 12.0), ("12.5", 12.5), ("1e-3", 1e-3), ("1E3", 1e3), ("+.5", 0.5), ("010", 10.0),
     ("12.", 12.0), ("-4", -4.0)],
)  # fmt: skip
def test_decimal_numbers_are_read(tmp_path: Path, text: str, value: float) -> None:
    entry, log = entry_of(tmp_path, f"a: {text}\n")
    assert entry.number("a") == value
    assert log.problems == ()


DIGITS = "Write digits with a decimal point, such as 12, 12.5 or 1e-3."


@pytest.mark.parametrize(
    ("text", "found", "remedy"),
    [
        ("410,50", "'410,50'",
         "Use a decimal point, no unit and no thousands separator: 410.50"),
        ("twelve", "'twelve'", DIGITS),
        (".nan", "'.nan'", DIGITS),
        ("NaN", "'NaN'", DIGITS),
        ("inf", "'inf'", DIGITS),
        ("-.inf", "'-.inf'", DIGITS),
        ("1_000", "'1_000'", DIGITS),
        ("0x1F", "'0x1F'", DIGITS),
        ("true", "'true'", DIGITS),
        ("120 m3/d", "'120 m3/d'", "Write the number alone; its unit is in the name of the field."),
        ("1e999", "'1e999'", "Write a number that is not that large."),
        ("'12'", "the text '12'", "Remove the quotes."),
        ("[1, 2]", "a list", "Write one number after the colon."),
        ("{b: 1}", "a block of keys", "Write one number after the colon."),
        ("~", "nothing", DIGITS),
    ],
)  # fmt: skip
def test_what_is_no_number_is_refused(tmp_path: Path, text: str, found: str, remedy: str) -> None:
    entry, log = entry_of(tmp_path, f"x: 1\na: {text}\n")
    assert math.isnan(entry.number("a", NON_NEGATIVE))
    assert said(log) == [
        f"a.yaml:2: a: found {found}, expected a number of 0 or more\n    {remedy}"
    ]


@pytest.mark.parametrize(
    ("allowed", "text", "expected"),
    [
        (NON_NEGATIVE, "-1", "a number of 0 or more"),
        (POSITIVE, "0", "a number above 0"),
        (PH, "15", "a number from 0 to 14"),
        (FRACTION, "30", "a number from 0 to 1"),
        (Range(high=5.0), "6", "a number at most 5"),
    ],
)
def test_numbers_outside_their_range_are_refused(
    tmp_path: Path, allowed: Range, text: str, expected: str
) -> None:
    entry, log = entry_of(tmp_path, f"a: {text}\n")
    assert math.isnan(entry.number("a", allowed))
    assert said(log) == [
        f"a.yaml:1: a: found {text}, expected {expected}\n"
        "    Correct the number; the field's unit is in its name."
    ]


def test_whole_numbers_only_where_they_are_asked_for(tmp_path: Path) -> None:
    entry, log = entry_of(tmp_path, "a: 3\nb: 2.5\n")
    assert entry.count_or("a", 1, low=1, high=9) == 3
    assert entry.count_or("b", 1, low=1, high=9) == 1
    assert entry.count_or("c", 7, low=1, high=9) == 7
    assert said(log) == [
        "a.yaml:2: b: found 2.5, expected a whole number from 1 to 9\n    Write no decimals."
    ]


@pytest.mark.parametrize("text", ["yes", "no", "on", "True", "'true'", "1", "[true]"])
def test_only_true_and_false_are_truth_values(tmp_path: Path, text: str) -> None:
    entry, log = entry_of(tmp_path, f"a: true\nb: {text}\n")
    assert entry.flag_or("a", default=False) is True
    assert entry.flag_or("c", default=True) is True
    assert entry.flag_or("b", default=False) is False
    assert [(p.line, p.expected) for p in log.problems] == [(2, "true or false")]


def test_dates_are_read_only_where_a_date_is_declared(tmp_path: Path) -> None:
    entry, log = entry_of(tmp_path, "a: 2026-01-05\nb: 2026-02-30\nc: 5.1.2026\nd: '2026-01-05'\n")
    assert entry.day_or("a") == "2026-01-05"
    assert entry.text("a") == "2026-01-05"
    assert entry.day_or("d") == "2026-01-05"
    assert entry.day_or("b") == ""
    assert entry.day_or("c") == ""
    assert said(log) == [
        "a.yaml:2: b: found '2026-02-30', expected a date\n"
        "    Write year-month-day, such as 2026-05-04.",
        "a.yaml:3: c: found '5.1.2026', expected a date\n"
        "    Write year-month-day, such as 2026-05-04.",
    ]


def test_unknown_names_come_with_the_nearest_known_one(tmp_path: Path) -> None:
    entry, log = entry_of(tmp_path, "a: [lime, soda_ahs, lime]\nb: tons\n")
    assert entry.names("a", ["lime", "soda_ash"], "reagents") == ("lime",)
    assert entry.choice("b", ["t", "L"], "units") == ""
    assert said(log) == [
        "a.yaml:1: a[2]: found 'soda_ahs', expected one of the reagents\n"
        "    Did you mean `soda_ash`? The reagents known here: lime, soda_ash.",
        "a.yaml:1: a[3]: found 'lime' twice, expected each name once\n    Delete one of them.",
        "a.yaml:2: b: found 'tons', expected one of the units\n    The units known here: L, t.",
    ]


def test_missing_and_unknown_keys_are_reported_once_each(tmp_path: Path) -> None:
    entry, log = entry_of(tmp_path, "flow_m3_per_day: 3\ncolour: red\nname: x\n")
    entry.number("flow_m3_per_d", POSITIVE)
    entry.number("tss_mg_per_l", NON_NEGATIVE)
    entry.text("name")
    entry.finish()
    keys = "The keys known here: flow_m3_per_d, name, tss_mg_per_l."
    assert said(log) == [
        "a.yaml:1: flow_m3_per_day: found an unknown key, expected only known keys\n"
        f"    Did you mean `flow_m3_per_d`? {keys}",
        f"a.yaml:2: colour: found an unknown key, expected only known keys\n    {keys}",
        "a.yaml:1: tss_mg_per_l: found nothing, expected a number of 0 or more\n"
        "    Add `tss_mg_per_l` here.",
    ]


def test_blocks_lists_and_texts_are_told_apart(tmp_path: Path) -> None:
    entry, log = entry_of(tmp_path, "a: 1\nb: {x: 1}\nc: [1]\nd:\n  - {y: 2}\n  - z\n")
    assert entry.block("a") is None
    assert entry.text("b") == ""
    assert entry.names("b", ["x"]) == ()
    assert [block.number("y") for block in entry.blocks("d")] == [2.0]
    assert said(log) == [
        "a.yaml:1: a: found '1', expected a block of keys\n"
        "    Write `key: value` pairs beneath this key.",
        "a.yaml:2: b: found a block of keys, expected text\n"
        "    Write the text after the colon, on one line.",
        "a.yaml:2: b: found a block of keys, expected a list\n    Write a list: [first, second].",
        "a.yaml:6: d[2]: found 'z', expected a block of keys\n"
        "    Write `key: value` pairs beneath this key.",
    ]


def test_numbers_by_name_check_both_name_and_number(tmp_path: Path) -> None:
    entry, log = entry_of(tmp_path, "a:\n  Cu: 1\n  Zz: 2\n  Ni: -1\n")
    values = entry.numbers("a", ["Cu", "Ni"], "metals")
    assert values["Cu"] == 1.0
    assert entry.numbers("b", ["Cu"], "metals") == {}
    assert [(p.line, p.field) for p in log.problems] == [(3, "a.Zz"), (4, "a.Ni")]


def test_a_number_is_a_whole_text_or_none() -> None:
    assert parse_number("1e-3") == 0.001
    assert [parse_number(t) for t in ("", "1e", "1 2", "--1", "1.2.3", "1\n", "\u0661")] == [
        None
    ] * 7

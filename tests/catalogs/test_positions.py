"""Strict YAML and CSV: what is accepted, what is refused, and the messages in full."""

from __future__ import annotations

import os
import time
from pathlib import Path

import pytest

from catalogs.positions import (
    MAX_YAML_BYTES,
    Items,
    Scalar,
    Table,
    load_csv,
    load_yaml,
)
from catalogs.problems import InputFileError, Problem, ProblemLog, closest


def read_yaml(tmp_path: Path, text: str | bytes) -> tuple[Table | None, list[str]]:
    path = tmp_path / "a.yaml"
    path.write_bytes(text if isinstance(text, bytes) else text.encode())
    log = ProblemLog()
    table = load_yaml(path, log, name="a.yaml")
    return table, [str(problem) for problem in log.problems]


def read_csv(
    tmp_path: Path, text: str, header: tuple[str, ...] = ("a", "b")
) -> tuple[tuple[Table, ...], list[str]]:
    path = tmp_path / "a.csv"
    path.write_text(text)
    log = ProblemLog()
    rows = load_csv(path, header, log, name="a.csv")
    return rows, [str(problem) for problem in log.problems]


def test_values_stay_text_and_keep_their_line(tmp_path: Path) -> None:
    table, problems = read_yaml(tmp_path, "# c\na: 1e-3\nb:\n  c: no\n  d: ['12:30', 2026-01-05]\n")
    assert problems == []
    assert table is not None
    assert table.nodes["a"] == Scalar("1e-3", 2)
    inner = table.nodes["b"]
    assert isinstance(inner, Table)
    assert inner.nodes["c"] == Scalar("no", 4)
    assert inner.nodes["d"] == Items(
        (Scalar("12:30", 5, plain=False), Scalar("2026-01-05", 5)), line=5
    )
    assert inner.lines == {"c": 4, "d": 5}


def test_a_byte_order_mark_and_windows_line_ends_are_accepted(tmp_path: Path) -> None:
    table, problems = read_yaml(tmp_path, b"\xef\xbb\xbfa: 1\r\nb: 2\r\n")
    assert problems == []
    assert table is not None
    assert table.lines == {"a": 1, "b": 2}


def test_every_repeated_key_is_reported_with_both_lines(tmp_path: Path) -> None:
    table, problems = read_yaml(tmp_path, "a: 1\nb: 2\na: 3\nc: {x: 1, x: 2}\n")
    assert problems == [
        "a.yaml:4: c.x: found the key 'x' twice in one block, expected each key once\n"
        "    It already stands in line 4: delete one of them.",
        "a.yaml:3: a: found the key 'a' twice in one block, expected each key once\n"
        "    It already stands in line 1: delete one of them.",
    ]
    assert table is not None
    assert table.nodes["a"] == Scalar("1", 1)


@pytest.mark.parametrize("key", ["12", "1.5", "true", "null", "~", "1e3", ".inf", "[a, b]"])
def test_keys_that_are_not_names_are_refused(tmp_path: Path, key: str) -> None:
    _, problems = read_yaml(tmp_path, f"a: 1\n? {key}\n: 2\n")
    assert len(problems) == 1
    assert problems[0].startswith("a.yaml:2: file: found ")
    assert "as a key, expected a name as a key" in problems[0]


def test_a_decimal_comma_inside_braces_is_explained(tmp_path: Path) -> None:
    _, problems = read_yaml(tmp_path, "a: {daily: 0,5}\n")
    assert problems == [
        "a.yaml:1: a: found '5' as a key, expected a name as a key\n"
        "    If a decimal comma was meant, write a decimal point: 0.5, not 0,5."
    ]


BOMB = "a: &a [x, x, x, x, x, x, x, x, x]\n" + "".join(
    f"{new}: &{new} [{', '.join(['*' + old] * 9)}]\n"
    for old, new in zip("abcdefgh", "bcdefghi", strict=True)
)


def test_an_alias_bomb_is_refused_at_its_first_anchor(tmp_path: Path) -> None:
    start = time.perf_counter()
    table, problems = read_yaml(tmp_path, BOMB)
    assert time.perf_counter() - start < 1.0
    assert table is None
    assert problems == [
        "a.yaml:1: file: found &a, expected no anchors and aliases\n"
        "    Write the value out where it is needed; text that begins with & or * needs quotes."
    ]


@pytest.mark.parametrize(
    ("text", "line", "found"),
    [
        ("a: 1\nb: *a\n", 2, "*a"),
        (
            "a: !!python/object:os.system x\n",
            1,
            "the tag tag:yaml.org,2002:python/object:os.system",
        ),
        ("a: 1\n---\nb: 2\n", 2, "a second document (---)"),
        ("a: " + "[" * 2000, 1, "more than 40 levels of nesting"),
        ("a:\n" + "".join(" " * i + "- \n" for i in range(1, 60)), 41, "more than 40 levels"),
        ("a: 1\n\tb: 2\n", 2, "a tab character"),
        ("a: 1\nb:\t2\n", 2, "a tab character"),
        ("a: 1\nb: \x07\n", 2, "the control character 0x07"),
        ("", 1, "nothing in the file"),
        ("# only a comment\n", 1, "nothing in the file"),
        ("- a\n- b\n", 1, "a list"),
        ("just text\n", 1, "'just text'"),
        ("a: 1\nb: c: d\n", 2, "text that is no YAML (mapping values are not allowed in this"),
        ("a: 1\nb: [1, 2\nc: 3\n", 3, "text that is no YAML ("),
        ("a: 'x\n", 2, "text that is no YAML (found unexpected end of stream)"),
    ],
)
def test_what_is_no_plain_block_of_keys_is_refused_with_its_line(
    tmp_path: Path, text: str, line: int, found: str
) -> None:
    table, problems = read_yaml(tmp_path, text)
    assert table is None
    assert len(problems) == 1
    assert problems[0].startswith(f"a.yaml:{line}: ")
    assert f": found {found}" in problems[0]


def test_forty_levels_are_read_and_one_more_is_refused(tmp_path: Path) -> None:
    table, problems = read_yaml(tmp_path, "a: " + "[" * 39 + "]" * 39)
    assert problems == []
    assert table is not None
    table, problems = read_yaml(tmp_path, "a: " + "[" * 40 + "]" * 40)
    assert table is None
    assert problems == [
        "a.yaml:1: file: found more than 40 levels of nesting, expected a flat file\n"
        "    Remove the extra brackets."
    ]


def test_other_encodings_are_refused_with_the_line(tmp_path: Path) -> None:
    _, problems = read_yaml(tmp_path, "a: 1\nb: caf\xe9\n".encode("latin-1"))
    assert problems == [
        "a.yaml:2: encoding: found the byte 0xe9, expected text in UTF-8\n"
        "    Save the file with the encoding UTF-8."
    ]


def test_a_huge_file_is_refused_before_it_is_read(tmp_path: Path) -> None:
    path = tmp_path / "big.yaml"
    with path.open("wb") as stream:
        stream.truncate(100_000_000)
    log = ProblemLog()
    start = time.perf_counter()
    assert load_yaml(path, log, name="big.yaml") is None
    assert load_csv(path, ("a",), log, name="big.csv") == ()
    assert time.perf_counter() - start < 0.1
    assert [str(p) for p in log.problems] == [
        "big.yaml:1: file: found a file of 100.0 MB, expected at most 1 MB\n"
        "    Nothing was read. Check that this is the right file, then remove what is not needed.",
        "big.csv:1: file: found a file of 100.0 MB, expected at most 20 MB\n"
        "    Nothing was read. Check that this is the right file, then remove what is not needed.",
    ]


def test_a_file_of_exactly_the_largest_size_is_read(tmp_path: Path) -> None:
    head = b"a: 1\n#"
    table, problems = read_yaml(tmp_path, head + b"x" * (MAX_YAML_BYTES - len(head)))
    assert problems == []
    assert table is not None
    _, problems = read_yaml(tmp_path, head + b"x" * (MAX_YAML_BYTES - len(head) + 1))
    assert len(problems) == 1


def test_a_directory_a_missing_file_and_a_pipe_are_refused(tmp_path: Path) -> None:
    (tmp_path / "site.yaml").write_text("a: 1\n")
    pipe = tmp_path / "pipe"
    os.mkfifo(pipe)
    log = ProblemLog()
    for path in (tmp_path, tmp_path / "none.yaml", pipe):
        assert load_yaml(path, log, name="x") is None
    assert [str(p) for p in log.problems] == [
        "x:1: file: found a directory, expected a file\n    Name a file in it: site.yaml.",
        "x:1: file: found no readable file (No such file or directory), expected a file\n"
        "    Check the path and its rights.",
        "x:1: file: found a device or pipe, expected a file\n"
        "    Save the data to a file and name that.",
    ]


def test_csv_rows_keep_their_lines_past_comments_and_empty_rows(tmp_path: Path) -> None:
    rows, problems = read_csv(tmp_path, '# c\nb,a\n\n1, "x, y" \n,\n#z\n 2 ,\n')
    assert problems == []
    assert [(row.line, row.nodes) for row in rows] == [
        (4, {"b": Scalar("1", 4), "a": Scalar("x, y", 4)}),
        (7, {"b": Scalar("2", 7), "a": Scalar("", 7)}),
    ]


def test_a_decimal_comma_in_a_row_is_a_cell_too_many(tmp_path: Path) -> None:
    rows, problems = read_csv(tmp_path, "a,b\n1,410,50\n2,3\n4\n")
    assert [row.line for row in rows] == [3]
    remedy = (
        "    Write decimals with a point (410.50) and put text that holds a comma in double quotes."
    )
    assert problems == [
        f"a.csv:2: row: found 3 cells, expected 2 cells, as in the header\n{remedy}",
        f"a.csv:4: row: found 1 cells, expected 2 cells, as in the header\n{remedy}",
    ]


def test_every_wrong_column_is_reported(tmp_path: Path) -> None:
    rows, problems = read_csv(
        tmp_path, "offer,suplier,offer\n1,2,3\n", ("offer", "supplier", "price")
    )
    assert rows == ()
    wanted = "Write as first line: offer,supplier,price"
    assert problems == [
        f"a.csv:1: header: found the column 'offer' twice, expected each column once\n    {wanted}",
        "a.csv:1: header: found the column 'suplier', expected only known columns\n"
        f"    Did you mean `supplier`? {wanted}",
        "a.csv:1: header: found no column 'supplier', expected the column 'supplier'\n"
        f"    {wanted}",
        f"a.csv:1: header: found no column 'price', expected the column 'price'\n    {wanted}",
    ]


def test_other_separators_open_quotes_and_empty_tables_are_refused(tmp_path: Path) -> None:
    assert read_csv(tmp_path, "a;b\n1;2\n")[1] == [
        "a.csv:1: header: found 'a;b', expected columns separated by commas\n"
        "    Save the table as comma-separated."
    ]
    assert read_csv(tmp_path, 'a,b\n1,"x\n2,3\n')[1] == [
        "a.csv:2: row: found a row that cannot be read (unexpected end of data), expected cells"
        " separated by commas\n    Close every double quote on its line; write a quote inside a"
        ' cell as "".'
    ]
    assert read_csv(tmp_path, "# nothing\n")[1] == [
        "a.csv:1: header: found no rows, expected a header line\n    Write as first line: a,b"
    ]


def test_problems_are_printed_sorted_by_line_within_their_file() -> None:
    def problem(file: str, line: int) -> Problem:
        return Problem(file=file, line=line, field="f", found="x", expected="y", remedy="z")

    error = InputFileError([problem("s", 9), problem("o", 1), problem("s", 2), problem("s", 10)])
    assert [(p.file, p.line) for p in error.problems] == [("s", 2), ("s", 9), ("s", 10), ("o", 1)]
    assert str(error).splitlines()[:2] == ["s:2: f: found x, expected y", "    z"]


def test_the_nearest_name_is_suggested_only_when_it_is_near() -> None:
    assert closest("puritty", ["purity_fraction", "price"]) == "purity_fraction"
    assert closest("CU", ["Cu", "Cd"]) == "Cu"
    assert closest("xyz", ["purity", "price"]) is None

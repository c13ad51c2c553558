"""Strict YAML and CSV with positions: every value keeps the line it stands on.

Owns the node types and the two readers; the guards on the file itself are `catalogs.file_text`,
turning values into numbers, dates and names is `catalogs.entries`.
"""

from __future__ import annotations

import csv
import re
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

import yaml

from catalogs.file_text import read_text
from catalogs.problems import ProblemLog, Spot, closest, echo

MAX_YAML_BYTES = 1_000_000
MAX_CSV_BYTES = 20_000_000
MAX_DEPTH = 40

_LOADER = getattr(yaml, "CSafeLoader", yaml.SafeLoader)
_NOT_A_NAME = re.compile(
    r"[-+]?[0-9][0-9_]*(\.[0-9_]*)?([eE][-+]?[0-9]+)?|[-+]?\.[0-9]+"
    r"|true|false|null|~|[-+]?\.inf|\.nan|",
    re.IGNORECASE,
)


@dataclass(frozen=True, slots=True)
class Scalar:
    """A single value as written; ``plain`` tells that no quotes stood around it."""

    text: str
    line: int
    plain: bool = True


@dataclass(frozen=True, slots=True)
class Items:
    """A list of values."""

    nodes: tuple[Node, ...]
    line: int


@dataclass(frozen=True, slots=True)
class Table:
    """A block of keys; ``lines`` holds the line of each key."""

    nodes: Mapping[str, Node]
    lines: Mapping[str, int]
    line: int


Node = Scalar | Items | Table


def load_yaml(path: Path, log: ProblemLog, *, name: str = "") -> Table | None:
    """Read a YAML file whose top level is a block of keys.

    Refused: more than 1 MB, other encodings than UTF-8, tabs, anchors and aliases, tags, more than
    40 levels, several documents, repeated keys and keys that are not names. Values stay text.

    Returns
    -------
    Table or None
        None when nothing usable could be read; the reasons are in ``log``. Repeated and nameless
        keys are recorded and left out, so that reading can go on and find further problems.
    """
    text = read_text(path, log, max_bytes=MAX_YAML_BYTES, name=name)
    if text is None:
        return None
    spot = Spot(log=log, file=name or str(path), line=1)
    if _has_tabs(text, spot):
        return None
    node = _compose(text, spot)
    if isinstance(node, Table) or node is None:
        return node
    spot.at("", node.line).problem(
        describe(node), "a block of `key: value` lines", "Start from `dosewright new DIR`."
    )
    return None


def _has_tabs(text: str, spot: Spot) -> bool:
    found = False
    for number, line in enumerate(text.split("\n"), start=1):
        if "\t" in line and not line.lstrip().startswith("#"):
            spot.at("", number).problem(
                "a tab character", "spaces", "Indent and separate with spaces; delete the tab."
            )
            found = True
    return found


class _Refused(Exception):  # noqa: N818 - leaves the event loop, never the module
    """Parsing stops here; the problem is already recorded."""


def _compose(text: str, spot: Spot) -> Node | None:
    try:
        return _build(yaml.parse(text, Loader=_LOADER), spot)
    except _Refused:
        return None
    except yaml.YAMLError as error:
        mark = getattr(error, "problem_mark", None) or getattr(error, "context_mark", None)
        what = getattr(error, "problem", None) or "characters that YAML does not allow"
        place = spot.at("", mark.line + 1 if mark else 1)
        if "nesting depth" in what:
            _refuse_depth(place)
            return None
        place.problem(
            f"text that is no YAML ({what})",
            "`key: value` lines with even indentation",
            "Look at this line and the one above: a missing space after a colon, a bracket or quote"
            " left open, or text with ': ' or '#' that needs quotes.",
        )
        return None


@dataclass(slots=True)
class _Open:
    """A list or block that is still being read."""

    line: int
    is_table: bool
    nodes: list[Node]


def _build(events: Iterator[yaml.Event], spot: Spot) -> Node | None:
    """Build the tree from parser events, without recursion and without following aliases."""
    stack: list[_Open] = []
    root: Node | None = None
    for event in events:
        line = event.start_mark.line + 1 if event.start_mark else spot.line
        _check_event(event, spot.at("", line), len(stack), has_root=root is not None)
        node: Node | None = None
        if isinstance(event, yaml.CollectionStartEvent):
            stack.append(_Open(line, isinstance(event, yaml.MappingStartEvent), []))
        elif isinstance(event, yaml.ScalarEvent):
            node = Scalar(event.value, line, plain=bool(event.implicit[0]))
        elif isinstance(event, yaml.CollectionEndEvent):
            part = stack.pop()
            node = _closed(part, spot.at(_path(stack), part.line))
        if node is not None and stack:
            stack[-1].nodes.append(node)
        elif node is not None:
            root = node
    if root is None:
        spot.problem(
            "nothing in the file", "`key: value` lines", "Start from `dosewright new DIR`."
        )
    return root


def _path(stack: list[_Open]) -> str:
    """Say where in the tree the parser stands: ``limits.own[2]``."""
    path = ""
    for part in stack:
        if not part.is_table:
            path += f"[{len(part.nodes) + 1}]"
        elif len(part.nodes) % 2:
            key = part.nodes[-1]
            path += f".{key.text}" if isinstance(key, Scalar) else ".?"
    return path.lstrip(".")


def _check_event(event: yaml.Event, spot: Spot, depth: int, *, has_root: bool) -> None:
    if isinstance(event, yaml.AliasEvent) or getattr(event, "anchor", None):
        mark = "*" if isinstance(event, yaml.AliasEvent) else "&"
        spot.problem(
            f"{mark}{getattr(event, 'anchor', '')}",
            "no anchors and aliases",
            "Write the value out where it is needed; text that begins with & or * needs quotes.",
        )
        raise _Refused
    if getattr(event, "tag", None):
        spot.problem(
            f"the tag {getattr(event, 'tag', '')}", "no tags", "Delete the text that begins with !."
        )
        raise _Refused
    if isinstance(event, yaml.CollectionStartEvent) and depth >= MAX_DEPTH:
        _refuse_depth(spot)
        raise _Refused
    if isinstance(event, yaml.DocumentStartEvent) and has_root:
        spot.problem("a second document (---)", "one document", "Keep one site per file.")
        raise _Refused


def _refuse_depth(spot: Spot) -> None:
    spot.problem(
        f"more than {MAX_DEPTH} levels of nesting", "a flat file", "Remove the extra brackets."
    )


def _closed(part: _Open, spot: Spot) -> Node:
    if not part.is_table:
        return Items(tuple(part.nodes), part.line)
    nodes: dict[str, Node] = {}
    lines: dict[str, int] = {}
    for key, value in zip(part.nodes[::2], part.nodes[1::2], strict=True):
        place = Spot(log=spot.log, file=spot.file, line=key.line, field=spot.field)
        if not isinstance(key, Scalar) or (key.plain and _NOT_A_NAME.fullmatch(key.text)):
            _refuse_key(key, value, place)
        elif key.text in nodes:
            place.at(key.text).problem(
                f"the key {echo(key.text)} twice in one block",
                "each key once",
                f"It already stands in line {lines[key.text]}: delete one of them.",
            )
        else:
            nodes[key.text] = value
            lines[key.text] = key.line
    return Table(nodes, lines, part.line)


def _refuse_key(key: Node, value: Node, spot: Spot) -> None:
    decimal = isinstance(key, Scalar) and key.text.isdigit() and value == Scalar("", value.line)
    spot.problem(
        f"{describe(key)} as a key",
        "a name as a key",
        "If a decimal comma was meant, write a decimal point: 0.5, not 0,5."
        if decimal
        else "Write a name before the colon, or put quotes around it.",
    )


def describe(node: Node) -> str:
    """Say in words what a node is, for a message."""
    if isinstance(node, Table):
        return "a block of keys"
    if isinstance(node, Items):
        return "a list"
    if node.plain and node.text in ("", "~", "null", "Null", "NULL"):
        return "nothing"
    return echo(node.text)


def load_csv(
    path: Path, header: Sequence[str], log: ProblemLog, *, name: str = "",
    optional: Sequence[str] = (),
) -> tuple[Table, ...]:  # fmt: skip
    """Read a comma-separated file, one row a line, as blocks of column and cell.

    Lines that start with ``#`` are comments and empty rows are skipped. The first other line must
    name every column of ``header`` once, those of ``optional`` at most once, and no others, in any
    order.

    Returns
    -------
    tuple of Table
        The rows that have a cell for every column; problems are recorded in ``log``.
    """
    text = read_text(path, log, max_bytes=MAX_CSV_BYTES, name=name)
    if text is None:
        return ()
    spot = Spot(log=log, file=name or str(path), line=1)
    columns: list[str] | None = None
    rows: list[Table] = []
    for number, cells in _csv_lines(text, spot):
        if columns is None:
            columns = cells
            if not _is_header(columns, header, optional, spot.at("header", number)):
                return ()
        elif len(cells) != len(columns):
            _refuse_width(cells, columns, spot.at("row", number))
        else:
            rows.append(_row(columns, cells, number))
    if columns is None:
        spot.at("header").problem(
            "no rows", "a header line", f"Write as first line: {','.join(header)}"
        )
    return tuple(rows)


def _row(columns: list[str], cells: list[str], line: int) -> Table:
    nodes = {column: Scalar(cell, line) for column, cell in zip(columns, cells, strict=True)}
    return Table(nodes, dict.fromkeys(columns, line), line)


def _csv_lines(text: str, spot: Spot) -> Iterator[tuple[int, list[str]]]:
    for number, line in enumerate(text.split("\n"), start=1):
        if not line.strip() or line.lstrip().startswith("#"):
            continue
        try:
            cells = [
                cell.strip()
                for cell in next(csv.reader([line.strip()], strict=True, skipinitialspace=True))
            ]
        except csv.Error as error:
            spot.at("row", number).problem(
                f"a row that cannot be read ({error})",
                "cells separated by commas",
                'Close every double quote on its line; write a quote inside a cell as "".',
            )
            continue
        if any(cells):
            yield number, cells


def _is_header(
    columns: list[str], header: Sequence[str], optional: Sequence[str], spot: Spot
) -> bool:
    if len(columns) == 1 and any(mark in columns[0] for mark in ";\t|"):
        spot.problem(
            echo(columns[0]), "columns separated by commas", "Save the table as comma-separated."
        )
        return False
    wanted = f"Write as first line: {','.join(header)}"
    sound = True
    for column in dict.fromkeys(columns):
        if columns.count(column) > 1:
            spot.problem(f"the column {echo(column)} twice", "each column once", wanted)
            sound = False
        elif column not in header and column not in optional:
            near = closest(column, header) or closest(column, optional)
            hint = f"Did you mean `{near}`? {wanted}" if near else wanted
            spot.problem(f"the column {echo(column)}", "only known columns", hint)
            sound = False
    for column in header:
        if column not in columns:
            spot.problem(f"no column {column!r}", f"the column {column!r}", wanted)
            sound = False
    return sound


def _refuse_width(cells: list[str], columns: list[str], spot: Spot) -> None:
    spot.problem(
        f"{len(cells)} cells",
        f"{len(columns)} cells, as in the header",
        "Write decimals with a point (410.50) and put text that holds a comma in double quotes.",
    )

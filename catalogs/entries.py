"""Reading values by declared kind from positioned nodes: numbers, texts, dates, lists, blocks.

Owns the conversions and their messages; what the values mean is the caller's affair. A bad value is
recorded and replaced by a harmless one (nan, an empty text), so that reading goes on.
"""

from __future__ import annotations

import datetime
import math
import re
from collections.abc import Collection, Iterator, Mapping
from dataclasses import dataclass
from typing import TypeVar

from catalogs.positions import Items, Node, Scalar, Table, describe
from catalogs.problems import ProblemLog, Spot, did_you_mean, echo

_NUMBER = re.compile(r"[-+]?(\.[0-9]+|[0-9]+(\.[0-9]*)?)([eE][-+]?[0-9]+)?")
_COMMA_NUMBER = re.compile(r"([-+]?[0-9]+),([0-9]+)")
_NUMBER_AND_UNIT = re.compile(r"[-+]?[0-9.]+(?:[eE][-+]?[0-9]+)?\s*([^0-9\s.,_x][^,]*)")

T = TypeVar("T")


@dataclass(frozen=True, slots=True, kw_only=True)
class Range:
    """The numbers that a field takes, able to describe itself."""

    low: float | None = None
    above: float | None = None
    high: float | None = None

    def holds(self, value: float) -> bool:
        """Tell whether a number lies in the range."""
        return (
            (self.low is None or value >= self.low)
            and (self.above is None or value > self.above)
            and (self.high is None or value <= self.high)
        )

    def describe(self) -> str:
        """Say the range in words, for a message.

        Examples
        --------
        >>> Range(above=0.0, high=1.0).describe()
        'a number above 0 and at most 1'
        """
        if self.low is not None and self.high is not None:
            return f"a number from {self.low:g} to {self.high:g}"
        parts = [
            f"of {self.low:g} or more" if self.low is not None else "",
            f"above {self.above:g}" if self.above is not None else "",
            f"at most {self.high:g}" if self.high is not None else "",
        ]
        said = " and ".join(part for part in parts if part)
        return f"a number {said}".strip()


ANY_NUMBER = Range()
NON_NEGATIVE = Range(low=0.0)
POSITIVE = Range(above=0.0)
PH = Range(low=0.0, high=14.0)
FRACTION = Range(low=0.0, high=1.0)
POSITIVE_FRACTION = Range(above=0.0, high=1.0)


def parse_number(text: str) -> float | None:
    """Read a decimal number such as ``12``, ``12.5`` or ``1e-3``; None when it is none.

    Examples
    --------
    >>> parse_number("1e-3"), parse_number("410,50"), parse_number(".inf")
    (0.001, None, None)
    """
    return float(text) if _NUMBER.fullmatch(text) else None


def number_remedy(text: str) -> str:
    """Say how to write what was probably meant by a text that is no number."""
    comma = _COMMA_NUMBER.fullmatch(text)
    if comma:
        return (
            "Use a decimal point, no unit and no thousands separator: "
            f"{comma.group(1)}.{comma.group(2)}"
        )
    unit = _NUMBER_AND_UNIT.fullmatch(text)
    if unit and not text.lower().lstrip("+-.").startswith(("nan", "inf")):
        return "Write the number alone; its unit is in the name of the field."
    return "Write digits with a decimal point, such as 12, 12.5 or 1e-3."


def to_number(node: Node, spot: Spot, allowed: Range = ANY_NUMBER) -> float:
    """Read a number; nan when a problem was recorded."""
    expected = allowed.describe()
    if not isinstance(node, Scalar):
        spot.problem(describe(node), expected, "Write one number after the colon.")
        return math.nan
    if not node.plain:
        spot.problem(f"the text {echo(node.text)}", expected, "Remove the quotes.")
        return math.nan
    value = parse_number(node.text)
    if value is None:
        spot.problem(describe(node), expected, number_remedy(node.text))
        return math.nan
    if not math.isfinite(value):
        spot.problem(describe(node), expected, "Write a number that is not that large.")
        return math.nan
    if not allowed.holds(value):
        spot.problem(node.text, expected, "Correct the number; the field's unit is in its name.")
        return math.nan
    return value


def to_text(node: Node, spot: Spot, expected: str = "text") -> str:
    """Read a text of at least one character; empty when a problem was recorded."""
    if not isinstance(node, Scalar) or not node.text.strip() or describe(node) == "nothing":
        spot.problem(describe(node), expected, "Write the text after the colon, on one line.")
        return ""
    return node.text.strip()


def to_flag(node: Node, spot: Spot) -> bool:
    """Read ``true`` or ``false``; False when a problem was recorded."""
    if isinstance(node, Scalar) and node.plain and node.text in ("true", "false"):
        return node.text == "true"
    spot.problem(describe(node), "true or false", "Write true or false, without quotes.")
    return False


def to_day(node: Node, spot: Spot) -> str:
    """Read a date as ``YYYY-MM-DD``; empty when a problem was recorded."""
    text = node.text.strip() if isinstance(node, Scalar) else ""
    if re.fullmatch(r"\d{4}-\d{2}-\d{2}", text):
        try:
            return datetime.date.fromisoformat(text).isoformat()
        except ValueError:
            pass  # a month or day that does not exist: reported below
    spot.problem(describe(node), "a date", "Write year-month-day, such as 2026-05-04.")
    return ""


def to_choice(node: Node, spot: Spot, options: Collection[str], what: str) -> str:
    """Read one of the known names; empty when a problem was recorded."""
    word = to_text(node, spot, f"one of the {what}")
    if word and word not in options:
        spot.problem(echo(word), f"one of the {what}", did_you_mean(word, options, what=what))
        return ""
    return word


class Entry:
    """A block of keys (or a row of a table) being read; every key must be asked for.

    Parameters
    ----------
    table
        The node.
    spot
        Its place, with the log that takes the problems.
    """

    def __init__(self, table: Table, spot: Spot) -> None:
        self._table = table
        self._known: set[str] = set()
        self._missing: dict[str, str] = {}
        self.spot = spot

    @classmethod
    def top(cls, table: Table, file: str, log: ProblemLog) -> Entry:
        """Start at the top of a file, or at a row of a table."""
        return cls(table, Spot(log=log, file=file, line=table.line))

    def at(self, key: str) -> Spot:
        """Return the place of a key, or of the block where the key is missing."""
        return self.spot.at(key, self._table.lines.get(key))

    def has(self, key: str) -> bool:
        """Tell whether a key is written (a cell: whether it is not empty)."""
        self._known.add(key)
        node = self._table.nodes.get(key)
        return node is not None and node != Scalar("", node.line)

    def has_column(self, key: str) -> bool:
        """Tell whether a row's table has a column, be the cell empty or not."""
        self._known.add(key)
        return key in self._table.nodes

    def finish_row(self, allowed: Collection[str]) -> None:
        """Leave the cells of a row that carries nothing but those allowed."""
        for key, line in self._table.lines.items():
            if key not in allowed and self.has(key):
                self.spot.at(key, line).problem(
                    describe(self._table.nodes[key]), f"nothing but {', '.join(allowed)}",
                    "Empty this cell; the offer's first row says it.",
                )  # fmt: skip
        self._known.update(self._table.nodes)
        self.finish()

    def _take(self, key: str, expected: str) -> Node | None:
        if self.has(key):
            return self._table.nodes[key]
        self._missing[key] = expected
        return None

    def number(self, key: str, allowed: Range = ANY_NUMBER) -> float:
        """Read a number that must be there."""
        node = self._take(key, allowed.describe())
        return math.nan if node is None else to_number(node, self.at(key), allowed)

    def number_or(self, key: str, default: T, allowed: Range = ANY_NUMBER) -> float | T:
        """Read a number that may be left out."""
        return self.number(key, allowed) if self.has(key) else default

    def count_or(self, key: str, default: int, *, low: int, high: int) -> int:
        """Read a whole number that may be left out."""
        value = self.number_or(key, float(default), Range(low=low, high=high))
        if value.is_integer():
            return int(value)
        if not math.isnan(value):
            expected = f"a whole number from {low} to {high}"
            self.at(key).problem(f"{value:g}", expected, "Write no decimals.")
        return default

    def text(self, key: str) -> str:
        """Read a text that must be there."""
        node = self._take(key, "text")
        return "" if node is None else to_text(node, self.at(key))

    def text_or(self, key: str, default: str = "") -> str:
        """Read a text that may be left out."""
        return self.text(key) if self.has(key) else default

    def flag_or(self, key: str, *, default: bool) -> bool:
        """Read true or false that may be left out."""
        return to_flag(self._table.nodes[key], self.at(key)) if self.has(key) else default

    def day_or(self, key: str, default: str = "") -> str:
        """Read a date that may be left out."""
        return to_day(self._table.nodes[key], self.at(key)) if self.has(key) else default

    def choice(self, key: str, options: Collection[str], what: str = "names") -> str:
        """Read one of the known names; it must be there."""
        node = self._take(key, f"one of the {what}")
        return "" if node is None else to_choice(node, self.at(key), options, what)

    def choice_or(
        self, key: str, default: str, options: Collection[str], what: str = "names"
    ) -> str:
        """Read one of the known names; it may be left out."""
        return self.choice(key, options, what) if self.has(key) else default

    def names(
        self, key: str, options: Collection[str], what: str = "names", *, required: bool = False
    ) -> tuple[str, ...]:
        """Read a list of known names, each at most once."""
        chosen: dict[str, None] = {}
        for node, spot in self.items(key, required=required):
            word = to_choice(node, spot, options, what)
            if word in chosen:
                spot.problem(f"{echo(word)} twice", "each name once", "Delete one of them.")
            if word:
                chosen[word] = None
        return tuple(chosen)

    def value(self, key: str, *, expected: str = "") -> Iterator[tuple[Node, Spot]]:
        """Hand out a value as it stands, with its place; nothing when it is left out.

        With ``expected`` it must be there.
        """
        if self.has(key) or expected:
            node = self._take(key, expected)
            if node is not None:
                yield node, self.at(key)

    def items(self, key: str, *, required: bool = False) -> Iterator[tuple[Node, Spot]]:
        """Walk a list: its values and their places."""
        if not self.has(key) and not required:
            return
        node = self._take(key, "a list")
        if isinstance(node, Items):
            for number, item in enumerate(node.nodes, start=1):
                yield item, self.at(key).at(f"[{number}]", item.line)
        elif node is not None:
            self.at(key).problem(describe(node), "a list", "Write a list: [first, second].")

    def block(self, key: str) -> Entry | None:
        """Open a block that must be there; None when it is missing or something else."""
        node = self._take(key, "a block of keys")
        return None if node is None else open_block(node, self.at(key))

    def block_or_none(self, key: str) -> Entry | None:
        """Open a block that may be left out."""
        return self.block(key) if self.has(key) else None

    def blocks(self, key: str, *, required: bool = False) -> Iterator[Entry]:
        """Walk a list of blocks."""
        for node, spot in self.items(key, required=required):
            entry = open_block(node, spot)
            if entry is not None:
                yield entry

    def pairs(self) -> Iterator[tuple[str, Node, Spot]]:
        """Walk all keys of a block whose keys are the user's: name, value and place."""
        for key, node in self._table.nodes.items():
            self._known.add(key)
            yield key, node, self.at(key)

    def numbers(
        self, key: str, options: Collection[str], what: str, allowed: Range = NON_NEGATIVE
    ) -> Mapping[str, float]:
        """Read a block of known names with a number each; empty when left out."""
        values: dict[str, float] = {}
        entry = self.block_or_none(key)
        for name, node, spot in entry.pairs() if entry else ():
            if is_known(name, options, what, spot):
                values[name] = to_number(node, spot, allowed)
        return values

    def knows(self, key: str, options: Collection[str], what: str) -> bool:
        """Tell whether a key of the user's is a known name, recording a problem when not."""
        return is_known(key, options, what, self.at(key))

    def blocks_by_name(self, options: Collection[str], what: str) -> Iterator[tuple[str, Entry]]:
        """Walk a block of known names that each hold a block."""
        for name, node, spot in self.pairs():
            if is_known(name, options, what, spot):
                entry = open_block(node, spot)
                if entry is not None:
                    yield name, entry

    def finish(self) -> None:
        """Report missing keys and keys that nobody asked for."""
        for key, line in self._table.lines.items():
            if key not in self._known:
                near = did_you_mean(key, self._known, what="keys")
                self.spot.at(key, line).problem("an unknown key", "only known keys", near)
                for missing in [m for m in self._missing if f"`{m}`" in near]:
                    del self._missing[missing]  # one slip, one message
        for key, expected in self._missing.items():
            self.spot.at(key).problem("nothing", expected, f"Add `{key}` here.")


def open_block(node: Node, spot: Spot) -> Entry | None:
    """Open a node as a block of keys; None when a problem was recorded."""
    if isinstance(node, Table):
        return Entry(node, spot)
    spot.problem(describe(node), "a block of keys", "Write `key: value` pairs beneath this key.")
    return None


def is_known(name: str, options: Collection[str], what: str, spot: Spot) -> bool:
    """Tell whether a name is known, recording a problem when it is not."""
    if name not in options:
        spot.problem(echo(name), f"one of the {what}", did_you_mean(name, options, what=what))
        return False
    return True

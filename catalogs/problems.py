"""Problems in user files: what they say, how they are gathered and printed together.

Owns the wording frame (place, fact, expectation, remedy) and the error that carries all problems
of one reading; reads no file itself.
"""

from __future__ import annotations

import difflib
from collections.abc import Iterable
from dataclasses import dataclass

_SIMILARITY_CUTOFF = 0.5  # the default of 0.6 misses short slips such as "puritty"
_LONGEST_ECHO = 60


@dataclass(frozen=True, slots=True, kw_only=True)
class Problem:
    """One thing wrong in one place of a file.

    Parameters
    ----------
    file
        Path as the user gave it.
    line
        Line number, counted from 1.
    field
        Where in the file, as a dotted path (``feed.ph``) or a column name.
    found, expected, remedy
        What stands there, what should, and what to do about it.
    """

    file: str
    line: int
    field: str
    found: str
    expected: str
    remedy: str

    def __str__(self) -> str:
        """Two lines: place with the fact, then the remedy.

        Examples
        --------
        >>> print(Problem(file="site.yaml", line=6, field="feed.ph", found="15",
        ...               expected="a number from 0 to 14", remedy="Give the measured pH."))
        site.yaml:6: feed.ph: found 15, expected a number from 0 to 14
            Give the measured pH.
        """
        place = f"{self.file}:{self.line}: {self.field}"
        return f"{place}: found {self.found}, expected {self.expected}\n    {self.remedy}"


class InputFileError(Exception):
    """A user file cannot be used; ``problems`` holds everything that is wrong with it."""

    def __init__(self, problems: Iterable[Problem]) -> None:
        given = list(problems)
        files = list(dict.fromkeys(problem.file for problem in given))
        given.sort(key=lambda problem: (files.index(problem.file), problem.line))
        self.problems: tuple[Problem, ...] = tuple(given)
        super().__init__("\n".join(str(problem) for problem in self.problems))


class ProblemLog:
    """Gathers the problems of one reading, so that all of them are reported at once."""

    def __init__(self) -> None:
        self._problems: list[Problem] = []

    @property
    def problems(self) -> tuple[Problem, ...]:
        """What was gathered so far, in order of discovery."""
        return tuple(self._problems)

    def add(self, problem: Problem) -> None:
        """Keep a problem; the same one twice counts once."""
        if problem not in self._problems:
            self._problems.append(problem)

    def raise_if_any(self) -> None:
        """Report everything gathered.

        Raises
        ------
        InputFileError
            At least one problem was gathered.
        """
        if self._problems:
            raise InputFileError(self._problems)


@dataclass(frozen=True, slots=True, kw_only=True)
class Spot:
    """A place in a file that problems can be reported at."""

    log: ProblemLog
    file: str
    line: int
    field: str = ""

    def problem(self, found: str, expected: str, remedy: str) -> None:
        """Record that this place holds something else than it should."""
        self.log.add(
            Problem(
                file=self.file, line=self.line, field=self.field or "file",
                found=found, expected=expected, remedy=remedy,
            )
        )  # fmt: skip

    def at(self, key: str, line: int | None = None) -> Spot:
        """Return the place of a key (or ``[3]``) inside this one."""
        joint = "" if not (self.field and key) or key.startswith("[") else "."
        return Spot(
            log=self.log,
            file=self.file,
            line=self.line if line is None else line,
            field=f"{self.field}{joint}{key}",
        )


def closest(word: str, known: Iterable[str]) -> str | None:
    """Return the known word nearest to a mistyped one, or None when none is near.

    Examples
    --------
    >>> closest("caustic soda", ["caustic_soda", "soda_ash"])
    'caustic_soda'
    """
    by_folded = {name.casefold(): name for name in known}
    near = difflib.get_close_matches(
        word.casefold(), list(by_folded), n=1, cutoff=_SIMILARITY_CUTOFF
    )
    return by_folded[near[0]] if near else None


def did_you_mean(word: str, known: Iterable[str], *, what: str = "names") -> str:
    """Return a remedy sentence: the nearest known word, and the list when it is short."""
    names = sorted(set(known))
    near = closest(word, names)
    listing = f"The {what} known here: {listed(names)}." if names else f"No {what} known here."
    return f"Did you mean `{near}`? {listing}" if near else listing


def listed(names: Iterable[str], *, most: int = 30) -> str:
    """Join names for a message, leaving out the tail of a long list."""
    given = list(names)
    shown = ", ".join(given[:most])
    return shown if len(given) <= most else f"{shown} and {len(given) - most} more"


def echo(text: str) -> str:
    """Quote a piece of a user's file for a message, shortened and on one line."""
    flat = text if len(text) <= _LONGEST_ECHO else f"{text[:_LONGEST_ECHO]}..."
    return repr(flat)

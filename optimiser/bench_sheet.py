"""Bench sheets: the results of jar tests as engineers write them, read with their places.

Owns the columns of such a sheet (date, doses, pH, filtered and unfiltered metals, sludge) and what
can be wrong with them. What the tests say is `optimiser.jar_tests`.
"""

from __future__ import annotations

import datetime
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path

from catalogs.cells import Cell, Sheet
from catalogs.problems import InputFileError, ProblemLog, closest, echo, listed
from catalogs.sample_amounts import Amounts
from catalogs.sample_dates import Moment, NoDate, read_moment
from catalogs.sample_header import TableOptions, find_header
from catalogs.sample_tables import RawSample, Result
from catalogs.sample_values import Findings, is_blank, read_value
from catalogs.sample_words import (
    ANALYTE,
    DATE,
    DISSOLVED,
    IGNORE,
    MEASURED_ROLES,
    PH,
    REMARK,
    SAMPLE,
    TEMPERATURE,
    TOTAL,
    UNKNOWN,
    Heading,
    fold,
    read_unit,
)
from catalogs.sheets import load_sheet
from chemistry.samples import Reported
from optimiser.site_feed import STATES_OF_ELEMENT

DOSE, SLUDGE, SLUDGE_VOLUME, SETTLING = "dose", "sludge", "sludge volume", "settling"
TEST = "test"
_READ = (DOSE, SLUDGE, SLUDGE_VOLUME, SETTLING, ANALYTE, *MEASURED_ROLES)
_DOSE_UNITS = {"mg/L": 1.0, "g/L": 1000.0, "g/m3": 1.0, "kg/m3": 1000.0}
MOST_DOSED_MG_PER_L = 1e5
_TEST_WORDS = ("test", "jar", "beaker", "no", "test no", "jar no")
EXAMPLE_HEADER = "date,test,hydrated_lime mg/L,pH,Cu filtered mg/L,Cu unfiltered mg/L,sludge mg/L"


@dataclass(frozen=True, slots=True, kw_only=True)
class JarTest:
    """One jar: what was dosed (mg/L pure, as fed), and what was measured after settling.

    ``filtered`` and ``unfiltered`` are mg/L of the analyte; conditions that were not written are
    None. A jar without any dose is the raw water of the tests.
    """

    name: str
    day: datetime.date
    ph: float
    doses_mg_per_l: Mapping[str, float] = field(default_factory=dict)
    filtered: Mapping[str, Reported] = field(default_factory=dict)
    unfiltered: Mapping[str, Reported] = field(default_factory=dict)
    temperature_degc: float | None = None
    sludge_mg_per_l: float | None = None
    sludge_ml_per_l: float | None = None
    settling_min: float | None = None
    row: int = 0

    @property
    def is_raw(self) -> bool:
        """Whether nothing was dosed."""
        return not any(self.doses_mg_per_l.values())


@dataclass(frozen=True, slots=True, kw_only=True)
class BenchSheet:
    """All jars of a sheet in order of its rows, and columns that were not read."""

    name: str
    jars: tuple[JarTest, ...]
    not_read: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class _Column:
    """A column: a heading of laboratories, or the dose of a reagent."""

    heading: Heading
    header: Cell
    reagent: str = ""


def load_bench_sheet(
    path: Path, reagents: Mapping[str, str], analytes: Sequence[str], *,
    on_day: datetime.date | None = None,
) -> BenchSheet:  # fmt: skip
    """Read the results of jar tests from a CSV or XLSX file.

    Parameters
    ----------
    path
        One row a jar. Doses are mg/L of pure compound, in columns named after the reagents.
    reagents
        Reagent id to its name; both are known as column names.
    analytes
        Analytes of the site's feed; others cannot be compared with theory.
    on_day
        Day after which no test can have been made; today when left out.

    Raises
    ------
    InputFileError
        Everything that is wrong with the file, with line or cell.
    """
    log = ProblemLog()
    sheet = load_sheet(path, log)
    if sheet is None:
        raise InputFileError(log.problems)
    findings = Findings(sheet)
    latest = on_day or datetime.date.today()
    reader = _BenchReader(sheet, findings, reagents, analytes, latest)
    found = reader.read()
    findings.report()
    log.raise_if_any()
    return found


class _BenchReader:
    def __init__(
        self, sheet: Sheet, findings: Findings, reagents: Mapping[str, str],
        analytes: Sequence[str], latest: datetime.date,
    ) -> None:  # fmt: skip
        self.sheet = sheet
        self.findings = findings
        self.reagents = {
            fold(word).replace("_", " "): r for r, n in reagents.items() for word in (r, n)
        }
        self.analytes = analytes
        self.latest = latest
        self.amounts = Amounts(findings, "mg/L")
        self.not_read: list[str] = []

    def read(self) -> BenchSheet:
        place = find_header(self.sheet, TableOptions())
        if place is None:
            first = self.sheet.rows[0][0]
            self.findings.add(
                first, "", f"no header row among {len(self.sheet.rows)} rows",
                "a row that names a date, doses and what was measured",
                f"Write a header such as {EXAMPLE_HEADER}",
            )  # fmt: skip
            return BenchSheet(name=self.sheet.file, jars=())
        headings, start, _ = place
        columns = [self._column(heading, cell) for heading, cell in headings]
        self._check_columns(columns, self.sheet.rows[start][0])
        jars = [jar for row in self.sheet.rows[start + 1 :] for jar in self._jar(row, columns)]
        self._check_jars(jars, self.sheet.rows[start][0])
        return BenchSheet(
            name=self.sheet.file, jars=tuple(jars), not_read=tuple(dict.fromkeys(self.not_read))
        )

    # -- columns ---------------------------------------------------------------------------------

    def _column(self, heading: Heading, header: Cell) -> _Column:
        if heading.role == IGNORE and not header.text:
            return _Column(heading, header)
        unit, left = read_unit(header.text)
        words = left.replace("_", " ").strip(" ()[],;:")
        bare = words.removeprefix("dose of ").removesuffix(" dose").strip()
        if bare in self.reagents:
            named = Heading(role=DOSE, unit=unit, text=header.text)
            return _Column(named, header, self.reagents[bare])
        role = _other_role(words, unit)
        if role:
            return _Column(Heading(role=role, unit=unit, text=header.text), header)
        if heading.role == UNKNOWN:
            self._unknown(header, bare)
            return _Column(Heading(role=IGNORE, text=header.text), header)
        return _Column(heading, header)

    def _unknown(self, header: Cell, words: str) -> None:
        near = closest(words, self.reagents)
        if near is None:
            self.not_read.append(" ".join(header.text.split()))
            return
        self.findings.add(
            header, "", f"the column {echo(header.text)}", "a reagent of the site, or a result",
            f"Did you mean `{self.reagents[near]}`? Reagents here:"
            f" {listed(dict.fromkeys(self.reagents.values()))}; call anything else a note.",
        )  # fmt: skip

    def _check_columns(self, columns: Sequence[_Column], first: Cell) -> None:
        seen: dict[tuple[str, str, str], Cell] = {}
        for column in columns:
            key = (column.reagent, *column.heading.key)
            if column.heading.role in (UNKNOWN, IGNORE, REMARK):
                continue
            if key in seen:
                self.findings.add(
                    column.header, "", f"a second column like {echo(seen[key].text)}",
                    "each column once", "Delete one of them.",
                )  # fmt: skip
            seen[key] = column.header
            if column.reagent and column.heading.unit not in _DOSE_UNITS:
                self.findings.add(
                    column.header, column.heading.text,
                    f"a dose in {column.heading.unit!r}" if column.heading.unit
                    else "a dose without a unit",
                    f"one of: {', '.join(_DOSE_UNITS)}",
                    "Write it into the header, of the pure compound, such as hydrated_lime mg/L.",
                )  # fmt: skip
        roles = {column.heading.role for column in columns}
        for role, what in ((PH, "pH"), (DOSE, "dose of a reagent"), (ANALYTE, "metal")):
            if role not in roles:
                self.findings.add(
                    first, "", f"no column with a {what}", f"a {what} in every jar",
                    f"Write a header such as {EXAMPLE_HEADER}",
                )  # fmt: skip

    # -- jars ------------------------------------------------------------------------------------

    def _jar(self, row: tuple[Cell, ...], columns: Sequence[_Column]) -> Iterator[JarTest]:
        by_column = {cell.column: cell for cell in row}
        cells = [(c, by_column[c.header.column]) for c in columns if c.header.column in by_column]
        day = self._day(cells, row[0])
        raw = RawSample(moment=Moment(day or self.latest), label="", cell=row[0])
        doses: dict[str, float] = {}
        plain: dict[str, float] = {}
        for column, cell in cells:
            if column.heading.role not in _READ:
                continue
            value = read_value(cell, column.heading.text, self.findings)
            if value is None:
                continue
            if column.reagent:
                dose = value.number * _DOSE_UNITS.get(column.heading.unit, 1.0)
                doses[column.reagent] = dose
                if dose > MOST_DOSED_MG_PER_L:
                    self.findings.add(
                        cell, column.heading.text, f"{dose:g} mg/L",
                        f"at most {MOST_DOSED_MG_PER_L:g} mg/L", "Check the unit of the dose.",
                    )  # fmt: skip
            elif column.heading.role in (SLUDGE, SLUDGE_VOLUME, SETTLING):
                plain[column.heading.role] = value.number
            else:
                result = Result(heading=column.heading, value=value, cell=cell)
                raw.results.setdefault(column.heading.key, result)
        ph = self.amounts.number(raw, PH)
        if ph is None:
            self.findings.add(
                row[0], "", "a jar without a pH", "the pH after mixing",
                "Write it, or delete the row: theory is compared at the pH of the jar.",
            )  # fmt: skip
        temperature = self.amounts.number(raw, TEMPERATURE)
        filtered, unfiltered = self._metals(raw)
        if day is None or ph is None:
            return
        yield JarTest(
            name=_name(cells) or f"row {row[0].row}", day=day, ph=ph, doses_mg_per_l=doses,
            filtered=filtered, unfiltered=unfiltered, temperature_degc=temperature,
            sludge_mg_per_l=plain.get(SLUDGE), sludge_ml_per_l=plain.get(SLUDGE_VOLUME),
            settling_min=plain.get(SETTLING), row=row[0].row,
        )  # fmt: skip

    def _day(self, cells: Sequence[tuple[_Column, Cell]], first: Cell) -> datetime.date | None:
        cell = next((cell for column, cell in cells if column.heading.role == DATE), first)
        found = read_moment(cell.text, latest=self.latest)
        if isinstance(found, NoDate):
            self.findings.add(cell, "date", echo(cell.text), found.expected, found.remedy)
            return None
        return found.day

    def _metals(self, raw: RawSample) -> tuple[dict[str, Reported], dict[str, Reported]]:
        """Filtered and unfiltered amounts; a result that says neither is refused."""
        filtered: dict[str, Reported] = {}
        unfiltered: dict[str, Reported] = {}
        for (name, fraction), result in raw.results.items():
            if result.heading.role != ANALYTE:
                continue
            if not set(STATES_OF_ELEMENT.get(name, (name,))) & set(self.analytes):
                self.findings.add(
                    result.cell, result.heading.text,
                    f"{name}, which the feed was not analysed for", "an analyte of the site's feed",
                    "Add it to the feed, or leave the column out. The feed has:"
                    f" {listed(self.analytes)}.",
                )  # fmt: skip
                continue
            value = self.amounts.mg_per_l(result)
            if value is None:
                continue
            if fraction not in (DISSOLVED, TOTAL):
                self.findings.add(
                    result.cell, result.heading.text, f"{name}, filtered or not",
                    "filtered and unfiltered results by name",
                    f"Call the column {name} filtered or {name} unfiltered.",
                )  # fmt: skip
            (filtered if fraction == DISSOLVED else unfiltered)[name] = value
        for name in filtered.keys() & unfiltered.keys():
            low, high = filtered[name], unfiltered[name]
            if low.value > high.value and not low.is_below:
                cell = raw.results[(name, DISSOLVED)].cell
                self.findings.add(
                    cell, f"{name} filtered", f"filtered {low.as_written} above unfiltered"
                    f" {high.as_written}", "filtered at most unfiltered",
                    "Check the units and whether the two were swapped.",
                )  # fmt: skip
        return filtered, unfiltered

    def _check_jars(self, jars: Sequence[JarTest], first: Cell) -> None:
        seen: dict[tuple[datetime.date, str], JarTest] = {}
        for jar in jars:
            key = (jar.day, jar.name)
            if key in seen:
                cell = Cell(jar.name, jar.row, 1)
                self.findings.add(
                    cell, "test", f"a second jar {echo(jar.name)} of {jar.day}", "each jar once",
                    f"The first stands in row {seen[key].row}: rename or delete one.",
                )  # fmt: skip
            seen.setdefault(key, jar)
        if jars and all(jar.is_raw for jar in jars):
            self.findings.add(
                first, "", "no jar with a dose", "at least one jar with a dose",
                "Write the doses in mg/L of the pure compound.",
            )  # fmt: skip
        if not jars and len(self.sheet.rows) < 2:
            self.findings.add(first, "", "no jars", "rows beneath the header", "Check the file.")


def _name(cells: Sequence[tuple[_Column, Cell]]) -> str:
    for column, cell in cells:
        if column.heading.role in (SAMPLE, TEST) and not is_blank(cell):
            return cell.text
    return ""


def _other_role(words: str, unit: str) -> str:
    """Columns that only bench sheets have."""
    if words in _TEST_WORDS:
        return TEST
    if words.startswith("sludge"):
        return SLUDGE if unit in _DOSE_UNITS else SLUDGE_VOLUME
    if words.startswith("settling"):
        return SETTLING
    return ""

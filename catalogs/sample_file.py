"""Files of dated samples as laboratories send them, turned into records of what was reported.

Owns dissolved against total and everything that a table of samples can get wrong as a whole.
Finding the cells is `catalogs.sample_tables`, converting units `catalogs.sample_amounts`; filling
blanks is `chemistry.sample_gaps`.
"""

from __future__ import annotations

import datetime
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path

from catalogs.cells import Cell
from catalogs.problems import ProblemLog, Spot, listed
from catalogs.sample_amounts import Amounts
from catalogs.sample_header import TableOptions
from catalogs.sample_states import check_states, split_states
from catalogs.sample_tables import RawSample, RawTable, read_table
from catalogs.sample_values import Findings
from catalogs.sample_words import ALKALINITY, ANALYTE, DISSOLVED, FLOW, PH, TEMPERATURE, TOTAL
from catalogs.sheets import load_sheet
from chemistry.feed import ALKALINITY_LEAST_PH
from chemistry.samples import Reported, SampleRecord

MOST_SAMPLES = 20_000


@dataclass(frozen=True, slots=True, kw_only=True)
class SampleFileOptions:
    """How a file is to be read, beyond what it says itself.

    ``columns`` gives names of the laboratory's columns or parameters another meaning
    (``{Fe: Fe(III)}``, ``{Ort: ignore}``); ``date_order`` says how 04/05/2025 is read;
    ``unit`` holds for analytes that no unit stands beside; ``dissolved_above_total_percent`` is the
    scatter of the analysis that is taken as equal.
    """

    sheet: str = ""
    columns: Mapping[str, str] = field(default_factory=dict)
    date_order: str = ""
    unit: str = ""
    dissolved_above_total_percent: float = 0.0
    latest: datetime.date | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class SampleFile:
    """What was read: records with the place of each, unknown columns with hints, notes."""

    records: tuple[SampleRecord, ...]
    spots: tuple[Spot, ...]
    unknown: Mapping[str, str]
    notes: tuple[str, ...]


def load_samples(
    path: Path, log: ProblemLog, options: SampleFileOptions | None = None, *, name: str = ""
) -> SampleFile | None:
    """Read a file of dated samples, one row a sample or one row a result.

    Parameters
    ----------
    path
        CSV (UTF-8; comma, semicolon or tab) or XLSX.
    log
        Takes every problem of the file.
    options
        How it is to be read.
    name
        How messages call the file; the path when empty.

    Returns
    -------
    SampleFile or None
        None when no table could be read. With problems in the log the records are incomplete.
    """
    options = options or SampleFileOptions()
    sheet = load_sheet(path, log, sheet=options.sheet, name=name)
    if sheet is None:
        return None
    findings = Findings(sheet)
    table = read_table(
        sheet, findings,
        TableOptions(
            columns=options.columns, date_order=options.date_order, unit=options.unit,
            latest=options.latest,
        ),
    )  # fmt: skip
    if table is None:
        findings.report()
        return None
    if not table.samples:
        findings.report()
        if not log.problems:
            sheet.whole().problem("no samples", "rows beneath the header", "Check the file.")
        return None
    reader = _Reader(findings, options)
    reader.check_table(table)
    records = [reader.record(raw) for raw in table.samples]
    reader.check_duplicates(table.samples)
    findings.report()
    return SampleFile(
        records=tuple(records), spots=tuple(sheet.spot(raw.cell) for raw in table.samples),
        unknown=table.unknown, notes=(*table.notes, *dict.fromkeys(reader.notes)),
    )  # fmt: skip


class _Reader:
    """Turns the raw samples of one table into records, recording what is wrong with them."""

    def __init__(self, findings: Findings, options: SampleFileOptions) -> None:
        self.findings = findings
        self.options = options
        self.amounts = Amounts(findings, options.unit)
        self.notes = self.amounts.notes

    def check_table(self, table: RawTable) -> None:
        """What is wrong with a whole column, told once."""
        if len(table.samples) > MOST_SAMPLES:
            first = table.samples[0]
            self._add(
                first.cell, "", f"{len(table.samples)} samples", f"at most {MOST_SAMPLES}",
                "Average them by day first.",
            )  # fmt: skip
        check_states(table, self._add)
        for heading, cell in table.headings:
            if heading.hint:
                self._add(cell, heading.text, f"{heading.text!r}", "a name with its basis",
                          f"{heading.hint[:1].upper()}{heading.hint[1:]}.")  # fmt: skip

    def check_duplicates(self, samples: Sequence[RawSample]) -> None:
        """Two samples of the same day, time and name cannot both be meant."""
        seen: dict[tuple[object, ...], RawSample] = {}
        for raw in samples:
            key = (raw.moment, raw.label)
            if key in seen:
                self._add(
                    raw.cell, "date", f"a second sample of {raw.moment}",
                    "each sample once",
                    f"The first stands in row {seen[key].cell.row}: delete one, or tell them apart"
                    " by a time or a sample column.",
                )  # fmt: skip
            seen.setdefault(key, raw)

    def record(self, raw: RawSample) -> SampleRecord:
        """The record of one sample."""
        amounts = dict(self._amounts(raw))
        dissolved, total = self._fractions(raw, amounts)
        split_states(raw, dissolved, total, self._add, self.notes.append)
        self._check_totals(raw, dissolved, total)
        ph = self.amounts.number(raw, PH)
        alkalinity = self.amounts.alkalinity(raw)
        if alkalinity is not None and ph is not None and ph < ALKALINITY_LEAST_PH:
            if not alkalinity.is_below and alkalinity.value > 0.0:
                cell = raw.results[(ALKALINITY, "")].cell
                self._add(
                    cell, ALKALINITY, f"{alkalinity.as_written} at pH {ph:g}",
                    f"no alkalinity below pH {ALKALINITY_LEAST_PH}",
                    "Correct the pH or the alkalinity; leave it empty where the water is acid.",
                )  # fmt: skip
            alkalinity = None
        return SampleRecord(
            day=raw.moment.day, time=raw.moment.time, label=raw.label,
            flow_m3_per_d=self.amounts.number(raw, FLOW), ph=ph,
            temperature_degc=self.amounts.number(raw, TEMPERATURE),
            alkalinity_mg_per_l_as_caco3=alkalinity, acidity_meq_per_l=self.amounts.acidity(raw),
            tss_mg_per_l=self.amounts.tss(raw), dissolved=dissolved, total=total,
            other=dict(raw.other),
        )  # fmt: skip

    def _add(self, cell: Cell, label: str, found: str, expected: str, remedy: str) -> None:
        self.findings.add(cell, label, found, expected, remedy)

    # -- concentrations --------------------------------------------------------------------------

    def _amounts(self, raw: RawSample) -> Iterator[tuple[tuple[str, str], Reported]]:
        for key, result in raw.results.items():
            if result.heading.role == ANALYTE:
                found = self.amounts.mg_per_l(result)
                if found is not None:
                    yield key, found

    def _fractions(
        self, raw: RawSample, amounts: Mapping[tuple[str, str], Reported]
    ) -> tuple[dict[str, Reported], dict[str, Reported]]:
        """Dissolved and total amounts; a result that says neither counts as both."""
        dissolved: dict[str, Reported] = {}
        total: dict[str, Reported] = {}
        for (name, fraction), value in amounts.items():
            if fraction == DISSOLVED:
                dissolved[name] = value
            elif fraction == TOTAL:
                total[name] = value
        for (name, fraction), value in amounts.items():
            if fraction:
                continue
            if name in total:
                result = raw.results[(name, "")]
                self._add(
                    result.cell, result.heading.text, f"{name} beside {name} total",
                    "names that tell dissolved from total",
                    f"Call it {name} dissolved, or write `columns: {{{result.heading.text}:"
                    " ignore}` in the site file.",
                )  # fmt: skip
            elif name in dissolved:
                total[name] = value
            else:
                dissolved[name] = total[name] = value
        return dissolved, total

    def _check_totals(
        self, raw: RawSample, dissolved: dict[str, Reported], total: dict[str, Reported]
    ) -> None:
        allowed = 1.0 + self.options.dissolved_above_total_percent / 100.0
        for name in dissolved.keys() & total.keys():
            low, high = dissolved[name], total[name]
            if low.is_below or low.value <= high.value:
                continue
            if low.value <= high.value * allowed:
                total[name] = replace(low, is_below=high.is_below and low.is_below)
                self.notes.append(
                    f"{name}: dissolved above total by at most"
                    f" {self.options.dissolved_above_total_percent:g} %: the total is raised to it"
                )
                continue
            result = raw.results.get((name, DISSOLVED)) or next(iter(raw.results.values()))
            self._add(
                result.cell, result.heading.text,
                f"dissolved {low.as_written} above total {high.as_written}",
                "dissolved at most total",
                "Check units and whether the two were swapped; where it is scatter of the analysis,"
                " write `dissolved_above_total_percent: 10` under `samples`.",
            )  # fmt: skip


def unknown_note(unknown: Mapping[str, str]) -> str:
    """Say which columns were not understood; empty where there are none."""
    if not unknown:
        return ""
    shown = [f"{name} ({hint})" if hint else name for name, hint in unknown.items()]
    return f"not read as analytes, kept as they stand: {listed(shown)}"

"""The `samples` key of a feed: a file of dated samples beside the site file.

Owns its settings, what the feed block says for analytes that the file lacks, and the checks that
need both. Reading the file is `catalogs.sample_file`.
"""

from __future__ import annotations

import datetime
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

from catalogs.entries import Entry, Range, to_text
from catalogs.positions import Scalar, Table
from catalogs.problems import Spot, echo
from catalogs.sample_dates import DATE_ORDERS
from catalogs.sample_file import SampleFile, SampleFileOptions, load_samples, unknown_note
from catalogs.sample_words import IGNORE, UNKNOWN, fold, read_heading
from chemistry.analysis import METALS
from chemistry.errors import WaterError
from chemistry.sample_gaps import complete_samples
from chemistry.samples import SampleDefaults, Samples

_SCATTER_PERCENT = Range(low=0.0, high=50.0)


@dataclass(frozen=True, slots=True, kw_only=True)
class SampleSource:
    """The file as read, before the feed block fills what it lacks."""

    name: str
    file: SampleFile
    spot: Spot

    @property
    def analytes(self) -> tuple[str, ...]:
        """Analytes that any sample reports."""
        names = {a: None for r in self.file.records for a in (*r.dissolved, *r.total)}
        return tuple(names)

    def reports(self, field: str) -> bool:
        """Tell whether any sample has a value of this field of its record."""
        return any(getattr(record, field) is not None for record in self.file.records)


@dataclass(frozen=True, slots=True, kw_only=True)
class SampleBlock:
    """Complete samples with the place of each in the file."""

    samples: Samples
    spots: Mapping[tuple[datetime.date, str, str], Spot]


def read_sample_source(entry: Entry, folder: Path, latest: datetime.date) -> SampleSource | None:
    """Read the file that a feed names; None where it names none or none could be read.

    Parameters
    ----------
    entry
        The feed block.
    folder
        Where the site file lies.
    latest
        Day after which no sample can have been taken.
    """
    for node, spot in entry.value("samples"):
        name, options = "", SampleFileOptions(latest=latest)
        if isinstance(node, Table):
            name, options = _read_options(Entry(node, spot), latest)
        else:
            name = to_text(node, spot, "the name of a file, or a block with `file`")
        if not name:
            return None
        path = folder / name
        if not path.exists():
            spot.problem(
                f"no file {echo(name)} beside the site file", "a CSV or XLSX file of samples",
                "Put the file there, or correct the name.",
            )  # fmt: skip
            return None
        found = load_samples(path, spot.log, options, name=str(path))
        return None if found is None else SampleSource(name=name, file=found, spot=spot)
    return None


def _read_options(entry: Entry, latest: datetime.date) -> tuple[str, SampleFileOptions]:
    name = entry.text("file")
    options = SampleFileOptions(
        sheet=entry.text_or("sheet"),
        columns=_read_columns(entry),
        date_order=entry.choice_or("date_order", "", DATE_ORDERS, "orders of dates"),
        unit=entry.choice_or("unit", "", ("mg/L", "ug/L", "g/L", "mmol/L", "umol/L"), "units"),
        dissolved_above_total_percent=entry.number_or(
            "dissolved_above_total_percent", 0.0, _SCATTER_PERCENT
        ),
        latest=latest,
    )
    entry.finish()
    return name, options


def _read_columns(entry: Entry) -> dict[str, str]:
    """Names of the laboratory's columns or parameters with what they stand for."""
    columns: dict[str, str] = {}
    block = entry.block_or_none("columns")
    for name, node, spot in block.pairs() if block else ():
        meaning = to_text(node, spot, "what the column stands for")
        if meaning and fold(meaning) != IGNORE and read_heading(meaning).role == UNKNOWN:
            spot.problem(
                echo(meaning), "an analyte, date, flow, pH or another column that is known here",
                "Write it as Cu total, Fe(III), flow m3/d, or `ignore`.",
            )  # fmt: skip
        elif meaning and isinstance(node, Scalar):
            columns[name] = meaning
    return columns


def finish_samples(
    source: SampleSource, entry: Entry, defaults: SampleDefaults
) -> SampleBlock | None:
    """Fill what the file lacks from the feed block; None when something is missing in both.

    Parameters
    ----------
    source
        The file as read, without problems.
    entry
        The feed block, for the places of problems.
    defaults
        What the feed block says.
    """
    sound = True
    for field, key, known in (
        ("flow_m3_per_d", "flow_m3_per_d", defaults.flow_m3_per_d),
        ("temperature_degc", "temperature_degc", defaults.temperature_degc),
    ):
        if known is None and not source.reports(field):
            entry.at(key).problem(
                f"nothing, and no such column in {source.name}", "a number",
                f"Add `{key}` to the feed or a column to the file.",
            )  # fmt: skip
            sound = False
    acid = defaults.ph is not None or defaults.acidity_meq_per_l is not None
    if not acid and not source.reports("ph") and not source.reports("acidity_meq_per_l"):
        entry.at("ph").problem(
            f"no pH and no acidity, neither here nor in {source.name}", "the measured pH",
            "Add a pH column to the file.",
        )  # fmt: skip
        sound = False
    if not any(name in METALS for name in (*source.analytes, *defaults.measurements)):
        source.spot.problem(
            f"no metal in {source.name}", "at least one metal",
            "Check the names of its columns; give others their meaning under `columns`.",
        )  # fmt: skip
        sound = False
    return _complete(source, defaults) if sound else None


def _complete(source: SampleSource, defaults: SampleDefaults) -> SampleBlock | None:
    notes = [*source.file.notes, unknown_note(source.file.unknown)]
    notes += [
        f"{name}: {source.name} stands in place of the site file's analysis"
        for name in defaults.measurements
        if name in source.analytes
    ]
    try:
        samples = complete_samples(
            source.file.records, defaults, source=source.name, unknown=source.file.unknown,
            notes=[note for note in notes if note],
        )  # fmt: skip
    except (WaterError, ValueError) as error:
        source.spot.problem(f"samples that do not hold ({error})", "waters that can exist",
                            f"Correct {source.name}.")  # fmt: skip
        return None
    spots = {
        (record.day, record.time, record.label): spot
        for record, spot in zip(source.file.records, source.file.spots, strict=True)
    }
    return SampleBlock(samples=samples, spots=spots)

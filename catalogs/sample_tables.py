"""Tables of samples, one row a sample or one row a result, as results with their places.

Owns finding the header, a units row and a row of reporting limits, and which cell belongs to which
sample. Converting units and judging the results is `catalogs.sample_file`.
"""

from __future__ import annotations

import datetime
from collections import Counter
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field, replace

from catalogs.cells import Cell, Sheet
from catalogs.problems import echo
from catalogs.sample_dates import EXAMPLE, Moment, NoDate, read_moment, read_time
from catalogs.sample_header import (
    MEASURED,
    Columns,
    TableOptions,
    check_columns,
    find_header,
    heading_of,
    named,
    with_units_row,
)
from catalogs.sample_values import Findings, Value, is_blank, read_value
from catalogs.sample_words import (
    ANALYTE,
    BASIS,
    DATE,
    FRACTION,
    IGNORE,
    LIMIT,
    LIMIT_WORDS,
    PARAMETER,
    REMARK,
    SAMPLE,
    SIGN,
    TIME,
    UNIT,
    UNKNOWN,
    VALUE,
    Heading,
    basis_spelled,
    fold,
    read_fraction,
    read_unit,
)


@dataclass(frozen=True, slots=True, kw_only=True)
class Result:
    """One result of one sample, in the unit of its heading."""

    heading: Heading
    value: Value
    cell: Cell


@dataclass(slots=True, kw_only=True)
class RawSample:
    """Results of one sample by (analyte or role, fraction); ``other`` keeps the rest as text."""

    moment: Moment
    label: str
    cell: Cell
    results: dict[tuple[str, str], Result] = field(default_factory=dict)
    other: dict[str, str] = field(default_factory=dict)


@dataclass(frozen=True, slots=True, kw_only=True)
class RawTable:
    """Every sample of a table in order of its rows, the columns asked for and what was not read."""

    samples: tuple[RawSample, ...]
    headings: tuple[tuple[Heading, Cell], ...]
    unknown: Mapping[str, str]
    notes: tuple[str, ...]


def read_table(sheet: Sheet, findings: Findings, options: TableOptions) -> RawTable | None:
    """Read all samples of a table; None when it has no header that can be used."""
    place = find_header(sheet, options)
    if place is None:
        first = sheet.rows[0]
        findings.add(
            first[0], "", f"no header row among {len(sheet.rows)} rows",
            "a row that names a date column and at least one analyte",
            "Write one row a sample (date, flow m3/d, pH, Cu mg/L, ...) or one row a result (date,"
            " parameter, value, unit); other names are given under `columns`.",
        )  # fmt: skip
        return None
    columns, start, notes = place
    if start:
        notes = [*notes, f"{start} row(s) above the header were not read"]
    roles = {heading.role for heading, _ in columns}
    rows = sheet.rows[start + 1 :]
    if PARAMETER in roles and VALUE in roles:
        return _long(rows, columns, findings, options, notes)
    return _wide(rows, columns, findings, options, notes)


# -- one row a sample ----------------------------------------------------------------------------


def _wide(
    rows: Sequence[tuple[Cell, ...]], columns: Columns, findings: Findings,
    options: TableOptions, notes: list[str],
) -> RawTable:  # fmt: skip
    check_columns(columns, findings)
    columns, rows = with_units_row(columns, rows)
    limits: dict[int, float] = {}
    samples: list[RawSample] = []
    unknown: dict[str, str] = {}
    for heading, _ in columns:
        if heading.role == UNKNOWN:
            unknown[" ".join(heading.text.split())] = heading.hint
    for row in rows:
        if _is_limits_row(row, columns):
            limits |= _read_limits_row(row, columns, findings)
            continue
        _check_width(row, columns, findings)
        sample = _sample(row, columns, findings, options)
        if sample is None:
            _read_results(row, columns, findings, limits, _undated(row))  # for its problems alone
            continue
        _read_results(row, columns, findings, limits, sample)
        samples.append(sample)
    measured = [(h, c) for h, c in columns if h.role in MEASURED]
    _check_units(samples, measured, findings, options)
    return RawTable(
        samples=tuple(samples), headings=tuple(measured), unknown=unknown, notes=tuple(notes)
    )


def _undated(row: tuple[Cell, ...]) -> RawSample:
    return RawSample(moment=Moment(datetime.date.min), label="", cell=row[0])


def _is_limits_row(row: tuple[Cell, ...], columns: Columns) -> bool:
    naming = {c.column for h, c in columns if h.role in (DATE, SAMPLE, REMARK, UNKNOWN)}
    words = [fold(cell.text) for cell in row if cell.column in naming and cell.text]
    return bool(words) and words[0] in LIMIT_WORDS


def _read_limits_row(
    row: tuple[Cell, ...], columns: Columns, findings: Findings
) -> dict[int, float]:
    found = {}
    for heading, cell in _measured_cells(row, columns):
        value = read_value(cell, heading.text, findings)
        if value is not None:
            found[cell.column] = value.number
    return found


def _measured_cells(row: tuple[Cell, ...], columns: Columns) -> Iterator[tuple[Heading, Cell]]:
    by_column = {cell.column: heading for heading, cell in columns}
    for cell in row:
        heading = by_column.get(cell.column)
        if heading is not None and heading.role in MEASURED:
            yield heading, cell


def _check_width(row: tuple[Cell, ...], columns: Columns, findings: Findings) -> None:
    extra = [cell for cell in row[len(columns) :] if cell.text]
    if extra:
        findings.add(
            row[0], "", f"{len(row)} cells", f"{len(columns)} cells, as in the header",
            "Write decimals with a point (4.5) and put text that holds a comma in double quotes.",
        )  # fmt: skip


def _sample(
    row: tuple[Cell, ...], columns: Columns, findings: Findings, options: TableOptions
) -> RawSample | None:
    """Date, time and name of the sample of a row; None when it has no date that can be read."""
    cells = {heading.role: None for heading, _ in columns}
    named: dict[str, tuple[Heading, Cell]] = {}
    by_column = {cell.column: cell for cell in row}
    for heading, header in columns:
        cell = by_column.get(header.column)
        if cell is not None and heading.role in cells and heading.role not in named:
            named[heading.role] = (heading, cell)
    heading, cell = named.get(DATE, (Heading(role=DATE, text="date"), row[0]))
    moment = _moment(heading, cell, findings, options)
    if moment is None:
        return None
    if TIME in named and not is_blank(named[TIME][1]):
        time = read_time(named[TIME][1].text)
        if time is None:
            findings.add(
                named[TIME][1], named[TIME][0].text, echo(named[TIME][1].text),
                "a time such as 08:30", "Write hours and minutes, or leave the cell empty.",
            )  # fmt: skip
        else:
            moment = Moment(moment.day, time)
    label = named[SAMPLE][1].text if SAMPLE in named else ""
    return RawSample(moment=moment, label=label, cell=cell)


def _moment(
    heading: Heading, cell: Cell, findings: Findings, options: TableOptions
) -> Moment | None:
    if is_blank(cell):
        findings.add(
            cell, heading.text, "no date", EXAMPLE,
            "Write the date of the sample, or delete the row (means and sums are worked out here).",
        )  # fmt: skip
        return None
    found = read_moment(cell.text, order=options.date_order, latest=options.latest)
    if isinstance(found, NoDate):
        findings.add(cell, heading.text, echo(cell.text), found.expected, found.remedy)
        return None
    return found


def _read_results(
    row: tuple[Cell, ...], columns: Columns, findings: Findings, limits: Mapping[int, float],
    sample: RawSample,
) -> None:  # fmt: skip
    for heading, cell in _measured_cells(row, columns):
        value = read_value(cell, heading.text, findings, limit=limits.get(cell.column))
        if value is not None:
            result = Result(heading=heading, value=value, cell=cell)
            sample.results.setdefault(heading.key, result)
    by_column = {cell.column: heading for heading, cell in columns}
    for cell in row:
        heading = by_column.get(cell.column, Heading(role=IGNORE))
        if heading.role == UNKNOWN and cell.text:
            sample.other[" ".join(heading.text.split())] = cell.text


def _check_units(
    samples: Sequence[RawSample], columns: Columns, findings: Findings, options: TableOptions
) -> None:
    """One unit for each column: that of its header, else the one that all its cells name."""
    for heading, header in columns:
        results = [s.results[heading.key] for s in samples if heading.key in s.results]
        results = [r for r in results if r.cell.column == header.column]
        written = Counter(r.value.unit for r in results if r.value.unit)
        unit = heading.unit or (written.most_common(1)[0][0] if written else "")
        all_named = bool(heading.unit) or all(r.value.unit for r in results)
        for result in results:
            own = result.value.unit
            if (own and own != unit) or (written and not own and not all_named):
                findings.add(
                    result.cell, heading.text,
                    f"{result.value.as_written} {own or 'without a unit'}".strip(),
                    f"one unit in the whole column ({unit})",
                    f"Convert the value to {unit}, or give each unit a column of its own.",
                )  # fmt: skip
        if heading.unit or not unit:
            continue
        for sample in samples:
            known = sample.results.get(heading.key)
            if known is not None and known.cell.column == header.column:
                sample.results[heading.key] = replace(known, heading=replace(heading, unit=unit))


# -- one row a result ----------------------------------------------------------------------------


def _long(
    rows: Sequence[tuple[Cell, ...]], columns: Columns, findings: Findings,
    options: TableOptions, notes: list[str],
) -> RawTable:  # fmt: skip
    samples: dict[tuple[Moment, str], RawSample] = {}
    headings: dict[tuple[str, str], tuple[Heading, Cell]] = {}
    unknown: dict[str, str] = {}
    for row in rows:
        _check_width(row, columns, findings)
        raw = _sample(row, columns, findings, options)
        heading, value, cell = _long_result(row, columns, findings, options)
        if raw is None:
            continue
        sample = samples.setdefault((raw.moment, raw.label), raw)
        if heading.role == UNKNOWN:
            name = " ".join(heading.text.split())
            unknown[name] = heading.hint
            sample.other[name] = cell.text
        if value is None or heading.role not in MEASURED:
            continue
        headings.setdefault(heading.key, (heading, cell))
        if heading.key in sample.results:
            earlier = sample.results[heading.key]
            findings.add(
                cell, heading.text, f"a second result for {named(heading)} of {raw.moment}",
                "one result for each sample and analyte",
                f"The first stands in row {earlier.cell.row}: delete one, or tell the samples apart"
                " by a time or a sample column.",
            )  # fmt: skip
            continue
        sample.results[heading.key] = Result(heading=heading, value=value, cell=cell)
    return RawTable(
        samples=tuple(samples.values()), headings=tuple(headings.values()), unknown=unknown,
        notes=tuple(notes),
    )  # fmt: skip


def _long_result(
    row: tuple[Cell, ...], columns: Columns, findings: Findings, options: TableOptions
) -> tuple[Heading, Value | None, Cell]:
    """What the row measures, its value, and the value's cell."""
    by_column = {cell.column: cell for cell in row}
    parts: dict[str, Cell] = {}
    for heading, header in columns:
        if header.column in by_column:
            parts.setdefault(heading.role, by_column[header.column])
    text = {role: cell.text for role, cell in parts.items()}
    heading = heading_of(text.get(PARAMETER, ""), options)
    value_heading = next(h for h, _ in columns if h.role == VALUE)
    cell = parts.get(VALUE, row[-1])
    if heading.role not in MEASURED:
        return heading, None, cell
    unit = read_unit(text.get(UNIT, ""))[0] or heading.unit or value_heading.unit
    if text.get(UNIT) and not read_unit(text[UNIT])[0] and not is_blank(parts[UNIT]):
        unit = text[UNIT]
    heading = replace(
        heading, unit=unit, basis=heading.basis or _basis(text, heading),
        fraction=heading.fraction or read_fraction(text.get(FRACTION, "")) or "",
    )  # fmt: skip
    if heading.role != ANALYTE:
        heading = replace(heading, fraction="")
    if heading.basis:
        heading = replace(heading, hint="")
    limit = read_value(parts[LIMIT], "reporting limit", findings) if LIMIT in parts else None
    sign = text.get(SIGN, "").strip() if text.get(SIGN, "").strip() in ("<", ">", "=") else ""
    value = read_value(
        cell, heading.text, findings, limit=limit.number if limit else None,
        sign="" if sign == "=" else sign,
    )  # fmt: skip
    if value is not None and value.unit:
        heading = replace(heading, unit=value.unit)
    return heading, value, cell


def _basis(text: Mapping[str, str], heading: Heading) -> str:
    """Basis of a result: from its own column, or written behind the unit."""
    if text.get(BASIS):
        return basis_spelled(text[BASIS])
    unit, left = read_unit(text.get(UNIT, ""))
    words = left.replace("as ", "").strip(" ()[]") if unit else ""
    return basis_spelled(words) if words else ""

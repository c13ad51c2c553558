"""Gaps in a series of samples: what stands for a blank, so that each sample is a water analysis.

Owns the medians that stand in for blanks and says every one of them; the types are
`chemistry.samples`.
"""

from __future__ import annotations

import statistics
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import replace

from chemistry.analysis import ANALYTES, Measurement, WaterAnalysis
from chemistry.feed import ALKALINITY_LEAST_PH
from chemistry.samples import (
    AnalyteSummary,
    Reported,
    Sample,
    SampleDefaults,
    SampleRecord,
    Samples,
)

_MOST_DAYS_NAMED = 3
UNLIKELY_RATIO = 300.0
"""A value this many times the median suggests another unit (common practice, no source)."""


def complete_samples(
    records: Sequence[SampleRecord], defaults: SampleDefaults, *, source: str = "",
    unknown: Mapping[str, str] | None = None, notes: Iterable[str] = (),
) -> Samples:  # fmt: skip
    """Turn reported samples into complete ones.

    Parameters
    ----------
    records
        The samples, in any order; a flow or a pH must be known from the file or the defaults.
    defaults
        What holds where the file has no column.
    source, unknown, notes
        Carried into the result.

    Returns
    -------
    Samples
        In order of time; samples without flow are left out, and named.

    Raises
    ------
    WaterError
        No pH, acidity or titration for a sample; dissolved above total.
    ValueError
        No sample, or none with flow.

    Notes
    -----
    A blank takes the median of the samples that have a value. Where only one of dissolved and total
    is there, the other follows from the median share of dissolved in the samples that have both.
    An analyte with one kind of result has the same dissolved and total amount, as for a single
    sample. Half of a reporting limit counts in balances, the limit in compliance.
    """
    said = list(notes)
    ordered = sorted(records, key=lambda record: (record.day, record.time, record.label))
    flows, measured_flow = _flows(ordered, defaults, said)
    kept = [(r, f) for r, f in zip(ordered, flows, strict=True) if f > 0.0]
    dry = [r for r, f in zip(ordered, flows, strict=True) if f <= 0.0]
    if dry:
        said.append(f"{_on_days(dry)}: no flow, left out")
    if not kept:
        raise ValueError("no sample with flow")
    rows = [record for record, _ in kept]
    filled = _Filling(rows, defaults, said)
    samples = tuple(
        Sample(
            day=record.day, time=record.time, label=record.label, flow_m3_per_d=flow,
            analysis=filled.analysis(i), assumed=tuple(filled.assumed[i]), other=record.other,
        )
        for i, (record, flow) in enumerate(kept)
    )  # fmt: skip
    return Samples(
        source=source, samples=samples, assumptions=tuple(dict.fromkeys(said)),
        unknown=unknown or {}, summary=tuple(filled.summary), flow_is_measured=measured_flow,
    )  # fmt: skip


def _flows(
    records: Sequence[SampleRecord], defaults: SampleDefaults, said: list[str]
) -> tuple[list[float], bool]:
    known = [r.flow_m3_per_d for r in records if r.flow_m3_per_d is not None]
    if not known:
        said.append("flow: not in the file, so every sample weighs the same")
        return [defaults.flow_m3_per_d or 1.0] * len(records), False
    blank = [r for r in records if r.flow_m3_per_d is None]
    middle = statistics.median(f for f in known if f > 0.0) if any(known) else 0.0
    if blank:
        said.append(_blank_text("flow", blank, len(records), f"{middle:.4g} m3/d"))
    return [middle if r.flow_m3_per_d is None else r.flow_m3_per_d for r in records], True


def _on_days(records: Sequence[SampleRecord]) -> str:
    days = [record.day.isoformat() for record in records]
    shown = ", ".join(days[:_MOST_DAYS_NAMED])
    more = len(days) - _MOST_DAYS_NAMED
    return shown if more <= 0 else f"{shown} and {more} more"


def _blank_text(what: str, blank: Sequence[SampleRecord], count: int, value: str) -> str:
    return (
        f"{what}: blank in {len(blank)} of {count} samples ({_on_days(blank)}), taken as the median"
        f" of the others, {value}"
    )


class _Filling:
    """Fills the gaps of all samples, one parameter after the other."""

    def __init__(
        self, records: Sequence[SampleRecord], defaults: SampleDefaults, said: list[str]
    ) -> None:
        self.records = records
        self.defaults = defaults
        self.said = said
        self.assumed: list[list[str]] = [[] for _ in records]
        self.summary: list[AnalyteSummary] = []
        self.measurements: list[dict[str, Measurement]] = [{} for _ in records]
        self._acid()
        self.temperature = self._plain("temperature", "C", _temperature, defaults.temperature_degc)
        self.tss = self._reported(
            "TSS", "mg/L", lambda r: r.tss_mg_per_l, Reported(value=defaults.tss_mg_per_l)
        )
        self._alkalinity()
        found_names = {a for r in records for a in (*r.dissolved, *r.total)}
        names = [name for name in ANALYTES if name in found_names]
        for name in names:
            self._analyte(name)
        for name, measurement in defaults.measurements.items():
            if name not in names:
                self.said.append(
                    f"{name}: not in the file, {measurement.as_written} of the site file for every"
                    " sample"
                )
                for amounts in self.measurements:
                    amounts[name] = measurement

    def analysis(self, i: int) -> WaterAnalysis:
        """The complete analysis of one sample."""
        alkalinity = self.alkalinity[i]
        temperature = self.temperature[i]
        tss = self.tss[i]
        return WaterAnalysis(
            measurements=self.measurements[i], close_charge_with=self.defaults.close_charge_with,
            temperature_degc=25.0 if temperature is None else temperature,
            ph=self.ph[i], acidity_meq_per_l=self.acidity[i],
            alkalinity_mg_per_l_as_caco3=alkalinity,
            tss_mg_per_l=0.0 if tss is None else tss.balance, aerated=self.defaults.aerated,
        )  # fmt: skip

    # -- sum parameters --------------------------------------------------------------------------

    def _acid(self) -> None:
        """The pH of each sample, and its acidity where one was measured."""
        self.acidity = [r.acidity_meq_per_l for r in self.records]
        without = [r for r in self.records if r.acidity_meq_per_l is None]
        if without and len(without) < len(self.records):
            self.said.append(f"acidity: blank on {_on_days(without)}, where the pH stands for it")
        if len(without) == len(self.records):
            self.acidity = [self.defaults.acidity_meq_per_l] * len(self.records)
        self.ph = self._plain(
            "pH", "", lambda r: r.ph, self.defaults.ph,
            needed=lambda i: self.acidity[i] is None,
        )  # fmt: skip

    def _alkalinity(self) -> None:
        default = self.defaults.alkalinity_mg_per_l_as_caco3
        found = self._reported(
            "alkalinity", "mg/L as CaCO3", lambda r: r.alkalinity_mg_per_l_as_caco3,
            None if default is None else Reported(value=default),
            needed=lambda i: (self.ph[i] or 7.0) >= ALKALINITY_LEAST_PH,
        )  # fmt: skip
        self.alkalinity = [None if a is None or a.balance == 0.0 else a.balance for a in found]

    def _plain(
        self, what: str, unit: str, value_of: Callable[[SampleRecord], float | None],
        default: float | None, needed: Callable[[int], bool] = lambda i: True,
    ) -> list[float | None]:  # fmt: skip
        found = self._reported(
            what, unit, lambda r: _as_reported(value_of(r)),
            None if default is None else Reported(value=default), needed,
        )  # fmt: skip
        return [None if value is None else value.value for value in found]

    def _reported(
        self, what: str, unit: str, value_of: Callable[[SampleRecord], Reported | None],
        default: Reported | None, needed: Callable[[int], bool] = lambda i: True,
    ) -> list[Reported | None]:  # fmt: skip
        values = [value_of(record) for record in self.records]
        known = [value for value in values if value is not None]
        if not known:
            return [default if needed(i) else None for i in range(len(values))]
        middle = _median(known)
        blank = [i for i, value in enumerate(values) if value is None and needed(i)]
        if blank:
            text = f"{middle.value:.4g} {unit}".strip()
            rows = [self.records[i] for i in blank]
            self.said.append(_blank_text(what, rows, len(values), text))
        for i in blank:
            values[i] = middle
            self.assumed[i].append(what)
        self._summarise(what, unit, known, len(blank))
        return values

    # -- analytes --------------------------------------------------------------------------------

    def _analyte(self, name: str) -> None:
        dissolved = [r.dissolved.get(name) for r in self.records]
        total = [r.total.get(name) for r in self.records]
        if not any(dissolved) or not any(total):
            kind, other = ("dissolved", "total") if any(dissolved) else ("total", "dissolved")
            one = dissolved if any(dissolved) else total
            self.said.append(f"{name}: only {kind} reported, taken as {other} as well")
            dissolved = total = one
        share = _median_share(dissolved, total)
        known = [pair for pair in zip(dissolved, total, strict=True) if any(pair)]
        pairs = [_pair(d, t, share) for d, t in known]
        middle = _median([d for d, _ in pairs]), _median([t for _, t in pairs])
        blank, derived = [], []
        for i, (d, t) in enumerate(zip(dissolved, total, strict=True)):
            if d is None and t is None:
                blank.append(i)
                pair = middle
            else:
                pair = _pair(d, t, share)
                if d is None or t is None:
                    derived.append(i)
            self.measurements[i][name] = _measured(*pair)
        self._say_assumed(name, blank, derived, middle[0], share)
        self._summarise(name, "mg/L", [d for d, _ in pairs], len(blank), [t for _, t in pairs])

    def _say_assumed(
        self, name: str, blank: Sequence[int], derived: Sequence[int], middle: Reported,
        share: float,
    ) -> None:  # fmt: skip
        if blank:
            sign = "<" if middle.is_below else ""
            self.said.append(
                _blank_text(
                    name, [self.records[i] for i in blank], len(self.records),
                    f"{sign}{middle.value:.4g} mg/L",
                )
            )  # fmt: skip
        if derived:
            days = _on_days([self.records[i] for i in derived])
            self.said.append(
                f"{name}: only one of dissolved and total on {days}; the other from the median"
                f" share of dissolved, {100.0 * share:.0f} %"
            )
        for i in (*blank, *derived):
            self.assumed[i].append(name)

    def _summarise(
        self, what: str, unit: str, known: Sequence[Reported], blanks: int,
        totals: Sequence[Reported] = (),
    ) -> None:  # fmt: skip
        values = [value.value for value in known]
        below = sum(value.is_below for value in known)
        middle = statistics.median(values)
        highest = max(values)
        total_highest = max((t.value for t in totals), default=None)
        self.summary.append(
            AnalyteSummary(
                analyte=what, unit=unit, results=len(values), below=below, blanks=blanks,
                lowest=min(values), median=middle, highest=highest,
                total_highest=None if total_highest == highest else total_highest,
            )
        )  # fmt: skip
        if unit == "mg/L" and middle > 0.0 and highest > UNLIKELY_RATIO * middle:
            self.said.append(
                f"{what}: the highest value, {highest:.4g} mg/L, is {highest / middle:.0f} times"
                " the median: check its unit"
            )


def _as_reported(value: float | None) -> Reported | None:
    return None if value is None else Reported(value=value)


def _temperature(record: SampleRecord) -> float | None:
    return record.temperature_degc


def _median(values: Sequence[Reported]) -> Reported:
    """Median of reported values; below where most of them are."""
    below = 2 * sum(value.is_below for value in values) > len(values)
    middle = statistics.median(value.value for value in values)
    return Reported(value=middle, is_below=below, as_written=f"median {middle:.4g} mg/L")


def _median_share(dissolved: Sequence[Reported | None], total: Sequence[Reported | None]) -> float:
    shares = [
        min(d.balance / t.balance, 1.0)
        for d, t in zip(dissolved, total, strict=True)
        if d is not None and t is not None and t.balance > 0.0
    ]
    return statistics.median(shares) if shares else 1.0


def _pair(
    dissolved: Reported | None, total: Reported | None, share: float
) -> tuple[Reported, Reported]:
    if dissolved is not None and total is not None:
        return dissolved, total
    if total is not None:
        return replace(total, value=total.value * share), total
    assert dissolved is not None
    return dissolved, replace(dissolved, value=dissolved.value / max(share, 1e-3))


def _measured(dissolved: Reported, total: Reported) -> Measurement:
    """Both values as a measurement; a reporting limit above the total gives way to the total."""
    return Measurement(
        dissolved_mg_per_l=min(dissolved.value, total.value), total_mg_per_l=total.value,
        below_reporting_limit=dissolved.is_below,
        as_written=dissolved.as_written
        if dissolved is total
        else f"dissolved {dissolved.as_written}, total {total.as_written}",
    )  # fmt: skip

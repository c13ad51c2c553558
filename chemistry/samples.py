"""Dated samples of one feed as frozen types: as reported, complete, and summed up.

Filling the gaps of what was reported is `chemistry.sample_gaps`, closing the charges of all samples
together `chemistry.sample_waters`; files are read elsewhere.
"""

from __future__ import annotations

import datetime
import statistics
from collections.abc import Mapping
from dataclasses import dataclass, field

from chemistry.analysis import Measurement, WaterAnalysis


@dataclass(frozen=True, slots=True, kw_only=True)
class Reported:
    """One reported value; with ``is_below`` it is the reporting limit."""

    value: float
    is_below: bool = False
    as_written: str = ""

    @property
    def balance(self) -> float:
        """What balances count: half of a reporting limit, see `Measurement.balance_mg_per_l`."""
        return self.value * (0.5 if self.is_below else 1.0)


@dataclass(frozen=True, slots=True, kw_only=True)
class SampleRecord:
    """What a laboratory reported of one sample; None and missing keys are blanks.

    ``dissolved`` and ``total`` are mg/L of the analyte itself by analyte id. ``other`` keeps what
    no analyte is known for, as written.
    """

    day: datetime.date
    time: str = ""
    label: str = ""
    flow_m3_per_d: float | None = None
    ph: float | None = None
    temperature_degc: float | None = None
    alkalinity_mg_per_l_as_caco3: Reported | None = None
    acidity_meq_per_l: float | None = None
    tss_mg_per_l: Reported | None = None
    dissolved: Mapping[str, Reported] = field(default_factory=dict)
    total: Mapping[str, Reported] = field(default_factory=dict)
    other: Mapping[str, str] = field(default_factory=dict)


@dataclass(frozen=True, slots=True, kw_only=True)
class SampleDefaults:
    """What holds for every sample where the file has no column for it."""

    close_charge_with: str
    temperature_degc: float | None = None
    flow_m3_per_d: float | None = None
    ph: float | None = None
    acidity_meq_per_l: float | None = None
    alkalinity_mg_per_l_as_caco3: float | None = None
    tss_mg_per_l: float = 0.0
    aerated: bool = False
    measurements: Mapping[str, Measurement] = field(default_factory=dict)


@dataclass(frozen=True, slots=True, kw_only=True)
class Sample:
    """One sample, complete; ``assumed`` names what was blank in it."""

    day: datetime.date
    time: str
    label: str
    flow_m3_per_d: float
    analysis: WaterAnalysis
    assumed: tuple[str, ...] = ()
    other: Mapping[str, str] = field(default_factory=dict)

    @property
    def name(self) -> str:
        """Day, time and name as printed."""
        return " ".join(part for part in (self.day.isoformat(), self.time, self.label) if part)


@dataclass(frozen=True, slots=True, kw_only=True)
class AnalyteSummary:
    """One analyte over all samples: results counted, and the range of its values.

    ``unit`` is that of the three figures. Dissolved amounts; a reporting limit counts in full.
    """

    analyte: str
    unit: str
    results: int
    below: int
    blanks: int
    lowest: float
    median: float
    highest: float
    total_highest: float | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Samples:
    """A feed as dated samples, in order of time.

    Parameters
    ----------
    source
        Where they were read, for messages.
    samples
        The samples with flow; one sample at least.
    assumptions
        Sentences on everything that was not measured.
    unknown
        Columns or parameters that no analyte is known for, with a hint where there is one.
    summary
        One entry for each analyte and sum parameter.
    flow_is_measured
        Whether the flows were read; otherwise all samples weigh the same.
    """

    source: str
    samples: tuple[Sample, ...]
    assumptions: tuple[str, ...] = ()
    unknown: Mapping[str, str] = field(default_factory=dict)
    summary: tuple[AnalyteSummary, ...] = ()
    flow_is_measured: bool = True

    @property
    def weights(self) -> tuple[float, ...]:
        """Share of each sample in the volume; they add up to 1."""
        whole = sum(sample.flow_m3_per_d for sample in self.samples)
        return tuple(sample.flow_m3_per_d / whole for sample in self.samples)

    @property
    def mean_flow_m3_per_d(self) -> float:
        """Mean of the samples' flows. [m3/d]"""
        return statistics.fmean(sample.flow_m3_per_d for sample in self.samples)

    @property
    def analytes(self) -> tuple[str, ...]:
        """Analytes of the samples."""
        return tuple(self.samples[0].analysis.measurements)

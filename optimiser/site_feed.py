"""The feed block of a site file: flow, analysis, acid, and the refusals that precede planning.

Owns reading and checking that block; closing the charge is `chemistry.feed`.
"""

from __future__ import annotations

import datetime
import math
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

from catalogs.entries import NON_NEGATIVE, PH, POSITIVE, Entry, Range, to_day, to_number
from catalogs.positions import Items, Node, Table, describe
from catalogs.problems import Spot, did_you_mean, echo, listed
from catalogs.quantities import Concentration, read_alkalinity, read_concentration
from chemistry.analysis import ACIDITY_END_PH, CHELATES
from chemistry.errors import WaterError
from chemistry.feed import ANALYTES, METALS, Measurement, WaterAnalysis
from chemistry.sample_waters import mean_analysis
from chemistry.samples import SampleDefaults
from optimiser.site_samples import SampleBlock, finish_samples, read_sample_source

STATES_OF_ELEMENT: Mapping[str, tuple[str, ...]] = {
    "Fe": ("Fe(II)", "Fe(III)"),
    "Cr": ("Cr(III)", "Cr(VI)"),
}
"""Elements that are limited as a sum and analysed by oxidation state."""

STANDS_FOR = ("average", "peak")
PRETREATMENT_MG_PER_L: Mapping[str, tuple[float, str]] = {
    "Cr(VI)": (0.05, "reduce it to Cr(III) first"),
    "CN": (0.05, "destroy it first, by oxidation"),
}
"""Dissolved amounts that must be pretreated, and how (hydroxide and sulfide leave both alone)."""

CLOSING_IONS = tuple(
    a.analyte
    for a in ANALYTES.values()
    if a.is_modelled and not a.is_metal and a.analyte not in CHELATES
)
_TEMPERATURE_DEGC = Range(low=0.0, high=60.0)
_DAYS_PER_YEAR = Range(above=0.0, high=366.0)


@dataclass(frozen=True, slots=True, kw_only=True)
class FeedBlock:
    """What the feed block says; ``analysis`` is None when something in it is wrong."""

    stands_for: str
    flow_m3_per_d: float
    peak_flow_m3_per_d: float | None
    operating_days_per_year: float
    temperature_degc: float
    analysis: WaterAnalysis | None
    analysed: Mapping[str, Spot]
    aerated: bool
    closing_analyte: str
    pretreated: Mapping[str, str]
    analysis_spot: Spot
    notes: tuple[str, ...]
    sampled: SampleBlock | None = None
    samples_named: bool = False

    @property
    def is_complete(self) -> bool:
        """Whether every analyte is known: a file of samples that is named could be read."""
        return not self.samples_named or self.sampled is not None


def read_feed(entry: Entry, folder: Path, on_day: datetime.date) -> FeedBlock:
    """Read the feed block of a site file.

    Parameters
    ----------
    entry
        The block; its log takes the problems.
    folder
        Where the site file lies, for a file of samples beside it.
    on_day
        Day after which no sample can have been taken.

    Notes
    -----
    With a file of samples the keys of the block stand for what the file lacks, and a flow given
    beside it stays the flow of the year. The analysis is then the mean of the samples.
    """
    before = len(entry.spot.log.problems)
    has_samples = entry.has("samples")
    stands_for = entry.choice("stands_for", STANDS_FOR, "kinds of feed")
    flow = _number(entry, "flow_m3_per_d", POSITIVE, required=not has_samples)
    peak_flow = _peak_flow(entry, flow)
    days = entry.number("operating_days_per_year", _DAYS_PER_YEAR)
    temperature = _number(entry, "temperature_degc", _TEMPERATURE_DEGC, required=not has_samples)
    aerated = entry.flag_or("aerated", default=False)
    closing = entry.choice("close_charge_with", CLOSING_IONS, "closing ions")
    analysed: dict[str, Spot] = {}
    measurements = _read_measurements(entry, analysed, required=not has_samples)
    acid = _read_acid(entry, required=not has_samples)
    if has_samples and acid.titration:
        entry.at("titration").problem(
            "one titration beside a file of samples", "the acidity of each sample",
            "Give an acidity column in the file, or leave the titration out.",
        )  # fmt: skip
    source = read_sample_source(entry, folder, on_day) if has_samples else None
    sampled = None
    if source is not None and len(entry.spot.log.problems) == before:
        sampled = finish_samples(
            source, entry,
            SampleDefaults(
                close_charge_with=closing, temperature_degc=temperature, flow_m3_per_d=flow,
                ph=acid.ph, acidity_meq_per_l=acid.acidity_meq_per_l, aerated=aerated,
                alkalinity_mg_per_l_as_caco3=acid.alkalinity_mg_per_l_as_caco3,
                tss_mg_per_l=acid.tss_mg_per_l, measurements=measurements,
            ),
        )  # fmt: skip
    highest = measurements if sampled is None else _highest(sampled)
    if source is not None:
        analysed |= dict.fromkeys(source.analytes, source.spot)
    pretreated, notes = _read_pretreated(entry, highest, analysed)
    entry.finish()
    analysis = None
    if len(entry.spot.log.problems) == before and sampled is not None:
        analysis = mean_analysis(sampled.samples)
        flow = sampled.samples.mean_flow_m3_per_d if flow is None else flow
        temperature = analysis.temperature_degc if temperature is None else temperature
    elif len(entry.spot.log.problems) == before:
        analysis = _water(
            acid, entry.at("analysis"), measurements=measurements, close_charge_with=closing,
            temperature_degc=temperature or 0.0, aerated=aerated,
        )  # fmt: skip
    return FeedBlock(
        stands_for=stands_for, flow_m3_per_d=math.nan if flow is None else flow,
        peak_flow_m3_per_d=peak_flow, operating_days_per_year=days, analysis=analysis,
        analysed=analysed, aerated=aerated,
        temperature_degc=math.nan if temperature is None else temperature,
        closing_analyte=closing, pretreated=pretreated, analysis_spot=entry.at("analysis"),
        notes=notes, sampled=sampled, samples_named=has_samples,
    )  # fmt: skip


def _number(entry: Entry, key: str, allowed: Range, *, required: bool) -> float | None:
    return entry.number(key, allowed) if required else entry.number_or(key, None, allowed)


def _highest(sampled: SampleBlock) -> dict[str, Measurement]:
    """The measurement with most of each analyte in solution."""
    analyses = [sample.analysis for sample in sampled.samples.samples]
    return {
        name: max((a.measurements[name] for a in analyses), key=lambda m: m.dissolved_mg_per_l)
        for name in sampled.samples.analytes
    }


def _peak_flow(entry: Entry, flow: float | None) -> float | None:
    peak = entry.number_or("peak_flow_m3_per_d", None, POSITIVE)
    if peak is not None and flow is not None and peak < flow:
        entry.at("peak_flow_m3_per_d").problem(
            f"a peak of {peak:g} m3/d below the flow of {flow:g} m3/d",
            "the highest flow of a day",
            "Correct one of the two.",
        )
    return peak


@dataclass(frozen=True, slots=True, kw_only=True)
class _Acid:
    """The sum parameters of an analysis: its acid, its alkalinity, its solids."""

    ph: float | None
    acidity_meq_per_l: float | None
    acidity_end_ph: float
    titration: tuple[tuple[float, float], ...]
    alkalinity_mg_per_l_as_caco3: float | None
    tss_mg_per_l: float


def _read_acid(entry: Entry, *, required: bool) -> _Acid:
    alkalinity = None
    for node, spot in entry.value("alkalinity"):
        alkalinity = read_alkalinity(node, spot)
    acid = _Acid(
        ph=entry.number_or("ph", None, PH),
        acidity_meq_per_l=entry.number_or("acidity_meq_per_l", None, NON_NEGATIVE),
        acidity_end_ph=entry.number_or("acidity_end_ph", ACIDITY_END_PH, PH),
        titration=_read_titration(entry),
        alkalinity_mg_per_l_as_caco3=alkalinity,
        tss_mg_per_l=entry.number_or("tss_mg_per_l", 0.0, NON_NEGATIVE),
    )
    given = any(entry.has(key) for key in ("ph", "acidity_meq_per_l", "titration"))
    if required and not given:
        entry.at("ph").problem(
            "no acid", "ph, acidity_meq_per_l or titration", "Add the measured `ph` here."
        )
    return acid


def _water(
    acid: _Acid, spot: Spot, *, measurements: Mapping[str, Measurement], close_charge_with: str,
    temperature_degc: float, aerated: bool,
) -> WaterAnalysis | None:  # fmt: skip
    """Put the analysis together; what only its own checks find is a problem too."""
    try:
        return WaterAnalysis(
            measurements=measurements, close_charge_with=close_charge_with,
            temperature_degc=temperature_degc, aerated=aerated, ph=acid.ph,
            acidity_meq_per_l=acid.acidity_meq_per_l, acidity_end_ph=acid.acidity_end_ph,
            titration=acid.titration, tss_mg_per_l=acid.tss_mg_per_l,
            alkalinity_mg_per_l_as_caco3=acid.alkalinity_mg_per_l_as_caco3,
        )  # fmt: skip
    except WaterError as error:
        spot.problem(str(error), "a water that can exist", "Correct the analysis.")
        return None


def _read_titration(entry: Entry) -> tuple[tuple[float, float], ...]:
    points: list[tuple[float, float]] = []
    for node, spot in entry.items("titration"):
        if not isinstance(node, Items) or len(node.nodes) != 2:
            spot.problem(
                describe(node), "a pair [base in meq/L, pH]", "Write each point as [4.5, 3.1]."
            )
            continue
        base = to_number(node.nodes[0], spot, NON_NEGATIVE)
        ph = to_number(node.nodes[1], spot, PH)
        if points and (base <= points[-1][0] or ph < points[-1][1]):
            spot.problem(
                f"{base:g} meq/L at pH {ph:g} after {points[-1][0]:g} meq/L at {points[-1][1]:g}",
                "points that rise in base and in pH",
                "Sort the points; leave out those where the pH fell.",
            )
        elif math.isfinite(base) and math.isfinite(ph):
            points.append((base, ph))
    return tuple(points)


def _read_measurements(
    entry: Entry, analysed: dict[str, Spot], *, required: bool
) -> dict[str, Measurement]:
    before = len(entry.spot.log.problems)
    block = entry.block("analysis") if required else entry.block_or_none("analysis")
    found: dict[str, Measurement] = {}
    for name, node, spot in block.pairs() if block else ():
        if not _is_analyte(name, spot):
            continue
        analysed[name] = spot
        measurement = _measurement(name, node, spot)
        if measurement is not None:
            found[name] = measurement
    sound = len(entry.spot.log.problems) == before
    if block is not None and required and sound and not any(name in METALS for name in analysed):
        block.spot.problem(
            "no metal", "at least one metal", f"Add what was measured: {listed(METALS)}."
        )
    return found


def _is_analyte(name: str, spot: Spot) -> bool:
    if name in ANALYTES:
        return True
    if name in STATES_OF_ELEMENT:
        first, second = STATES_OF_ELEMENT[name]
        spot.problem(
            f"{name} without its oxidation state",
            f"{first} and {second} apart",
            f"Give {first} and {second}; where one was measured, the other is the rest of the"
            f" total {name}.",
        )
        return False
    near = did_you_mean(name, ANALYTES, what="analytes")
    spot.problem(
        echo(name),
        "an analyte",
        f"{near} Leave out an ion that is not listed; the closing ion stands for its charge.",
    )
    return False


def _measurement(name: str, node: Node, spot: Spot) -> Measurement | None:
    analyte = ANALYTES[name]
    if not isinstance(node, Table):
        single = read_concentration(node, spot, analyte)
        return None if single is None else _measured(single, single)
    entry = Entry(node, spot)
    parts: dict[str, Concentration] = {}
    for key in ("dissolved", "total"):
        for part, place in entry.value(key, expected="a quantity such as 38 mg/L"):
            value = read_concentration(part, place, analyte)
            if value is not None:
                parts[key] = value
    entry.finish()
    if len(parts) < 2:
        return None
    dissolved, total = parts["dissolved"], parts["total"]
    if dissolved.mg_per_l > total.mg_per_l and not dissolved.is_below:
        spot.problem(
            f"dissolved {dissolved.as_written} above total {total.as_written}",
            "dissolved at most total",
            "Check the units and whether the two values were swapped.",
        )
        return None
    return _measured(dissolved, total)


def _measured(dissolved: Concentration, total: Concentration) -> Measurement:
    """Put both values together; a reporting limit above the total gives way to the total."""
    return Measurement(
        dissolved_mg_per_l=min(dissolved.mg_per_l, total.mg_per_l),
        total_mg_per_l=total.mg_per_l,
        below_reporting_limit=dissolved.is_below,
        as_written=dissolved.as_written
        if dissolved is total
        else f"dissolved {dissolved.as_written}, total {total.as_written}",
    )


def _read_pretreated(
    entry: Entry, measurements: Mapping[str, Measurement], analysed: Mapping[str, Spot]
) -> tuple[dict[str, str], tuple[str, ...]]:
    """Read what was pretreated, and refuse what must be and was not."""
    days: dict[str, str] = {}
    named: set[str] = set()
    block = entry.block_or_none("pretreated")
    for name, node, spot in block.pairs() if block else ():
        if name in PRETREATMENT_MG_PER_L:
            named.add(name)
            days[name] = to_day(node, spot)
        else:
            remedy = did_you_mean(name, PRETREATMENT_MG_PER_L, what="pretreatments")
            spot.problem(echo(name), "Cr(VI) or CN", remedy)
    notes: list[str] = []
    for name, (most, how) in PRETREATMENT_MG_PER_L.items():
        if name not in measurements or measurements[name].dissolved_mg_per_l <= most:
            continue
        value = measurements[name].as_written
        if name not in named:
            _refuse(name, value, most, how, analysed[name])
        elif days[name]:
            notes.append(
                f"{name}: {value} is above {most:g} mg/L; the site states pretreatment on"
                f" {days[name]}. Precipitation does not remove it"
            )
    return days, tuple(notes)


def _refuse(name: str, value: str, most: float, how: str, spot: Spot) -> None:
    advice = f"Precipitation does not remove it: {how}, then give the analysis after that"
    spot.problem(
        value,
        f"at most {most:g} mg/L dissolved {ANALYTES[name].name}",
        f"{advice}, and name the day in feed: `pretreated: {{{name}: 2026-05-04}}`.",
    )

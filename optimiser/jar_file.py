"""What jar tests found, as a small YAML file in the site folder: written whole, read strictly.

Owns the file's shape. How the factors are found is `optimiser.jar_tests`; what the site makes of
them `optimiser.site_jar`.
"""

from __future__ import annotations

from collections.abc import Collection, Mapping
from dataclasses import dataclass, field
from pathlib import Path

from catalogs.entries import NON_NEGATIVE, PH, POSITIVE, Entry, Range
from catalogs.positions import load_yaml
from catalogs.problems import ProblemLog
from chemistry.calibration import FactorFit
from optimiser.whole_files import write_whole

JAR_FILE = "jar.yaml"
_RATE = Range(above=0.0, high=1.0)


@dataclass(frozen=True, slots=True, kw_only=True)
class Span:
    """Lowest and highest value that the tests covered."""

    low: float
    high: float


@dataclass(frozen=True, slots=True, kw_only=True)
class JarCalibration:
    """Factors from jar tests with the conditions that they hold for.

    Parameters
    ----------
    results
        Name of the bench sheet.
    first_day, last_day
        Days of the tests, year-month-day.
    confidence
        Of the intervals.
    dose_factors
        Reagent to fed over reacting.
    residual_factors
        Metal to dissolved as measured over dissolved by theory.
    floors_mg_per_l
        Metal to the total that at least three jars reached, where it is below the practical floor.
    ph, doses_mg_per_l
        Ranges of pH and of doses (pure, fed) that were tested.
    feed_mg_per_l
        Dissolved metals of the water tested.
    temperature_degc
        Range of temperatures, None where none was written.
    """

    results: str
    first_day: str
    last_day: str
    jars: int
    confidence: float
    ph: Span
    dose_factors: Mapping[str, FactorFit] = field(default_factory=dict)
    residual_factors: Mapping[str, FactorFit] = field(default_factory=dict)
    floors_mg_per_l: Mapping[str, float] = field(default_factory=dict)
    doses_mg_per_l: Mapping[str, Span] = field(default_factory=dict)
    feed_mg_per_l: Mapping[str, float] = field(default_factory=dict)
    temperature_degc: Span | None = None

    def outside(
        self, *, ph: float | None = None, doses_mg_per_l: Mapping[str, float] | None = None,
        feed_mg_per_l: Mapping[str, float] | None = None,
    ) -> tuple[str, ...]:  # fmt: skip
        """Say what of a plan or a feed lies outside the tested range.

        Examples
        --------
        >>> made = JarCalibration(results="b.csv", first_day="2025-05-04", last_day="2025-05-04",
        ...                       jars=3, confidence=0.9, ph=Span(low=8.0, high=9.0))
        >>> made.outside(ph=9.6)
        ('pH 9.6: the jar tests ran from 8 to 9',)
        """
        said = []
        if ph is not None and not self.ph.low <= ph <= self.ph.high:
            said.append(f"pH {ph:g}: the jar tests ran from {self.ph.low:g} to {self.ph.high:g}")
        for reagent, dose in (doses_mg_per_l or {}).items():
            name = reagent.partition("@")[0]
            span = self.doses_mg_per_l.get(name)
            if dose > 0.0 and span is None:
                said.append(f"{name}: not in the jar tests")
            elif dose > 0.0 and span is not None and not span.low <= dose <= span.high:
                said.append(
                    f"{name} {dose:.4g} mg/L: the jar tests ran from {span.low:g} to {span.high:g}"
                )
        for metal, amount in (feed_mg_per_l or {}).items():
            tested = self.feed_mg_per_l.get(metal)
            if tested and not tested / FEED_CHANGE <= amount <= tested * FEED_CHANGE:
                said.append(
                    f"{metal} {amount:.3g} mg/L in the feed: the water tested held {tested:.3g}"
                )
        return tuple(said)


FEED_CHANGE = 1.5
"""A metal of the feed that changed by more than this asks for new tests (common practice)."""


def calibration_text(calibration: JarCalibration, tests: Collection[str] = ()) -> str:
    """Write a calibration as the text of its file, with the tests behind it as comments."""
    made = calibration
    lines = [
        "# Factors from jar tests, written by `dosewright jar`. Name this file in the site file:",
        "#     treatment: {jar_tests: " + JAR_FILE + ", ...}",
        f"results: {_quoted(made.results)}",
        f"first_day: {made.first_day}",
        f"last_day: {made.last_day}",
        f"jars: {made.jars}",
        f"confidence: {made.confidence:g}          # chance that an interval holds its factor",
        f"ph: {_span(made.ph)}",
    ]
    if made.temperature_degc is not None:
        lines.append(f"temperature_degc: {_span(made.temperature_degc)}")
    lines += _block("doses_mg_per_l", {k: _span(v) for k, v in made.doses_mg_per_l.items()})
    lines += _block("feed_mg_per_l", {k: f"{v:.5g}" for k, v in made.feed_mg_per_l.items()})
    lines += _block("dose_factors", {k: _fit(v) for k, v in made.dose_factors.items()})
    lines += _block("residual_factors", {k: _fit(v) for k, v in made.residual_factors.items()})
    lines += _block("floors_mg_per_l", {k: f"{v:.5g}" for k, v in made.floors_mg_per_l.items()})
    if tests:
        lines += ["# The tests beside theory:", *(f"#   {line}".rstrip() for line in tests)]
    return "\n".join(lines) + "\n"


def _quoted(text: str) -> str:
    return '"' + text.replace("\\", "\\\\").replace('"', '\\"') + '"'


def _span(span: Span) -> str:
    return f"{{low: {span.low:.5g}, high: {span.high:.5g}}}"


def _fit(fit: FactorFit) -> str:
    assumed = ", scatter_assumed: true" if fit.scatter_assumed else ""
    return (
        f"{{factor: {fit.factor:.5g}, low: {fit.low:.5g}, high: {fit.high:.5g}, "
        f"scatter_ln: {fit.scatter_ln:.4g}, jars: {fit.jars}{assumed}}}"
    )


def _block(name: str, values: Mapping[str, str]) -> list[str]:
    return [f"{name}:", *(f"  {key}: {value}" for key, value in values.items())] if values else []


def write_calibration(path: Path, text: str, *, force: bool = False) -> None:
    """Write the file whole or not at all.

    Parameters
    ----------
    path
        The file; its folder must exist.
    text
        What `calibration_text` made.
    force
        Replace a file that is there.

    Raises
    ------
    FileExistsError
        The file is there and ``force`` is not given; it is left as it is.
    OSError
        The folder cannot be written to; nothing was left behind.
    """
    write_whole(path, text.encode(), force=force)


def read_calibration(
    path: Path, log: ProblemLog, reagents: Collection[str], metals: Collection[str]
) -> JarCalibration | None:
    """Read the file of a site; None when a problem was recorded.

    Parameters
    ----------
    path
        The file.
    log
        Takes the problems.
    reagents
        Reagents that a factor may be given for.
    metals
        Metals and elements that a factor may be given for.
    """
    before = len(log.problems)
    table = load_yaml(path, log)
    if table is None:
        return None
    entry = Entry.top(table, str(path), log)
    spans = entry.block_or_none("doses_mg_per_l")
    found = JarCalibration(
        results=entry.text("results"), first_day=entry.day_or("first_day"),
        last_day=entry.day_or("last_day"), jars=entry.count_or("jars", 1, low=1, high=10_000),
        confidence=entry.number("confidence", _RATE), ph=_read_span(entry.block("ph"), PH),
        temperature_degc=_read_span(entry.block("temperature_degc"), Range(low=0.0, high=60.0))
        if entry.has("temperature_degc") else None,
        doses_mg_per_l={
            name: _read_span(block, NON_NEGATIVE)
            for name, block in (spans.blocks_by_name(reagents, "reagents") if spans else ())
        },
        feed_mg_per_l=entry.numbers("feed_mg_per_l", metals, "metals"),
        dose_factors=_read_fits(entry, "dose_factors", reagents, "reagents"),
        residual_factors=_read_fits(entry, "residual_factors", metals, "metals"),
        floors_mg_per_l=entry.numbers("floors_mg_per_l", metals, "metals", POSITIVE),
    )  # fmt: skip
    entry.finish()
    return found if len(log.problems) == before else None


def _read_span(block: Entry | None, allowed: Range) -> Span:
    if block is None:
        return Span(low=0.0, high=0.0)
    span = Span(low=block.number("low", allowed), high=block.number("high", allowed))
    if span.low > span.high:
        block.spot.problem(
            f"low {span.low:g} above high {span.high:g}", "low at most high", "Swap the values."
        )
    block.finish()
    return span


def _read_fits(entry: Entry, key: str, names: Collection[str], what: str) -> dict[str, FactorFit]:
    block = entry.block_or_none(key)
    found: dict[str, FactorFit] = {}
    for name, part in block.blocks_by_name(names, what) if block else ():
        fit = FactorFit(
            factor=part.number("factor", POSITIVE), low=part.number("low", POSITIVE),
            high=part.number("high", POSITIVE), scatter_ln=part.number("scatter_ln", NON_NEGATIVE),
            jars=part.count_or("jars", 1, low=1, high=10_000),
            scatter_assumed=part.flag_or("scatter_assumed", default=False),
        )  # fmt: skip
        if fit.low > fit.factor or fit.factor > fit.high:
            part.spot.problem(
                f"factor {fit.factor:g} outside its interval {fit.low:g} to {fit.high:g}",
                "low, factor and high in this order", "Correct them, or run the jar tests again.",
            )  # fmt: skip
        part.finish()
        found[name] = fit
    return found

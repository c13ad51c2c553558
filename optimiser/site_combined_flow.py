"""The combined_flow block of a site: streams that join the treated one before the sampling point.

Owns what becomes of the categorical limits of the named sets; own limits are the permit's words and
stay as they are. The formula is `optimiser.combined_flow`.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

from catalogs.entries import NON_NEGATIVE, POSITIVE, Entry
from catalogs.limit_sets import SetLimit, load_limit_sets
from catalogs.problems import Spot, listed
from chemistry.feed import BURDENS, METALS
from optimiser.combined_flow import alternative_limit_mg_per_l, treated_ceiling_mg_per_l
from optimiser.site import Limit
from optimiser.site_feed import STATES_OF_ELEMENT

REGULATED, UNREGULATED, DILUTE = "regulated", "unregulated", "dilute"
BEFORE, AFTER = "before_treatment", "after_treatment"
_PARAMETERS = (*METALS, *STATES_OF_ELEMENT, *BURDENS)
_PERIODS = {"daily": "daily_mg_per_l", "monthly": "monthly_mg_per_l"}


@dataclass(frozen=True, slots=True, kw_only=True)
class Stream:
    """A stream beside the treated process water; ``limits`` are those of its own category."""

    name: str
    kind: str
    flow_m3_per_d: float
    limits: Mapping[str, SetLimit]
    mg_per_l: Mapping[str, float]
    spot: Spot


@dataclass(frozen=True, slots=True, kw_only=True)
class CombinedFlow:
    """Streams that are together at the sampling point, ``process_m3_per_d`` the site's own."""

    mixed: str
    process_m3_per_d: float
    streams: tuple[Stream, ...]
    detection_mg_per_l: Mapping[str, float]
    spot: Spot

    @property
    def total_m3_per_d(self) -> float:
        """Flow at the sampling point."""
        return self.process_m3_per_d + sum(s.flow_m3_per_d for s in self.streams)

    @property
    def dilute_m3_per_d(self) -> float:
        """Flow of the dilute streams."""
        return sum(s.flow_m3_per_d for s in self.streams if s.kind == DILUTE)

    def applied(self, limits: Sequence[Limit]) -> tuple[list[Limit], list[str]]:
        """Categorical limits as ceilings of the treated water, and notes with the numbers."""
        made, notes = [], []
        for limit in limits:
            found: dict[str, float | None] = {}
            for period, key in _PERIODS.items():
                value = getattr(limit, key)
                if value is None:
                    continue
                found[key], text = self._ceiling(limit.parameter, period, value)
                notes.append(text)
            source = f"{limit.source}; combined wastestream formula, 40 CFR 403.6(e)"
            made.append(replace(limit, source=source, **found))  # type: ignore[arg-type]
        where = (
            "the feed holds every stream, so the alternative limits are those of the treated water"
            if self.mixed == BEFORE
            else "the streams join after treatment, where the control authority decides on the"
            " formula; ceilings never exceed the limit at the end of the process (403.6(d))"
        )
        return made, [f"combined flow: {where}; own limits stand as written", *notes]

    def _ceiling(self, parameter: str, period: str, value: float) -> tuple[float, str]:
        regulated = [(self.process_m3_per_d, value)]
        for stream in self.streams:
            own = stream.limits.get(parameter)
            limit = getattr(own, _PERIODS[period]) if own else None
            if limit is not None:
                regulated.append((stream.flow_m3_per_d, limit))
        alternative = alternative_limit_mg_per_l(
            regulated, total_m3_per_d=self.total_m3_per_d, dilute_m3_per_d=self.dilute_m3_per_d
        )
        self._check_detection(parameter, period, alternative)
        text = (
            f"combined flow: {parameter} {period} {value:g} mg/L at the end of the process is"
            f" {alternative:.4g} mg/L at the sampling point ({sum(f for f, _ in regulated):g}"
            f" regulated and {self.dilute_m3_per_d:g} dilute of {self.total_m3_per_d:g} m3/d)"
        )
        if self.mixed == BEFORE:
            return alternative, text
        ceiling = min(value, self._left(parameter, period, alternative))
        return ceiling, f"{text}, which leaves {ceiling:.4g} mg/L for the treated stream"

    def _check_detection(self, parameter: str, period: str, alternative: float) -> None:
        least = self.detection_mg_per_l.get(parameter)
        if least is not None and alternative < least:
            self.spot.problem(
                f"an alternative limit of {alternative:.4g} mg/L {period} for {parameter}",
                f"at least its detection limit, {least:g} mg/L (40 CFR 403.6(e)(2))",
                "Sample the process before it is diluted, and leave `combined_flow` out.",
            )

    def _left(self, parameter: str, period: str, alternative: float) -> float:
        others = [(s.flow_m3_per_d, s.mg_per_l.get(parameter, 0.0)) for s in self.streams]
        for stream in self.streams:
            if stream.kind != DILUTE and parameter not in stream.mg_per_l:
                stream.spot.problem(
                    f"no {parameter} of the stream {stream.name}",
                    "its concentration: it counts at the sampling point",
                    f"Add `mg_per_l: {{{parameter}: ...}}` to the stream.",
                )
        left = treated_ceiling_mg_per_l(alternative, self.process_m3_per_d, others)
        if left <= 0.0:
            self.spot.problem(
                f"other streams that use up the {period} limit of {parameter}",
                f"something left of {alternative:.4g} mg/L for the treated stream",
                "Treat those streams too, or correct their concentrations.",
            )
            return alternative
        return left


def read_combined_flow(entry: Entry, flow_m3_per_d: float) -> CombinedFlow | None:
    """Read the block; None when a problem was recorded.

    Parameters
    ----------
    entry
        The block.
    flow_m3_per_d
        The site's flow: all streams where they mix before treatment, else the treated one alone.
    """
    before = len(entry.spot.log.problems)
    mixed = entry.choice("mixed", (BEFORE, AFTER), "places where the streams mix")
    streams = tuple(_stream(block) for block in entry.blocks("streams", required=True))
    detection = entry.numbers("detection_mg_per_l", _PARAMETERS, "parameters", POSITIVE)
    entry.finish()
    if len(entry.spot.log.problems) > before:
        return None
    others = sum(stream.flow_m3_per_d for stream in streams)
    process = flow_m3_per_d - others if mixed == BEFORE else flow_m3_per_d
    if process <= 0.0:
        entry.at("streams").problem(
            f"{others:g} m3/d of other streams in a feed of {flow_m3_per_d:g} m3/d",
            "less than the feed, which holds them all where they mix before treatment",
            f"Correct the flows, or write `mixed: {AFTER}`.",
        )
        return None
    return CombinedFlow(
        mixed=mixed, process_m3_per_d=process, streams=streams, detection_mg_per_l=detection,
        spot=entry.spot,
    )  # fmt: skip


def _stream(entry: Entry) -> Stream:
    sets = load_limit_sets()
    name = entry.text("stream")
    kind = entry.choice("kind", (REGULATED, UNREGULATED, DILUTE), "kinds of streams")
    flow = entry.number("flow_m3_per_d", POSITIVE)
    chosen = entry.choice_or("set", "", sets, "limit sets")
    if kind == REGULATED and not entry.has("set"):
        entry.spot.problem(
            "a regulated stream without its category", f"`set`, one of {listed(sets)}",
            "Name the limit set that regulates it, or write `kind: unregulated`.",
        )  # fmt: skip
    if kind in (UNREGULATED, DILUTE) and chosen:
        entry.at("set").problem(
            f"`set` beside `kind: {kind}`", "`set` only with `kind: regulated`", "Delete one."
        )
    amounts = entry.numbers("mg_per_l", _PARAMETERS, "parameters", NON_NEGATIVE)
    entry.finish()
    rows = sets[chosen].limits if chosen else ()
    return Stream(
        name=name, kind=kind, flow_m3_per_d=flow, mg_per_l=amounts, spot=entry.spot,
        limits={row.parameter: row for row in rows},
    )  # fmt: skip

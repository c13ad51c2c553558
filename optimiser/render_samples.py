"""The part of ``check`` that shows a file of samples: what was read, and what was assumed."""

from __future__ import annotations

from chemistry.samples import AnalyteSummary, Samples
from optimiser.site import Site
from optimiser.tables import bullets, number, paragraph, table

CHARGE_ERROR_PERCENT = 10.0
"""Charge-balance error above which an analysis is doubted (common practice)."""


def sample_lines(site: Site) -> list[str]:
    """Lines on the samples of a site; none where it has a single analysis."""
    samples = site.samples
    if samples is None:
        return []
    lines = ["", f"Samples in {samples.source}"]
    lines += paragraph(_period(samples))
    lines += table(
        ["what", "unit", "n", "below\nlimit", "blank", "lowest", "median", "highest",
         "highest\ntotal"],
        [_row(entry) for entry in samples.summary], text_columns=(0, 1),
    )  # fmt: skip
    lines += paragraph(
        "Dissolved amounts, a reporting limit counted in full; n is the number of results."
    )
    notes = [*samples.assumptions, *_charge_notes(site)]
    if notes:
        lines += ["Assumed, and worth knowing about the samples:", *bullets(notes)]
    return lines


def _period(samples: Samples) -> str:
    first, last = samples.samples[0], samples.samples[-1]
    count = len(samples.samples)
    text = f"{count} sample{'' if count == 1 else 's'}, {first.day} to {last.day}"
    if not samples.flow_is_measured:
        return f"{text}; the file holds no flow."
    flows = [sample.flow_m3_per_d for sample in samples.samples]
    return (
        f"{text}; flow {number(min(flows))} to {number(max(flows))} m3/d, mean "
        f"{number(samples.mean_flow_m3_per_d)}."
    )


def _row(entry: AnalyteSummary) -> list[str]:
    total = entry.total_highest
    return [
        entry.analyte, entry.unit or "-", str(entry.results),
        str(entry.below) if entry.below else "-", str(entry.blanks) if entry.blanks else "-",
        number(entry.lowest), number(entry.median), number(entry.highest),
        "" if total is None else number(total),
    ]  # fmt: skip


def _charge_notes(site: Site) -> list[str]:
    assert site.samples is not None
    if site.sample_waters is None:
        return []
    errors = site.sample_waters.charge_balance_error_percent
    doubted = [
        sample.day.isoformat()
        for sample, error in zip(site.samples.samples, errors, strict=True)
        if abs(error) > CHARGE_ERROR_PERCENT
    ]
    text = f"charge-balance error {min(errors):+.1f} to {max(errors):+.1f} % before closing"
    if doubted:
        text += f"; beyond {CHARGE_ERROR_PERCENT:g} % in {len(doubted)} of {len(errors)} samples"
        text += f", first on {doubted[0]}"
    return [text]

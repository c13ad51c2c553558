"""Print every published case beside what the product computes.

Use: ``python -m tests.reference.report``. Soft cases and those that are not asserted are shown like
the rest, with what they miss by. Ratios are computed over published (over the geometric middle
where a range is published), decades their log10, for a pH the difference.
"""

from __future__ import annotations

import sys
from statistics import median

from tests.reference.cases import Reading, readings

HEADER = (
    f"{'value':<40} {'use':<5} {'computed':>12} {'published':>12} {'ratio':>8} {'decades':>7} "
    f"{'met':<4} unit"
)


def line(reading: Reading) -> str:
    met = {True: "yes", False: "NO", None: "-"}[reading.passes]
    published = reading.expectation
    shown = (
        f"{published.expected:.4g}"
        if published.expected is not None
        else "{:.3g}-{:.3g}".format(*published.limits())
    )
    use = reading.case.use + ("" if reading.asserted or reading.case.use != "hard" else "*")
    return (
        f"{reading.label:<40} {use:<5} {reading.measured:>12.4g} {shown:>12} "
        f"{reading.ratio:>8.4f} {reading.log10_ratio:>+7.3f} {met:<4} {published.unit}"
    )


def report() -> str:
    """The whole table, case by case, with counts, medians and worst at its end."""
    rows = [HEADER]
    seen = ""
    for reading in readings():
        case = reading.case
        if case.case != seen:
            rows.append(f"{case.case}: {case.claim}")
            seen = case.case
        rows.append(f"  {line(reading)}")
        if reading.expectation.not_asserted:
            rows.append(f"    * not asserted: {reading.expectation.not_asserted}")
    return "\n".join([*rows, "", *totals(), "", *spread()]) + "\n"


def groups() -> dict[str, list[Reading]]:
    """Readings by what is asked of them."""
    return {
        "hard, asserted": [r for r in readings() if r.asserted],
        "hard, not asserted": [r for r in readings() if r.case.use == "hard" and not r.asserted],
        "soft": [r for r in readings() if r.case.use == "soft"],
        "info": [r for r in readings() if r.case.use == "info"],
    }


def totals() -> list[str]:
    """Counts by use: values, met, missed."""
    lines = []
    for name, members in groups().items():
        met = sum(r.passes is True for r in members)
        missed = [r.label for r in members if r.passes is False]
        tail = f", missed: {', '.join(missed)}" if missed else ""
        open_ = sum(r.passes is None for r in members)
        free = f", {open_} published without a tolerance" if open_ else ""
        lines.append(f"{name}: {len(members)} values, {met} met{free}{tail}")
    return lines


def spread() -> list[str]:
    """Median and worst miss by use and by group of cases, pH apart from decades."""
    lines = []
    everything = {"all": list(readings()), **groups()}
    for letter in sorted({r.case.group for r in readings()}):
        everything[f"group {letter}"] = [r for r in readings() if r.case.group == letter]
    for name, members in everything.items():
        for what, unit in (("|log10(computed/published)|", ""), ("|pH difference|", "pH")):
            some = [r for r in members if (r.expectation.unit == "pH") == bool(unit)]
            if some:
                worst = max(some, key=lambda r: abs(r.log10_ratio))
                middle = median(abs(r.log10_ratio) for r in some)
                lines.append(
                    f"{name}: {what} of {len(some)} values: median {middle:.4f}, "
                    f"worst {abs(worst.log10_ratio):.3f} ({worst.label})"
                )
    return lines


if __name__ == "__main__":
    sys.stdout.write(report())

"""The chart of a site's curves: residual against dose and pH with limits, and alkali demand.

Owns which panels there are and what is drawn in each; figures come from `optimiser.curves` and
`optimiser.curve_guides`.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING

from optimiser.chart_style import (
    INK,
    LABEL_PT,
    QUIET,
    MarginLabel,
    Pen,
    house_style,
    label_in_margin,
    new_figure,
    pen,
    plain,
    plain_log,
    save,
    thousands,
)
from optimiser.curve_guides import Band, Ceiling, bands, ceilings
from optimiser.curves import Curve, Curves
from optimiser.errors import ChartError
from optimiser.site import Site
from optimiser.tables import number

if TYPE_CHECKING:
    from matplotlib.axes import Axes

PANEL_WIDTH_IN, PANEL_HEIGHT_IN = 6.2, 3.8
LEFT_IN, RIGHT_IN, BOTTOM_IN, TOP_IN = 0.85, 1.75, 0.62, 0.42
HEADER_IN, FOOTER_IN = 0.5, 0.55
COLUMNS = 2
BELOW_TARGET = 300.0  # residuals further below the lowest target than this run off the panel
BACK_BY = 1.5  # a residual that rises so many times past its least has a best dose
DECADES_APART = 20.0  # doses whose largest and least are further apart stand on a log axis
MOST_NAMED = 3  # best doses are ringed; beside more metals than this they are not named
NO_DOSE = 0.4  # where a dose of 0 stands on a log axis, as a share of the least dose


@dataclass(frozen=True, eq=False, kw_only=True)
class Guides:
    """What is drawn beside curves.

    ``ceilings`` by metal, ``bands`` by reagent and metal, ``doses_mg_per_l`` the planned dose by
    reagent.
    """

    ceilings: Mapping[str, Ceiling] = field(default_factory=dict)
    bands: Mapping[str, Mapping[str, Band]] = field(default_factory=dict)
    doses_mg_per_l: Mapping[str, float] = field(default_factory=dict)


def chart_curves(
    site: Site, curves: Curves, path: Path, reagents: Sequence[str], doses: Mapping[str, float]
) -> None:
    """Draw a site's curves with its limits, planned doses, and envelopes of the reagents named.

    Raises
    ------
    ChartError
        A reagent named has no state along its curves.
    """
    with_states = {curve.reagent for curve in curves.curves if curve.points}
    for name in reagents:
        if name not in with_states:
            raise ChartError(f"--reagent {name}: no state along it was reached; try another --ph")
    limits = ceilings(site)
    metals = [metal for metal in curves.metals if metal in limits]
    around = {
        curve.reagent: bands(site, curve, metals)
        for curve in curves.curves
        if curve.kind == "residual-versus-dose" and curve.reagent in reagents
    }
    guides = Guides(ceilings=limits, bands=around, doses_mg_per_l=doses)
    draw_curves(curves, guides, path, reagents)


Panel = Callable[["Axes"], None]


def draw_curves(curves: Curves, guides: Guides, path: Path, reagents: Sequence[str] = ()) -> None:
    """Draw curves into a file.

    Parameters
    ----------
    curves
        From `optimiser.curves.build_curves`.
    guides
        Limits, envelopes and planned doses.
    path
        Ends in ``.svg`` or ``.png``; what is there is written over.
    reagents
        Draw the curves of these alone; all when empty.
    """
    shown = [c for c in curves.curves if c.points and (not reagents or c.reagent in reagents)]
    panels: list[Panel] = [
        lambda axes, c=curve: _residuals(axes, c, curves.metals, guides)  # type: ignore[misc]
        for curve in shown
    ]
    if not shown or not reagents or any(c.kind == "residual-versus-ph" for c in shown):
        panels.append(lambda axes: _demand(axes, curves))
    rows = math.ceil(len(panels) / COLUMNS)
    columns = min(COLUMNS, len(panels))
    width, height = columns * PANEL_WIDTH_IN, HEADER_IN + rows * PANEL_HEIGHT_IN + FOOTER_IN
    with house_style():
        figure = new_figure(width, height)
        for position, panel in enumerate(panels):
            row, column = divmod(position, COLUMNS)
            left = column * PANEL_WIDTH_IN + LEFT_IN
            bottom = FOOTER_IN + (rows - 1 - row) * PANEL_HEIGHT_IN + BOTTOM_IN
            panel(
                figure.add_axes((
                    left / width, bottom / height,
                    (PANEL_WIDTH_IN - LEFT_IN - RIGHT_IN) / width,
                    (PANEL_HEIGHT_IN - BOTTOM_IN - TOP_IN) / height,
                ))
            )  # fmt: skip
        figure.text(
            0.2 / width, 1.0 - 0.28 / height, f"{curves.site}: curves of the feed, "
            f"pH {curves.feed_ph:.2f}", fontsize=12.0, fontweight="bold", va="center",
        )  # fmt: skip
        figure.text(
            0.2 / width, 0.3 / height, _note(guides), fontsize=7.5, color=QUIET, va="center"
        )
        save(figure, path)


def _note(guides: Guides) -> str:
    parts = [
        "Dissolved residuals at equilibrium of the whole water; carry-over comes on top. "
        "Horizontal lines in the dash of each metal,\n`at most`: what the mean may be for its "
        "tightest limit with design margin and variability. Rings: a best dose."
    ]
    if any(guides.bands.values()):
        parts.append("Shaded: between the optimistic and the safe straight-line envelope.")
    return " ".join(parts)


# -- residuals -----------------------------------------------------------------------------------


def _residuals(axes: Axes, curve: Curve, metals: Sequence[str], guides: Guides) -> None:
    """Residuals of every metal along a dose or the pH, with limits, envelopes and best dose."""
    by_ph = curve.kind == "residual-versus-ph"
    reagent = curve.reagent.replace("_", " ")
    held = "" if curve.held_ph is None else f", pH held at {curve.held_ph:.2f}"
    axes.set_title(f"pH moved with {reagent}" if by_ph else f"Dose of {reagent}{held}")
    axes.set_xlabel("pH" if by_ph else "dose, mg/L pure as fed")
    axes.set_ylabel("residual, mg/L")
    x = [p.ph if by_ph else p.dose_mg_per_l for p in curve.points]
    if not by_ph and curve.held_ph is not None:
        x = _on_log_axis(axes, x)
    else:
        room = 0.02 * (max(x) - min(x)) or 0.1
        axes.set_xlim(min(x) - room, max(x) + room)
        axes.xaxis.set_major_formatter(lambda value, _: f"{value:,.10g}")
    low, high = _range(curve, metals, guides.ceilings)
    axes.set_yscale("log")
    axes.set_ylim(low, high)
    plain_log(axes.yaxis, low, high)
    labels = [
        _metal(axes, curve, metal, position, x, guides) for position, metal in enumerate(metals)
    ]
    _planned(axes, curve, guides)
    label_in_margin(axes, labels)


def _metal(
    axes: Axes, curve: Curve, metal: str, position: int, x: Sequence[float], guides: Guides
) -> MarginLabel:
    """One metal's residuals and the line of its tightest limit; returns the label of both."""
    one = pen(position)
    y = [p.residual_mg_per_l[metal] for p in curve.points]
    kind = "ph" if curve.kind == "residual-versus-ph" else "dose"
    band = guides.bands.get(curve.reagent, {}).get(metal) if kind == "dose" else None
    (line,) = axes.plot(
        x, y, color=one.colour, linestyle=one.dash if band is None else "none", marker=one.marker,
        markersize=3.5, zorder=3,
    )  # fmt: skip
    line.set_gid(f"residual-{kind}-{curve.reagent}-{metal}")
    if band is not None:
        _envelope(axes, band, one, f"{curve.reagent}-{metal}")
    if kind == "dose" and metal in guides.ceilings:
        few = len(curve.points[0].residual_mg_per_l) <= MOST_NAMED
        _least(axes, curve, x, y, one, named=few)
    text = metal
    ceiling = guides.ceilings.get(metal)
    if ceiling is not None:
        target = ceiling.target_mg_per_l
        text += f", at most {number(target)}"
        rule = axes.axhline(target, color=one.colour, linewidth=0.8, linestyle=one.dash, zorder=2)
        rule.set_gid(f"ceiling-{kind}-{curve.reagent}-{metal}")
    low = axes.get_ylim()[0]
    if y[-1] < low:
        text += " (below)"
    return MarginLabel(y=max(y[-1], low), text=text, colour=one.colour)


def _envelope(axes: Axes, band: Band, one: Pen, name: str) -> None:
    """The safe line, the optimistic one thinner, and what lies between them."""
    dose, safe, optimistic = band.dose_mg_per_l, band.safe_mg_per_l, band.optimistic_mg_per_l
    axes.fill_between(dose, optimistic, safe, color=one.colour, alpha=0.3, linewidth=0, zorder=2)
    for values, width, kind in ((safe, 1.4, "safe"), (optimistic, 0.6, "optimistic")):
        (line,) = axes.plot(dose, values, color=one.colour, linestyle=one.dash, linewidth=width)
        line.set_gid(f"{kind}-{name}")


def _least(
    axes: Axes, curve: Curve, x: Sequence[float], y: Sequence[float], one: Pen, *, named: bool
) -> None:
    """Ring the lowest residual where a larger dose brings the metal back."""
    best = min(range(len(y)), key=lambda k: y[k])
    low = axes.get_ylim()[0]
    if best in (0, len(y) - 1) or y[-1] < BACK_BY * y[best] or y[best] < low:
        return
    axes.plot(
        x[best], y[best], marker="o", markersize=8.0, color=one.colour, fillstyle="none",
        linestyle="none", markeredgewidth=0.9, zorder=4,
    )  # fmt: skip
    if not named:
        return
    axes.annotate(
        f"least at {number(curve.points[best].dose_mg_per_l)}", (x[best], y[best]), (0, 9),
        textcoords="offset points", ha="center", va="center", fontsize=7.0, color=INK, zorder=5,
    )  # fmt: skip


def _on_log_axis(axes: Axes, doses: Sequence[float]) -> list[float]:
    """Doses on a log axis, 0 at its left end under a tick of its own."""
    some = [dose for dose in doses if dose > 0.0]
    low, high = min(some), max(some)
    zero = NO_DOSE * low
    axes.set_xscale("log")
    axes.set_xlim(zero * 0.8, high * 1.25)
    plain_log(axes.xaxis, low, high)
    if min(doses) > 0.0:
        return list(doses)
    ticks = [zero, *axes.xaxis.get_majorticklocs()]
    axes.set_xticks(ticks, ["0", *(plain(tick) for tick in ticks[1:])])
    return [dose if dose > 0.0 else zero for dose in doses]


def _range(
    curve: Curve, metals: Sequence[str], ceilings: Mapping[str, Ceiling]
) -> tuple[float, float]:
    """What the residual axis spans: every target, and residuals down to far below the lowest."""
    values = [p.residual_mg_per_l[m] for p in curve.points for m in metals]
    targets = [ceilings[m].target_mg_per_l for m in metals if m in ceilings]
    high = max([*values, *targets], default=1.0)
    low = min([*values, *targets], default=high)
    low = max(low, min(targets, default=high) / BELOW_TARGET, high * 1e-12)
    return low / 1.6, high * 1.8


def _planned(axes: Axes, curve: Curve, guides: Guides) -> None:
    """Mark the planned dose of the reagent that is swept."""
    dose = guides.doses_mg_per_l.get(curve.reagent)
    if dose is None or curve.kind == "residual-versus-ph":
        return
    low, high = axes.get_xlim()
    if low < dose < high:
        line = axes.axvline(dose, color=INK, linewidth=1.0, linestyle=(0, (4, 2)), zorder=2)
        line.set_gid(f"planned-{curve.reagent}")
        axes.annotate(
            f"planned {number(dose, 4)}", (dose, 1.0), (3, -2), xycoords=("data", "axes fraction"),
            textcoords="offset points", va="top", fontsize=LABEL_PT,
            bbox={"facecolor": "white", "edgecolor": "none", "pad": 0.8},
        )  # fmt: skip


# -- demand --------------------------------------------------------------------------------------


def _demand(axes: Axes, curves: Curves) -> None:
    """Dose of each alkali or acid alone that brings the feed to a pH."""
    axes.set_title("Alkali and acid demand, each one alone")
    axes.set_xlabel("pH")
    axes.set_ylabel("dose, mg/L pure as fed")
    names = list(dict.fromkeys(n for row in curves.demand_mg_per_l.values() for n in row))
    lines: dict[str, list[tuple[float, float]]] = {}
    for name in names:
        pairs = [(ph, row.get(name)) for ph, row in curves.demand_mg_per_l.items()]
        lines[name] = [(ph, dose) for ph, dose in pairs if dose]
    doses = [dose for line in lines.values() for _, dose in line]
    if not doses:
        axes.text(0.5, 0.5, "no alkali or acid to drive", transform=axes.transAxes, ha="center")
        return
    if max(doses) > DECADES_APART * min(doses):
        low, high = min(doses) / 1.4, max(doses) * 1.4
        axes.set_yscale("log")
        axes.set_ylim(low, high)
        plain_log(axes.yaxis, low, high)
    else:
        axes.set_ylim(0.0, 1.1 * max(doses))
        thousands(axes.yaxis)
    labels = []
    for position, name in enumerate(name for name in names if lines[name]):
        one = pen(position)
        ph, dose = zip(*lines[name], strict=True)
        (line,) = axes.plot(ph, dose, color=one.colour, linestyle=one.dash, marker=one.marker,
                            markersize=3.5)  # fmt: skip
        line.set_gid(f"demand-{name}")
        labels.append(MarginLabel(y=dose[-1], text=name.replace("_", " "), colour=one.colour))
    label_in_margin(axes, labels)

"""The chart of a trade-off: yearly cost of verified plans against what it is traded for.

Owns what is drawn where; it reads the dictionary that ``--json`` prints and computes nothing.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from itertools import groupby
from pathlib import Path
from textwrap import fill
from typing import TYPE_CHECKING, Any

from optimiser.chart_style import (
    INK,
    LABEL_PT,
    QUIET,
    house_style,
    new_figure,
    pen,
    save,
    spread_apart,
    thousands,
)
from optimiser.tables import money

if TYPE_CHECKING:
    from matplotlib.axes import Axes

Data = Mapping[str, Any]

WIDTH_IN, HEIGHT_IN = 9.0, 4.8
LEAST_COST_RANGE = 0.05  # of the cost: a flat curve is drawn flat
TOP_ROOM, BOTTOM_ROOM = 0.16, 0.14
LABEL_GAP_PT, LABEL_RISE_PT = 11.0, 7.0
LABEL_LETTERS = 53


def draw_trade_off(data: Data, path: Path) -> None:
    """Draw a trade-off into a file.

    Parameters
    ----------
    data
        ``TradeOff.to_dict()``.
    path
        Ends in ``.svg`` or ``.png``; what is there is written over.
    """
    with house_style():
        figure = new_figure(WIDTH_IN, HEIGHT_IN)
        axes = figure.add_axes((0.09, 0.125, 0.55, 0.775))
        _draw(axes, data)
        save(figure, path)


def _draw(axes: Axes, data: Data) -> None:
    against, points = data["against"], data["points"]
    column = against["column"]
    unit = f", {against['unit']}" if against["unit"] else ""
    axes.set_title(f"{data['site']['name']}: cost against {against['what']}")
    axes.set_xlabel(f"{against['what']}{unit}")
    axes.set_ylabel(f"{data['site']['currency']} a year")
    thousands(axes.xaxis)
    thousands(axes.yaxis)
    if not points:
        axes.text(0.5, 0.5, "no plan was found", transform=axes.transAxes, ha="center")
        return
    _set_ranges(axes, data)
    x = [point[column] for point in points]
    y = [point["total"] for point in points]
    axes.plot(x, y, color=QUIET, linewidth=0.8, linestyle=(0, (1, 2)), zorder=1)
    _recipes(axes, data)
    _costs(axes, points, column)
    _plan(axes, data)
    _without_plan(axes, data)


def _set_ranges(axes: Axes, data: Data) -> None:
    column = data["against"]["column"]
    x = [point[column] for point in data["points"]] + list(data["without_plan"])
    y = [point["total"] for point in data["points"]]
    span = max(max(y) - min(y), LEAST_COST_RANGE * max(y))
    middle = 0.5 * (max(y) + min(y))
    axes.set_ylim(middle - span * (0.5 + BOTTOM_ROOM), middle + span * (0.5 + TOP_ROOM))
    wide = max(max(x) - min(x), 1e-3 * max(x))
    axes.set_xlim(min(x) - 0.12 * wide, max(x) + 0.05 * wide)


def _recipes(axes: Axes, data: Data) -> None:
    """One pen per recipe, named at its last point to the right."""
    column, points = data["against"]["column"], data["points"]
    order = list(dict.fromkeys(tuple(point["reagents"]) for point in points))
    named: dict[tuple[str, ...], tuple[float, float]] = {}
    text: dict[tuple[str, ...], str] = {}
    for recipe, group in groupby(points, key=lambda point: tuple(point["reagents"])):
        mine = list(group)
        one = pen(order.index(recipe))
        (line,) = axes.plot(
            [point[column] for point in mine], [point["total"] for point in mine],
            color=one.colour, linestyle=one.dash, marker=one.marker, zorder=3,
        )  # fmt: skip
        line.set_gid(f"recipe-{order.index(recipe)}-{'-'.join(recipe)}-{column}-{len(named)}")
        if any(point["is_plan"] for point in mine):
            text[recipe] = " (ringed: the plan)"
        anchor = max(mine, key=lambda point: point[column])
        named[recipe] = max(named.get(recipe, (-1.0, 0.0)), (anchor[column], anchor["total"]))
    words = {recipe: " + ".join(n.replace("_", " ") for n in recipe) for recipe in order}
    _name(axes, [(fill(words[r] + text.get(r, ""), LABEL_LETTERS), *named[r]) for r in order])


def _name(axes: Axes, names: Sequence[tuple[str, float, float]]) -> None:
    """Name recipes right of a point of theirs: curves fall to the right, so there is room."""
    height_pt, width_pt = _size_pt(axes)
    low, high = axes.get_ylim()
    ranked = sorted(((y - low) / (high - low), text, x) for text, x, y in names)
    rise = LABEL_RISE_PT / height_pt
    lines = max((text.count("\n") + 1 for _, text, _ in ranked), default=1)
    gap = lines * LABEL_GAP_PT / height_pt
    heights = spread_apart([share + rise for share, *_ in ranked], gap)
    left, right = axes.get_xlim()
    for (share, text, x), height in zip(ranked, heights, strict=True):
        across = (x - left) / (right - left)
        axes.annotate(
            text, (across, share), (across + 12.0 / width_pt, height), xycoords="axes fraction",
            textcoords="axes fraction", ha="left", va="center", fontsize=LABEL_PT, color=INK,
            annotation_clip=False,
            arrowprops={"arrowstyle": "-", "color": QUIET, "lw": 0.5, "shrinkA": 1, "shrinkB": 4},
        )  # fmt: skip


def _costs(axes: Axes, points: Sequence[Data], column: str) -> None:
    """Write costs below their points, left out where they would run into each other."""
    height_pt, width_pt = _size_pt(axes)
    to_share = axes.transAxes.inverted()
    taken: list[tuple[float, float]] = []
    for point in sorted(points, key=lambda one: not one["is_plan"]):
        pixel = axes.transData.transform((point[column], point["total"]))
        across, up = to_share.transform(pixel)
        here = (float(across) * width_pt, float(up) * height_pt)
        if any(abs(here[0] - x) < 32.0 and abs(here[1] - y) < 10.0 for x, y in taken):
            continue
        taken.append(here)
        axes.annotate(
            money(point["total"]), (point[column], point["total"]), (-4, -9),
            textcoords="offset points", ha="right", va="center", fontsize=7.0, color=QUIET,
            bbox={"facecolor": "white", "edgecolor": "none", "pad": 0.6}, zorder=2,
        )  # fmt: skip


def _size_pt(axes: Axes) -> tuple[float, float]:
    box = axes.get_position()
    return 72.0 * HEIGHT_IN * box.height, 72.0 * WIDTH_IN * box.width


def _plan(axes: Axes, data: Data) -> None:
    """Ring the plan of the site as it is."""
    column = data["against"]["column"]
    for point in data["points"]:
        if point["is_plan"]:
            (ring,) = axes.plot(
                point[column], point["total"], marker="o", markersize=11.0, color=INK,
                fillstyle="none", linestyle="none", markeredgewidth=0.9,
            )  # fmt: skip
            ring.set_gid("plan")


def _without_plan(axes: Axes, data: Data) -> None:
    """Say where no plan was found: a hatched edge below the least, crosses at single values."""
    left = axes.get_xlim()[0]
    least = data["least_reached"]
    if least is not None and left < least:
        lowest = f"{least:.{data['against']['digits']}g}"
        axes.axvspan(left, least, facecolor="none", edgecolor="#bdbdbd", hatch="////", linewidth=0)
        axes.text(
            0.5 * (left + least), 0.5, f"no plan found below {lowest}", rotation=90,
            transform=axes.get_xaxis_transform(), ha="center", va="center", fontsize=7.5,
            bbox={"facecolor": "white", "edgecolor": "none", "pad": 1.5},
        )  # fmt: skip
    crosses = [x for x in data["without_plan"] if least is None or x > least]
    if crosses:
        axes.plot(
            crosses, [0.05] * len(crosses), transform=axes.get_xaxis_transform(), marker="x",
            color=QUIET, linestyle="none",
        )  # fmt: skip
        axes.annotate(
            "x  no plan found", (0.01, 0.105), xycoords="axes fraction", fontsize=7.5, color=QUIET,
        )  # fmt: skip

"""The chart of a year's stock: every store's level week by week, with its deliveries.

Owns what is drawn where; it reads the dictionary that ``--json`` prints and computes nothing.
"""

from __future__ import annotations

import datetime
import itertools
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

from optimiser.chart_style import (
    INK,
    LABEL_PT,
    QUIET,
    house_style,
    new_figure,
    pen,
    save,
    thousands,
)
from optimiser.tables import given, number

if TYPE_CHECKING:
    from matplotlib.axes import Axes

Data = Mapping[str, Any]

WIDTH_IN, PANEL_IN, HEAD_IN, FOOT_IN = 9.0, 2.15, 0.55, 0.45
LEFT, RIGHT, GAP_IN = 0.085, 0.8, 0.5
HEADROOM = 0.16
LABEL_WEEKS = 4  # a label is about so wide
NOTHING = 1e-6
FILL = "#e8eef4"


def draw_orders(data: Data, path: Path) -> None:
    """Draw the stock of a year into a file, one panel a store.

    Parameters
    ----------
    data
        ``OrderPlan.to_dict()``.
    path
        Ends in ``.svg`` or ``.png``; what is there is written over.
    """
    stores = data["stores"]
    height = HEAD_IN + FOOT_IN + PANEL_IN * len(stores) + GAP_IN * (len(stores) - 1)
    with house_style():
        figure = new_figure(WIDTH_IN, height)
        figure.text(
            LEFT, 1.0 - 0.28 / height, f"{data['site']['name']}: stock over the year from "
            f"{data['first_day']}", fontsize=10.0, fontweight="bold", va="center",
        )  # fmt: skip
        for number_, store in enumerate(stores):
            top = HEAD_IN + 0.12 + number_ * (PANEL_IN + GAP_IN)
            bottom = 1.0 - (top + PANEL_IN - 0.12) / height
            axes = figure.add_axes((LEFT, bottom, RIGHT - LEFT, (PANEL_IN - 0.12) / height))
            _panel(axes, data, store)
        save(figure, path)


def _day(text: str) -> int:
    return datetime.date.fromisoformat(text).toordinal()


def _panel(axes: Axes, data: Data, store: Data) -> None:
    axes.set_title(_title(store), fontsize=9.0, fontweight="normal")
    axes.set_ylabel(f"stock, {store['unit']}")
    thousands(axes.yaxis)
    first, last = _day(data["first_day"]), _day(data["year_ends"])
    _level(axes, store, first, last)
    _least(axes, store, first, last)
    highest = max(week["after_delivery"] for week in store["weeks"])
    size = store["store"]
    shown = size is not None and size <= 4.0 * highest
    if shown:
        axes.axhline(size, color=pen(4).colour, linewidth=1.2, linestyle=(0, (6, 2)), zorder=2)
        _beside(axes, last, size, f"store takes {given(size)} {store['unit']}")
    axes.set_ylim(0.0, (size if shown else highest) * (1.0 + HEADROOM))
    _deliveries(axes, store)
    axes.set_xlim(first, last)
    _months(axes, first, last)


def _level(axes: Axes, store: Data, first: int, last: int) -> None:
    """The level: up at a delivery, down on a straight line through the week."""
    x, y = [float(first)], [store["opening"]]
    weeks = store["weeks"]
    for k, week in enumerate(weeks):
        after = _day(weeks[k + 1]["from"]) if k + 1 < len(weeks) else last
        x += [_day(week["from"]), after]
        y += [week["after_delivery"], week["end"]]
    axes.fill_between(x, y, color=FILL, linewidth=0.0, zorder=1)
    (line,) = axes.plot(x, y, color=pen(2).colour, zorder=3)
    line.set_gid(f"stock-{store['reagent']}")


def _least(axes: Axes, store: Data, first: int, last: int) -> None:
    """What must always be there, where something must."""
    least = [week["least"] for week in store["weeks"]]
    if not any(least):
        return
    days = [first, *(_day(week["from"]) for week in store["weeks"][1:]), last]
    axes.plot(
        days,
        [store["opening"], *least],
        color=QUIET,
        linewidth=1.0,
        linestyle=(0, (1, 1.2)),
        zorder=4,
    )
    _beside(axes, last, least[-1], "must be there")


def _beside(axes: Axes, last: int, height: float, text: str) -> None:
    axes.annotate(
        text, (last, height), (6, 0), textcoords="offset points", ha="left", va="center",
        fontsize=LABEL_PT, color=INK, annotation_clip=False,
    )  # fmt: skip


def _rises(store: Data) -> list[tuple[int, float]]:
    """Weeks with a delivery, and what it brings."""
    before, found = store["opening"], []
    for k, week in enumerate(store["weeks"]):
        rise, before = week["after_delivery"] - before, week["end"]
        if rise > NOTHING * max(week["after_delivery"], NOTHING):
            found.append((k, rise))
    return found


def _have_room(rises: Sequence[tuple[int, float]]) -> bool:
    """Whether every delivery can be labelled before the next one comes."""
    weeks = [week for week, _ in rises]
    return all(after - week >= LABEL_WEEKS for week, after in itertools.pairwise(weeks))


def _title(store: Data) -> str:
    name, rises = store["reagent"].replace("_", " "), _rises(store)
    text = f"{name} ({', '.join(store['offers'])}): {len(rises)} "
    text += "delivery" if len(rises) == 1 else "deliveries"
    if not _have_room(rises):
        sizes = [rise for _, rise in rises]
        text += f" of {number(min(sizes))} to {number(max(sizes))} {store['unit']}"
    return text


def _deliveries(axes: Axes, store: Data) -> None:
    """A mark on every delivery, with its size where there is room for all sizes."""
    top, size, rises = axes.get_ylim()[1], store["store"], _rises(store)
    named = _have_room(rises)
    for k, rise in rises:
        day, level = _day(store["weeks"][k]["from"]), store["weeks"][k]["after_delivery"]
        axes.plot(
            day, level, marker="v", color=pen(2).colour, markersize=5.0, zorder=5, clip_on=False,
        )  # fmt: skip
        if not named:
            continue
        at_store = size is not None and 0.0 <= size - level < 0.12 * top
        axes.annotate(
            f"+{number(rise)}", (day, size if at_store else level), (3, 3 if at_store else 6),
            textcoords="offset points", ha="left", va="bottom", fontsize=7.5, color=INK, zorder=6,
        )  # fmt: skip


def _months(axes: Axes, first: int, last: int) -> None:
    """Ticks on the first of every month, named by month; the year stands where it begins."""
    ticks: list[int] = []
    labels: list[str] = []
    day = datetime.date.fromordinal(first).replace(day=1)
    while day.toordinal() < last:
        if day.toordinal() >= first:
            ticks.append(day.toordinal())
            new_year = day.month == 1 or not labels
            labels.append(f"{day:%b}\n{day.year}" if new_year else f"{day:%b}")
        day = (day + datetime.timedelta(days=32)).replace(day=1)
    axes.set_xticks(ticks, labels)

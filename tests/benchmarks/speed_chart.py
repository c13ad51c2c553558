"""The sweep of equilibrium speeds as an SVG: a panel per axis, cost per state on a log scale."""

from __future__ import annotations

import csv
import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass

WIDTH, HEIGHT, LEFT, TOP, GAP, BOTTOM = 250, 210, 62, 44, 34, 74
TITLES = {
    "components": "components (with their species and solids)",
    "solids": "candidate solids",
    "batch": "states solved at once",
}
SERIES = {"cold": ("cold_states_per_s", "#1f5f8b"), "warm": ("warm_states_per_s", "#c2571a")}
LOG_AXES = ("batch",)


@dataclass(frozen=True)
class Panel:
    """One axis of the sweep with its place on the sheet and the decades of cost that it shows."""

    axis: str
    rows: Sequence[dict[str, str]]
    left: float
    decades: tuple[int, int]

    def x(self, value: float) -> float:
        """Horizontal place of a value of the axis."""
        scale = math.log10 if self.axis in LOG_AXES else float
        low, high = scale(float(self.rows[0]["value"])), scale(float(self.rows[-1]["value"]))
        return self.left + WIDTH * (scale(value) - low) / (high - low)

    def y(self, microseconds: float) -> float:
        """Vertical place of a cost."""
        low, high = self.decades
        return TOP + HEIGHT * (high - math.log10(microseconds)) / (high - low)

    def draw(self) -> Iterable[str]:
        """Frame, grid, ticks and one line per series."""
        middle = self.left + WIDTH / 2
        yield f'<rect x="{self.left}" y="{TOP}" width="{WIDTH}" height="{HEIGHT}" class="frame"/>'
        yield text(middle, TOP + HEIGHT + 36, TITLES[self.axis])
        for decade in range(self.decades[0], self.decades[1] + 1):
            y = self.y(10.0**decade)
            yield f'<path d="M{self.left} {y:.1f}h{WIDTH}" class="grid"/>'
            yield text(self.left - 6, y + 4, f"{10**decade:,}".replace(",", " "), "end")
        for row in self.rows:
            yield text(self.x(float(row["value"])), TOP + HEIGHT + 17, row["value"])
        for column, colour in SERIES.values():
            places = [
                (self.x(float(r["value"])), self.y(1e6 / float(r[column]))) for r in self.rows
            ]
            line = "L".join(f"{x:.1f} {y:.1f}" for x, y in places)
            yield f'<path d="M{line}" fill="none" stroke="{colour}" stroke-width="2"/>'
            for x, y in places:
                yield f'<circle cx="{x:.1f}" cy="{y:.1f}" r="3" fill="{colour}"/>'


def text(x: float, y: float, words: str, anchor: str = "middle") -> str:
    """Return a label."""
    return f'<text x="{x:.1f}" y="{y:.1f}" text-anchor="{anchor}">{words}</text>'


def chart(lines: Sequence[str]) -> str:
    """Draw the rows of the sweep's CSV."""
    rows = list(csv.DictReader(lines))
    costs = [1e6 / float(row[column]) for row in rows for column, _ in SERIES.values()]
    decades = math.floor(math.log10(min(costs))), math.ceil(math.log10(max(costs)))
    width = len(TITLES) * (LEFT + WIDTH) + GAP
    height = TOP + HEIGHT + BOTTOM
    body = []
    for number, axis in enumerate(TITLES):
        some = [row for row in rows if row["axis"] == axis]
        panel = Panel(axis, some, LEFT + number * (LEFT + WIDTH), decades)
        body.extend(panel.draw())
    body.append(text(LEFT, 24, "Cost of an equilibrium state, microseconds of one core", "start"))
    for number, (name, (_, colour)) in enumerate(SERIES.items()):
        x = LEFT + 420 + 150 * number
        body.append(f'<path d="M{x} 20h26" stroke="{colour}" stroke-width="2"/>')
        body.append(
            text(x + 34, 24, {"cold": "cold", "warm": "after a step of 2 %"}[name], "start")
        )
    return "\n".join(
        [
            f'<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 {width} {height}" '
            f'width="{width}" height="{height}">',
            "<style>text{font:12px sans-serif;fill:#222}.frame{fill:none;stroke:#888}"
            ".grid{stroke:#ddd}</style>",
            f'<rect width="{width}" height="{height}" fill="#fff"/>',
            *body,
            "</svg>\n",
        ]
    )

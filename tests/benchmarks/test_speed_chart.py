"""The chart of equilibrium speeds is an image with every measured point in its panel."""

from __future__ import annotations

from xml.etree import ElementTree

from tests.benchmarks.equilibrium_speed import HEADER
from tests.benchmarks.speed_chart import HEIGHT, SERIES, TITLES, TOP, chart

ROWS = [
    HEADER,
    *(f"{axis},{value},15,125,30,64,{10000 // value},{40000 // value}" for axis in TITLES
      for value in (1, 4, 28)),
]  # fmt: skip
SVG = "{http://www.w3.org/2000/svg}"


def test_every_measured_point_is_drawn_inside_its_panel() -> None:
    root = ElementTree.fromstring(chart(ROWS))
    points = list(root.iter(f"{SVG}circle"))
    assert len(points) == (len(ROWS) - 1) * len(SERIES)
    assert all(TOP <= float(p.get("cy", "-1")) <= TOP + HEIGHT for p in points)
    words = [t.text for t in root.iter(f"{SVG}text")]
    assert set(TITLES.values()) <= set(words)
    assert words.count("28") == len(TITLES)

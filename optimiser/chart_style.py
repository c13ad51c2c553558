"""The look of charts and how they reach a file: one place for colours, labels and safe writing.

Owns what every chart shares; what is drawn is for `optimiser.chart_trade_off` and
`optimiser.chart_curves`. matplotlib loads here, and only when a chart is asked for.
"""

from __future__ import annotations

import io
import math
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

DPI = 150
INK, QUIET, GRID = "#1a1a1a", "#5a5a5a", "#dcdcdc"
LABEL_PT = 8.0
_LINE_PT = 9.5  # least distance of two labels in the margin

# Okabe and Ito (2008), Color Universal Design, jfly.uni-koeln.de/color: eight colours told apart by
# every kind of colour vision. Yellow is too faint on white and is left out; black comes first. The
# order alternates dark and light, so that neighbours differ in grey as well.
_COLOURS = ("#000000", "#E69F00", "#0072B2", "#56B4E9", "#D55E00", "#009E73", "#CC79A7")
_DASHES: tuple[Any, ...] = (
    "solid", (0, (6, 2)), (0, (1, 1.2)), (0, (6, 2, 1, 2)), (0, (3, 1.5)),
    (0, (8, 2, 1, 2, 1, 2)), (0, (2, 2.5)), (0, (10, 3)),
)  # fmt: skip
_MARKERS = ("o", "s", "^", "D", "v", "P", "X", "<", ">", "h", "p")


@dataclass(frozen=True, slots=True)
class Pen:
    """Colour, dash and marker of one line; no two of the first 616 are alike in all three."""

    colour: str
    dash: Any
    marker: str


def pen(number: int) -> Pen:
    """The pen of the line with this number, from 0."""
    return Pen(
        _COLOURS[number % len(_COLOURS)], _DASHES[number % len(_DASHES)],
        _MARKERS[number % len(_MARKERS)],
    )  # fmt: skip


@dataclass(frozen=True, slots=True)
class MarginLabel:
    """A text to the right of the axes, at the height of what it names."""

    y: float
    text: str
    colour: str


@contextmanager
def house_style() -> Iterator[None]:
    """Draw in the house look, whatever the user's own matplotlib settings are."""
    import matplotlib as mpl

    settings: Any = {
        "font.family": ["DejaVu Sans"], "font.size": 9.0, "axes.titlesize": 10.0,
        "axes.titleweight": "bold", "axes.titlelocation": "left", "axes.labelsize": 9.0,
        "axes.edgecolor": QUIET, "axes.labelcolor": INK, "text.color": INK,
        "xtick.color": QUIET, "ytick.color": QUIET, "xtick.labelcolor": INK,
        "ytick.labelcolor": INK, "xtick.labelsize": 8.0, "ytick.labelsize": 8.0,
        "axes.spines.top": False, "axes.spines.right": False, "axes.grid": True,
        "grid.color": GRID, "grid.linewidth": 0.6, "axes.axisbelow": True,
        "lines.linewidth": 1.5, "lines.markersize": 4.5, "figure.facecolor": "white",
        "svg.fonttype": "none", "svg.hashsalt": "dosewright", "path.simplify": False,
        "axes.formatter.use_mathtext": False, "axes.unicode_minus": False,
    }  # fmt: skip
    with mpl.rc_context():
        mpl.rcdefaults()
        mpl.rcParams.update(settings)
        yield


def new_figure(width_in: float, height_in: float) -> Figure:
    """An empty figure that belongs to no window."""
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    figure = Figure(figsize=(width_in, height_in))
    FigureCanvasAgg(figure)
    return figure


def thousands(axis: Any) -> None:
    """Write the ticks of a linear axis as the tables do: 12,500."""
    from matplotlib.ticker import FuncFormatter

    axis.set_major_formatter(FuncFormatter(lambda value, _: f"{value:,.10g}"))


def plain_log(axis: Any, low: float, high: float) -> None:
    """Ticks of a log axis in plain digits: decades, with 2 and 5 between them where few."""
    from matplotlib.ticker import FixedLocator, NullFormatter, NullLocator

    first, last = math.floor(math.log10(low)), math.ceil(math.log10(high))
    decades = last - first
    steps = (1.0, 2.0, 5.0) if decades <= 2 else (1.0,)
    stride = 1 if decades <= 8 else 2
    ticks = [s * 10.0**p for p in range(first, last + 1, stride) for s in steps]
    inside = [tick for tick in ticks if low * 0.999 <= tick <= high * 1.001]
    axis.set_major_locator(FixedLocator(inside))
    axis.set_major_formatter(lambda value, _: plain(value))
    axis.set_minor_locator(NullLocator())
    axis.set_minor_formatter(NullFormatter())


def plain(value: float) -> str:
    """A tick of a log axis, in digits down to 0.0001 and as a power below.

    Examples
    --------
    >>> [plain(x) for x in (1000.0, 0.5, 0.001, 1e-7)]
    ['1,000', '0.5', '0.001', '1e-7']
    """
    if value >= 1e-4:
        return f"{value:,.10g}"
    power = math.floor(math.log10(value) + 1e-9)
    return f"{value / 10.0**power:.0f}e{power}"


def label_in_margin(axes: Axes, labels: Sequence[MarginLabel]) -> None:
    """Write labels right of the axes without overlap, each joined to its height by a thin line."""
    figure = axes.figure
    box = axes.get_position()
    height_pt = 72.0 * figure.get_figheight() * box.height  # type: ignore[union-attr]
    wanted = []
    for label in labels:
        _, pixel = axes.transData.transform((axes.get_xlim()[1], label.y))
        share = float(axes.transAxes.inverted().transform((0.0, pixel))[1])
        wanted.append((min(max(share, 0.0), 1.0), label))
    wanted.sort(key=lambda item: item[0])
    places = spread_apart([share for share, _ in wanted], _LINE_PT / height_pt)
    for (share, label), place in zip(wanted, places, strict=True):
        axes.annotate(
            label.text, xy=(1.0, share), xytext=(1.03, place), xycoords="axes fraction",
            textcoords="axes fraction", va="center", ha="left", fontsize=LABEL_PT,
            color=INK, annotation_clip=False,
            arrowprops={
                "arrowstyle": "-", "color": label.colour, "lw": 1.2, "shrinkA": 1.5, "shrinkB": 0,
                "relpos": (0.0, 0.5),
            },
        )  # fmt: skip


def spread_apart(heights: Sequence[float], gap: float) -> list[float]:
    """Move rising heights apart to at least a gap, as little as possible, within 0 to 1.

    Examples
    --------
    >>> [round(h, 2) for h in spread_apart([0.5, 0.5, 0.9], 0.1)]
    [0.45, 0.55, 0.9]
    """
    groups: list[list[float]] = []  # centre, count
    for height in heights:
        groups.append([height, 1.0])
        while len(groups) > 1:
            (low, below), (high, above) = groups[-2:]
            if high - low >= gap * (below + above) / 2.0 - 1e-12:
                break
            groups[-2:] = [[(low * below + high * above) / (below + above), below + above]]
    found: list[float] = []
    for centre, count in groups:
        start = centre - gap * (count - 1.0) / 2.0
        found += [start + gap * k for k in range(int(count))]
    count_all = len(found)
    found = [min(h, 1.0 - gap * (count_all - 1 - k)) for k, h in enumerate(found)]
    return [max(h, gap * k) for k, h in enumerate(found)]


def save(figure: Figure, path: Path) -> None:
    """Write a figure as SVG or PNG, whole or not at all; the same figure gives the same bytes."""
    kind = path.suffix.lower()
    made = io.BytesIO()
    metadata = {"Date": None, "Creator": None} if kind == ".svg" else {"Software": None}
    figure.savefig(made, format=kind[1:], dpi=DPI, metadata=metadata)
    part = path.with_name(f".{path.name}.part")
    try:
        part.write_bytes(made.getvalue())
        part.replace(path)
    except BaseException:
        part.unlink(missing_ok=True)
        raise

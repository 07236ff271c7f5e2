"""The one hand all pictures are drawn in: sizes, colours, log axes, saving.

Nothing here touches matplotlib's global state: every function that draws runs inside
`context()`, figures are made without pyplot, and no display is needed.

Signs are the same in every picture: open symbols are data, lines are model, bands are intervals.
Colours are told apart by the colour-blind (after the set of Okabe & Ito, recalled) and differ in
lightness, and a dash pattern and a marker always say the same once more, so that a grey print
keeps its meaning.
"""

from __future__ import annotations

import functools
import io
import math
import re
from collections.abc import Callable
from contextlib import AbstractContextManager
from typing import Any, ParamSpec, TypeVar
from xml.sax.saxutils import escape

import matplotlib
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import Formatter, FuncFormatter, LogLocator, MaxNLocator

P = ParamSpec("P")
R = TypeVar("R")

MM = 1.0 / 25.4
WIDTH = 112.0
"""Width of a picture [mm]; read at its own size in print and on a phone without zooming."""

INK = "#1b1f24"
SOFT = "#5b6470"
GRID = "#d9dde2"
SHADE = "#e7e9ec"
PAPER = "#ffffff"
BLUE = "#0072b2"
VERMILION = "#d55e00"
GREEN = "#008a65"
PURPLE = "#a5528c"
HATCH = "#b9bfc7"
FILLS = ("#4f94c4", "#f7d3ae", "#57a58e", "#ecd0e4", "#9aa3ad", "#f3eab8", "#6d7783")
"""Fills of bars, light and dark in turn for a grey print; each has its own hatch as well."""
SERIES = (BLUE, VERMILION, GREEN, PURPLE, INK)
DASHES: tuple[Any, ...] = (
    "-",
    (0, (5, 1.6)),
    (0, (1.2, 1.2)),
    (0, (6, 1.5, 1.2, 1.5)),
    (0, (9, 2)),
)
MARKERS = ("o", "s", "^", "D", "v", "p", "<", ">", "h")

_RC: dict[str, Any] = {
    "font.family": "sans-serif",
    "font.sans-serif": ["DejaVu Sans", "Arial", "Helvetica", "sans-serif"],
    "font.size": 9.0,
    "axes.labelsize": 9.0,
    "axes.titlesize": 9.0,
    "xtick.labelsize": 8.5,
    "ytick.labelsize": 8.5,
    "legend.fontsize": 8.5,
    "mathtext.default": "regular",
    "text.color": INK,
    "axes.edgecolor": INK,
    "axes.labelcolor": INK,
    "axes.facecolor": PAPER,
    "axes.linewidth": 0.8,
    "axes.axisbelow": True,
    "axes.grid": False,
    "figure.facecolor": PAPER,
    "savefig.facecolor": PAPER,
    "xtick.color": INK,
    "ytick.color": INK,
    "xtick.direction": "in",
    "ytick.direction": "in",
    "xtick.top": True,
    "ytick.right": True,
    "xtick.major.size": 4.5,
    "ytick.major.size": 4.5,
    "xtick.minor.size": 2.2,
    "ytick.minor.size": 2.2,
    "xtick.minor.visible": False,
    "ytick.minor.visible": False,
    "lines.linewidth": 1.4,
    "lines.markersize": 4.5,
    "legend.frameon": False,
    "legend.handlelength": 2.4,
    "legend.columnspacing": 1.4,
    "legend.borderaxespad": 0.2,
    "hatch.color": HATCH,
    "hatch.linewidth": 0.6,
    "svg.fonttype": "none",
    "svg.hashsalt": "mwdlink",
    "path.simplify": True,
    "axes.unicode_minus": True,
    "axes.formatter.use_mathtext": True,
}


def context() -> AbstractContextManager[None]:
    """The style as a context; matplotlib's own settings come back when it ends.

    It starts from matplotlib's defaults, so that a user's settings file cannot change a picture.
    """
    merged: dict[Any, Any] = {k: v for k, v in matplotlib.rcParamsDefault.items() if k not in _KEEP}
    return matplotlib.rc_context(merged | _RC)


# settings that are about the process and not about the look: changing them has side effects
_KEEP = frozenset(
    {
        "backend",
        "backend_fallback",
        "interactive",
        "toolbar",
        "timezone",
        "webagg.port",
        "webagg.address",
        "webagg.open_in_browser",
        "webagg.port_retries",
        "tk.window_focus",
        "figure.max_open_warning",
        "savefig.directory",
        "docstring.hardcopy",
    }
)


def styled(function: Callable[P, R]) -> Callable[P, R]:
    """Run a picture function inside `context()`."""

    @functools.wraps(function)
    def inside(*args: P.args, **kwargs: P.kwargs) -> R:
        with context():
            return function(*args, **kwargs)

    return inside


def new_axes(ax: Axes | None = None, *, height: float = 82.0, width: float = WIDTH) -> Axes:
    """The given axes, or the only axes of a new figure.

    Parameters
    ----------
    ax : Axes, optional
    height, width : float
        Size of a new figure [mm].
    """
    if ax is not None:
        return ax
    figure = Figure(figsize=(width * MM, height * MM), layout="constrained")
    return figure.add_subplot()


def figure_of(ax: Axes) -> Figure | None:
    """The figure that holds the axes, past any subfigures, in every supported matplotlib."""
    figure: Any = ax.figure
    root = getattr(figure, "figure", figure)
    return root if isinstance(root, Figure) else None


def superscript(exponent: int) -> str:
    """An integer in raised figures: plain text, which every font and screen can show."""
    return str(exponent).translate(str.maketrans("0123456789-", "⁰¹²³⁴⁵⁶⁷⁸⁹⁻"))


class DecadeFormatter(Formatter):
    """Labels for a log axis: every decade while there is room, else every 2nd, 3rd ...

    The tick stays at every decade; only its label is left out where labels would touch. On a span
    of less than about two decades 2 and 5 are labelled too, on a very short one every digit.
    """

    axis: Any

    def __init__(self, minor: bool = False) -> None:
        self.minor = minor

    def _span(self) -> tuple[float, float]:
        low, high = sorted(self.axis.get_view_interval())
        if not (low > 0 and high > low):
            return 1.0, 0.0
        decades = math.log10(high / low)
        box = self.axis.axes.bbox
        size = self.axis.axes.figure
        dpi = getattr(size, "dpi", 72.0) or 72.0
        inches = (box.width if self.axis.axis_name == "x" else box.height) / dpi
        return decades, max(inches, 0.1)

    def step(self) -> int:
        decades, inches = self._span()
        room = 0.34 if self.axis.axis_name == "x" else 0.19
        return max(1, math.ceil(decades * room / inches))

    def _plain(self) -> bool:
        """Whether the axis is short enough, and its numbers small enough, for plain figures."""
        low, high = sorted(self.axis.get_view_interval())
        return self._span()[0] < 2.2 and low > 9e-3 and high < 9.9e4

    def __call__(self, x: float, pos: int | None = None) -> str:
        if not x > 0:
            return ""
        exponent = math.floor(math.log10(x) + 1e-9)
        mantissa = x / 10.0**exponent
        if not self.minor:
            if abs(mantissa - 1.0) > 1e-6 or exponent % self.step():
                return ""
            return grouped(10.0**exponent) if self._plain() else f"10{superscript(exponent)}"
        decades, inches = self._span()
        per_decade = inches / max(decades, 1e-6)
        digit = round(mantissa)
        wanted = {2, 5} if decades > 0.75 else {2, 3, 4, 5, 7}
        if decades > 2.2 or per_decade < 0.9 or digit not in wanted:
            return ""
        if self._plain():
            return grouped(round(digit * 10.0**exponent, 9))
        return f"{digit}×10{superscript(exponent)}"


def log_axis(axis: Any) -> None:
    """Make an axis logarithmic with a tick at every decade and at 2 to 9, whatever the span."""
    name = axis.axis_name
    if name == "x":
        axis.axes.set_xscale("log")
    else:
        axis.axes.set_yscale("log")
    axis.set_major_locator(LogLocator(base=10.0, subs=(1.0,), numticks=99))
    axis.set_minor_locator(LogLocator(base=10.0, subs=tuple(range(2, 10)), numticks=999))
    axis.set_major_formatter(DecadeFormatter())
    axis.set_minor_formatter(DecadeFormatter(minor=True))


def log_axes(ax: Axes, which: str = "xy") -> None:
    """`log_axis` for one axis or both."""
    if "x" in which:
        log_axis(ax.xaxis)
    if "y" in which:
        log_axis(ax.yaxis)


def decades_between(low: float, high: float) -> float:
    """Decades between two positive numbers."""
    return math.log10(high / low)


def equal_decades(
    ax: Axes, *, own_figure: bool, rows: int = 1, least: float = 50.0, most: float = 150.0
) -> None:
    """Give a decade the same length on both log axes.

    In a figure of our own the height follows from the spans, so that nothing is left blank; on
    axes given by the caller only the aspect is set.

    Parameters
    ----------
    rows : int
        Rows of the legend above the axes.
    least, most : float
        Bounds of the figure's height [mm].
    """
    x = decades_between(*ax.get_xlim())
    y = decades_between(*ax.get_ylim())
    ax.set_aspect("equal", adjustable="box")
    ax.set_anchor("N")
    if own_figure and x > 0:
        beside, around = 19.0, 18.5 + 4.6 * rows
        height = (WIDTH - beside) * y / x + around
        figure = figure_of(ax)
        if figure is not None:
            figure.set_size_inches(WIDTH * MM, min(max(height, least), most) * MM)


def linear_axis(axis: Any) -> None:
    """Numbers on a linear axis in groups of three figures, powers of ten where they are long."""
    axis.set_major_formatter(FuncFormatter(lambda x, _: grouped(x)))
    axis.set_major_locator(
        MaxNLocator(nbins=6 if axis.axis_name == "y" else 5, steps=[1, 2, 2.5, 5, 10])
    )


def grouped(x: float) -> str:
    """150 000, 1.5×10⁶: a tick's number as written in a text."""
    size = abs(x)
    if size and (size >= 1e6 or size < 1e-3):
        exponent = math.floor(math.log10(size) + 1e-9)
        return f"{x / 10.0**exponent:g}×10{superscript(exponent)}".replace("-", "−")
    text = f"{x:.10g}".replace("-", "−")
    whole, dot, rest = text.partition(".")
    if len(whole.lstrip("−")) > 4:
        whole = f"{whole[:-3]}\u202f{whole[-3:]}"
    return whole + dot + rest


def by_rows(items: list[Any], columns: int) -> list[Any]:
    """Reorder so that a legend, which fills column by column, reads row by row."""
    rows = math.ceil(len(items) / columns)
    full = len(items) - (rows - 1) * columns
    heights = [rows if c < full else rows - 1 for c in range(columns)]
    return [items[r * columns + c] for c in range(columns) for r in range(heights[c])]


def legend_above(ax: Axes, *, handles: list[Any] | None = None, over_figure: bool = False) -> int:
    """The legend over the axes, where it can hide nothing.

    It starts at the axes' left edge; where it is too wide for that it ends at their right edge.

    Parameters
    ----------
    handles : list, optional
        What to name, in reading order; everything labelled unless given.
    over_figure : bool
        Start at the figure's left edge: for pictures with long names beside the axes.

    Returns
    -------
    int
        Rows it takes.
    """
    found, labels = ax.get_legend_handles_labels()
    if handles is not None:
        found, labels = handles, [str(h.get_label()) for h in handles]
    if not found:
        return 0
    columns, rows, width = 1, 1, 0.0
    for n in range(min(5, len(found)), 0, -1):
        rows = math.ceil(len(found) / n)
        columns = math.ceil(len(found) / rows)
        # handle, gaps and about 1.6 mm a character
        width = (
            sum(max(len(t) for t in labels[c::columns]) * 1.6 + 13.2 for c in range(columns)) - 4
        )
        if width <= WIDTH - 8.0:
            break
    order = by_rows(list(range(len(found))), columns)
    found, labels = [found[k] for k in order], [labels[k] for k in order]
    look: dict[str, Any] = {"ncols": columns, "borderpad": 0.0, "handletextpad": 0.6}
    figure = figure_of(ax)
    if over_figure and figure is not None:
        figure.legend(found, labels, loc="outside upper left", **look)
    elif width <= WIDTH - 34.0:
        ax.legend(found, labels, loc="lower left", bbox_to_anchor=(0.0, 1.01), **look)
    else:
        ax.legend(found, labels, loc="lower right", bbox_to_anchor=(1.0, 1.01), **look)
    return rows


def series_look(i: int) -> dict[str, Any]:
    """Colour and dash of the i-th line: both change, so that either alone is enough."""
    return {
        "color": SERIES[i % len(SERIES)],
        "linestyle": DASHES[(i + i // len(SERIES)) % len(DASHES)],
    }


def data_look(i: int) -> dict[str, Any]:
    """Colour and marker of the i-th set of points: open symbols, no line."""
    return {
        "color": SERIES[i % len(SERIES)],
        "marker": MARKERS[i % len(MARKERS)],
        "linestyle": "none",
        "markerfacecolor": "none",
        "markeredgewidth": 0.9,
    }


def save_svg(figure: Figure, *, title: str = "", description: str = "") -> bytes:
    """The figure as SVG, the same bytes for the same content, with a title and a description.

    Parameters
    ----------
    title, description : str
        What a screen reader says of it; they become the file's own `title` and `desc`.
    """
    buffer = io.BytesIO()
    with context():
        figure.savefig(buffer, format="svg", metadata={"Date": None, "Creator": None})
    text = buffer.getvalue().decode("utf-8")
    # matplotlib's style element would reach the whole page once the picture is put inline
    text = re.sub(
        r"<style type=\"text/css\">\*\{stroke-linejoin: round; stroke-linecap: butt\}</style>",
        "",
        text,
    )
    if title or description:
        name = f"<title>{escape(title)}</title>" if title else ""
        words = f"<desc>{escape(description)}</desc>" if description else ""
        text = re.sub(
            r"(<svg\b)([^>]*>)",
            lambda m: f'{m[1]} role="img" stroke-linejoin="round"{m[2]}\n {name}{words}',
            text,
            count=1,
        )
    return text.encode("utf-8")


def save_png(figure: Figure, *, title: str = "", description: str = "", dpi: int = 300) -> bytes:
    """The figure as PNG at 300 dots per inch, the same bytes for the same content."""
    buffer = io.BytesIO()
    metadata: dict[str, str | None] = {"Software": None}
    if title:
        metadata["Title"] = title
    if description:
        metadata["Description"] = description
    with context():
        figure.savefig(buffer, format="png", dpi=dpi, metadata=metadata)
    return buffer.getvalue()

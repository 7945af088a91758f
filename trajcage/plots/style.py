"""The looks of all figures, and what drawing one returns."""

import textwrap
from collections.abc import Mapping
from contextlib import AbstractContextManager
from dataclasses import dataclass
from typing import Any

from matplotlib import style
from matplotlib.axes import Axes
from matplotlib.axis import Axis
from matplotlib.figure import Figure
from matplotlib.ticker import FuncFormatter, LogLocator, NullFormatter

__all__ = [
    "FADED",
    "INK",
    "MAP",
    "PALETTE",
    "REGION_COLORS",
    "STYLE",
    "Drawing",
    "Missing",
    "legend",
    "log_ticks",
    "new_figure",
    "settle",
    "styled",
]

#: Colors of lines and points. Searched for the largest smallest distance in CIELAB
#: between any two, also as seen with each kind of dichromacy.
PALETTE = ("#0c388a", "#f8a500", "#880940", "#2dcba1", "#7b6000", "#a79cdf")

#: Colors of the regions, the same in every figure.
REGION_COLORS: Mapping[str, str] = {
    "crystal": PALETTE[0],
    "glass": PALETTE[1],
    "fluid": PALETTE[5],
    "unknown": "#ffffff",
}

INK, FADED = "#222222", "#8a8a8a"

#: Perceptually uniform and safe for color-blind readers.
MAP = "cividis"

#: Settings of matplotlib while figures are drawn and saved. Marked with a fixed salt,
#: the same figure gives the same SVG.
STYLE: Mapping[str, Any] = {
    "axes.axisbelow": True,
    "axes.edgecolor": INK,
    "axes.grid": True,
    "axes.labelcolor": INK,
    "axes.linewidth": 0.8,
    "axes.spines.right": False,
    "axes.spines.top": False,
    "errorbar.capsize": 2.5,
    "figure.dpi": 100,
    "figure.facecolor": "white",
    "font.family": ["DejaVu Sans"],
    "font.size": 9.0,
    "grid.color": "#e4e4e4",
    "grid.linewidth": 0.6,
    "legend.fontsize": 8.0,
    "legend.frameon": False,
    "lines.linewidth": 1.5,
    "lines.markersize": 4.0,
    "mathtext.default": "regular",
    "svg.hashsalt": "trajcage",
    "text.color": INK,
    "xtick.color": INK,
    "ytick.color": INK,
}

_WIDTH = 7.4  # inches
_LINE = 0.135  # inches
_LETTERS = 19.0  # of a caption in an inch, a few less than fit


@dataclass(frozen=True, eq=False)
class Drawing:
    """A finished figure and the words below it."""

    figure: Figure
    title: str
    caption: str


@dataclass(frozen=True)
class Missing:
    """Why there is no figure."""

    reason: str


def styled() -> AbstractContextManager[None]:
    """Draw and save with our looks, whatever the user's own settings are."""
    return style.context(["default", dict(STYLE)])


def new_figure(
    title: str,
    caption: str,
    *,
    rows: int = 1,
    columns: int = 1,
    size: tuple[float, float] = (_WIDTH, 3.9),
    **options: Any,
) -> tuple[Drawing, list[Axes]]:
    """Make a figure with a title above and a caption below its axes.

    Parameters
    ----------
    title, caption : str
        Taken literally: no markup.
    rows, columns : int
        Grid of axes.
    size : (float, float), inches
        Width of the figure; height of the axes.
    options
        For :meth:`matplotlib.figure.Figure.subplots`.

    Returns
    -------
    drawing : Drawing
        The figure, to be drawn on.
    axes : list of Axes
        Row by row.
    """
    width, body = size
    lines = textwrap.wrap(caption, int(width * _LETTERS))
    foot, head = 0.22 + _LINE * len(lines), 0.42
    height = body + foot + head
    figure = Figure(figsize=(width, height))
    figure.set_layout_engine(
        "constrained",
        rect=(0.01, foot / height, 0.98, body / height),
        h_pad=0.06,
        w_pad=0.06,
    )
    left = 0.12 / width
    figure.text(
        left,
        1.0 - 0.1 / height,
        title,
        va="top",
        fontsize=11,
        fontweight="bold",
        parse_math=False,
    )
    figure.text(
        left,
        0.1 / height,
        "\n".join(lines),
        va="bottom",
        fontsize=7,
        color="#444444",
        linespacing=1.25,
        parse_math=False,
    )
    made = figure.subplots(rows, columns, squeeze=False, **options)
    return Drawing(figure, title, caption), list(made.flat)


def settle(figure: Figure) -> None:
    """Lay out a finished figure for good, the same to the last bit every time.

    The solver behind the layout leaves rounding that differs from run to run, and
    vector formats name their parts after it.
    """
    figure.draw_without_rendering()
    figure.set_layout_engine("none")
    for axes in figure.axes:
        left, bottom, width, height = axes.get_position(original=True).bounds
        places = [round(x, 6) for x in (left, bottom, width, height)]
        axes.set_position((places[0], places[1], places[2], places[3]))


def legend(axes: Axes, **options: Any) -> None:
    """Put the legend beside the axes, where it hides nothing."""
    axes.legend(
        loc="upper left", bbox_to_anchor=(1.01, 1.02), borderaxespad=0.0, **options
    )


def log_ticks(axis: Axis, low: float, high: float) -> None:
    """Give a logarithmic axis readable ticks, also if it is short."""
    axis.set_minor_formatter(NullFormatter())
    if not 0.0 < low <= high < 50.0 * low:
        return
    subs = (1.0, 3.0) if high > 20.0 * low else (1.0, 2.0, 5.0)
    axis.set_major_locator(LogLocator(10.0, subs=subs))
    axis.set_major_formatter(FuncFormatter(lambda value, _: f"{value:g}"))

"""How figures look: sizes in mm, one palette, one way to write them.

The palette is that of Okabe & Ito (2008, Color Universal Design), which stays apart for readers
with any of the common kinds of colour vision; line styles and labels say the same without colour.
"""

from __future__ import annotations

import io
import re
from collections.abc import Sequence
from contextlib import AbstractContextManager
from dataclasses import dataclass
from typing import Any, Final

import numpy as np
from matplotlib import rc_context
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure

from bayesglm.recording.recording import FloatArray, IntArray

INK: Final = "#1a1a1a"
GREY: Final = "#767676"
LIGHT: Final = "#a6a6a6"
PALE: Final = "#e4e4e4"
ORANGE: Final = "#e69f00"
SKY: Final = "#56b4e9"
GREEN: Final = "#009e73"
BLUE: Final = "#0072b2"
VERMILLION: Final = "#d55e00"
PURPLE: Final = "#cc79a7"

#: Colour and dashes of the ranges of drive or of classes, in order.
SERIES: Final[tuple[tuple[str, Any], ...]] = (
    (ORANGE, (0, (6, 1.5))),
    (GREEN, (0, (4, 1.2, 1, 1.2))),
    (PURPLE, (0, (2.2, 1))),
    (BLUE, "solid"),
    (VERMILLION, (0, (4, 1.2, 1, 1.2, 1, 1.2))),
    (SKY, (0, (9, 2))),
)

DOUBLE_COLUMN_MM: Final = 180.0
_PNG_DPI: Final = 200
_POINTS_PER_MM: Final = 5.0

#: Any, because matplotlib types the keys in one version and not in another.
_STYLE: Final[Any] = {
    "font.family": ["DejaVu Sans"],
    "font.size": 7.5,
    "axes.labelsize": 7.5,
    "axes.titlesize": 7.5,
    "axes.titlelocation": "left",
    "axes.titlepad": 4.0,
    "xtick.labelsize": 7.0,
    "ytick.labelsize": 7.0,
    "legend.fontsize": 7.0,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.edgecolor": GREY,
    "axes.labelcolor": INK,
    "text.color": INK,
    "axes.linewidth": 0.6,
    "xtick.color": GREY,
    "ytick.color": GREY,
    "xtick.labelcolor": INK,
    "ytick.labelcolor": INK,
    "xtick.major.width": 0.6,
    "ytick.major.width": 0.6,
    "xtick.major.size": 2.5,
    "ytick.major.size": 2.5,
    "xtick.minor.size": 1.5,
    "ytick.minor.size": 1.5,
    "axes.unicode_minus": True,
    "lines.linewidth": 1.0,
    "lines.solid_capstyle": "butt",
    "legend.frameon": False,
    "legend.handlelength": 2.6,
    "svg.fonttype": "none",
    "svg.hashsalt": "bayesglm",
    "savefig.facecolor": "white",
    "agg.path.chunksize": 10000,
}

_PATHS = re.compile(r' d="([^"]*)"')
_LONG_NUMBERS = re.compile(r"(\d+\.\d\d)\d+")


@dataclass(frozen=True)
class Margins:
    """Space around and between panels, mm."""

    left: float = 14.0
    right: float = 3.0
    top: float = 7.0
    bottom: float = 10.0
    across: float = 14.0
    down: float = 12.0


def styled() -> AbstractContextManager[None]:
    """Context in which figures are drawn and written."""
    return rc_context(_STYLE)


def new_figure(width_mm: float, height_mm: float) -> Figure:
    """Make an empty figure of the given size, without any global state."""
    figure = Figure(figsize=(width_mm / 25.4, height_mm / 25.4))
    FigureCanvasAgg(figure)
    return figure


def panels(
    figure: Figure, rows: int, columns: int, margins: Margins, heights: Sequence[float] = (1.0,)
) -> list[list[list[Axes]]]:
    """Lay out a grid of panels, each a stack of axes that touch.

    Parameters
    ----------
    figure
        The figure.
    rows, columns
        Size of the grid.
    margins
        Space around and between panels.
    heights
        Heights of the axes of one stack, from the top, in any unit.

    Returns
    -------
    For each row and column the axes of its stack, from the top.
    """
    width, height = figure.get_size_inches() * 25.4
    across = (width - margins.left - margins.right - (columns - 1) * margins.across) / columns
    down = (height - margins.top - margins.bottom - (rows - 1) * margins.down) / rows
    between = 2.0
    unit = (down - between * (len(heights) - 1)) / sum(heights)
    grid = []
    for row in range(rows):
        top = height - margins.top - row * (down + margins.down)
        line = []
        for column in range(columns):
            left = margins.left + column * (across + margins.across)
            stack, y = [], top
            for share in heights:
                y -= share * unit
                box = (left / width, y / height, across / width, share * unit / height)
                stack.append(figure.add_axes(box))
                y -= between
            line.append(stack)
        grid.append(line)
    return grid


def width_of(axes: Axes) -> float:
    """Width of axes, mm."""
    figure = axes.get_figure(root=True)
    assert figure is not None
    return float(axes.get_position().width * figure.get_size_inches()[0] * 25.4)


def points_across(axes: Axes) -> int:
    """Number of columns of pixels worth drawing across axes."""
    return max(50, round(width_of(axes) * _POINTS_PER_MM))


def envelope(values: FloatArray, columns: int) -> IntArray:
    """Choose the samples of a trace to draw: extremes of each column, so that no spike is lost.

    Parameters
    ----------
    values
        The trace, shape (n,); values may be NaN.
    columns
        Number of columns.

    Returns
    -------
    Array of indices, sorted
        At most two a column. Where little changes every change is kept instead, so that steps
        of current have their edges.
    """
    n = len(values)
    changed = values[1:] != values[:-1]
    if np.count_nonzero(changed) < columns:
        before = np.flatnonzero(changed)
        return np.unique(np.concatenate([[0], before, before + 1, [n - 1]]))
    if n <= 2 * columns:
        return np.arange(n)
    width = -(-n // columns)
    whole = n // width * width
    places = (
        _extremes(values[:whole].reshape(-1, width)) + width * np.arange(whole // width)[:, None]
    )
    if whole == n:
        return places.ravel()
    return np.append(places.ravel(), whole + _extremes(values[None, whole:]).ravel())


def _extremes(blocks: FloatArray) -> IntArray:
    """Places of the extremes of each row of blocks, in the order of time, shape (rows, 2)."""
    gone = np.isnan(blocks)
    # Copies only where values are missing: a trace may be as long as a recording.
    some = bool(gone.any())
    lowest = (np.where(gone, np.inf, blocks) if some else blocks).argmin(axis=1)
    highest = (np.where(gone, -np.inf, blocks) if some else blocks).argmax(axis=1)
    places: IntArray = np.sort(np.column_stack([lowest, highest]), axis=1)
    return places


def plot_thinned(
    axes: Axes, times: FloatArray, values: FloatArray, color: str, width: float, label: str = ""
) -> None:
    """Plot a trace with no more points than can be seen.

    Parameters
    ----------
    axes
        Where to.
    times, values
        The trace, shape (n,).
    color, width
        Of the line; the width in points.
    label
        For the legend; empty for none.
    """
    at = envelope(values, points_across(axes))
    axes.plot(times[at], values[at], color=color, linewidth=width, label=label or None)


def label_y(axes: Axes, text: str, mm: float = 9.0) -> None:
    """Label a vertical axis at a fixed distance, so that labels of a column line up."""
    axes.set_ylabel(text)
    axes.yaxis.set_label_coords(-mm / width_of(axes), 0.5)


def hide_x(axes: Axes) -> None:
    """Take the horizontal axis away: that of the axes below serves both."""
    axes.tick_params(bottom=False, labelbottom=False)
    axes.spines["bottom"].set_visible(False)


def as_svg(figure: Figure) -> str:
    """Write a figure as SVG: text stays text, no date, coordinates to a hundredth of a point."""
    buffer = io.StringIO()
    with styled():
        figure.savefig(buffer, format="svg", metadata={"Date": None})
    # Fonts that journals ask for come first; the one measured with is the widest of them.
    text = buffer.getvalue().replace("'DejaVu Sans'", "Helvetica, Arial, 'DejaVu Sans', sans-serif")
    return _PATHS.sub(lambda match: _LONG_NUMBERS.sub(r"\1", match[0]), text)


def as_png(figure: Figure) -> bytes:
    """Write a figure as PNG."""
    buffer = io.BytesIO()
    with styled():
        figure.savefig(buffer, format="png", dpi=_PNG_DPI)
    return buffer.getvalue()

"""What a figure shows, as plain arrays, for the tests of figures."""

from __future__ import annotations

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.patches import StepPatch

from bayesglm.recording.recording import FloatArray


def lines(figure: Figure, panel: int) -> list[Line2D]:
    """Return the lines of a panel, in the order in which they were drawn."""
    return list(figure.axes[panel].get_lines())


def x_of(line: Line2D) -> FloatArray:
    """Return where a line's points lie across."""
    return np.asarray(line.get_xdata(), dtype=np.float64)


def y_of(line: Line2D) -> FloatArray:
    """Return where a line's points lie upwards."""
    return np.asarray(line.get_ydata(), dtype=np.float64)


def histogram_of(axes: Axes) -> tuple[FloatArray, FloatArray]:
    """Return heights, shape (n,), and edges, shape (n + 1,), of the first histogram of a panel."""
    patch = next(patch for patch in axes.patches if isinstance(patch, StepPatch))
    values, edges, _ = patch.get_data()
    return np.asarray(values, dtype=np.float64), np.asarray(edges, dtype=np.float64)

"""Figures of the kernels: of one cell with all its bands, and of all cells side by side."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any, Final

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.patches import Patch

from bayesglm.inference.results import Band, CellFit, Split
from bayesglm.recording.recording import FloatArray
from bayesglm.report.style import (
    BLUE,
    GREY,
    INK,
    PALE,
    SERIES,
    Margins,
    label_y,
    new_figure,
    panels,
)
from bayesglm.report.truth import Truth

KERNEL_TITLES: Final = {"input": "Input kernel κ", "after_spike": "After-spike kernel η"}
_X_LABELS: Final = {
    "input": "Lag (ms, compressed scale)",
    "after_spike": "Time after the spike (ms)",
}
_Y_LABELS: Final = {"input": "κ (MΩ/ms)", "after_spike": "η (mV)"}
_BAND_ALPHA: Final = 0.25
_TRUTH_STYLE: Final[dict[str, Any]] = {"color": INK, "linewidth": 1.0, "linestyle": (0, (5, 3))}
_WHITE_STYLE: Final[dict[str, Any]] = {"color": GREY, "linewidth": 0.9, "linestyle": (0, (1, 1.5))}
#: A range of drive that says little must not flatten the kernel: the axis is stretched for it at
#: each end by at most this share of the height of the bands.
_LARGEST_STRETCH: Final = 0.2


_WARP_MS = 2.0
_WARPED_TICKS_MS = (0, 1, 2, 5, 10, 20, 50, 100, 200, 400)


def drawn_kernels(fit: CellFit) -> list[str]:
    """Names of the kernels that are curves, in the order in which they are drawn."""
    return [name for name in KERNEL_TITLES if name in fit.kernels]


def draw_kernels(fit: CellFit, truth: Truth | None, width_mm: float) -> Figure:
    """Draw each kernel of a cell with its bands, and what each range of drive says alone."""
    names = drawn_kernels(fit)
    columns = len(names) if width_mm > 120 else 1
    rows = -(-len(names) // columns)
    margins = Margins(left=13.0, top=7.0, bottom=20.0 if width_mm > 120 else 36.0, down=16.0)
    height = margins.top + margins.bottom + rows * 56.0 + (rows - 1) * margins.down
    figure = new_figure(width_mm, height)
    grid = panels(figure, rows, columns, margins)
    for place, name in enumerate(names):
        axes = grid[place // columns][place % columns][0]
        _kernel_panel(axes, fit.kernels[name], fit.splits.get(name), truth)
        if name == "after_spike":
            axes.axvspan(0, fit.design.spike_window_ms[1], color=PALE, linewidth=0, zorder=0)
    figure.legend(
        handles=_legend(fit, truth),
        loc="lower center",
        ncols=3 if width_mm > 120 else 1,
        columnspacing=3.0,
    )
    return figure


def draw_overview(fits: Sequence[CellFit], width_mm: float) -> Figure:
    """Draw the kernels of all cells in one pair of panels, a style for each class."""
    names = [name for name in KERNEL_TITLES if any(name in fit.kernels for fit in fits)]
    classes = list(dict.fromkeys(fit.cell_class for fit in fits))
    columns = len(names) if width_mm > 120 else 1
    rows = -(-len(names) // columns)
    margins = Margins(left=13.0, top=7.0, bottom=16.0 if len(classes) > 1 else 10.0, down=16.0)
    height = margins.top + margins.bottom + rows * 50.0 + (rows - 1) * margins.down
    figure = new_figure(width_mm, height)
    grid = panels(figure, rows, columns, margins)
    for place, name in enumerate(names):
        axes = grid[place // columns][place % columns][0]
        bands = [(fit, fit.kernels[name]) for fit in fits if name in fit.kernels]
        for fit, band in bands:
            color, dashes = SERIES[classes.index(fit.cell_class) % len(SERIES)]
            axes.fill_between(
                band.lags_ms, band.lower, band.upper, color=color, alpha=0.12, linewidth=0
            )
            axes.plot(band.lags_ms, band.mean, color=color, linestyle=dashes, linewidth=1.0)
        dress(axes, name, max(band.lags_ms[-1] for _, band in bands))
    if len(classes) > 1:
        figure.legend(handles=_class_legend(classes), loc="lower center", ncols=4)
    return figure


def _kernel_panel(axes: Axes, band: Band, split: Split | None, truth: Truth | None) -> None:
    lags = band.lags_ms
    axes.fill_between(lags, band.lower, band.upper, color=BLUE, alpha=_BAND_ALPHA, linewidth=0)
    for edge in (band.lower_simultaneous, band.upper_simultaneous):
        axes.plot(lags, edge, color=BLUE, linewidth=0.5)
    axes.plot(lags, band.mean, color=BLUE, linewidth=1.6)
    shown = axes.get_ylim()
    for edge in (band.white_lower, band.white_upper):
        axes.plot(lags, edge, **_WHITE_STYLE)
    handles = _range_curves(axes, band, split)
    if truth is not None and band.kernel in truth.curves:
        axes.plot(*_within(truth.curves[band.kernel], lags), **_TRUTH_STYLE)
    axes.set_ylim(_limited(axes.get_ylim(), shown))
    dress(axes, band.kernel, lags[-1])
    if handles:
        positive = float(np.nansum(band.mean)) > 0
        axes.legend(
            handles=handles,
            loc="upper right" if positive else "lower right",
            title="from part of the drive alone",
            title_fontsize=7,
            alignment="left",
            frameon=True,
            edgecolor="none",
            framealpha=0.8,
        )


def _range_curves(axes: Axes, band: Band, split: Split | None) -> list[Line2D]:
    lines = []
    for (color, dashes), part in zip(SERIES, split.ranges if split else (), strict=False):
        curve = np.where(np.isfinite(band.mean), part.curve[0], np.nan)
        lines += axes.plot(
            band.lags_ms, curve, color=color, linestyle=dashes, linewidth=1.1, label=part.label
        )
    return lines


def dress(axes: Axes, name: str, longest_ms: float) -> None:
    """Give the axes of a kernel their scale, ticks, title and labels.

    Parameters
    ----------
    axes
        Where the kernel is drawn.
    name
        ``input`` or ``after_spike``.
    longest_ms
        End of the axis of lags, ms.
    """
    axes.axhline(0.0, color=GREY, linewidth=0.5, zorder=0.5)
    if name == "input":
        # κ falls within the first ms to a fraction of its beginning and lasts for hundreds: as
        # on the axis of its knots, both are seen.
        axes.set_xscale("function", functions=(_warp, _unwarp))
        axes.set_xticks([tick for tick in _WARPED_TICKS_MS if tick <= longest_ms])
    axes.set_xlim(0, longest_ms)
    axes.set_title(KERNEL_TITLES[name])
    axes.set_xlabel(_X_LABELS[name])
    label_y(axes, _Y_LABELS[name])


def _warp(lags_ms: FloatArray) -> FloatArray:
    return np.log1p(np.maximum(lags_ms, 0.0) / _WARP_MS)


def _unwarp(warped: FloatArray) -> FloatArray:
    return _WARP_MS * np.expm1(warped)


def _within(
    curve: tuple[np.ndarray[Any, Any], np.ndarray[Any, Any]], lags: np.ndarray[Any, Any]
) -> tuple[np.ndarray[Any, Any], np.ndarray[Any, Any]]:
    inside = curve[0] >= lags[0]
    return curve[0][inside], curve[1][inside]


def _limited(wanted: tuple[float, float], shown: tuple[float, float]) -> tuple[float, float]:
    """Stretch limits to what is wanted, but not by more than the largest stretch."""
    room = _LARGEST_STRETCH * (shown[1] - shown[0])
    return max(wanted[0], shown[0] - room), min(wanted[1], shown[1] + room)


def _legend(fit: CellFit, truth: Truth | None) -> list[Line2D | Patch]:
    level = f"{100 * next(iter(fit.kernels.values())).level:.0f} %"
    handles: list[Line2D | Patch] = [
        Line2D([], [], color=BLUE, linewidth=1.6, label="posterior mean"),
        Patch(color=BLUE, alpha=_BAND_ALPHA, linewidth=0, label=f"{level} band, lag by lag"),
        Line2D([], [], color=BLUE, linewidth=0.5, label=f"{level} band of the whole curve"),
        Line2D([], [], label=f"{level} band if noise were white", **_WHITE_STYLE),
    ]
    if "after_spike" in fit.kernels:
        handles.append(Patch(color=PALE, linewidth=0, label="spike window: not identified"))
    if truth is not None and truth.curves:
        handles.append(Line2D([], [], label="truth of the simulation", **_TRUTH_STYLE))
    return handles


def _class_legend(classes: Sequence[str]) -> list[Line2D]:
    return [
        Line2D([], [], color=color, linestyle=dashes, label=name or "no class stated")
        for name, (color, dashes) in zip(classes, SERIES * len(classes), strict=False)
    ]

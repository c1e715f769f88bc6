"""Figure of how far the kernels move when one unit is left out.

Each line costs a small linear product and no new fit: the jackknife knows how the estimate moves.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.patches import Patch

from bayesglm.inference.bands import SIMULTANEOUS_SD_SHARE, kernel_rows
from bayesglm.inference.results import CellFit
from bayesglm.recording.recording import BoolArray, FloatArray, IntArray
from bayesglm.report.kernel_figures import drawn_kernels, dress
from bayesglm.report.style import (
    BLUE,
    GREY,
    SERIES,
    Margins,
    hide_x,
    label_y,
    new_figure,
    panels,
)

#: So many units have a name, and so many more a thin line: beyond that lines only cover each
#: other.
_NAMED: Final = 3
_THIN: Final = 20
_MOST_LAGS: Final = 50


@dataclass(frozen=True, eq=False)
class UnitChanges:
    """What leaving out each unit does to a kernel.

    Attributes
    ----------
    lags_ms
        Lags, shape (n,).
    mean, sd
        Posterior mean and sd of the kernel, shape (n,).
    without
        The kernel without each unit, shape (B, n).
    """

    lags_ms: FloatArray
    mean: FloatArray
    sd: FloatArray
    without: FloatArray

    @property
    def judged(self) -> BoolArray:
        """Lags where the kernel is identified and not pinned to zero, shape (n,)."""
        known: BoolArray = np.isfinite(self.mean)
        return known & (self.sd > SIMULTANEOUS_SD_SHARE * np.nanmax(self.sd, initial=0.0))

    @property
    def in_sds(self) -> FloatArray:
        """The change of the kernel, in its posterior sds; NaN where not judged; shape (B, n)."""
        scale = np.where(self.judged, self.sd, np.nan)
        return (self.without - self.mean) / scale


def unit_changes(fit: CellFit, kernel: str) -> UnitChanges:
    """Move a kernel as the posterior moves when each unit is left out, to first order.

    Parameters
    ----------
    fit
        The fit.
    kernel
        ``input`` or ``after_spike``.

    Returns
    -------
    UnitChanges
        The posterior mean less ``(Q + V⁻¹)⁻¹V⁻¹M(ẑ − ẑ without the unit)``: the prior of
        precision Q, at the posterior median of the kernels' sds, damps the change of the
        estimate, ``ŵ = Mẑ`` of covariance V. Sds and V are held.
    """
    band = fit.kernels[kernel]
    white = fit.settings.model.noise == "white"
    precision = fit.calibration.white_precision if white else fit.calibration.precision
    total = fit.prior.precision(fit.chains.median("sd")) + precision
    estimate = fit.calibration.fit.basis @ fit.calibration.changes.T
    changes = np.linalg.solve(total, precision @ estimate)
    moved = (kernel_rows(fit.design, kernel, band.lags_ms) @ changes).T
    return UnitChanges(band.lags_ms, band.mean, band.sd, band.mean - moved)


def most_influential(fit: CellFit) -> IntArray:
    """Units by influence, the largest first.

    The influence of a unit is the root mean square over lags of the change in posterior sds, of
    the kernel where it is largest.
    """
    influence = np.zeros(fit.digest.n_units)
    for name in drawn_kernels(fit):
        found = unit_changes(fit, name)
        if found.judged.any():
            square = np.mean(found.in_sds[:, found.judged] ** 2, axis=1)
            influence = np.maximum(influence, square)
    order: IntArray = np.argsort(-influence, kind="stable")
    return order


def draw_leave_one_out(fit: CellFit, width_mm: float) -> Figure:
    """Draw each kernel without each unit, and the change in posterior sds below."""
    names = drawn_kernels(fit)
    wide = width_mm > 120
    columns = len(names) if wide else 1
    rows = -(-len(names) // columns)
    margins = Margins(left=14.0, across=16.0, bottom=20.0 if wide else 38.0, down=16.0)
    height = margins.top + margins.bottom + rows * 68.0 + (rows - 1) * margins.down
    figure = new_figure(width_mm, height)
    grid = panels(figure, rows, columns, margins, heights=(2.0, 1.0))
    order = most_influential(fit)
    for place, name in enumerate(names):
        upper, lower = grid[place // columns][place % columns]
        _kernel_panel(upper, fit, name)
        _dress(upper, lower, name, float(fit.kernels[name].lags_ms[-1]))
        _unit_lines(upper, lower, unit_changes(fit, name), order)
    figure.legend(
        handles=_legend(fit, order), loc="lower center", ncols=3 if wide else 1, columnspacing=3.0
    )
    return figure


def _kernel_panel(axes: Axes, fit: CellFit, name: str) -> None:
    band = fit.kernels[name]
    axes.fill_between(
        band.lags_ms, band.lower, band.upper, color=BLUE, alpha=0.2, linewidth=0, zorder=0.6
    )
    axes.plot(band.lags_ms, band.mean, color=BLUE, linewidth=1.6, zorder=3)


def _unit_lines(upper: Axes, lower: Axes, found: UnitChanges, order: IntArray) -> None:
    """Draw named units over thin ones, at few lags, even on the axis: each line costs space."""
    x = upper.transData.transform(np.column_stack([found.lags_ms, found.lags_ms]))[:, 0]
    at = np.unique(np.searchsorted(x, np.linspace(x[0], x[-1], _MOST_LAGS)))
    in_sds, limits = found.in_sds, upper.get_ylim()
    for rank, unit in enumerate(order[: _NAMED + _THIN]):
        color, dashes = SERIES[rank] if rank < _NAMED else (GREY, "solid")
        width, above = (1.0, 4) if rank < _NAMED else (0.35, 2)
        for axes, curve in ((upper, found.without[unit]), (lower, in_sds[unit])):
            axes.plot(
                found.lags_ms[at], curve[at], color=color, linestyle=dashes, linewidth=width,
                zorder=above,
            )  # fmt: skip
    for edge in (-1.0, 1.0):
        lower.axhline(edge, color=BLUE, linewidth=0.5)
    # Where a kernel is hardly identified the lines go far: they must not flatten it.
    low, high = upper.get_ylim()
    room = 0.5 * (limits[1] - limits[0])
    upper.set_ylim(max(low, limits[0] - room), min(high, limits[1] + room))
    reach = np.clip(np.nanmax(np.abs(lower.get_ylim())), 1.2, 3.0)
    lower.set_ylim(-reach, reach)


def _dress(upper: Axes, lower: Axes, name: str, longest_ms: float) -> None:
    dress(upper, name, longest_ms)
    dress(lower, name, longest_ms)
    upper.set_xlabel("")
    hide_x(upper)
    lower.set_title("")
    label_y(lower, "Change (sd)")


def _legend(fit: CellFit, order: IntArray) -> list[Line2D | Patch]:
    level = f"{100 * next(iter(fit.kernels.values())).level:.0f} %"
    handles: list[Line2D | Patch] = [
        Line2D([], [], color=BLUE, linewidth=1.6, label="posterior mean"),
        Patch(color=BLUE, alpha=0.2, linewidth=0, label=f"{level} band, lag by lag"),
    ]
    for (color, dashes), unit in zip(SERIES, order[:_NAMED], strict=False):
        label = f"without {fit.digest.labels[unit]}"
        handles.append(Line2D([], [], color=color, linestyle=dashes, label=label))
    others = min(len(order) - _NAMED, _THIN)
    if others > 0:
        label = f"without one of {others} other units"
        handles.append(Line2D([], [], color=GREY, linewidth=0.5, label=label))
    return handles

"""Figure of what is left: how long residuals stay alike, and at which frequencies they lie."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Final

import numpy as np
from matplotlib.figure import Figure

from bayesglm.checks.residuals import SweepRows
from bayesglm.inference.results import CellFit
from bayesglm.likelihood.digest import BAND_EDGES_HZ
from bayesglm.recording.recording import FloatArray
from bayesglm.report.predicted import residual_autocorrelation
from bayesglm.report.style import BLUE, GREY, Margins, label_y, new_figure, panels

_LONGEST_MS: Final = 500.0
_WHITE: Final = (0, (1, 1.5))


def draw_residuals(fit: CellFit, predicted: Sequence[SweepRows], width_mm: float) -> Figure:
    """Draw autocorrelation and spectrum of the residual, each against white noise."""
    columns = 2 if width_mm > 120 else 1
    margins = Margins(left=13.0, down=16.0, across=17.0)
    height = margins.top + margins.bottom + (3 - columns) * 45.0 + (2 - columns) * margins.down
    figure = new_figure(width_mm, height)
    grid = panels(figure, 3 - columns, columns, margins)
    left, right = (stack[0] for line in grid for stack in line)
    lags, correlation = residual_autocorrelation(
        predicted, fit.design.row_ms, fit.settings.model.sweep_offsets, _LONGEST_MS
    )
    left.plot(lags, correlation, color=BLUE, linewidth=1.2, label="residual")
    left.axhline(0.0, color=GREY, linewidth=0.9, linestyle=_WHITE, label="white noise")
    left.set_xlim(0, lags[-1])
    left.set_title("Autocorrelation of the residual")
    left.set_xlabel("Lag (ms)")
    label_y(left, "Correlation (no unit)")
    edges, density, white = residual_spectrum(fit)
    right.stairs(density, edges, baseline=None, color=BLUE, linewidth=1.2, label="residual")
    right.axhline(white, color=GREY, linewidth=0.9, linestyle=_WHITE, label="white noise")
    right.set_xscale("log")
    right.set_yscale("log")
    right.set_xlim(edges[0], edges[-1])
    right.xaxis.set_major_formatter(lambda x, _: f"{x:g}")
    right.set_title("Spectrum of the residual")
    right.set_xlabel("Frequency (Hz)")
    label_y(right, "Power density (mV²/Hz)")
    for axes in (left, right):
        axes.legend(loc="upper right")
    return figure


def residual_spectrum(fit: CellFit) -> tuple[FloatArray, FloatArray, float]:
    """One-sided power density of the residual by band, and that of white noise of its variance.

    Returns
    -------
    (edges in Hz, density in mV²/Hz, white density in mV²/Hz)
        Shapes (F + 1,), (F,); bands that hold nothing are left out.
    """
    nyquist = 500.0 / fit.design.row_ms
    # The first band reaches down to zero, which a logarithmic axis cannot show.
    edges = np.array([BAND_EDGES_HZ[0] / 2, *BAND_EDGES_HZ])
    edges = np.append(edges[edges < nyquist], nyquist)
    per_Hz = 2e-3 * fit.design.row_ms
    density = per_Hz * fit.calibration.spectrum[: len(edges) - 1]
    # A band too narrow to hold a frequency of the transform joins the one above it.
    filled = density > 0
    white = per_Hz * fit.calibration.fit.residual_variance
    return np.append(edges[0], edges[1:][filled]), density[filled], white

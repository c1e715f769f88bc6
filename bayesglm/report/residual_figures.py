"""Figures of what is left: how long residuals stay alike, at which frequencies, and how large."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Final

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from scipy.stats import norm

from bayesglm.checks.residuals import EVENT_SDS, ResidualMoments, SweepRows, residual_moments
from bayesglm.inference.results import CellFit
from bayesglm.likelihood.digest import BAND_EDGES_HZ
from bayesglm.recording.recording import FloatArray
from bayesglm.recording.wording import fixed, number
from bayesglm.report.predicted import centred_residuals, residual_autocorrelation
from bayesglm.report.style import BLUE, GREY, INK, Margins, label_y, new_figure, panels
from bayesglm.report.wording import count

_LONGEST_MS: Final = 500.0
_WHITE: Final = (0, (1, 1.5))
_BINS: Final = 80


def draw_residuals(fit: CellFit, predicted: Sequence[SweepRows], width_mm: float) -> Figure:
    """Draw autocorrelation and spectrum of the residual, each against white noise."""
    columns = 2 if width_mm > 120 else 1
    margins = Margins(left=13.0, down=16.0, across=17.0)
    height = margins.top + margins.bottom + (3 - columns) * 45.0 + (2 - columns) * margins.down
    figure = new_figure(width_mm, height)
    grid = panels(figure, 3 - columns, columns, margins)
    left, right = (stack[0] for line in grid for stack in line)
    residuals = centred_residuals(predicted, fit)
    lags, correlation = residual_autocorrelation(residuals, fit.design.row_ms, _LONGEST_MS)
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


def draw_residual_distribution(
    fit: CellFit, predicted: Sequence[SweepRows], width_mm: float
) -> Figure:
    """Draw the histogram of the residual against a normal of its sd, with its moments in words."""
    residuals = centred_residuals(predicted, fit)
    found = residual_moments(residuals, fit.design.row_ms)
    wide = width_mm > 120
    margins = Margins(left=15.0, right=70.0) if wide else Margins(left=15.0, top=27.0, bottom=24.0)
    figure = new_figure(width_mm, margins.top + margins.bottom + 50.0)
    axes = panels(figure, 1, 1, margins)[0][0][0]
    _histogram(axes, np.concatenate(residuals), found)
    if wide:
        axes.legend(loc="lower left", bbox_to_anchor=(1.02, 0.0))
    else:
        figure.legend(loc="lower center")
    place = (1.04, 1.0) if wide else (0.0, 1.14)
    axes.text(
        *place, "\n".join(moments_in_words(found)), transform=axes.transAxes, linespacing=1.6,
        verticalalignment="top" if wide else "bottom",
    )  # fmt: skip
    return figure


def moments_in_words(found: ResidualMoments) -> tuple[str, ...]:
    """The moments of the residual and the number of its events, in words."""
    above, below = (
        f"{count(n, 'event')} ({number(n / max(found.seconds, 1e-9), 2)}/s)"
        for n in (found.above, found.below)
    )
    low, high = (fixed(limit, 1) for limit in found.limits)
    return (
        f"sd {number(found.sd, 3)} mV, robust sd {number(found.robust_sd, 3)} mV",
        f"skewness {fixed(found.skewness, 2)}, excess kurtosis {fixed(found.excess_kurtosis, 1)}",
        f"above {high} mV: {above}",
        f"below {low} mV: {below}",
    )


def _histogram(axes: Axes, residual: FloatArray, found: ResidualMoments) -> None:
    residual = residual[np.isfinite(residual)]
    density, edges = np.histogram(residual, bins=_BINS, density=True)
    lowest = 0.5 / (len(residual) * (edges[1] - edges[0]))
    axes.stairs(
        np.maximum(density, lowest / 10), edges, baseline=None, color=BLUE, linewidth=1.2,
        label="residual",
    )  # fmt: skip
    x = np.linspace(edges[0], edges[-1], 201)
    normal = norm.pdf(x, residual.mean(), max(found.sd, 1e-12))
    axes.plot(x, normal, color=INK, linestyle=(0, (5, 2)), label="normal of the same sd")
    for limit in found.limits:
        axes.axvline(
            limit, color=GREY, linewidth=0.9, linestyle=_WHITE,
            label=f"{EVENT_SDS:g} robust sd" if limit == found.limits[1] else None,
        )  # fmt: skip
    axes.set_yscale("log")
    axes.set_ylim(lowest, 3 * max(density.max(), normal.max()))
    axes.set_xlim(edges[0], edges[-1])
    axes.set_title("Distribution of the residual")
    axes.set_xlabel("Residual (mV)")
    label_y(axes, "Density (1/mV)", mm=10.0)

"""Figures of what the sampler did: the prior against the posterior, and the chains themselves."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Final

import numpy as np
from arviz_stats.base import array_stats
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.patches import Patch
from matplotlib.ticker import NullLocator
from scipy.stats import gamma, halfnorm, norm, rankdata

from bayesglm.features import resistance_row
from bayesglm.inference.diagnose import PRIOR_SHARE_LIMIT
from bayesglm.inference.results import Band, CellFit
from bayesglm.recording.recording import FloatArray
from bayesglm.recording.wording import fixed, minus
from bayesglm.report.kernel_figures import drawn_kernels, dress
from bayesglm.report.style import (
    BLUE,
    GREY,
    INK,
    PALE,
    VERMILLION,
    Margins,
    envelope,
    hide_x,
    label_y,
    new_figure,
    panels,
)

_SIGNS: Final = {"input": "κ", "after_spike": "η"}
_UNITS: Final = {"input": "MΩ/ms", "after_spike": "mV"}
_PRIOR_LINE: Final = (0, (1, 1.5))
_RANK_BINS: Final = 20
#: Of each chain so many columns are drawn, its extremes in each.
_TRACE_COLUMNS: Final = 60


@dataclass(frozen=True, eq=False)
class Scalar:
    """A sampled number.

    Attributes
    ----------
    label
        What it is, with its unit.
    draws
        Shape (chains, draws).
    prior
        Its prior distribution (of `scipy.stats`), or None where it has none of its own.
    """

    label: str
    draws: FloatArray
    prior: Any = None


def hyperparameters(fit: CellFit) -> list[Scalar]:
    """What was sampled: sds of the kernels, φ, and the time constants of exponentials."""
    sd = fit.chains.draws["sd"]
    found = [
        Scalar(
            f"Sd of {_SIGNS[name]} ({_UNITS[name]})",
            sd[..., k],
            halfnorm(scale=fit.prior.sd_scale[k]),
        )
        for k, name in enumerate(fit.prior.names)
    ]
    # Where residuals are taken for white φ is one, and there is nothing to show.
    if fit.settings.model.noise != "white":
        half = fit.calibration.freedom / 2
        found.append(Scalar("φ (no unit)", fit.chains.draws["phi"], gamma(half, scale=1 / half)))
    # Their prior comes from what places them and has no simple density.
    for name, tau in fit.chains.time_constants.items():
        found += [
            Scalar(f"τ{k + 1} of {_SIGNS[name]} (ms)", tau[..., k]) for k in range(tau.shape[-1])
        ]
    return found


def resistance_draws(fit: CellFit) -> Scalar:
    """The input resistance of each draw."""
    step_ms = min(recording.step_ms for recording in fit.recordings)
    return Scalar("Input resistance (MΩ)", fit.weights @ resistance_row(fit.design, step_ms))


def draw_prior_posterior(fit: CellFit, width_mm: float) -> Figure:
    """Draw what the data did to the prior: of each kernel by lag, and of each hyperparameter."""
    names, scalars = drawn_kernels(fit), hyperparameters(fit)
    wide = width_mm > 120
    columns = len(names) if wide else 1
    rows = -(-len(names) // columns)
    across = min(len(scalars), 4) if wide else 1
    down = -(-len(scalars) // across)
    foot, upper_mm, lower_mm = (12.0 if wide else 20.0), rows * 88.0, down * 40.0
    figure = new_figure(width_mm, upper_mm + lower_mm + foot)
    upper = Margins(left=15.0, bottom=lower_mm + foot + 10.0, across=17.0, down=16.0)
    lower = Margins(left=8.0, top=upper_mm + 4.0, bottom=foot + 10.0, across=10.0, down=14.0)
    grid = panels(figure, rows, columns, upper, heights=(2.0, 1.2))
    for place, name in enumerate(names):
        _kernel_against_prior(grid[place // columns][place % columns], fit.kernels[name])
    cells = [stack[0] for line in panels(figure, down, across, lower) for stack in line]
    for axes, scalar in zip(cells, scalars, strict=False):
        _scalar_against_prior(axes, scalar)
    for axes in cells[len(scalars) :]:
        figure.delaxes(axes)
    figure.legend(
        handles=_prior_legend(fit), loc="lower center", ncols=2 if wide else 1, columnspacing=3.0
    )
    return figure


def prior_sd(band: Band) -> FloatArray:
    """Prior sd of a kernel at its lags, in its unit; NaN where it is not known; shape (n,)."""
    known = band.prior_share > 0
    return np.divide(band.sd, band.prior_share, out=np.full(len(band.sd), np.nan), where=known)


def _kernel_against_prior(stack: list[Axes], band: Band) -> None:
    curve, share = stack
    reach = float(norm.ppf((1 + band.level) / 2)) * prior_sd(band)
    curve.fill_between(band.lags_ms, -reach, reach, color=PALE, alpha=0.6, linewidth=0)
    for edge in (-reach, reach):
        curve.plot(band.lags_ms, edge, color=GREY, linewidth=1.0, linestyle=_PRIOR_LINE)
    curve.fill_between(band.lags_ms, band.lower, band.upper, color=BLUE, alpha=0.35, linewidth=0)
    curve.plot(band.lags_ms, band.mean, color=BLUE, linewidth=1.4)
    share.plot(band.lags_ms, band.prior_share, color=BLUE, linewidth=1.4)
    share.axhline(PRIOR_SHARE_LIMIT, color=VERMILLION, linewidth=0.9, linestyle=(0, (5, 2)))
    share.annotate(
        "above: set by the prior", (1.0, PRIOR_SHARE_LIMIT), (0, -2), va="top", ha="right",
        xycoords=("axes fraction", "data"), textcoords="offset points", fontsize=6.5,
    )  # fmt: skip
    for axes in stack:
        dress(axes, band.kernel, float(band.lags_ms[-1]))
    curve.set_xlabel("")
    hide_x(curve)
    share.set_title("")
    _compress(curve, band, float(np.nanmax(reach, initial=0.0)))
    share.set_yscale("log")
    smallest = float(np.nanmin(band.prior_share, initial=0.1))
    share.set_ylim(max(smallest / 1.5, 1e-4), 1.3)
    share.yaxis.set_major_formatter(lambda y, _: f"{y:g}")
    label_y(share, "Prior share", mm=10.0)


def _compress(axes: Axes, band: Band, widest: float) -> None:
    """Show the posterior on a linear scale, and the far wider prior beyond it on a logarithmic."""
    posterior = np.nanmax(np.abs([band.lower, band.upper]), initial=0.0)
    if not 0 < posterior < widest:
        return
    decade = 10.0 ** np.floor(np.log10(posterior))
    linear = next(decade * step for step in (1.0, 2.0, 5.0, 10.0) if decade * step >= posterior)
    axes.set_yscale("symlog", linthresh=linear, linscale=1.5)
    decades = linear * 10.0 ** np.arange(int(np.log10(max(widest / linear, 1.0))) + 1)
    ticks = np.concatenate([-decades[::-1], [-linear / 2, 0.0, linear / 2], decades])
    axes.set_yticks(ticks)
    axes.yaxis.set_minor_locator(NullLocator())
    axes.yaxis.set_major_formatter(lambda y, _: minus(f"{y:g}"))
    label_y(axes, f"{_SIGNS[band.kernel]} ({band.unit}), log beyond ±{linear:g}", mm=10.0)


def _scalar_against_prior(axes: Axes, scalar: Scalar) -> None:
    draws = scalar.draws.ravel()
    low, high = np.quantile(draws, [0.001, 0.999])
    density, edges = np.histogram(draws, bins=40, range=(low, high), density=True)
    axes.stairs(density, edges, fill=True, color=BLUE, alpha=0.45)
    if scalar.prior is not None:
        low = min(low, float(scalar.prior.ppf(0.001)))
        high = max(high, float(scalar.prior.ppf(0.99)))
        x = np.linspace(low, high, 200)
        axes.plot(x, scalar.prior.pdf(x), color=INK, linewidth=1.0, linestyle=_PRIOR_LINE)
    axes.set_xlim(low, high)
    axes.set_yticks([])
    axes.spines["left"].set_visible(False)
    axes.locator_params(axis="x", nbins=5)
    axes.set_xlabel(scalar.label)
    axes.set_ylabel("Density")


def _prior_legend(fit: CellFit) -> list[Line2D | Patch]:
    level = f"{100 * next(iter(fit.kernels.values())).level:.0f} %"
    return [
        Patch(
            facecolor=PALE, edgecolor=GREY, linestyle=_PRIOR_LINE, linewidth=1.0,
            label=f"prior: {level} band, lag by lag",
        ),
        Line2D([], [], color=INK, linestyle=_PRIOR_LINE, label="prior: density"),
        Patch(color=BLUE, alpha=0.35, linewidth=0, label=f"posterior: mean and {level} band"),
        Patch(color=BLUE, alpha=0.45, linewidth=0, label="posterior: draws"),
    ]  # fmt: skip


def draw_trace_rank(fit: CellFit, width_mm: float) -> Figure:
    """Draw the chains of each hyperparameter and of the input resistance, and their ranks."""
    scalars = [*hyperparameters(fit), resistance_draws(fit)]
    wide = width_mm > 120
    rows, columns = (len(scalars), 2) if wide else (2 * len(scalars), 1)
    margins = Margins(left=14.0, right=5.0, top=8.0, across=16.0, down=9.0 if wide else 18.0)
    row_mm = 24.0
    height = margins.top + margins.bottom + rows * row_mm + (rows - 1) * margins.down
    figure = new_figure(width_mm, height)
    cells = [stack[0] for line in panels(figure, rows, columns, margins) for stack in line]
    for place, scalar in enumerate(scalars):
        trace, ranks = cells[2 * place : 2 * place + 2]
        _trace(trace, scalar)
        _ranks(ranks, scalar)
        trace.set_xlabel("Draw, one chain after the other")
        ranks.set_xlabel("Rank of the draw among those of all chains")
        for axes in (trace, ranks):
            axes.locator_params(axis="x", nbins=5)
            if place < len(scalars) - 1 and wide:
                axes.set_xlabel("")
                hide_x(axes)
    return figure


def _trace(axes: Axes, scalar: Scalar) -> None:
    """Draw the chains one after the other, so that none covers another."""
    chains, n = scalar.draws.shape
    for k, chain in enumerate(scalar.draws):
        at = envelope(chain, _TRACE_COLUMNS)
        axes.plot(k * n + at, chain[at], color=BLUE, linewidth=0.5)
        if k:
            axes.axvline(k * n, color=GREY, linewidth=0.5)
        axes.text(
            (k + 0.5) / chains, 1.0, f"chain {k + 1}", transform=axes.transAxes, fontsize=6.0,
            ha="center", va="bottom", color=GREY,
        )  # fmt: skip
    axes.set_xlim(0, chains * n)
    axes.set_title(scalar.label, pad=9.0)
    axes.locator_params(axis="y", nbins=4)


def rank_counts(draws: FloatArray) -> FloatArray:
    """Histogram of the ranks of each chain among all draws, over what is expected, less one.

    Parameters
    ----------
    draws
        Shape (chains, draws).

    Returns
    -------
    Shape (chains, 20): zero where all chains hold as many draws of those ranks.
    """
    ranks = rankdata(draws, method="average").reshape(draws.shape)
    edges = np.linspace(0.5, draws.size + 0.5, _RANK_BINS + 1)
    counts = np.array([np.histogram(chain, edges)[0] for chain in ranks])
    expected = np.histogram(np.arange(1, draws.size + 1), edges)[0] / len(draws)
    relative: FloatArray = counts / expected - 1.0
    return relative


def _ranks(axes: Axes, scalar: Scalar) -> None:
    counts = rank_counts(scalar.draws)
    edges = np.linspace(0, scalar.draws.size, _RANK_BINS + 1)
    for k, relative in enumerate(counts, start=1):
        # A chain twice as often, or never, among these ranks reaches almost to the next one.
        axes.stairs(
            k + 0.8 * np.clip(relative, -1, 1), edges, baseline=k, fill=True, color=BLUE, alpha=0.6
        )
        axes.axhline(k, color=INK, linewidth=0.5)
    rhat, ess = (
        float(measure(scalar.draws, chain_axis=0, draw_axis=1))
        for measure in (array_stats.rhat, array_stats.ess)
    )
    axes.set_title(f"R̂ {fixed(rhat, 3)}, {fixed(ess, 0)} effective draws", pad=9.0)
    axes.set_xlim(0, scalar.draws.size)
    axes.set_ylim(len(counts) + 1, 0)
    axes.set_yticks(range(1, len(counts) + 1))
    label_y(axes, "Chain", mm=6.0)

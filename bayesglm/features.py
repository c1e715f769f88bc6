"""Numbers read off the kernels, draw by draw, with definitions that create no effects.

A minimum taken in every draw would be biased downwards by noise, and the maximum of a noisy
flat curve is always positive. Extrema are therefore read at the lag of the mean curve's
extremum, and a bump counts only where the kernel exceeds δ for several milliseconds.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from bayesglm.inference.bands import identified, kernel_lags, kernel_rows
from bayesglm.kernels.design import VoltageDesign
from bayesglm.recording.recording import FloatArray, IntArray

#: A bump is η above this, mV, …
BUMP_MV = 0.25
#: … for at least this long, ms.
BUMP_MS = 5.0
#: With fewer bumps than this share of the draws, height and time of the peak are left blank.
_FEWEST_BUMPS = 0.05


@dataclass(frozen=True, eq=False)
class FeatureDraws:
    """Draws of one feature.

    Attributes
    ----------
    kernel
        The kernel it is read from; empty for the offset and the noise.
    unit
        Unit of the draws.
    draws
        Shape (D,).
    is_probability
        Whether the draws are 0/1 events of which only the mean is of interest.
    """

    kernel: str
    unit: str
    draws: FloatArray
    is_probability: bool = False


def resistance_row(design: VoltageDesign, step_ms: float) -> FloatArray:
    """Combination of the weights that is the input resistance ``Σ_k κ_k dt``, MΩ, shape (P,)."""
    lags = design.input.lags(step_ms)
    row: FloatArray = kernel_rows(design, "input", lags).sum(axis=0) * step_ms
    return row


def linear_features(
    design: VoltageDesign, step_ms: float, report_at_ms: tuple[float, ...]
) -> dict[str, FloatArray]:
    """Features that are linear in the weights, by name, as combinations of them, shape (P,)."""
    rows = {"input_resistance": resistance_row(design, step_ms)}
    if design.after_spike is not None:
        lags = _reported_lags(design, report_at_ms)
        at_lags = kernel_rows(design, "after_spike", lags)
        rows |= {f"after_spike_at_{lag:g}ms": row for lag, row in zip(lags, at_lags, strict=True)}
    return rows


def reported_rows(
    design: VoltageDesign, step_ms: float, report_at_ms: tuple[float, ...]
) -> FloatArray:
    """The reported scalars that are linear in the weights, shape (n, P): they set ν."""
    offset = np.zeros((1, design.n_weights))
    offset[0, 0] = 1.0
    return np.concatenate([offset, [*linear_features(design, step_ms, report_at_ms).values()]])


def feature_draws(
    weights: FloatArray, design: VoltageDesign, step_ms: float, report_at_ms: tuple[float, ...]
) -> dict[str, FeatureDraws]:
    """Read the features off draws of the weights.

    Parameters
    ----------
    weights
        Shape (D, P).
    design
        The linear model.
    step_ms
        Recorded step, ms.
    report_at_ms
        Lags after a spike at which η is reported, ms; those outside what is identified are
        left out.

    Returns
    -------
    dict
        By name, in the order of the table.
    """
    found = {
        "input_resistance": FeatureDraws("input", "MΩ", weights @ resistance_row(design, step_ms)),
        "membrane_time_constant": FeatureDraws("input", "ms", _time_constants(weights, design)),
        "input_half_width": FeatureDraws(
            "input", "ms", _input_half_widths(weights, design, step_ms)
        ),
        "offset": FeatureDraws("", "mV", weights[:, design.columns["offset"].start]),
    }
    if "electrode" in design.columns:
        found["electrode_resistance"] = FeatureDraws(
            "", "MΩ", weights[:, design.columns["electrode"]].sum(axis=1)
        )
    if design.after_spike is not None:
        found |= _after_spike(weights, design, report_at_ms)
    return found


def _time_constants(weights: FloatArray, design: VoltageDesign) -> FloatArray:
    lags = kernel_lags(design, "input")
    curves = weights @ kernel_rows(design, "input", lags).T
    spacing = np.diff(lags, prepend=0.0)
    variance = curves.var(axis=0)
    # Where the kernel is pinned to zero its variance vanishes; such lags must not decide the fit.
    variance = np.maximum(variance, np.median(variance))
    return fit_exponentials(lags, curves, spacing / np.where(variance > 0, variance, 1.0))


def _input_half_widths(weights: FloatArray, design: VoltageDesign, step_ms: float) -> FloatArray:
    """Lag by which half of the input resistance is reached, ms, shape (D,); τ ln 2 if exponential.

    Half of the largest value of κ would tell of its first sample alone: electrode and dendrites
    make the first millisecond several times higher than the membrane's part, at a few percent of
    the area. The area up to a lag is also what a step of current shows. NaN where the mean has no
    positive area.
    """
    every = design.input.lags(step_ms)
    area = np.cumsum(kernel_rows(design, "input", every), axis=0) * step_ms
    ends = np.minimum(np.searchsorted(every, kernel_lags(design, "input") - 1e-9), len(every) - 1)
    reached = weights @ area[ends].T
    whole = weights @ area[-1]
    if whole.mean() <= 0:
        return np.full(len(weights), np.nan)
    reached = np.concatenate([np.zeros((len(weights), 1)), reached], axis=1)
    beyond = reached >= whole[:, None] / 2
    beyond[:, 0], beyond[:, -1] = False, True
    after = np.argmax(beyond, axis=1)
    lags = np.concatenate([[0.0], every[ends]])
    return _crossing(lags, reached, whole / 2, after)


def _crossing(
    lags_ms: FloatArray, curves: FloatArray, level: FloatArray, after: IntArray
) -> FloatArray:
    """Lag at which each curve crosses its level between index `after` − 1 and `after`, ms, (D,)."""
    draw = np.arange(len(curves))
    low, high = curves[draw, after - 1], curves[draw, after]
    share = np.divide(level - low, high - low, out=np.zeros_like(low), where=high != low)
    crossing: FloatArray = lags_ms[after - 1] + np.clip(share, 0.0, 1.0) * (
        lags_ms[after] - lags_ms[after - 1]
    )
    return crossing


def half_widths(lags_ms: FloatArray, curves: FloatArray, lowest: int) -> FloatArray:
    """Width of the stretch around a minimum in which each curve is below half of it, ms.

    Parameters
    ----------
    lags_ms
        Shape (n,), ms.
    curves
        Shape (D, n), mV.
    lowest
        Index of the minimum of the mean curve; each curve's own value there sets its level.

    Returns
    -------
    Shape (D,). Where the stretch is cut by the first lag or the last, it begins or ends there; 0
    for a curve that is not negative at the minimum.
    """
    level = curves[:, lowest] / 2
    above = curves > level[:, None]
    right, left = above[:, lowest:], above[:, lowest::-1]
    end = np.full(len(curves), lags_ms[-1])
    start = np.full(len(curves), lags_ms[0])
    ends, starts = right.any(axis=1), left.any(axis=1)
    after = lowest + np.argmax(right, axis=1)
    before = lowest - np.argmax(left, axis=1)
    deep = level < 0
    for found, which, index in ((end, ends & deep, after), (start, starts & deep, before + 1)):
        found[which] = _crossing(lags_ms, curves[which], level[which], index[which])
    return np.where(deep, end - start, 0.0)


def fit_exponentials(lags_ms: FloatArray, curves: FloatArray, weight: FloatArray) -> FloatArray:
    """Fit ``a·exp(−s/τ)`` to many curves by weighted least squares.

    Parameters
    ----------
    lags_ms
        Shape (n,), ms.
    curves
        Shape (D, n).
    weight
        Weight of each lag, shape (n,).

    Returns
    -------
    τ of each curve in ms, shape (D,): the best of a fine grid, then Gauss–Newton in (a, log τ).
    """
    grid = np.geomspace(lags_ms[0], 3 * lags_ms[-1], 150)
    shapes = np.exp(-lags_ms[:, None] / grid)
    projection = np.maximum((curves * weight) @ shapes, 0.0)
    explained = projection**2 / (weight @ shapes**2)
    tau = grid[np.argmax(explained, axis=1)]
    for _ in range(8):
        shape = np.exp(-lags_ms / tau[:, None])
        slope = shape * lags_ms / tau[:, None]
        aa, ab, bb = (shape**2) @ weight, (shape * slope) @ weight, (slope**2) @ weight
        a = ((curves * shape) @ weight) / aa
        misfit = ((curves - a[:, None] * shape) * slope) @ weight
        # With the amplitude eliminated, the step in log τ; short, so that it stays on the grid.
        curvature = a * (bb - ab**2 / aa)
        step = np.divide(misfit, curvature, out=np.zeros_like(misfit), where=curvature != 0)
        tau = np.clip(tau * np.exp(np.clip(step, -0.1, 0.1)), grid[0], grid[-1])
    return tau


def _after_spike(
    weights: FloatArray, design: VoltageDesign, report_at_ms: tuple[float, ...]
) -> dict[str, FeatureDraws]:
    lags = kernel_lags(design, "after_spike")
    lags = lags[identified(design, "after_spike", lags)]
    curves = weights @ kernel_rows(design, "after_spike", lags).T
    mean = curves.mean(axis=0)
    lowest = int(np.argmin(mean))
    highest = lowest + int(np.argmax(mean[lowest:]))
    peaks = curves[:, highest]
    peak_times = lags[lowest + np.argmax(curves[:, lowest:], axis=1)]
    bump = has_bump(lags[lowest:], curves[:, lowest:])
    if bump.mean() < _FEWEST_BUMPS:
        # The kernel only climbs back to its end, which is zero by construction: no peak.
        peaks, peak_times = np.full_like(peaks, np.nan), np.full_like(peak_times, np.nan)
    minimum_times = lags[np.argmin(curves, axis=1)]
    if lowest == 0:
        # It falls towards the spike window's end: the minimum lies inside, where nothing is known.
        minimum_times = np.full_like(minimum_times, np.nan)
    widths = half_widths(lags, curves, lowest)
    if mean[lowest] >= 0:
        widths = np.full_like(widths, np.nan)
    kernel = "after_spike"
    found = {
        "after_spike_minimum": FeatureDraws(kernel, "mV", curves[:, lowest]),
        "after_spike_minimum_time": FeatureDraws(kernel, "ms", minimum_times),
        "after_spike_half_width": FeatureDraws(kernel, "ms", widths),
        "after_spike_peak": FeatureDraws(kernel, "mV", peaks),
        "after_spike_peak_time": FeatureDraws(kernel, "ms", peak_times),
        "after_spike_peak_probability": FeatureDraws(kernel, "1", bump, is_probability=True),
    }
    for lag in _reported_lags(design, report_at_ms):
        at = weights @ kernel_rows(design, kernel, np.array([lag]))[0]
        found[f"after_spike_at_{lag:g}ms"] = FeatureDraws(kernel, "mV", at)
    return found


def has_bump(lags_ms: FloatArray, curves: FloatArray) -> FloatArray:
    """Whether each curve exceeds `BUMP_MV` for at least `BUMP_MS` without a break, 0 or 1.

    Parameters
    ----------
    lags_ms
        Shape (n,), ms.
    curves
        Shape (D, n), mV.
    """
    longest = np.zeros(len(curves))
    run = np.zeros(len(curves))
    spacing = np.diff(lags_ms, prepend=lags_ms[0])
    for above, width in zip((curves > BUMP_MV).T, spacing, strict=True):
        # A run lasts from its first to its last lag.
        run = np.where(above, np.where(np.isnan(run), 0.0, run + width), np.nan)
        longest = np.fmax(longest, run)
    return (longest >= BUMP_MS).astype(float)


def _reported_lags(design: VoltageDesign, report_at_ms: tuple[float, ...]) -> FloatArray:
    lags = np.array(report_at_ms, dtype=np.float64)
    assert design.after_spike is not None
    inside = identified(design, "after_spike", lags) & (lags < design.after_spike.duration_ms)
    return lags[inside]

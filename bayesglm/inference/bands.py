"""From draws of the weights to bands of the kernels."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.stats import norm

from bayesglm.inference.results import SIMULTANEOUS_SD_SHARE as SIMULTANEOUS_SD_SHARE
from bayesglm.inference.results import Band
from bayesglm.kernels.design import VoltageDesign
from bayesglm.recording.recording import BoolArray, FloatArray

KERNEL_UNITS = {"input": "MΩ/ms", "after_spike": "mV", "electrode": "MΩ"}

#: Lags are written every row up to here, ms, and every 1 ms after.
_FINE_LAGS_MS = 20.0


@dataclass(frozen=True, eq=False)
class WeightSummary:
    """Gaussian summary of the weights under some assumption: mean (P,), covariance (P, P)."""

    mean: FloatArray
    covariance: FloatArray


def kernel_lags(design: VoltageDesign, kernel: str) -> FloatArray:
    """Lags at which a kernel is written, ms: every row to 20 ms, then every 1 ms.

    The electrode term has the lag 0, and those in the middle of its kernel's bins.
    """
    if kernel == "electrode":
        bins = design.electrode_kernel
        edges = np.zeros(1) if bins is None else bins.edges_ms
        return np.append(0.0, (edges[1:] + edges[:-1]) / 2)
    duration = design.kernels[kernel].duration_ms
    fine = np.arange(1, round(_FINE_LAGS_MS / design.row_ms) + 1) * design.row_ms
    coarse = np.arange(_FINE_LAGS_MS + 1.0, duration + 1e-9)
    lags = np.concatenate([fine, coarse])
    return lags[lags <= duration + 1e-9]


def kernel_rows(design: VoltageDesign, kernel: str, lags_ms: FloatArray) -> FloatArray:
    """Matrix that maps all weights to a kernel at given lags, shape (n_lags, P)."""
    rows = np.zeros((len(lags_ms), design.n_weights))
    place = design.columns[kernel]
    if kernel == "electrode":
        # Each lag is a weight of its own, in MΩ.
        rows[:, place] = np.eye(place.stop - place.start)
    else:
        rows[:, place] = design.kernels[kernel].evaluate(lags_ms)
    return rows


def identified(design: VoltageDesign, kernel: str, lags_ms: FloatArray) -> BoolArray:
    """Lags at which the voltage says something: for η, those after the spike window."""
    if kernel != "after_spike":
        return np.ones(len(lags_ms), dtype=np.bool_)
    return lags_ms > design.spike_window_ms[1] + 1e-9


def make_band(
    kernel: str,
    design: VoltageDesign,
    draws: FloatArray,
    white: WeightSummary,
    prior_covariance: FloatArray,
    level: float,
) -> Band:
    """Summarise draws of the weights as a band, the split by drive left blank.

    Parameters
    ----------
    kernel
        ``input``, ``after_spike`` or ``electrode``.
    design
        The linear model.
    draws
        Weights, shape (D, P).
    white
        The weights if residuals were white.
    prior_covariance
        Of the weights with the kernels' sds integrated out, shape (P, P).
    level
        Level of the bands.

    Returns
    -------
    Band
    """
    lags = kernel_lags(design, kernel)
    rows = kernel_rows(design, kernel, lags)
    curves = draws @ rows.T
    mean, sd = curves.mean(axis=0), curves.std(axis=0, ddof=1)
    lower, upper = np.quantile(curves, [(1 - level) / 2, (1 + level) / 2], axis=0)
    known = identified(design, kernel, lags)
    reach = simultaneous_factor(curves[:, known], level)
    white_sd = np.sqrt(np.einsum("lp,pq,lq->l", rows, white.covariance, rows))
    white_mean, z = rows @ white.mean, float(norm.ppf((1 + level) / 2))
    prior_sd = np.sqrt(np.einsum("lp,pq,lq->l", rows, prior_covariance, rows))
    blank = np.full(len(lags), np.nan)

    def shown(values: FloatArray) -> FloatArray:
        return np.where(known, values, np.nan)

    return Band(
        kernel=kernel,
        unit=KERNEL_UNITS[kernel],
        level=level,
        lags_ms=lags,
        mean=shown(mean),
        sd=shown(sd),
        lower=shown(lower),
        upper=shown(upper),
        lower_simultaneous=shown(mean - reach * sd),
        upper_simultaneous=shown(mean + reach * sd),
        white_lower=shown(white_mean - z * white_sd),
        white_upper=shown(white_mean + z * white_sd),
        between_range_sd=blank,
        protocol_lower=blank,
        protocol_upper=blank,
        prior_share=shown(np.divide(sd, prior_sd, out=blank.copy(), where=prior_sd > 0)),
    )


def simultaneous_factor(curves: FloatArray, level: float) -> float:
    """Half-width of the simultaneous band in sds: quantile of the largest deviation (sup-t).

    Parameters
    ----------
    curves
        Draws of a curve, shape (D, n_lags).
    level
        Probability that the whole curve lies inside.
    """
    sd = curves.std(axis=0, ddof=1)
    judged = sd > SIMULTANEOUS_SD_SHARE * sd.max(initial=0.0)
    if not judged.any():
        return float(norm.ppf((1 + level) / 2))
    deviation = np.abs(curves[:, judged] - curves[:, judged].mean(axis=0)) / sd[judged]
    return float(np.quantile(deviation.max(axis=1), level))

"""How much the first milliseconds of η rest on where the spike window ends.

The end is a choice: too early, and the spike itself is fitted; too late, and the early
after-potential is lost. η is estimated for several ends, each from a digest of its own, since
other rows are left out.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from bayesglm.inference.bands import identified, kernel_lags, kernel_rows
from bayesglm.inference.sensitivity import SpikeWindows
from bayesglm.inference.setup import make_digest
from bayesglm.kernels.design import VoltageDesign
from bayesglm.likelihood.calibration import Calibration, calibrate
from bayesglm.models.cell import voltage_evidence, weight_moments
from bayesglm.models.priors import WeightPrior
from bayesglm.recording.recording import FloatArray, Recording
from bayesglm.recording.settings import Settings

#: Ends that are tried, ms after a spike, the chosen one besides.
_ENDS_MS = (3.0, 5.0, 8.0, 10.0)
#: Lags at which η is read, ms.
_LAGS_MS = (10.0, 20.0, 30.0)


def spike_windows(
    recordings: Sequence[Recording],
    calibration: Calibration,
    design: VoltageDesign,
    prior: WeightPrior,
    kernel_sd: FloatArray,
    settings: Settings,
) -> SpikeWindows:
    """Estimate η for several ends of the spike window.

    Parameters
    ----------
    recordings
        What was fitted.
    calibration
        Of the fit.
    design, prior
        Of the fit, with an after-spike kernel.
    kernel_sd
        Sd of each kernel, shape (n_kernels,): held at its posterior median.
    settings
        How units are made.

    Returns
    -------
    SpikeWindows
    """
    before, chosen = design.spike_window_ms
    ends = sorted({*_ENDS_MS, chosen})
    read = []
    for end in ends:
        windowed = replace(design, spike_window_ms=(before, end))
        found = calibration
        if end != chosen:
            digest, least = make_digest(recordings, windowed, prior, settings)
            found = calibrate(digest, least, np.empty((0, design.n_weights)))
        evidence = voltage_evidence(
            found.fit.weights, found.precision, found.fit.rank, found.freedom, prior
        )
        read.append(_read(windowed, *weight_moments(evidence, prior, kernel_sd)))
    features = {
        name: (np.array([one[name][0] for one in read]), np.array([one[name][1] for one in read]))
        for name in read[0]
    }
    return SpikeWindows(np.array(ends), ends.index(chosen), features)


def _read(
    design: VoltageDesign, mean: FloatArray, covariance: FloatArray
) -> dict[str, tuple[float, float]]:
    """Mean and sd of η at the early lags and at its minimum; NaN inside the spike window."""
    duration = design.kernels["after_spike"].duration_ms
    lags = np.array([lag for lag in _LAGS_MS if lag < duration])
    found = {
        f"after_spike_at_{lag:g}ms": pair
        for lag, pair in zip(lags, _moments(design, lags, mean, covariance), strict=True)
    }
    every = kernel_lags(design, "after_spike")
    every = every[identified(design, "after_spike", every)]
    curve = kernel_rows(design, "after_spike", every) @ mean
    lowest = int(np.argmin(curve))
    # At the first lag the minimum lies inside the window, where nothing is known.
    minimum = (float("nan"), float("nan"))
    if lowest > 0:
        minimum = _moments(design, every[lowest : lowest + 1], mean, covariance)[0]
    return found | {"after_spike_minimum": minimum}


def _moments(
    design: VoltageDesign, lags_ms: FloatArray, mean: FloatArray, covariance: FloatArray
) -> list[tuple[float, float]]:
    rows = kernel_rows(design, "after_spike", lags_ms)
    known = identified(design, "after_spike", lags_ms)
    values = np.where(known, rows @ mean, np.nan)
    sds = np.where(known, np.sqrt(np.einsum("lp,pq,lq->l", rows, covariance, rows)), np.nan)
    return list(zip(values.tolist(), sds.tolist(), strict=True))

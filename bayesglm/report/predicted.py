"""Which sweeps of a fit the figures show, with their predictions and residuals.

Every sweep is taken where the recording is short. Of a long one a share is taken, spread over
it, so that the cost of figures does not grow with the recording.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import Final

import numpy as np
from scipy import fft

from bayesglm.checks.residuals import SweepRows, sweep_rows
from bayesglm.inference.results import CellFit
from bayesglm.recording.recording import FloatArray, Recording, Sweep

#: Index of a recording in the fit, and of a sweep in the recording.
Place = tuple[int, int]

_MOST_SAMPLES: Final = 2_000_000
_MOST_SWEEPS: Final = 12


def sweeps_of(fit: CellFit) -> list[Place]:
    """Index of the recording and of the sweep in it, for every sweep of the fit."""
    return [
        (index, number)
        for index, recording in enumerate(fit.recordings)
        for number in range(len(recording.sweeps))
    ]


def spread(items: Sequence[Place], at_most: int) -> list[Place]:
    """Take at most so many items, evenly spread, the first and the last among them."""
    places = np.unique(np.linspace(0, len(items) - 1, min(at_most, len(items))).round().astype(int))
    return [items[place] for place in places]


def predict_sweeps(fit: CellFit, also: Sequence[Place] = ()) -> dict[Place, SweepRows]:
    """Predict the sweeps that figures need.

    Parameters
    ----------
    fit
        The fit.
    also
        Sweeps that must be among them.

    Returns
    -------
    dict
        The rows of each sweep, in the order of the fit; sweeps are cut short where they would
        exceed the budget.
    """
    chosen = sorted({*spread(sweeps_of(fit), _MOST_SWEEPS), *also})
    budget = _MOST_SAMPLES // len(chosen)
    weights = fit.mean_weights
    found: dict[Place, SweepRows] = {}
    for index, recording in enumerate(fit.recordings):
        places = [place for place in chosen if place[0] == index]
        if places:
            sweeps = tuple(cut_short(recording.sweeps[number], budget) for _, number in places)
            rows = sweep_rows([replace(recording, sweeps=sweeps)], fit.design, weights)
            found |= zip(places, rows, strict=True)
    return found


def cut_short(sweep: Sweep, samples: int) -> Sweep:
    """Return the first `samples` of a sweep, or all of it where it has no more."""
    if sweep.n_samples <= samples:
        return sweep
    return replace(
        sweep,
        current=sweep.current[:samples],
        voltage=sweep.voltage[:samples],
        keep=sweep.keep[:samples],
        spikes=None if sweep.spikes is None else sweep.spikes[sweep.spikes < samples],
        jumps=tuple(jump for jump in sweep.jumps if jump.sample < samples),
    )


def mean_current_nA(recording: Recording, number: int) -> float:
    """Mean current of a sweep, nA."""
    return float(recording.sweeps[number].current.mean())


def centred_residuals(sweeps: Sequence[SweepRows], fit: CellFit) -> list[FloatArray]:
    """Residual of each sweep less what the fit gives the sweep as its own.

    Parameters
    ----------
    sweeps
        The predicted sweeps.
    fit
        Says whether sweeps have offsets, and drift.

    Returns
    -------
    list of arrays
        mV, NaN where a row was not fitted; sweeps without fitted rows are passed over.
    """
    fitted = [rows for rows in sweeps if rows.kept.any()]
    if not fit.settings.model.sweep_offsets:
        return [rows.residual for rows in fitted]
    return [rows.centred(fit.calibration.fit.drifts) for rows in fitted]


def residual_autocorrelation(
    residuals: Sequence[FloatArray], row_ms: float, longest_ms: float
) -> tuple[FloatArray, FloatArray]:
    """Autocorrelation of the residual, averaged over all pairs of fitted rows of all sweeps.

    Parameters
    ----------
    residuals
        Residual of each sweep, shape (n_rows,) each, NaN where a row was not fitted; about zero.
    row_ms
        Length of a row, ms.
    longest_ms
        Longest lag, ms.

    Returns
    -------
    (lags in ms, autocorrelation)
        From lag 0 to the longest that half of the longest sweep allows, shape (n,).
    """
    longest = max(len(residual) for residual in residuals)
    n_lags = max(2, min(round(longest_ms / row_ms) + 1, longest // 2))
    products, pairs = np.zeros(n_lags), np.zeros(n_lags)
    for residual in residuals:
        kept = np.isfinite(residual)
        products += _lagged(np.where(kept, residual, 0.0), n_lags)
        pairs += _lagged(kept.astype(np.float64), n_lags)
    covariance = np.divide(products, pairs, out=np.zeros(n_lags), where=pairs > 0.5)
    scale = covariance[0] if covariance[0] > 0 else 1.0
    return times_of(n_lags, row_ms), covariance / scale


def times_of(n: int, step_ms: float) -> FloatArray:
    """Times 0, step, 2·step, … ms, shape (n,)."""
    times: FloatArray = np.linspace(0.0, (n - 1) * step_ms, n)
    return times


def _lagged(values: FloatArray, n_lags: int) -> FloatArray:
    """Sums of products of values so many rows apart, shape (n_lags,)."""
    n = fft.next_fast_len(len(values) + n_lags, real=True)
    spectrum = np.abs(fft.rfft(values, n)) ** 2
    sums: FloatArray = np.zeros(n_lags)
    found = fft.irfft(spectrum, n)[:n_lags]
    sums[: len(found)] = found
    return sums

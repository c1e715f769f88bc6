"""Residuals row by row, and what they tell of a membrane that is not linear."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy import stats
from simulated_cells import arbitrary_recording, neuron, recording_of_noise

from bayesglm.checks.residuals import SweepRows, linearity, residual_moments, sweep_rows
from bayesglm.checks.simulation import Noise
from bayesglm.inference.results import CellFit
from bayesglm.kernels.basis import KernelSpec
from bayesglm.kernels.design import VoltageDesign, row_means
from bayesglm.likelihood.least_squares import (
    LeastSquares,
    column_scale,
    correlation_time_ms,
    least_squares,
)
from bayesglm.likelihood.voltage import kept_rows, voltage_digest
from bayesglm.recording.recording import FloatArray, Recording

DESIGN = VoltageDesign(KernelSpec(150.0), None)


def subthreshold(bend: float, seed: int = 1, tau_ms: float = 10.0) -> Recording:
    """A cell without spikes whose voltage bends: v + bend·(v + 65)²."""
    cell = neuron(threshold_mV=100.0, noise=Noise((0.5,), (tau_ms,)))
    recording = recording_of_noise(cell, seed, n_sweeps=8, mean_nA=0.0)
    return replace(
        recording,
        sweeps=tuple(
            replace(s, voltage=s.voltage + bend * (s.voltage + 65) ** 2) for s in recording.sweeps
        ),
    )


def share_of(recording: Recording) -> tuple[float, FloatArray]:
    """Share of the residual that follows the prediction, and mean residuals by bin."""
    digest = voltage_digest((recording,), DESIGN, 1000.0)
    fit: LeastSquares = least_squares(digest, column_scale(digest))
    found = linearity((recording,), DESIGN, fit.weights, correlation_time_ms(digest, fit))
    assert np.all(np.diff(found.prediction) > 0)
    return found.share, found.residual


def test_a_linear_cell_leaves_nothing_that_follows_the_prediction() -> None:
    shares = [share_of(subthreshold(0.0, seed, tau_ms=60.0))[0] for seed in range(8)]
    assert np.mean(shares) < 0.005


def test_what_ten_bins_of_correlated_noise_may_share_is_taken_off() -> None:
    """Nine degrees of freedom over rows two correlation times apart: 9 · 2 · 50 ms/32 s."""
    recording = subthreshold(0.03)
    digest = voltage_digest((recording,), DESIGN, 1000.0)
    weights = least_squares(digest, column_scale(digest)).weights
    plain, corrected = (
        linearity((recording,), DESIGN, weights, correlation_ms).share
        for correlation_ms in (0.0, 50.0)
    )
    assert plain - corrected == pytest.approx(9 * 2 * 50 / 32_000, rel=0.02)


def test_a_bent_cell_leaves_a_parabola() -> None:
    """Negative control: of the variance of b(u² − ⟨u²⟩) + noise the first part follows u."""
    share, residual = share_of(subthreshold(0.03))
    assert share > 0.3
    assert residual[0] > 0
    assert residual[-1] > 0
    assert residual[4] < 0


def test_more_bend_more_share() -> None:
    shares = [share_of(subthreshold(bend))[0] for bend in (0.005, 0.01, 0.02, 0.04)]
    assert np.all(np.diff(shares) > 0)


def test_offsets_of_sweeps_are_no_nonlinearity() -> None:
    recording = subthreshold(0.0)
    moved = replace(
        recording,
        sweeps=tuple(
            replace(s, voltage=s.voltage + 2.0 * (-1) ** k) for k, s in enumerate(recording.sweeps)
        ),
    )
    assert share_of(moved)[0] < 0.02


def test_rows_of_a_sweep(linear_fit: CellFit) -> None:
    """Residuals are measured minus predicted where rows were fitted, and NaN elsewhere."""
    fit, recording = linear_fit, linear_fit.recordings[0]
    rows = list(sweep_rows(fit.recordings, fit.design, fit.mean_weights))
    assert len(rows) == 10
    for one, sweep in zip(rows, recording.sweeps, strict=True):
        np.testing.assert_array_equal(one.voltage, row_means(sweep.voltage, 1))
        np.testing.assert_array_equal(one.kept, kept_rows(sweep, fit.design, 0.5, 1))
        np.testing.assert_array_equal(np.isnan(one.residual), ~one.kept)
        assert one.time_ms[:2].tolist() == [0.25, 0.75]
    residual = np.concatenate([one.residual[one.kept] for one in rows])
    assert residual.std() == pytest.approx(0.7, rel=0.05)
    assert abs(residual.mean()) < 0.1


def normal(n: int, seed: int = 0) -> FloatArray:
    return np.random.default_rng(seed).normal(0.3, 2.0, n)


def test_a_normal_residual_has_moments_of_zero() -> None:
    """Monte Carlo errors of skewness and excess kurtosis: √(6/n) and √(24/n)."""
    n = 200_000
    found = residual_moments([normal(n), normal(n, 1)], 0.5)
    assert found.sd == pytest.approx(2.0, rel=0.01)
    assert found.robust_sd == pytest.approx(2.0, rel=0.01)
    assert found.median == pytest.approx(0.3, abs=0.02)
    assert abs(found.skewness) < 4 * np.sqrt(6 / (2 * n))
    assert abs(found.excess_kurtosis) < 4 * np.sqrt(24 / (2 * n))
    assert found.seconds == pytest.approx(200.0)
    # One in 16 000 rows, both sides together: 25 of 400 000.
    assert 10 < found.above + found.below < 45
    assert found.limits == pytest.approx((0.3 - 8.0, 0.3 + 8.0), abs=0.1)


def test_moments_of_an_exponential_residual() -> None:
    """Closed forms: sd 1, skewness 2, excess kurtosis 6, median ln 2; all events are above."""
    found = residual_moments([np.random.default_rng(0).exponential(1.0, 500_000)], 0.5)
    assert found.sd == pytest.approx(1.0, rel=0.01)
    assert found.median == pytest.approx(np.log(2), abs=0.01)
    assert found.skewness == pytest.approx(2.0, rel=0.05)
    assert found.excess_kurtosis == pytest.approx(6.0, rel=0.15)
    assert found.above > 1000
    assert found.below == 0


def test_moments_agree_with_scipy() -> None:
    values = np.random.default_rng(0).gamma(3.0, 1.0, 5000)
    found = residual_moments([values[:2000], values[2000:]], 0.5)
    assert found.skewness == pytest.approx(stats.skew(values))
    assert found.excess_kurtosis == pytest.approx(stats.kurtosis(values))
    mad = stats.median_abs_deviation(values, scale="normal")
    assert found.robust_sd == pytest.approx(mad, rel=1e-4)


def test_events_are_counted_once_and_by_side() -> None:
    """Built by hand: a median absolute deviation of 0.5 mV, hence limits of ±2.97 mV."""
    residual = np.tile([1.0, -1.0, 0.5, -0.5, 0.0], 800)
    residual[100:140] = 8.0
    residual[110:130] = 1.0  # stays above the median: still the same event
    residual[200] = 3.1  # after rows below the median: another
    residual[300:340] = -8.0
    residual[400:500] = 2.8  # does not reach the limit
    missing = residual.copy()
    missing[120] = np.nan  # what lies on the other side of a gap counts anew
    found = residual_moments([residual], 0.5)
    assert found.limits == pytest.approx((-2.9652, 2.9652))
    assert (found.above, found.below) == (2, 1)
    found = residual_moments([missing], 0.5)
    assert (found.above, found.below) == (3, 1)
    found = residual_moments([residual, residual], 0.5)
    assert (found.above, found.below) == (4, 2)


def test_an_event_does_not_reach_from_sweep_to_sweep() -> None:
    residual = np.tile([1.0, -1.0, 0.5, -0.5, 0.0], 200)
    first, second = residual.copy(), residual.copy()
    first[-10:], second[:10] = 9.0, 9.0
    assert residual_moments([first, second], 0.5).above == 2


def test_a_residual_of_zero_has_no_events() -> None:
    found = residual_moments([np.zeros(50)], 0.5)
    assert (found.sd, found.skewness, found.above, found.below) == (0.0, 0.0, 0, 0)


def test_a_drift_is_taken_out_with_the_line() -> None:
    """What is left of an offset, a line and a curve: the curve less its own line."""
    time = np.arange(50) + 0.5
    kept = np.arange(50) % 7 > 0
    curve = np.sin(time)
    (sweep,) = arbitrary_recording(0.5, (100,), masked=False).sweeps
    rows = SweepRows(sweep, time, 3 + 0.2 * time + curve, np.zeros(50), kept)
    slope, level = np.polyfit(time[kept], curve[kept], 1)
    expected = np.where(kept, curve - level - slope * time, np.nan)
    np.testing.assert_allclose(rows.centred(drift=True), expected, atol=1e-9)
    assert np.nanstd(rows.centred(drift=False)) > 2

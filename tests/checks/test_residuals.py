"""Residuals row by row, and what they tell of a membrane that is not linear."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from simulated_cells import neuron, recording_of_noise

from bayesglm.checks.residuals import linearity, sweep_rows
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

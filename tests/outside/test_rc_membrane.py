"""The RC membrane in closed form (Johnston & Wu 1995), from recording to resistance and time
constant: R = 100 MΩ, C = 200 pF, τ = 20 ms, resting at −70 mV.
"""

from __future__ import annotations

import numpy as np
import pytest
from simulated_cells import coloured_current

from bayesglm.checks.simulation import Neuron, Noise, exponential_input, membrane, simulate
from bayesglm.features import feature_draws, resistance_row
from bayesglm.kernels.basis import KernelSpec
from bayesglm.kernels.design import VoltageDesign
from bayesglm.likelihood.least_squares import column_scale, least_squares
from bayesglm.likelihood.voltage import predict_rows, voltage_digest
from bayesglm.recording.recording import Recording, Sweep


def rc_neuron(step_ms: float, electrode_MOhm: float, noise: Noise) -> Neuron:
    lags = step_ms * np.arange(1, round(300 / step_ms) + 1)
    kernel = exponential_input(100.0, 20.0, lags)
    return Neuron(kernel, np.zeros(1), -70.0, electrode_MOhm, threshold_mV=1e3, noise=noise)


def fitted_weights(recording: Recording, design: VoltageDesign) -> np.ndarray:
    digest = voltage_digest((recording,), design, None)
    return least_squares(digest, column_scale(digest)).weights


@pytest.mark.parametrize("step_ms", [0.1, 0.5])
@pytest.mark.parametrize("electrode_MOhm", [0.0, 15.0])
def test_noise_free_recording_gives_back_the_membrane(
    step_ms: float, electrode_MOhm: float
) -> None:
    """Only the splines stand between fit and truth: 0.2 % of R, τ and the electrode's share."""
    rng = np.random.default_rng(0)
    current = coloured_current(rng, 4, 3.0, step_ms=step_ms)
    recording = simulate(rc_neuron(step_ms, electrode_MOhm, Noise((), ())), current, step_ms, rng)
    design = VoltageDesign(KernelSpec(200.0, 20, 10.0), None)
    weights = fitted_weights(recording, design)
    found = feature_draws(weights[None], design, step_ms, ())
    assert found["input_resistance"].draws[0] == pytest.approx(100.0, rel=2e-3)
    assert found["membrane_time_constant"].draws[0] == pytest.approx(20.0, rel=5e-3)
    assert found["offset"].draws[0] == pytest.approx(-70.0, abs=0.02)
    assert found["electrode_resistance"].draws[0] == pytest.approx(electrode_MOhm, abs=0.1)


def test_fit_predicts_the_step_response() -> None:
    """``V(t)`` after a step of 0.1 nA at 5 … 100 ms, from a fit to a fluctuating current."""
    rng = np.random.default_rng(1)
    cell = rc_neuron(0.1, 0.0, Noise((), ()))
    recording = simulate(cell, coloured_current(rng, 4, 3.0, step_ms=0.1), 0.1, rng)
    design = VoltageDesign(KernelSpec(200.0, 20, 10.0), None, row_ms=0.1)
    weights = fitted_weights(recording, design)
    current = np.zeros(4000)
    current[1000:] = 0.1
    keep = np.ones(4000, dtype=np.bool_)
    step = Sweep(0, current, np.zeros(4000), keep, np.array([], dtype=np.int64))
    found = predict_rows(step, design, 0.1, weights[:, None])[:, 0]
    closed = {5: -67.788008, 10: -66.065307, 20: -63.678794, 40: -61.353353, 60: -60.497871}
    for at_ms, voltage in closed.items():
        at = 1000 + round(at_ms / 0.1)
        assert membrane(cell, current, 0.1)[at] == pytest.approx(voltage, abs=2e-6)
        assert found[at] == pytest.approx(voltage, abs=0.02)


def test_noise_spreads_the_estimate_around_the_truth() -> None:
    """Twenty noisy recordings: mean within four standard errors, beside the splines' 0.2 MΩ."""
    design = VoltageDesign(KernelSpec(150.0, 12), None)
    found = []
    for seed in range(20):
        rng = np.random.default_rng(seed)
        cell = rc_neuron(0.5, 10.0, Noise((0.7,), (15.0,)))
        recording = simulate(cell, coloured_current(rng, 10, 2.0), 0.5, rng)
        found.append(resistance_row(design, 0.5) @ fitted_weights(recording, design))
    error = np.std(found, ddof=1) / np.sqrt(20)
    assert abs(np.mean(found) - 100.0) < 4 * error + 0.2
    assert error < 1.0

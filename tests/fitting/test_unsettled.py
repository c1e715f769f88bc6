"""Sweeps cut out of a running current: what was driven by an unrecorded current is left out."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from simulated_cells import STEP_MS, coloured_current, neuron

from bayesglm.checks.simulation import Noise, simulate
from bayesglm.fitting.run import fit
from bayesglm.recording.recording import Recording
from bayesglm.recording.settings import Settings
from bayesglm.recording.settings_input import override

QUIET_SD = 0.1


@pytest.fixture(scope="module")
def cut() -> Recording:
    """Twelve sweeps of 3 s whose first 500 ms of current were not recorded."""
    rng = np.random.default_rng(4)
    cell = neuron(noise=Noise((QUIET_SD,), (5.0,)), threshold_mV=200.0)
    currents = coloured_current(rng, 12, 3.5)
    whole = simulate(cell, currents, STEP_MS, rng)
    lost = round(500 / STEP_MS)
    sweeps = tuple(
        replace(s, current=s.current[lost:], voltage=s.voltage[lost:], keep=s.keep[lost:])
        for s in whole.sweeps
    )
    return replace(whole, sweeps=sweeps)


def test_beginning_is_left_out_and_told(cut: Recording) -> None:
    settings = override(Settings(), ["kernels.input.duration_ms=150"])
    found = fit(cut, settings)
    assert found.feature("noise_sd").mean == pytest.approx(QUIET_SD, rel=0.1)
    resistance = found.feature("input_resistance")
    assert abs(resistance.mean - 100.0) < 4 * resistance.sd + 0.1
    (recording,) = found.recordings
    assert "150 ms of 12 of 12 sweeps" in recording.left_out[-1]


def test_kept_it_would_swell_the_noise(cut: Recording) -> None:
    settings = override(
        Settings(), ["kernels.input.duration_ms=150", "model.leave_out_unsettled=false"]
    )
    assert fit(cut, settings).feature("noise_sd").mean > 1.5 * QUIET_SD

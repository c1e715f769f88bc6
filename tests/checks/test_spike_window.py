"""η with other ends of the spike window: the same where nothing is hidden, other where it is."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from simulated_cells import STEP_MS, after_spike_kernel, neuron, recording_of_noise
from threadpoolctl import threadpool_limits

from bayesglm.checks.spike_window import spike_windows
from bayesglm.fitting.run import fit
from bayesglm.inference.results import CellFit
from bayesglm.inference.sensitivity import SpikeWindows
from bayesglm.recording.recording import Recording
from bayesglm.recording.settings import Settings
from bayesglm.recording.settings_input import override

#: Chains that are enough for a median sd.
QUICK = ["sampling.chains=2", "sampling.warmup=100", "sampling.draws=100"]


def varied(found: CellFit, recording: Recording) -> SpikeWindows:
    sd = np.median(found.chains.draws["sd"], axis=(0, 1))
    with threadpool_limits(1, user_api="blas"):
        return spike_windows(
            (recording,), found.calibration, found.design, found.prior, sd, found.settings
        )


@pytest.fixture(scope="module")
def windows(linear_fit: CellFit) -> SpikeWindows:
    found = linear_fit.sensitivity.windows
    assert found is not None
    return found


def test_ends_and_what_each_can_tell(windows: SpikeWindows) -> None:
    assert windows.ends_ms.tolist() == [3.0, 5.0, 8.0, 10.0]
    assert windows.chosen == 1
    mean, sd = windows.features["after_spike_at_10ms"]
    # Lag 10 ms lies inside the window that ends there.
    assert np.isfinite(mean).tolist() == [True, True, True, False]
    assert np.isfinite(sd).tolist() == [True, True, True, False]
    # η of this cell falls towards the spike: it has no minimum after any window.
    assert np.isnan(windows.features["after_spike_minimum"][0]).all()


def test_a_linear_cell_says_the_same_with_every_window(windows: SpikeWindows) -> None:
    """Truth: η of the simulated cell at 10, 20 and 30 ms; its spike lasts 2 ms."""
    eta = after_spike_kernel("monotone")
    for lag in (10, 20, 30):
        mean, sd = windows.features[f"after_spike_at_{lag}ms"]
        known = np.isfinite(mean)
        assert np.all(np.abs(mean - eta[round(lag / STEP_MS) - 1])[known] < 4 * sd[known])
        assert np.nanmax(windows.moved(f"after_spike_at_{lag}ms")) < 1.5
        assert windows.moved(f"after_spike_at_{lag}ms")[windows.chosen] == 0


def test_the_chosen_end_is_that_of_the_fit(windows: SpikeWindows, linear_fit: CellFit) -> None:
    """At the median smoothness instead of all: nearly the posterior of the fit."""
    feature = linear_fit.feature("after_spike_at_30ms")
    mean, sd = (values[windows.chosen] for values in windows.features["after_spike_at_30ms"])
    assert abs(mean - feature.mean) < 0.3 * feature.sd
    assert sd == pytest.approx(feature.sd, rel=0.4)


def test_a_spike_that_outlasts_the_window_is_seen() -> None:
    """A tail of 20 mV that decays with 1.5 ms is over after 10 ms, and not after 3."""
    recording = recording_of_noise(neuron(), seed=1, n_sweeps=5, seconds=2.0)
    tail = 20.0 * np.exp(-STEP_MS * np.arange(1, 41) / 1.5)
    sweeps = []
    for sweep in recording.sweeps:
        voltage = sweep.voltage.copy()
        for spike in sweep.spikes if sweep.spikes is not None else ():
            piece = voltage[spike + 1 : spike + 41]
            piece += tail[: len(piece)]
        sweeps.append(replace(sweep, voltage=voltage))
    tailed = replace(recording, sweeps=tuple(sweeps))
    found = fit(tailed, override(Settings(), ["model.duration_grid=false", *QUICK]))
    mean, sd = varied(found, tailed).features["after_spike_minimum"]
    # With the short window η starts high and has a minimum; after the tail it has none.
    assert np.isfinite(mean).tolist()[0]
    assert sd[0] > 0


def test_another_end_of_the_users_own_is_among_them() -> None:
    settings = override(
        Settings(), ["model.spike_window_ms=[-1, 6]", "model.duration_grid=false", *QUICK]
    )
    found = fit(recording_of_noise(neuron(), seed=2, n_sweeps=5, seconds=2.0), settings)
    assert found.sensitivity.durations is None
    windows = found.sensitivity.windows
    assert windows is not None
    assert windows.ends_ms.tolist() == [3.0, 5.0, 6.0, 8.0, 10.0]
    assert windows.chosen == 2

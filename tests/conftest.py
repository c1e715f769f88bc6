"""Fixtures shared by all tests; putting this file here also lets them import `simulated_cells`."""

from __future__ import annotations

import pytest
from simulated_cells import neuron, recording_of_noise

from bayesglm.fitting.run import fit
from bayesglm.inference.results import CellFit
from bayesglm.recording.recording import Recording
from bayesglm.recording.settings import Settings
from bayesglm.recording.settings_input import override


@pytest.fixture(scope="session")
def linear_recording() -> Recording:
    """Ten sweeps of 4 s of a linear cell of 100 MΩ and 20 ms under fluctuating current."""
    return recording_of_noise(neuron(), seed=1)


@pytest.fixture(scope="session")
def linear_fit(linear_recording: Recording) -> CellFit:
    """Its fit under default settings."""
    return fit(linear_recording)


@pytest.fixture(scope="session")
def white_fit(linear_recording: Recording) -> CellFit:
    """Its fit as if residuals were white."""
    return fit(linear_recording, override(Settings(), ["model.noise=white"]))

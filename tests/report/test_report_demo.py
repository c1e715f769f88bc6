"""The demo's truth is that of its cells; the whole demo runs in `cli/test_demo.py`."""

from __future__ import annotations

import numpy as np
import pytest

from bayesglm.checks.scenario import STEP_MS, demo_cells
from bayesglm.report.demo import truth_of


def test_truth_is_read_off_the_neuron() -> None:
    for cell in demo_cells():
        truth = truth_of(cell)
        assert truth.features["input_resistance"] == pytest.approx(cell.resistance_MOhm, rel=0.01)
        lags, eta = truth.curves["after_spike"]
        at = int(np.flatnonzero(np.isclose(lags, 30.0))[0])
        assert truth.features["after_spike_at_30ms"] == pytest.approx(eta[at])
        assert lags[0] == STEP_MS
        assert len(truth.curves["input"][0]) == len(truth.curves["input"][1])

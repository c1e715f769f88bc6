"""Kernels of exponentials that are, and one that is not."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from simulated_cells import STEP_MS, neuron, recording_of_noise

from bayesglm.checks.shape import shape_misfit
from bayesglm.fitting.run import fit
from bayesglm.inference.results import CellFit
from bayesglm.recording.settings import Settings
from bayesglm.recording.settings_input import override

SHORT = override(
    Settings(),
    [
        "kernels.input.duration_ms=150",
        "kernels.after_spike.basis=exponentials",
        "kernels.after_spike.terms=2",
        "model.duration_grid=false",
        "model.window_sensitivity=false",
        "sampling.draws=100",
        "sampling.warmup=100",
    ],
)


def shape_row(one: CellFit) -> str:
    return next(r.verdict for r in one.verdict.reasons if r.check == "shape_after_spike")


@pytest.mark.parametrize(("bump_mV", "verdict"), [(0.0, "passed"), (1.0, "caution")])
def test_a_bump_is_no_sum_of_two_exponentials(bump_mV: float, verdict: str) -> None:
    """η is a sum of two exponentials, or comes back in a bump 90 ms after the spike."""
    lags = STEP_MS * np.arange(1, 601)
    eta = -4 * np.exp(-lags / 60) - 6 * np.exp(-lags / 8)
    eta += bump_mV * np.exp(-0.5 * ((lags - 90) / 20) ** 2)
    cell = replace(neuron(), after_spike=eta)
    one = fit(recording_of_noise(cell, seed=3), SHORT)
    found = shape_misfit(one.design, one.calibration, one.mean_weights)
    assert set(found) == {"after_spike"}
    assert (found["after_spike"] > 3.5) == (verdict == "caution")
    assert shape_row(one) == verdict


def test_splines_have_no_such_row(linear_fit: CellFit) -> None:
    fit = linear_fit
    assert shape_misfit(fit.design, fit.calibration, fit.mean_weights) == {}

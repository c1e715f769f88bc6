"""Features on curves whose features are known."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from simulated_cells import after_spike_kernel

from bayesglm.checks.simulation import exponential_input
from bayesglm.features import (
    feature_draws,
    fit_exponentials,
    half_widths,
    has_bump,
    reported_rows,
    resistance_row,
)
from bayesglm.kernels.basis import KernelSpec
from bayesglm.kernels.design import VoltageDesign

DESIGN = VoltageDesign(KernelSpec(200.0, 30, 5.0), KernelSpec(300.0, 30, 10.0))
STEP_MS = 0.1


def weights_of(kernel: str, curve: np.ndarray, lags: np.ndarray) -> np.ndarray:
    """Weights whose kernel is nearest to a curve, shape (P,)."""
    weights = np.zeros(DESIGN.n_weights)
    basis = DESIGN.kernels[kernel].evaluate(lags)
    weights[DESIGN.columns[kernel]] = np.linalg.lstsq(basis, curve, rcond=None)[0]
    return weights


def cell_weights(resistance: float, tau: float, eta: np.ndarray) -> np.ndarray:
    """Weights of a cell at −62 mV with 12 MΩ in series, its η given every 0.5 ms."""
    lags = STEP_MS * np.arange(1, 2000)
    weights = weights_of("input", exponential_input(resistance, tau, lags), lags)
    weights += weights_of("after_spike", eta, 0.5 * np.arange(1, 601))
    weights[:2] = -62.0, 12.0
    return weights


def features(weights: np.ndarray) -> dict[str, np.ndarray]:
    found = feature_draws(np.atleast_2d(weights), DESIGN, STEP_MS, (30.0, 100.0))
    return {name: one.draws for name, one in found.items()}


@given(tau=st.floats(3.0, 80.0), amplitude=st.floats(0.01, 100.0), sign=st.sampled_from([1.0]))
@settings(deadline=None, max_examples=60)
def test_time_constants_of_exponentials_are_exact(
    tau: float, amplitude: float, sign: float
) -> None:
    lags = np.concatenate([np.arange(0.5, 20, 0.5), np.arange(20.0, 150.0)])
    curve = sign * amplitude * np.exp(-lags / tau)
    found = fit_exponentials(lags, curve[None], np.diff(lags, prepend=0.0))
    assert found[0] == pytest.approx(tau, rel=1e-6)


def test_time_constant_of_a_mixture_is_that_of_weighted_least_squares() -> None:
    """Source: scipy.optimize.curve_fit on noisy curves."""
    from scipy.optimize import curve_fit

    rng = np.random.default_rng(0)
    lags, weight = np.arange(1.0, 100.0), np.linspace(1, 3, 99)
    curves = 5 * np.exp(-lags / 15) + 1.5 * np.exp(-lags / 40) + 0.2 * rng.normal(size=(20, 99))
    found = fit_exponentials(lags, curves, weight)
    for tau, curve in zip(found, curves, strict=True):
        expected, _ = curve_fit(
            lambda s, a, t: a * np.exp(-s / t), lags, curve, (5.0, 20.0), sigma=weight**-0.5
        )
        assert tau == pytest.approx(expected[1], rel=1e-4)


def test_curves_without_a_decay_stay_on_the_grid() -> None:
    lags = np.arange(1.0, 50.0)
    curves = np.stack([np.zeros(49), -np.exp(-lags / 10), np.ones(49), np.exp(lags / 20)])
    found = fit_exponentials(lags, curves, np.ones(49))
    assert np.all((found >= lags[0]) & (found <= 3 * lags[-1]))


@pytest.mark.parametrize("step", [0.05, 0.1, 0.5])
def test_binned_exponential_sums_to_the_resistance(step: float) -> None:
    """Exact bins sum to R (1 − e^(−W/τ)); samples of (R/τ) e^(−s/τ) at left edges would not:
    100.250208 for dt = 0.1 ms, R = 100 MΩ, τ = 20 ms.
    """
    lags = step * np.arange(1, round(400 / step) + 1)
    total = exponential_input(100.0, 20.0, lags).sum() * step
    assert total == pytest.approx(100 * (1 - np.exp(-20)), abs=1e-9)
    sampled = (100 / 20 * np.exp(-0.1 * np.arange(4000) / 20)).sum() * 0.1
    assert sampled == pytest.approx(100.250208, abs=1e-6)


def test_resistance_is_the_sum_over_lags_of_kappa_dt() -> None:
    weights = cell_weights(130.0, 20.0, np.zeros(600))
    row = resistance_row(DESIGN, STEP_MS)
    assert row @ weights == pytest.approx(130 * (1 - np.exp(-10)), rel=2e-4)
    assert row[:2].tolist() == [0.0, 0.0]


@pytest.mark.parametrize(("resistance", "tau"), [(100.0, 20.0), (250.0, 9.0), (60.0, 35.0)])
def test_features_of_an_exponential_cell(resistance: float, tau: float) -> None:
    found = features(cell_weights(resistance, tau, after_spike_kernel("monotone")))
    assert found["input_resistance"][0] == pytest.approx(resistance, rel=0.01)
    assert found["membrane_time_constant"][0] == pytest.approx(tau, rel=0.01)
    assert found["offset"][0] == -62.0
    assert found["electrode_resistance"][0] == 12.0
    eta = after_spike_kernel("monotone")
    assert found["after_spike_at_30ms"][0] == pytest.approx(eta[59], abs=0.02)
    assert found["after_spike_at_100ms"][0] == pytest.approx(eta[199], abs=0.02)
    # A monotone undershoot is deepest where it is first seen, after the spike window.
    assert found["after_spike_minimum"][0] == pytest.approx(eta[10], abs=0.02)
    assert np.isnan(found["after_spike_minimum_time"][0])
    assert found["after_spike_peak_probability"][0] == 0.0
    # It only climbs back to zero at its end, which is no peak.
    assert np.isnan([found["after_spike_peak"][0], found["after_spike_peak_time"][0]]).all()


def test_features_of_a_bump() -> None:
    eta = after_spike_kernel("bump")
    found = features(cell_weights(100.0, 20.0, eta))
    assert found["after_spike_peak"][0] == pytest.approx(eta.max(), abs=0.03)
    assert found["after_spike_peak_time"][0] == pytest.approx(0.5 * (eta.argmax() + 1), abs=2.0)
    assert found["after_spike_peak_probability"][0] == 1.0


def test_extrema_are_read_at_the_mean_curves_extremum() -> None:
    """Noise must not deepen the minimum: its mean over draws is the mean curve's minimum."""
    weights = cell_weights(100.0, 20.0, after_spike_kernel("bump"))
    rng = np.random.default_rng(1)
    draws = weights + rng.normal(size=(3000, len(weights))) * np.where(
        np.arange(len(weights)) >= DESIGN.columns["after_spike"].start, 0.8, 0.0
    )
    found = features(draws)
    mean = features(draws.mean(axis=0))
    for name in ("after_spike_minimum", "after_spike_peak"):
        assert found[name].mean() == pytest.approx(mean[name][0], abs=1e-9)
        assert found[name].std() > 0.3


@pytest.mark.parametrize(
    ("height", "start", "stop", "bump"),
    [
        (0.3, 40, 46, 1.0),  # lags 40 … 45: 5 ms
        (0.3, 40, 45, 0.0),  # lags 40 … 44: 4 ms
        (0.24, 40, 80, 0.0),  # too low
        (2.0, 15, 18, 0.0),  # high but short
    ],
)
def test_a_bump_is_high_enough_for_long_enough(
    height: float, start: float, stop: float, bump: float
) -> None:
    """More than 0.25 mV for at least 5 ms without a break."""
    lags = np.concatenate([np.arange(0.5, 20.1, 0.5), np.arange(21.0, 100.0)])
    curve = np.where((lags >= start) & (lags < stop), height, -1.0)
    assert has_bump(lags, curve[None]).tolist() == [bump]


def test_two_short_bumps_do_not_add_up() -> None:
    lags = np.arange(1.0, 100.0)
    curve = np.where(((lags >= 20) & (lags < 24)) | ((lags >= 26) & (lags < 30)), 1.0, 0.0)
    assert has_bump(lags, curve[None]).tolist() == [0.0]


def test_noise_around_zero_is_no_bump() -> None:
    """The maximum of a noisy flat curve is always positive; a bump it is not."""
    lags = np.arange(1.0, 300.0)
    curves = 0.2 * np.random.default_rng(2).normal(size=(500, 299))
    assert (curves.max(axis=1) > 0).all()
    assert has_bump(lags, curves).mean() < 0.02


def test_only_lags_that_are_known_are_reported() -> None:
    """Inside the spike window and beyond the kernel there is nothing to report."""
    rows = reported_rows(DESIGN, STEP_MS, (2.0, 30.0, 100.0, 299.9, 300.0, 500.0))
    assert rows.shape == (5, DESIGN.n_weights)
    found = feature_draws(np.zeros((1, DESIGN.n_weights)), DESIGN, STEP_MS, (2.0, 30.0, 500.0))
    assert [n for n in found if n.startswith("after_spike_at")] == ["after_spike_at_30ms"]


def test_without_spikes_and_electrode_their_features_are_absent() -> None:
    design = VoltageDesign(KernelSpec(100.0), None, electrode=False)
    found = feature_draws(np.ones((3, design.n_weights)), design, STEP_MS, (30.0,))
    assert list(found) == [
        "input_resistance",
        "membrane_time_constant",
        "input_half_width",
        "offset",
    ]
    assert reported_rows(design, STEP_MS, (30.0,)).shape == (2, design.n_weights)


def test_units_and_kernels_of_the_features() -> None:
    found = feature_draws(np.ones((3, DESIGN.n_weights)), DESIGN, STEP_MS, (30.0,))
    assert {name: one.unit for name, one in found.items()} == {
        "input_resistance": "MΩ",
        "membrane_time_constant": "ms",
        "input_half_width": "ms",
        "offset": "mV",
        "electrode_resistance": "MΩ",
        "after_spike_minimum": "mV",
        "after_spike_minimum_time": "ms",
        "after_spike_half_width": "ms",
        "after_spike_peak": "mV",
        "after_spike_peak_time": "ms",
        "after_spike_peak_probability": "1",
        "after_spike_at_30ms": "mV",
    }
    assert [n for n, one in found.items() if one.is_probability] == ["after_spike_peak_probability"]


@pytest.mark.parametrize("tau", [8.0, 20.0])
def test_half_width_of_an_exponential_input_kernel_is_tau_ln_2(tau: float) -> None:
    """Half of the area of R(1 − f)f^(k−1) is reached at τ ln 2."""
    weights = cell_weights(100.0, tau, after_spike_kernel("monotone"))
    assert features(weights)["input_half_width"][0] == pytest.approx(tau * np.log(2), rel=0.01)


def test_half_width_is_hardly_moved_by_a_high_first_sample() -> None:
    """3 MΩ of 100 in the first 0.3 ms, as of an electrode: κ starts three times as high."""
    lags = STEP_MS * np.arange(1, 2000)
    plain = exponential_input(100.0, 20.0, lags)
    spiked = plain + np.where(lags < 0.35, 10.0, 0.0)
    found = features(weights_of("input", spiked, lags))["input_half_width"][0]
    assert spiked[0] > 2.5 * plain[0]
    # Half of 103 MΩ, 3 of them at once: 100(1 − exp(−s/20)) = 48.5.
    assert found == pytest.approx(-20 * np.log(1 - 0.485), rel=0.02)


def test_half_width_needs_a_positive_area() -> None:
    lags = STEP_MS * np.arange(1, 2000)
    weights = weights_of("input", -exponential_input(100.0, 20.0, lags), lags)
    assert np.isnan(features(weights)["input_half_width"]).all()


def test_half_widths_of_known_shapes() -> None:
    """A triangle of half width 10, an exponential cut by its first lag, one that never falls."""
    lags = np.arange(5.0, 101.0)
    triangle = -np.maximum(4.0 * (1 - np.abs(lags - 40.0) / 10.0), 0.0)
    assert half_widths(lags, triangle[None], 35)[0] == pytest.approx(10.0)
    exponential = -3.0 * np.exp(-lags / 20.0)
    # The curve is read between lags in a straight line.
    assert half_widths(lags, exponential[None], 0)[0] == pytest.approx(20 * np.log(2), rel=1e-3)
    assert half_widths(lags, np.stack([-np.ones(96), np.ones(96)]), 10).tolist() == [95.0, 0.0]


def test_half_width_of_the_after_spike_kernel() -> None:
    """Each draw by its own height at the mean curve's minimum, from the window's end on."""
    eta = after_spike_kernel("monotone")
    weights = cell_weights(100.0, 20.0, eta)
    lags = 0.5 * np.arange(1, 601)
    first = eta[lags > 5.0][0]
    expected = lags[(lags > 5.0) & (eta > first / 2)][0] - 5.5
    found = features(np.stack([weights, 1.5 * weights]))["after_spike_half_width"]
    np.testing.assert_allclose(found, expected, atol=0.6)
    weights[DESIGN.columns["after_spike"]] *= -1
    assert np.isnan(features(weights)["after_spike_half_width"]).all()

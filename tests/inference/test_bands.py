"""Bands: their lags, pointwise and simultaneous cover, and what stays blank."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.stats import norm

from bayesglm.inference.bands import (
    WeightSummary,
    identified,
    kernel_lags,
    kernel_rows,
    make_band,
    simultaneous_factor,
)
from bayesglm.inference.results import Band
from bayesglm.kernels.basis import KernelSpec
from bayesglm.kernels.design import VoltageDesign, electrode_spec

DESIGN = VoltageDesign(KernelSpec(100.0, 6), KernelSpec(60.0, 5))
P = DESIGN.n_weights


def test_lags_are_every_row_to_20_ms_and_every_ms_after() -> None:
    lags = kernel_lags(DESIGN, "input")
    assert lags[:40].tolist() == [0.5 * k for k in range(1, 41)]
    assert lags[40:].tolist() == list(range(21, 101))
    assert kernel_lags(DESIGN, "electrode").tolist() == [0.0]


@pytest.mark.parametrize(("duration", "last"), [(12.3, 12.0), (20.0, 20.0), (47.6, 47.0)])
def test_lags_end_with_the_kernel(duration: float, last: float) -> None:
    assert kernel_lags(VoltageDesign(KernelSpec(duration), None), "input")[-1] == last


def test_rows_evaluate_one_kernel_of_all_weights() -> None:
    weights = np.arange(1.0, P + 1)
    lags = np.array([3.0, 40.0])
    place = DESIGN.columns["after_spike"]
    expected = DESIGN.after_spike.evaluate(lags) @ weights[place]  # type: ignore[union-attr]
    np.testing.assert_allclose(kernel_rows(DESIGN, "after_spike", lags) @ weights, expected)
    assert kernel_rows(DESIGN, "electrode", np.zeros(1)) @ weights == [2.0]


def test_an_electrode_that_charges_has_a_lag_for_each_weight() -> None:
    design = VoltageDesign(KernelSpec(100.0, 6), None, electrode_kernel=electrode_spec(0.8, 0.05))
    lags = kernel_lags(design, "electrode")
    np.testing.assert_allclose(lags, [0.0, 0.1, 0.3, 0.5, 0.7])
    weights = np.arange(float(design.n_weights))
    np.testing.assert_array_equal(kernel_rows(design, "electrode", lags) @ weights, np.arange(1, 6))


def test_after_spike_kernel_is_known_only_after_the_spike_window() -> None:
    lags = np.array([0.5, 4.5, 5.0, 5.5])
    assert identified(DESIGN, "after_spike", lags).tolist() == [False, False, False, True]
    assert identified(DESIGN, "input", lags).all()


@pytest.mark.parametrize("n_lags", [1, 3, 10])
def test_simultaneous_factor_of_independent_lags(n_lags: int) -> None:
    """Closed form: ``(2Φ(z) − 1)^n = level``."""
    curves = np.random.default_rng(0).normal(size=(40_000, n_lags)) * np.arange(1, n_lags + 1)
    expected = norm.ppf((1 + 0.9 ** (1 / n_lags)) / 2)
    assert simultaneous_factor(curves, 0.9) == pytest.approx(expected, rel=0.02)


def test_simultaneous_factor_of_one_moving_curve_is_pointwise() -> None:
    """Lags that move together need no more room than one; pinned lags do not count."""
    size = np.random.default_rng(1).normal(size=(40_000, 1))
    curves = size * np.array([1.0, 2.0, 0.5, 1e-3, 0.0])
    assert simultaneous_factor(curves, 0.9) == pytest.approx(norm.ppf(0.95), rel=0.02)
    assert simultaneous_factor(np.zeros((50, 3)), 0.9) == pytest.approx(norm.ppf(0.95))


@pytest.fixture(scope="module")
def covariance() -> np.ndarray:
    root = np.random.default_rng(2).normal(size=(P, P))
    return root @ root.T / P


def band(kernel: str, covariance: np.ndarray, level: float = 0.8) -> tuple[Band, np.ndarray]:
    """A band made of Gaussian draws, and the matrix that gives the kernel."""
    mean = np.linspace(-1, 1, P)
    draws = np.random.default_rng(3).multivariate_normal(mean, covariance, size=20_000)
    white = WeightSummary(mean + 1, covariance / 100)
    made = make_band(kernel, DESIGN, draws, white, 4 * covariance, level)
    return made, kernel_rows(DESIGN, kernel, made.lags_ms)


@pytest.mark.parametrize("kernel", ["input", "after_spike", "electrode"])
def test_band_of_gaussian_draws(kernel: str, covariance: np.ndarray) -> None:
    """Mean, sd, quantiles, the white band and the share of the prior, in closed form."""
    made, rows = band(kernel, covariance)
    mean = rows @ np.linspace(-1, 1, P)
    sd = np.sqrt(np.einsum("lp,pq,lq->l", rows, covariance, rows))
    known = identified(DESIGN, kernel, made.lags_ms) & (sd > 0.05 * sd.max())
    z = norm.ppf(0.9)
    scaled = {
        "mean": (made.mean - mean, 0.0),
        "sd": (made.sd - sd, 0.0),
        "lower": (made.lower - mean, -z),
        "upper": (made.upper - mean, z),
        "white_lower": (made.white_lower - mean - rows.sum(axis=1), -z / 10),
        "white_upper": (made.white_upper - mean - rows.sum(axis=1), z / 10),
    }
    for name, (found, expected) in scaled.items():
        np.testing.assert_allclose(found[known] / sd[known], expected, atol=0.04, err_msg=name)
    np.testing.assert_allclose(made.prior_share[known], 0.5, rtol=0.03)
    assert np.all(made.upper_simultaneous[known] >= made.upper[known] - 0.05 * sd[known])
    assert (made.level, made.kernel) == (0.8, kernel)
    assert made.unit == {"input": "MΩ/ms", "after_spike": "mV", "electrode": "MΩ"}[kernel]


def test_after_spike_band_is_blank_inside_the_spike_window(covariance: np.ndarray) -> None:
    made, _ = band("after_spike", covariance)
    hidden = made.lags_ms <= 5.0
    for name in ("mean", "sd", "lower", "upper", "upper_simultaneous", "white_lower"):
        assert np.isnan(getattr(made, name)[hidden]).all()
        assert np.isfinite(getattr(made, name)[~hidden]).all()
    assert np.isnan(made.between_range_sd).all()


def test_simultaneous_band_holds_whole_curves_at_its_level(covariance: np.ndarray) -> None:
    made, rows = band("input", covariance)
    mean = np.linspace(-1, 1, P)
    fresh = np.random.default_rng(4).multivariate_normal(mean, covariance, size=20_000) @ rows.T
    inside = (fresh >= made.lower_simultaneous) & (fresh <= made.upper_simultaneous)
    judged = made.sd > 0.02 * made.sd.max()
    assert inside[:, judged].all(axis=1).mean() == pytest.approx(0.8, abs=0.015)

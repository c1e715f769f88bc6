"""The random-walk prior: what it leaves free, and that its sd does not depend on the knots."""

from __future__ import annotations

import numpy as np
import pytest

from bayesglm.kernels.basis import KernelSpec
from bayesglm.kernels.smoothness import RIDGE_FACTOR, smoothness_prior


def kernel_sd(spec: KernelSpec, covariance: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Places on the warped axis, and the kernel's prior sd there."""
    x = (np.arange(2000) + 0.5) / 2000
    lags = spec.warp_ms * np.expm1(x * np.log1p(spec.duration_ms / spec.warp_ms))
    basis = spec.evaluate(lags)
    return x, np.sqrt(np.einsum("lj,jk,lk->l", basis, covariance, basis))


def straight(spec: KernelSpec) -> np.ndarray:
    """Weights of ``1 − x``, by least squares on the splines."""
    x = np.linspace(0, 1, 500, endpoint=False)
    lags = spec.warp_ms * np.expm1(x * np.log1p(spec.duration_ms / spec.warp_ms))
    return np.linalg.lstsq(spec.evaluate(lags), 1 - x, rcond=None)[0]


@pytest.mark.parametrize("weights", [6, 14, 30])
def test_bends_leave_the_straight_line_free_and_the_ridge_holds_it(weights: int) -> None:
    spec = KernelSpec(300.0, weights)
    prior = smoothness_prior(spec)
    line = straight(spec)
    size = np.linalg.norm(prior.bend, 2)
    assert np.linalg.matrix_rank(prior.bend, tol=1e-9 * size, hermitian=True) == weights - 1
    assert np.linalg.matrix_rank(prior.ridge, tol=1e-9, hermitian=True) == 1
    assert np.abs(prior.bend @ line).max() < 1e-8 * size
    along = line / np.linalg.norm(line)
    assert np.abs(prior.ridge - (along @ prior.ridge @ along) * np.outer(along, along)).max() < 1e-8
    assert np.linalg.eigvalsh(prior.precision(1.0, 1.0))[0] > 0


@pytest.mark.parametrize("weights", [6, 10, 14, 20, 40])
@pytest.mark.parametrize("duration", [50.0, 300.0])
def test_kernel_sd_is_one_whatever_the_number_of_knots(weights: int, duration: float) -> None:
    """Source: Sørbye & Rue (2014): the geometric mean of the marginal sds is the scale."""
    spec = KernelSpec(duration, weights)
    prior = smoothness_prior(spec)
    for structure in (prior.bend, prior.ridge):
        covariance = np.linalg.pinv(structure, rcond=1e-10, hermitian=True)
        _, sd = kernel_sd(spec, covariance)
        assert np.exp(np.mean(np.log(sd))) == pytest.approx(1.0, rel=0.02)


def test_kernel_sd_by_lag_hardly_depends_on_the_number_of_knots() -> None:
    """The prior speaks of the kernel, not of its weights."""
    curves = []
    for weights in (14, 28):
        spec = KernelSpec(300.0, weights)
        covariance = np.linalg.inv(smoothness_prior(spec).precision(1.0, 1.0))
        x, sd = kernel_sd(spec, covariance)
        curves.append(sd[(x > 0.02) & (x < 0.9)])
    np.testing.assert_allclose(curves[0], curves[1], rtol=0.1)


@pytest.mark.parametrize(("weights", "tolerance"), [(60, 0.04), (20, 0.15)])
def test_penalty_is_the_integrated_squared_bend(weights: int, tolerance: float) -> None:
    """For (1 − x)², (1 − x)³ and (1 − x)⁸ the integrals are 4, 12 and 3136/13, also where knots
    crowd at the start; their ratios need no scale.
    """
    spec = KernelSpec(300.0, weights)
    x = np.linspace(0, 1, 3000, endpoint=False)
    lags = spec.warp_ms * np.expm1(x * np.log1p(spec.duration_ms / spec.warp_ms))
    bend = smoothness_prior(spec).bend
    penalties = []
    for power in (2, 3, 8):
        w = np.linalg.lstsq(spec.evaluate(lags), (1 - x) ** power, rcond=None)[0]
        penalties.append(w @ bend @ w)
    assert penalties[1] / penalties[0] == pytest.approx(3.0, rel=tolerance)
    assert penalties[2] / penalties[0] == pytest.approx(3136 / 13 / 4, rel=tolerance)


def test_precision_scales_with_sd_and_scale() -> None:
    prior = smoothness_prior(KernelSpec(100.0, 8))
    expected = prior.bend / 9 + prior.ridge / (RIDGE_FACTOR * 5) ** 2
    np.testing.assert_allclose(prior.precision(3.0, 5.0), expected)


@pytest.mark.parametrize("weights", [10, 20, 40])
def test_a_falling_prior_falls_whatever_the_knots(weights: int) -> None:
    def sds(n: int, falls: bool) -> np.ndarray:
        spec = KernelSpec(300.0, n)
        lags = np.array([1.0, 10.0, 50.0, 150.0])
        basis = spec.evaluate(lags)
        covariance = np.linalg.inv(smoothness_prior(spec, falls).precision(1.0, 0.5))
        return np.sqrt(np.einsum("lj,jk,lk->l", basis, covariance, basis))

    np.testing.assert_allclose(sds(weights, True), sds(14, True), rtol=0.15)
    falling, level = sds(weights, True), sds(weights, False)
    assert falling[-1] / falling[0] < 0.1 * level[-1] / level[0]


@pytest.mark.parametrize("weights", [8, 14, 30])
def test_the_mean_sd_of_a_falling_prior_is_one(weights: int) -> None:
    spec = KernelSpec(300.0, weights)
    prior = smoothness_prior(spec, falls=True)
    _, sd = kernel_sd(spec, np.linalg.pinv(prior.bend, rcond=1e-12, hermitian=True))
    assert np.exp(np.mean(np.log(sd))) == pytest.approx(1.0, rel=0.02)

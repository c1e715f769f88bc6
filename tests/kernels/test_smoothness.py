"""The random-walk prior: what it leaves free, and that its sd does not depend on the basis."""

from __future__ import annotations

import numpy as np
import pytest

from bayesglm.kernels.basis import KernelSpec
from bayesglm.kernels.smoothness import RIDGE_FACTOR, SmoothnessPrior, smoothness_prior
from bayesglm.recording.settings import Basis

#: Bases with a random-walk prior and numbers of weights, the last literally one a lag of 0.5 ms.
BASES: list[tuple[Basis, int]] = [
    ("splines", 6),
    ("splines", 14),
    ("splines", 30),
    ("cosines", 14),
    ("cosines", 30),
    ("lags", 60),
    ("lags", 200),
    ("lags", 600),
]


def penalty(prior: SmoothnessPrior) -> np.ndarray:
    """Precision of the bends: the inverse of their covariance beside the free direction."""
    root = np.linalg.inv(np.column_stack([prior.bends, prior.free]))[:-1]
    return root.T @ root


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
    assert np.linalg.matrix_rank(np.column_stack([prior.bends, prior.free])) == weights
    np.testing.assert_allclose(prior.free[:, 0] / prior.free[0, 0], line / line[0], atol=1e-9)
    found = penalty(prior)
    assert np.abs(found @ line).max() < 1e-8 * np.linalg.norm(found, 2)


@pytest.mark.parametrize(("basis", "weights"), BASES)
def test_a_straight_line_is_nearly_free_in_every_basis(basis: Basis, weights: int) -> None:
    """Against a bend of the same height, 4x(1 − x)."""
    spec = KernelSpec(300.0, weights, 2.0, basis, 0.5)
    x = np.linspace(0, 1, 3000, endpoint=False)
    rows = spec.evaluate(spec.unwarp(x))
    line = np.linalg.lstsq(rows, 1 - x, rcond=None)[0]
    bend = np.linalg.lstsq(rows, 4 * x * (1 - x), rcond=None)[0]
    held = penalty(smoothness_prior(spec))
    assert line @ held @ line < 0.02 * (bend @ held @ bend)


@pytest.mark.parametrize("weights", [6, 10, 14, 20, 40])
@pytest.mark.parametrize("duration", [50.0, 300.0])
def test_kernel_sd_is_one_whatever_the_number_of_knots(weights: int, duration: float) -> None:
    """Source: Sørbye & Rue (2014): the geometric mean of the marginal sds is the scale."""
    spec = KernelSpec(duration, weights)
    prior = smoothness_prior(spec)
    for root in (prior.bends, prior.free):
        _, sd = kernel_sd(spec, root @ root.T)
        assert np.exp(np.mean(np.log(sd))) == pytest.approx(1.0, rel=0.02)


def test_kernel_sd_by_lag_hardly_depends_on_the_number_of_knots() -> None:
    """The prior speaks of the kernel, not of its weights."""
    curves = []
    for weights in (14, 28):
        spec = KernelSpec(300.0, weights)
        covariance = smoothness_prior(spec).covariance(1.0, 1.0)
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
    bend = penalty(smoothness_prior(spec))
    penalties = []
    for power in (2, 3, 8):
        w = np.linalg.lstsq(spec.evaluate(lags), (1 - x) ** power, rcond=None)[0]
        penalties.append(w @ bend @ w)
    assert penalties[1] / penalties[0] == pytest.approx(3.0, rel=tolerance)
    assert penalties[2] / penalties[0] == pytest.approx(3136 / 13 / 4, rel=tolerance)


def test_covariance_scales_with_sd_and_scale() -> None:
    prior = smoothness_prior(KernelSpec(100.0, 8))
    bends, free = prior.covariance(1.0, 0.0), prior.covariance(0.0, 1.0)
    assert np.trace(free) == pytest.approx(RIDGE_FACTOR**2 * np.sum(prior.free**2))
    np.testing.assert_allclose(prior.covariance(3.0, 5.0), 9 * bends + 25 * free)


@pytest.mark.parametrize("falls", [False, True])
@pytest.mark.parametrize(("basis", "weights"), BASES[1:])
def test_the_kernels_prior_sd_is_the_same_in_every_basis(
    basis: Basis, weights: int, falls: bool
) -> None:
    """Away from the ends, against 14 splines, within 15 %."""

    def sds(spec: KernelSpec, lags: np.ndarray) -> np.ndarray:
        covariance, rows = smoothness_prior(spec, falls).covariance(1.0, 0.5), spec.evaluate(lags)
        return np.sqrt(np.einsum("lj,jk,lk->l", rows, covariance, rows))

    spec = KernelSpec(300.0, weights, 2.0, basis, 0.5)
    lags = spec.unwarp(np.linspace(0.05, 0.93, 40))
    np.testing.assert_allclose(sds(spec, lags), sds(KernelSpec(300.0), lags), rtol=0.15)


def test_hundreds_of_lags_lose_no_digits() -> None:
    """The differences of the bends are the unit normals that made them."""
    spec = KernelSpec(300.0, 600, 2.0, "lags", 0.5)
    prior = smoothness_prior(spec, falls=True)
    whole = np.column_stack([prior.bends, prior.free])
    np.testing.assert_allclose(np.linalg.inv(whole) @ whole, np.eye(600), atol=1e-5)


@pytest.mark.parametrize("weights", [10, 20, 40])
def test_a_falling_prior_falls_whatever_the_knots(weights: int) -> None:
    def sds(n: int, falls: bool) -> np.ndarray:
        spec = KernelSpec(300.0, n)
        lags = np.array([1.0, 10.0, 50.0, 150.0])
        basis = spec.evaluate(lags)
        covariance = smoothness_prior(spec, falls).covariance(1.0, 0.5)
        return np.sqrt(np.einsum("lj,jk,lk->l", basis, covariance, basis))

    np.testing.assert_allclose(sds(weights, True), sds(14, True), rtol=0.15)
    falling, level = sds(weights, True), sds(weights, False)
    # √(1 + s/s0) grows 7-fold from 1 to 150 ms.
    assert falling[-1] / falling[0] < 0.35 * level[-1] / level[0]


@pytest.mark.parametrize("weights", [8, 14, 30])
def test_the_mean_sd_of_a_falling_prior_is_one(weights: int) -> None:
    spec = KernelSpec(300.0, weights)
    prior = smoothness_prior(spec, falls=True)
    _, sd = kernel_sd(spec, prior.bends @ prior.bends.T)
    assert np.exp(np.mean(np.log(sd))) == pytest.approx(1.0, rel=0.02)

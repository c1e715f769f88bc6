"""Estimate and covariances against the slow twin and against what is known exactly."""

from __future__ import annotations

from dataclasses import replace
from functools import lru_cache

import numpy as np
import pytest
from scipy.linalg import matmul_toeplitz
from scipy.signal import lfilter
from simulated_cells import (
    STEP_MS,
    arbitrary_recording,
    coloured_current,
    matrix_digest,
    neuron,
    plain_design,
    recording_of_noise,
)

from bayesglm.checks.simulation import Noise, simulate
from bayesglm.kernels.basis import KernelSpec
from bayesglm.kernels.design import VoltageDesign
from bayesglm.likelihood import reference
from bayesglm.likelihood.calibration import Calibration, calibrate, inflation_within
from bayesglm.likelihood.digest import VoltageDigest
from bayesglm.likelihood.least_squares import (
    LeastSquares,
    column_scale,
    correlation_time_ms,
    least_squares,
    noise_log_sd,
    sandwich,
    with_sweep_effects,
)
from bayesglm.likelihood.voltage import voltage_digest

DESIGN = VoltageDesign(
    KernelSpec(15.0, 6, 10.0), KernelSpec(18.0, 5, 10.0), row_ms=0.5, spike_window_ms=(-0.5, 1.0)
)
#: (step, lengths of the sweeps, blocks a sweep, ρ of offsets and drifts)
CASES = [
    pytest.param(0.25, (1000, 700, 803, 900, 750, 640), 1, (0.0,), id="sweeps, no offsets"),
    pytest.param(0.25, (1000, 700, 803, 900, 750, 640), 1, (0.05,), id="sweeps, offsets"),
    pytest.param(0.25, (1000, 700, 803, 900, 750, 640), 1, (0.05, 0.02), id="sweeps, drifts"),
    pytest.param(0.5, (1000, 1000), 6, (0.0,), id="blocks, no offsets"),
    pytest.param(0.5, (1000, 1000), 6, (0.05,), id="blocks, offsets"),
    pytest.param(0.5, (1000, 1000), 6, (0.05, 0.02), id="blocks, drifts"),
]


@lru_cache
def reduced(
    step_ms: float, lengths: tuple[int, ...], n_blocks: int, drift: bool = False
) -> tuple[VoltageDigest, reference.Rows]:
    """A recording reduced by the fast path and by the slow one."""
    recording, design = arbitrary_recording(step_ms, lengths), replace(DESIGN, drift=drift)
    block_ms = None if n_blocks == 1 else min(lengths) * step_ms / n_blocks
    fast = voltage_digest((recording,), design, block_ms)
    return fast, reference.recording_rows(recording, design, n_blocks)


def in_weights(fit: LeastSquares, covariance: np.ndarray) -> np.ndarray:
    """A covariance of z as one of the weights."""
    return fit.basis @ covariance @ fit.basis.T


def scaled(found: np.ndarray, expected: np.ndarray) -> float:
    """Largest difference of covariances in units of the sds."""
    sd = np.sqrt(np.diagonal(expected))
    return float(np.max(np.abs(found - expected) / np.outer(sd, sd)))


@pytest.mark.parametrize(("step_ms", "lengths", "n_blocks", "ratios"), CASES)
def test_everything_equals_the_slow_twin(
    step_ms: float, lengths: tuple[int, ...], n_blocks: int, ratios: tuple[float, ...]
) -> None:
    """Estimate, white, cluster and jackknife covariance; refits by QR on the other side."""
    digest, rows = reduced(step_ms, lengths, n_blocks, drift=len(ratios) > 1)
    ratio = np.array(ratios)
    fit = least_squares(digest, column_scale(digest), ratio)
    assert fit.lost.shape[1] == 0
    weights, inverse, variance = reference.estimate(rows, ratio)
    assert np.max(np.abs(fit.weights - weights) / np.sqrt(variance * np.diagonal(inverse))) < 1e-8
    assert fit.residual_variance == pytest.approx(variance, rel=1e-9)
    assert scaled(fit.white_covariance, reference.white_covariance(rows, ratio)) < 1e-8
    assert scaled(sandwich(digest, fit), reference.cluster_covariance(rows, ratio)) < 1e-8
    calibration = calibrate(digest, fit, np.eye(digest.design.n_weights))
    assert calibration.leverage.max() < 0.5
    jackknife = in_weights(fit, calibration.jackknife)
    assert scaled(jackknife, reference.jackknife_covariance(rows, ratio)) < 1e-8


@pytest.mark.parametrize("scale", ["columns", "prior"])
def test_estimate_does_not_depend_on_the_scale_of_the_weights(scale: str) -> None:
    digest, rows = reduced(0.5, (1000, 1000), 6)
    rng = np.random.default_rng(0)
    mixed = np.tril(rng.normal(size=(13, 13))) + 5 * np.eye(13)
    fit = least_squares(digest, column_scale(digest) if scale == "columns" else mixed)
    expected, inverse, variance = reference.estimate(rows)
    assert np.max(np.abs(fit.weights - expected) / np.sqrt(variance * np.diag(inverse))) < 1e-8


def correlated(rng: np.random.Generator, n: int, phi: float) -> np.ndarray:
    """First-order autoregressive noise of unit variance, stationary from the start."""
    drive = rng.normal(0.0, np.sqrt(1 - phi**2), n)
    drive[0] = rng.normal()
    noise: np.ndarray = lfilter([1.0], [1.0, -phi], drive)
    return noise


def regression(
    rng: np.random.Generator, n: int, phi: float, n_units: int, n_columns: int = 5
) -> tuple[VoltageDigest, np.ndarray]:
    """Rows of correlated columns with correlated noise, and the true weights."""
    x = np.column_stack([np.ones(n), *(correlated(rng, n, 0.9) for _ in range(n_columns + 1))])
    truth = np.concatenate([[-65.0], np.linspace(-1, 1, n_columns + 1)])
    return matrix_digest(x, x @ truth + correlated(rng, n, phi), n_units), truth


def test_lost_directions_carry_no_precision_whatever_the_scale() -> None:
    """A scale that mixes the weights leaves lost and excited directions at any angle."""
    rng = np.random.default_rng(9)
    x = np.column_stack([np.ones(4000), rng.normal(size=(4000, 6))])
    x[:, 4] = x[:, 3]
    digest = matrix_digest(x, x @ np.ones(7) + rng.normal(size=4000), 8, plain_design(5))
    fit = least_squares(digest, np.tril(rng.normal(size=(7, 7))) + 3 * np.eye(7))
    calibration = calibrate(digest, fit, np.eye(7))
    size = np.linalg.norm(calibration.precision)
    assert np.abs(calibration.precision @ fit.lost).max() < 1e-9 * size
    assert np.abs(calibration.white_precision @ fit.lost).max() < 1e-9 * size
    np.testing.assert_allclose(fit.back @ fit.basis, np.eye(6), atol=1e-9)
    # What the data say of the weights is H/σ² for white residuals, lost directions and all.
    information = x.T @ x / fit.residual_variance
    np.testing.assert_allclose(calibration.white_precision, information, rtol=1e-8, atol=1e-6)


def test_directions_never_excited_are_told_and_carry_no_precision() -> None:
    """Two equal columns: their difference is lost, the estimate of their sum is not."""
    rng = np.random.default_rng(0)
    x = np.column_stack([np.ones(4000), rng.normal(size=(4000, 6))])
    x[:, 4] = x[:, 3]
    v = x @ np.arange(7.0) + rng.normal(size=4000)
    digest = matrix_digest(x, v, 8, plain_design(5))
    fit = least_squares(digest, column_scale(digest))
    assert fit.rank == 6
    lost = fit.lost[:, 0] / np.abs(fit.lost[:, 0]).max()
    np.testing.assert_allclose(np.abs(lost), [0, 0, 0, 1, 1, 0, 0], atol=1e-6)
    assert lost[3] == pytest.approx(-lost[4])
    assert fit.weights[3] + fit.weights[4] == pytest.approx(7.0, abs=0.1)
    assert fit.weights[3] == pytest.approx(fit.weights[4])
    calibration = calibrate(digest, fit, np.eye(7))
    size = np.linalg.norm(calibration.precision)
    assert np.abs(calibration.precision @ lost).max() < 1e-9 * size
    assert np.abs(calibration.white_precision @ lost).max() < 1e-9 * size
    covariance = in_weights(fit, calibration.covariance)
    inverse = np.linalg.pinv(covariance, rcond=1e-9, hermitian=True)
    np.testing.assert_allclose(calibration.precision, inverse, rtol=1e-6, atol=1e-6 * size)


def plain_calibration(n_units: int = 12, seed: int = 0) -> tuple[VoltageDigest, Calibration]:
    digest, _ = regression(np.random.default_rng(seed), 6000, 0.9, n_units)
    fit = least_squares(digest, column_scale(digest))
    return digest, calibrate(digest, fit, np.eye(7))


def test_covariance_is_the_jackknife_shrunk_towards_the_inflated_spectral_one() -> None:
    """``V = (B V_jack + K D V0 D)/(B + K)``, in weights, D on the kernel's weights alone."""
    digest, calibration = plain_calibration()
    fit = calibration.fit
    assert digest.design.columns["input"] == slice(2, 7)
    jackknife, spectral = (
        in_weights(fit, c) for c in (calibration.jackknife, calibration.spectral)
    )
    inner = slice(2, 7)
    d2 = np.trace(np.linalg.solve(spectral[inner, inner], jackknife[inner, inner])) / 5
    assert calibration.ratio["input"] == pytest.approx(np.sqrt(d2))
    factor = np.array([1, 1, *[max(1.0, np.sqrt(d2))] * 5])
    assert calibration.inflation["input"] == pytest.approx(factor[-1])
    target = factor[:, None] * spectral * factor
    expected = (12 * jackknife + 7 * target) / (12 + 7)
    assert scaled(in_weights(fit, calibration.covariance), expected) < 1e-9


def test_given_inflation_leaves_the_jackknife_aside() -> None:
    digest, calibration = plain_calibration()
    again = calibrate(digest, calibration.fit, np.eye(7), {"input": 2.0})
    factor = np.array([1, 1, 2, 2, 2, 2, 2])
    spectral = in_weights(calibration.fit, calibration.spectral)
    expected = factor[:, None] * spectral * factor
    assert scaled(in_weights(calibration.fit, again.covariance), expected) < 1e-9


def test_spectral_covariance_is_the_true_one_for_correlated_noise() -> None:
    """``H⁻¹XᵀΓXH⁻¹`` with Γ known: mean over 8 made sets; white residuals are far off."""
    rng, n, phi = np.random.default_rng(1), 6000, 0.9
    gamma = phi ** np.arange(n)
    found, true, white = [], [], []
    for _ in range(8):
        x = np.column_stack([np.ones(n), *(correlated(rng, n, 0.9) for _ in range(6))])
        digest = matrix_digest(x, x @ np.ones(7) + correlated(rng, n, phi), 1)
        fit = least_squares(digest, column_scale(digest))
        inverse = np.linalg.inv(x.T @ x)
        true.append(np.diagonal(inverse @ x.T @ matmul_toeplitz(gamma, x) @ inverse))
        found.append(np.diagonal(in_weights(fit, calibrate(digest, fit, np.eye(7)).spectral)))
        white.append(np.diagonal(fit.white_covariance))
    ratio = np.mean(np.array(found) / true, axis=0)
    # The level's variance rests on the two lowest bands, which few rows reach.
    np.testing.assert_allclose(ratio[1:], 1.0, atol=0.12)
    assert 0.6 < ratio[0] < 1.4
    assert np.all(np.mean(np.array(white) / true, axis=0) < 0.25)


@pytest.mark.parametrize("phi", [0.0, 0.9])
def test_units_agree_with_the_spectrum_where_the_model_holds(phi: float) -> None:
    """D² is about one: mean over 20 made sets within 0.1; B/(B − K)-like excess allowed for."""
    rng = np.random.default_rng(2)
    squares = []
    for _ in range(20):
        digest, _ = regression(rng, 8000, phi, 40)
        fit = least_squares(digest, column_scale(digest))
        squares.append(calibrate(digest, fit, np.eye(7)).ratio["input"] ** 2)
    assert np.mean(squares) == pytest.approx(1.05, abs=0.1)


def test_units_that_disagree_raise_the_ratio() -> None:
    """Negative control: each unit has weights of its own."""
    rng = np.random.default_rng(3)
    n, n_units = 8000, 20
    x = np.column_stack([np.ones(n), rng.normal(size=(n, 6))])
    own = rng.normal(0.0, 0.2, (n_units, 7))
    v = np.einsum("np,np->n", x, own[np.arange(n) * n_units // n]) + rng.normal(size=n)
    digest = matrix_digest(x, v, n_units)
    calibration = calibrate(digest, least_squares(digest, column_scale(digest)), np.eye(7))
    # Variance of a mean of units: 0.2²/20 of their own weights against 1/8000 of noise.
    assert calibration.ratio["input"] == pytest.approx(np.sqrt(1 + 0.04 / 20 * 8000), rel=0.3)


def test_spread_inside_groups_ignores_what_groups_differ_by() -> None:
    """Two groups with different weights: the whole is inflated, the inside of groups is not."""
    rng = np.random.default_rng(4)
    n, n_units = 12000, 24
    x = np.column_stack([np.ones(n), rng.normal(size=(n, 6))])
    second = np.arange(n) * n_units // n >= 12
    v = x @ np.ones(7) + 0.3 * second * x[:, 3:].sum(axis=1) + rng.normal(size=n)
    digest = matrix_digest(x, v, n_units)
    calibration = calibrate(digest, least_squares(digest, column_scale(digest)), np.eye(7))
    groups = [np.arange(12), np.arange(12, 24)]
    assert calibration.inflation["input"] > 2.5
    assert inflation_within(digest, calibration, groups)["input"] < 1.4
    assert inflation_within(digest, calibration, [np.array([0])]) == {"input": 1.0}


def test_one_unit_that_carries_a_direction_is_seen() -> None:
    """Leverage is the largest share of information: one unit alone has a column that varies."""
    rng = np.random.default_rng(5)
    n, n_units = 5000, 10
    x = np.column_stack([np.ones(n), rng.normal(size=(n, 6))])
    x[500:, 5] *= 1e-3
    digest = matrix_digest(x, x @ np.ones(7) + rng.normal(size=n), n_units)
    calibration = calibrate(digest, least_squares(digest, column_scale(digest)), np.eye(7))
    assert calibration.leverage[0] == pytest.approx(1.0, abs=1e-3)
    assert calibration.leverage[1:].max() < 0.3
    assert np.isfinite(calibration.covariance).all()


def dense_freedom(rows: reference.Rows, contrast: np.ndarray) -> float:
    """Satterthwaite's ν from the matrix that maps rows to the units' changes, refit by refit."""
    whole = np.linalg.pinv(rows.x)
    maps = []
    for unit in np.unique(rows.unit):
        change = whole.copy()
        change[:, rows.unit != unit] -= np.linalg.pinv(rows.x[rows.unit != unit])
        maps.append(contrast @ change)
    covariance = np.array(maps) @ np.array(maps).T
    return float(np.trace(covariance) ** 2 / np.sum(covariance**2))


def test_degrees_of_freedom_equal_the_dense_formula() -> None:
    """Source: Bell & McCaffrey (2002), the moments of the jackknife variance under white noise."""
    digest, rows = reduced(0.5, (1000, 1000), 6)
    fit = least_squares(digest, column_scale(digest))
    contrasts = np.eye(digest.design.n_weights)[[0, 3, 9]]
    expected = min(dense_freedom(rows, contrast) for contrast in contrasts)
    assert calibrate(digest, fit, contrasts).freedom == pytest.approx(expected, rel=1e-6)
    assert expected < 11


def test_equal_units_have_one_degree_of_freedom_fewer_than_units() -> None:
    """The mean of B equal units: ν = B − 1, as for Student's t."""
    rng = np.random.default_rng(6)
    x = np.column_stack([np.ones(6000), rng.normal(size=(6000, 6))])
    digest = matrix_digest(x, rng.normal(size=6000), 12)
    fit = least_squares(digest, column_scale(digest))
    assert calibrate(digest, fit, np.eye(7)[:1]).freedom == pytest.approx(11, rel=0.02)
    assert calibrate(digest, fit, np.empty((0, 7))).freedom == 11


@pytest.mark.parametrize("tau_ms", [5.0, 20.0])
def test_correlation_time_of_exponentially_correlated_noise(tau_ms: float) -> None:
    """For ``exp(−t/τ)`` it is τ; mean over 6 recordings of 40 s."""
    found = []
    for seed in range(6):
        cell = neuron(noise=Noise((1.0,), (tau_ms,)), threshold_mV=50.0)
        recording = recording_of_noise(cell, seed)
        design = VoltageDesign(KernelSpec(150.0), None)
        digest = voltage_digest((recording,), design, 1000.0)
        found.append(correlation_time_ms(digest, least_squares(digest, column_scale(digest))))
    assert np.mean(found) == pytest.approx(tau_ms, rel=0.15)


def test_noise_sd_and_its_error_over_units() -> None:
    """White noise of 2 mV in 100 units of 50 rows: relative error 1/√(2·5000)."""
    rng = np.random.default_rng(7)
    x = np.column_stack([np.ones(5000), rng.normal(size=(5000, 6))])
    digest = matrix_digest(x, 2 * rng.normal(size=5000), 100)
    log_sd, error = noise_log_sd(digest, least_squares(digest, column_scale(digest)))
    assert abs(log_sd - np.log(2)) < 4 * 0.01
    assert error == pytest.approx(0.01, rel=0.3)


def offset_recording(sd_mV: float, seed: int) -> tuple[VoltageDigest, LeastSquares]:
    """Twenty sweeps of 2 s whose offsets have the given sd, in correlated noise."""
    rng = np.random.default_rng(seed)
    cell = neuron(noise=Noise((0.5,), (10.0,), sweep_sd_mV=sd_mV), threshold_mV=50.0)
    recording = simulate(cell, coloured_current(rng, 20, 2.0), STEP_MS, rng)
    digest = voltage_digest((recording,), VoltageDesign(KernelSpec(150.0), None), None)
    return digest, with_sweep_effects(digest, column_scale(digest))


def test_sweep_offsets_are_found_and_noise_is_not_taken_for_them() -> None:
    """Sd 1 mV is found; none stays small beside the noise of a sweep's mean, 0.05 mV."""
    found = [offset_recording(1.0, seed)[1].sweep_variances[0] for seed in range(5)]
    assert np.mean(found) == pytest.approx(1.0, rel=0.4)
    none = [offset_recording(0.0, seed)[1].sweep_variances[0] for seed in range(5)]
    assert np.mean(none) < 0.05**2


def test_the_level_is_as_uncertain_as_the_offsets_make_it() -> None:
    """Twenty offsets of 1 mV: the mean offset has sd 1/√20, the kernel hardly notices."""
    digest, fit = offset_recording(1.0, 1)
    calibration = calibrate(digest, fit, np.eye(digest.design.n_weights))
    covariance = in_weights(fit, calibration.covariance)
    assert np.sqrt(covariance[0, 0]) == pytest.approx(1 / np.sqrt(20), rel=0.35)
    assert abs(fit.weights[0] + 65) < 4 / np.sqrt(20)


def test_a_perfect_fit_has_no_residual_and_no_offsets() -> None:
    x = np.column_stack([np.ones(3000), np.random.default_rng(8).normal(size=(3000, 6))])
    digest = matrix_digest(x, x @ np.ones(7), 6)
    fit = with_sweep_effects(digest, column_scale(digest))
    np.testing.assert_allclose(fit.weights, 1.0, atol=1e-10)
    assert fit.residual_variance < 1e-12

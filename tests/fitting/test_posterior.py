"""Draws of one cell: scales sampled, weights exact, and the white posterior beside them."""

from __future__ import annotations

import numpy as np
import pytest

from bayesglm.fitting.posterior import sample_posterior, white_weights
from bayesglm.inference.results import CellFit
from bayesglm.models.cell import conditional_weights, voltage_evidence
from bayesglm.recording.settings import Settings


def test_shapes_and_flat_order(linear_fit: CellFit) -> None:
    fit = linear_fit
    found = sample_posterior(fit.calibration, fit.design, fit.prior, 0.5, Settings())
    np.testing.assert_array_equal(found.weights, fit.weights)
    assert found.weights.shape == (4, 500, fit.design.n_weights)
    assert found.chains.draws["sd"].shape == (4, 500, 2)
    np.testing.assert_array_equal(found.flat[500:1000], found.weights[1])
    median = np.median(found.chains.draws["sd"].reshape(-1, 2), axis=0)
    np.testing.assert_array_equal(found.kernel_sd, median)


def test_weights_are_drawn_given_their_own_sd_and_phi(linear_fit: CellFit) -> None:
    """Standardised by their conditional mean and covariance, draws are standard normal."""
    fit = linear_fit
    least = fit.calibration.fit
    evidence = voltage_evidence(
        least.weights, fit.calibration.precision, least.rank, fit.calibration.freedom, fit.prior
    )
    sd = fit.chains.draws["sd"].reshape(-1, 2)
    phi = fit.chains.draws["phi"].reshape(-1)
    mean, factor = conditional_weights(evidence, sd, phi)
    x = np.linalg.solve(fit.prior.root, (fit.weights.reshape(len(phi), -1) - fit.prior.mean).T).T
    standard = np.einsum("dqp,dq->dp", factor, x - mean)
    n = standard.size
    assert abs(standard.mean()) < 5 / np.sqrt(n)
    assert standard.std() == pytest.approx(1.0, abs=5 / np.sqrt(2 * n))
    covariance = np.cov(standard.T)
    assert np.abs(covariance - np.eye(len(covariance))).max() < 6 / np.sqrt(len(phi))


def test_phi_is_known_for_white_residuals(white_fit: CellFit) -> None:
    assert white_fit.chains.draws["phi"].mean() == pytest.approx(1.0, abs=0.01)
    assert white_fit.chains.draws["phi"].std() < 0.01


def test_white_weights_are_the_dense_posterior(linear_fit: CellFit) -> None:
    """Gaussian formula with covariance σ²H⁻¹, where every direction is excited."""
    fit = linear_fit
    sd = np.array([2.0, 3.0])
    mean, covariance = white_weights(fit.calibration, fit.prior, sd)
    gram = fit.digest.gram.sum(axis=0)
    least = fit.calibration.fit
    precision = fit.calibration.white_precision + fit.prior.precision(sd)
    expected = np.linalg.inv(precision)
    size = np.sqrt(np.diagonal(expected))
    assert gram.shape == (31, 31)
    np.testing.assert_allclose((covariance - expected) / np.outer(size, size), 0, atol=1e-5)
    pulled = fit.prior.precision(sd) @ fit.prior.mean
    pulled = pulled + fit.calibration.white_precision @ least.weights
    np.testing.assert_allclose((mean - expected @ pulled) / size, 0, atol=1e-4)

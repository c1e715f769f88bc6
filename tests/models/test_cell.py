"""The model with its weights integrated out, against SciPy's normal density and dense algebra."""

from __future__ import annotations

import jax
import jax.numpy as jnp
import numpy as np
import pytest
from numpyro.infer.util import log_density
from scipy.stats import dirichlet, gamma, halfnorm, multivariate_normal

from bayesglm.kernels.basis import KernelSpec
from bayesglm.kernels.design import VoltageDesign
from bayesglm.kernels.exponentials import GAP_CONCENTRATION
from bayesglm.models.cell import (
    VoltageEvidence,
    conditional_weights,
    draw_weights,
    log_marginal,
    voltage_evidence,
    voltage_model,
    weight_moments,
)
from bayesglm.models.priors import WeightPrior, weight_prior
from bayesglm.recording.settings import PriorsSection

DESIGN = VoltageDesign(KernelSpec(100.0, 6), KernelSpec(200.0, 5))
P = DESIGN.n_weights
#: Pairs of (σ of each kernel, φ).
POINTS = [([3.0, 1.0], 1.0), ([20.0, 10.0], 0.4), ([0.5, 40.0], 2.5), ([7.0, 0.2], 1.3)]


class Made:
    """An estimate of given rank with its covariance, and the prior; everything dense."""

    def __init__(self, rank: int, freedom: float = 8.0) -> None:
        rng = np.random.default_rng(rank)
        self.prior: WeightPrior = weight_prior(DESIGN, PriorsSection())
        #: The directions that are known, shape (rank, P): all, or fewer combinations.
        self.known = np.eye(P) if rank == P else rng.normal(size=(rank, P))
        root = rng.normal(size=(rank, rank))
        self.covariance = root @ root.T + 0.5 * np.eye(rank)
        truth = self.prior.mean + self.prior.root @ rng.normal(size=P) * 0.3
        self.found = self.known @ truth + np.linalg.cholesky(self.covariance) @ rng.normal(
            size=rank
        )
        precision = self.known.T @ np.linalg.solve(self.covariance, self.known)
        estimate = np.linalg.pinv(self.known) @ self.found
        self.evidence: VoltageEvidence = voltage_evidence(
            estimate, precision, rank, freedom, self.prior
        )

    def log_density(self, sd: list[float], phi: float) -> float:
        """``log N(ŵ; μ, Q⁻¹ + V/φ)`` in the known directions."""
        spread = np.linalg.inv(self.prior.precision(np.array(sd)))
        covariance = self.known @ spread @ self.known.T + self.covariance / phi
        mean = self.known @ self.prior.mean
        return float(multivariate_normal.logpdf(self.found, mean, covariance))

    def posterior(self, sd: list[float], phi: float) -> tuple[np.ndarray, np.ndarray]:
        """Mean and covariance of w by the dense formula for Gaussians."""
        spread = np.linalg.inv(self.prior.precision(np.array(sd)))
        gain = spread @ self.known.T
        gain = gain @ np.linalg.inv(self.known @ gain + self.covariance / phi)
        mean = self.prior.mean + gain @ (self.found - self.known @ self.prior.mean)
        return mean, spread - gain @ self.known @ spread


@pytest.mark.parametrize("rank", [P, 8, 3])
def test_marginal_density_is_the_normal_one(rank: int) -> None:
    """Source: scipy.stats.multivariate_normal; differences, since a constant is left out."""
    made = Made(rank)
    found = [
        float(log_marginal(made.evidence, jnp.array(sd), jnp.array(phi))) for sd, phi in POINTS
    ]
    expected = [made.log_density(sd, phi) for sd, phi in POINTS]
    np.testing.assert_allclose(np.diff(found), np.diff(expected), rtol=1e-7, atol=1e-7)


@pytest.mark.parametrize("rank", [P, 8])
def test_gradient_is_that_of_finite_differences(rank: int) -> None:
    # Large enough that the rounding of the density, divided by the step, stays below 1e-5.
    made, step = Made(rank), 1e-4

    def density(point: jax.Array) -> jax.Array:
        return log_marginal(made.evidence, point[:2], point[2])

    for sd, phi in POINTS:
        at = np.array([*sd, phi])
        gradient = np.asarray(jax.grad(density)(jnp.asarray(at)))
        for i in range(3):
            shift = step * at[i] * np.eye(3)[i]
            slope = (density(jnp.asarray(at + shift)) - density(jnp.asarray(at - shift))) / (
                2 * step * at[i]
            )
            assert gradient[i] == pytest.approx(float(slope), rel=1e-5, abs=1e-5)


def test_compiled_density_is_the_same() -> None:
    made = Made(8)
    plain = log_marginal(made.evidence, jnp.array([3.0, 1.0]), jnp.array(0.7))
    compiled = jax.jit(log_marginal)(made.evidence, jnp.array([3.0, 1.0]), jnp.array(0.7))
    assert float(plain) == pytest.approx(float(compiled), rel=1e-11)


def test_model_adds_the_priors_of_sd_and_phi() -> None:
    """Source: scipy.stats halfnorm and gamma."""
    made = Made(P, freedom=5.0)
    found = []
    expected = []
    for sd, phi in POINTS:
        values = {"sd": jnp.array(sd), "phi": jnp.array(phi)}
        found.append(float(log_density(voltage_model, (made.evidence,), {}, values)[0]))
        prior = halfnorm.logpdf(sd, scale=[20.0, 10.0]).sum() + gamma.logpdf(
            phi, 2.5, scale=1 / 2.5
        )
        expected.append(made.log_density(sd, phi) + prior)
    np.testing.assert_allclose(np.diff(found), np.diff(expected), rtol=1e-7, atol=1e-7)


@pytest.mark.parametrize("rank", [P, 8, 3])
def test_conditional_weights_are_the_dense_posterior(rank: int) -> None:
    """Directions that are not known keep their prior."""
    made = Made(rank)
    sds, phis = np.array([sd for sd, _ in POINTS]), np.array([phi for _, phi in POINTS])
    means, factors = conditional_weights(made.evidence, sds, phis)
    for i, (sd, phi) in enumerate(POINTS):
        mean, covariance = made.posterior(sd, phi)
        size = np.sqrt(np.diagonal(covariance))
        found = made.prior.mean + made.prior.root @ means[i]
        np.testing.assert_allclose((found - mean) / size, 0.0, atol=1e-6)
        root = made.prior.root @ np.linalg.inv(factors[i]).T
        np.testing.assert_allclose(
            (root @ root.T - covariance) / np.outer(size, size), 0, atol=1e-6
        )
        assert np.allclose(np.triu(factors[i], 1), 0.0)


def test_exact_draws_have_the_dense_mean_and_covariance() -> None:
    """20,000 draws: standardised mean and covariance within five standard errors."""
    made, n = Made(8), 20_000
    sd, phi = POINTS[0]
    x = draw_weights(made.evidence, np.tile(sd, (n, 1)), np.full(n, phi), jax.random.key(0))
    mean, covariance = made.posterior(sd, phi)
    w = made.prior.mean + x @ made.prior.root.T
    size = np.sqrt(np.diagonal(covariance))
    assert np.abs((w.mean(axis=0) - mean) / size).max() < 5 / np.sqrt(n)
    error = np.abs(np.cov(w.T) - covariance) / np.outer(size, size)
    assert error.max() < 5 * np.sqrt(2 / n)


def test_draws_follow_the_key() -> None:
    made = Made(8)
    sd, phi = np.tile(POINTS[0][0], (5, 1)), np.ones(5)
    one, again, other = (draw_weights(made.evidence, sd, phi, jax.random.key(k)) for k in (1, 1, 2))
    np.testing.assert_array_equal(one, again)
    assert np.all(one != other)


SUMMED = VoltageDesign(
    KernelSpec(100.0, 6), KernelSpec(200.0, 7, 2.0, "exponentials", 0.5, 2), electrode=False
)
#: (σ of κ, φ, τ of η).
TERMS = [
    ([3.0], 1.0, [4.0, 60.0]),
    ([20.0], 0.4, [0.8, 1.1]),
    ([0.5], 2.5, [20.0, 150.0]),
    ([7.0], 1.3, [19.0, 20.0]),
]


class Summed:
    """Splines and exponentials: the estimate, and the dense prior of the weights given τ."""

    def __init__(self, rank: int) -> None:
        rng = np.random.default_rng(3)
        self.prior = weight_prior(SUMMED, PriorsSection())
        self.known = rng.normal(size=(rank, SUMMED.n_weights))
        root = rng.normal(size=(rank, rank))
        self.covariance = root @ root.T + 0.5 * np.eye(rank)
        self.found = rng.normal(0.0, 3.0, rank) + self.known @ self.prior.mean
        self.evidence = voltage_evidence(
            np.linalg.pinv(self.known) @ self.found,
            self.known.T @ np.linalg.solve(self.covariance, self.known),
            rank,
            8.0,
            self.prior,
        )

    def spread(self, sd: list[float], tau: list[float]) -> np.ndarray:
        """Prior covariance of w: A(τ)A(τ)ᵀ·(2·10 mV)² for η, written out on its splines."""
        total = self.prior.covariance(np.array(sd))
        place, spec = SUMMED.columns["after_spike"], SUMMED.after_spike
        assert spec is not None
        # The grid of lags of the package's fit, 400 even places on the warped axis.
        lags = 2 * np.expm1(np.linspace(0, 1, 400) * np.log1p(100.0))
        shapes = np.exp(-lags[:, None] / np.array(tau))
        a = np.linalg.lstsq(spec.evaluate(lags), shapes, rcond=None)[0]
        total[place, place] = 400.0 * a @ a.T
        return total


@pytest.mark.parametrize("rank", [14, 5])
def test_marginal_density_with_exponentials_is_the_normal_one(rank: int) -> None:
    """Source: scipy.stats.multivariate_normal with the dense covariance of the weights."""
    made, found, expected = Summed(rank), [], []
    for sd, phi, tau in TERMS:
        at = {"after_spike": jnp.array(tau)}
        found.append(float(log_marginal(made.evidence, jnp.array(sd), jnp.array(phi), at)))
        covariance = made.known @ made.spread(sd, tau) @ made.known.T + made.covariance / phi
        mean = made.known @ made.prior.mean
        expected.append(multivariate_normal.logpdf(made.found, mean, covariance))
    np.testing.assert_allclose(np.diff(found), np.diff(expected), rtol=1e-6, atol=1e-6)


@pytest.mark.parametrize("rank", [14, 5])
def test_moments_and_draws_with_exponentials_are_the_dense_posterior(rank: int) -> None:
    """Moments exact; 20,000 draws within five standard errors."""
    made, n = Summed(rank), 20_000
    sd, phi, tau = TERMS[0]
    spread = made.spread(sd, tau)
    gain = spread @ made.known.T
    gain = gain @ np.linalg.inv(made.known @ gain + made.covariance / phi)
    mean = made.prior.mean + gain @ (made.found - made.known @ made.prior.mean)
    covariance = spread - gain @ made.known @ spread
    at = made.prior.at({"after_spike": np.array(tau)})
    found, its_covariance = weight_moments(made.evidence, at, np.array(sd))
    size = np.sqrt(np.diagonal(covariance))
    np.testing.assert_allclose((found - mean) / size, 0.0, atol=1e-6)
    np.testing.assert_allclose((its_covariance - covariance) / np.outer(size, size), 0, atol=1e-5)
    x = draw_weights(
        made.evidence,
        np.tile(sd, (n, 1)),
        np.full(n, phi),
        jax.random.key(0),
        {"after_spike": np.tile(tau, (n, 1))},
    )
    w = made.prior.mean + x @ made.prior.root.T
    assert np.abs((w.mean(axis=0) - mean) / size).max() < 5 / np.sqrt(n)
    error = np.abs(np.cov(w.T) - covariance) / np.outer(size, size)
    assert error.max() < 5 * np.sqrt(2 / n)


def test_model_adds_the_prior_of_places_and_reports_sorted_time_constants() -> None:
    """Source: scipy.stats.dirichlet for the gaps of the places."""
    made, found, expected = Summed(14), [], []
    for places in ([0.2, 0.7], [0.7, 0.3], [0.45, 0.5]):
        values = {"sd": jnp.array([3.0]), "phi": jnp.array(1.0)}
        values["places_after_spike"] = jnp.array(places)
        density, trace = log_density(voltage_model, (made.evidence,), {}, values)
        tau = trace["tau_after_spike"]["value"]
        np.testing.assert_allclose(tau, 0.5 * 400.0 ** np.sort(places), rtol=1e-12)
        marginal = log_marginal(
            made.evidence, values["sd"], values["phi"], {"after_spike": jnp.asarray(tau)}
        )
        found.append(float(density - marginal))
        gaps = np.diff(np.sort(places), prepend=0.0, append=1.0)
        expected.append(dirichlet.logpdf(gaps, np.full(3, GAP_CONCENTRATION)))
    np.testing.assert_allclose(np.diff(found), np.diff(expected), rtol=1e-7, atol=1e-9)

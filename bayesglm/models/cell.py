"""The model of one cell: kernels' sds and φ are sampled, the weights are integrated out.

    σ_k ~ half-normal(scale_k)            sd of each kernel
    φ   ~ gamma(ν/2, ν/2)                 how far the calibrated covariance may be off
    w   ~ normal(μ, Q(σ)⁻¹)               weights: offset, electrode, κ, η
    ŵ   ~ normal(w, V/φ)                  the calibrated least-squares estimate

Given σ and φ all is Gaussian, so w is integrated out of what NUTS samples and then drawn
exactly. The covariance is used in precision form: a direction that the recording never excites
has precision zero and keeps its prior.
"""

from __future__ import annotations

from typing import NamedTuple

import jax
import jax.numpy as jnp
import numpy as np
import numpyro
import numpyro.distributions as dist

from bayesglm import backend as backend
from bayesglm.models.priors import WeightPrior
from bayesglm.recording.recording import FloatArray


class VoltageEvidence(NamedTuple):
    """What the voltage says, in coordinates x with ``w = μ + S x``, as arrays for `jit`.

    Attributes
    ----------
    estimate
        Least-squares estimate in x, shape (P,).
    precision
        Its calibrated precision in x, shape (P, P).
    rank
        Number of directions the recording excites.
    freedom
        ν of φ.
    fixed, bend
        Prior precision in x, as in `WeightPrior`.
    sd_scale
        Scale of the half-normal prior of each kernel's sd.
    """

    estimate: jax.Array
    precision: jax.Array
    rank: jax.Array
    freedom: jax.Array
    fixed: jax.Array
    bend: jax.Array
    sd_scale: jax.Array


def voltage_evidence(
    weights: FloatArray, precision: FloatArray, rank: int, freedom: float, prior: WeightPrior
) -> VoltageEvidence:
    """Bring estimate and prior to common coordinates in which the prior has unit size.

    Parameters
    ----------
    weights, precision
        Least-squares estimate, (P,), and its calibrated precision, (P, P).
    rank
        Number of directions the recording excites.
    freedom
        ν of φ.
    prior
        Prior of the weights.

    Returns
    -------
    VoltageEvidence
    """
    root = prior.root
    # Along directions never excited the estimate is arbitrary and has precision zero.
    estimate = jnp.linalg.solve(root, weights - prior.mean)
    return VoltageEvidence(
        estimate=estimate,
        precision=jnp.asarray(root.T @ precision @ root),
        rank=jnp.asarray(float(rank)),
        freedom=jnp.asarray(freedom),
        fixed=jnp.asarray(root.T @ prior.fixed @ root),
        bend=jnp.asarray(root.T @ prior.bend @ root),
        sd_scale=jnp.asarray(prior.sd_scale),
    )


def voltage_model(evidence: VoltageEvidence) -> None:
    """NumPyro model of one cell's voltage, weights integrated out."""
    sd = numpyro.sample("sd", dist.HalfNormal(evidence.sd_scale).to_event(1))
    phi = numpyro.sample("phi", dist.Gamma(evidence.freedom / 2, evidence.freedom / 2))
    numpyro.factor("voltage", log_marginal(evidence, sd, phi))


def log_marginal(evidence: VoltageEvidence, sd: jax.Array, phi: jax.Array) -> jax.Array:
    """``log p(ŵ | σ, φ)`` with the weights integrated out, up to a constant.

    Parameters
    ----------
    evidence
        What the voltage says.
    sd
        Sd of each kernel, shape (n_kernels,).
    phi
        Factor of the precision.
    """
    prior = _prior_precision(evidence, sd)
    total = jnp.linalg.cholesky(prior + phi * evidence.precision)
    pulled = phi * evidence.precision @ evidence.estimate
    whitened = jax.scipy.linalg.solve_triangular(total, pulled, lower=True)
    log_prior = jnp.sum(jnp.log(jnp.diagonal(jnp.linalg.cholesky(prior))))
    log_total = jnp.sum(jnp.log(jnp.diagonal(total)))
    misfit = evidence.estimate @ pulled - whitened @ whitened
    return 0.5 * evidence.rank * jnp.log(phi) + log_prior - log_total - 0.5 * misfit


def conditional_weights(
    evidence: VoltageEvidence, sd: FloatArray, phi: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Mean and Cholesky factor of the precision of the weights, given σ and φ.

    Parameters
    ----------
    evidence
        What the voltage says.
    sd
        Sds of the kernels, shape (D, n_kernels).
    phi
        Shape (D,).

    Returns
    -------
    (mean, factor)
        In the coordinates x, shapes (D, P) and (D, P, P); the factor L is lower triangular,
        ``LLᵀ`` is the precision.
    """
    # NumPy and not a vmapped JAX function: XLA's batched triangular solves on the CPU were seen
    # to wait for each other for ever on two cores (jaxlib 0.10.2).
    data = np.asarray(evidence.precision)
    prior = np.asarray(evidence.fixed) + np.einsum("dk,kpq->dpq", sd**-2.0, evidence.bend)
    factor = np.linalg.cholesky(prior + phi[:, None, None] * data)
    pulled = phi[:, None] * (data @ np.asarray(evidence.estimate))
    half = np.linalg.solve(factor, pulled[..., None])
    mean = np.linalg.solve(np.swapaxes(factor, 1, 2), half)[..., 0]
    return mean, factor


def weight_moments(
    evidence: VoltageEvidence, prior: WeightPrior, sd: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Mean, (P,), and covariance, (P, P), of the weights for given kernel sds and φ = 1.

    Parameters
    ----------
    evidence
        What the voltage says, in the coordinates of `prior`.
    prior
        Prior of the weights.
    sd
        Sd of each kernel, shape (n_kernels,).
    """
    mean, factor = conditional_weights(evidence, sd[None], np.ones(1))
    root = prior.root @ np.linalg.inv(factor[0]).T
    return prior.mean + prior.root @ mean[0], root @ root.T


def draw_weights(
    evidence: VoltageEvidence, sd: FloatArray, phi: FloatArray, key: jax.Array
) -> FloatArray:
    """Draw the weights exactly, given draws of σ and φ.

    Parameters
    ----------
    evidence
        What the voltage says.
    sd
        Sds of the kernels, shape (D, n_kernels).
    phi
        Shape (D,).
    key
        Random key.

    Returns
    -------
    Draws in the coordinates x, shape (D, P).
    """
    mean, factor = conditional_weights(evidence, sd, phi)
    noise = np.asarray(jax.random.normal(key, mean.shape))
    draws: FloatArray = mean + np.linalg.solve(np.swapaxes(factor, 1, 2), noise[..., None])[..., 0]
    return draws


def _prior_precision(evidence: VoltageEvidence, sd: jax.Array) -> jax.Array:
    return evidence.fixed + jnp.einsum("k,kpq->pq", 1.0 / sd**2, evidence.bend)

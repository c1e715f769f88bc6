"""The model of one cell: what the weights depend on is sampled, the weights are integrated out.

    σ_k ~ half-normal(scale_k)            sd of each kernel of splines, cosines or lags
    τ_k ~ ordered, gaps of log τ Dirichlet    time constants of each kernel of exponentials
    φ   ~ gamma(ν/2, ν/2)                 how far the calibrated covariance may be off
    y   ~ normal(0, Q(σ)⁻¹)               coefficients: offset, electrode, weights or amplitudes
    w   = μ + S G(τ) y                    weights: offset, electrode, κ, η
    ŵ   ~ normal(w, V/φ)                  the calibrated least-squares estimate

Given σ, τ and φ all is Gaussian, so y is integrated out of what is sampled and then drawn
exactly. The covariance is used in precision form: a direction that the recording never excites
has precision zero and keeps its prior.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import NamedTuple

import jax
import jax.numpy as jnp
import numpy as np
import numpyro
import numpyro.distributions as dist

from bayesglm import backend as backend
from bayesglm.kernels.exponentials import log_gap_density, time_constants
from bayesglm.models.priors import WeightPrior
from bayesglm.recording.recording import FloatArray

#: Sites of time constants are called by this and the kernel's name.
TAU_SITE = "tau_"

#: Numbers in the largest stack of matrices that is made for draws at once.
_STACK = 8_000_000


class ExponentialTerms(NamedTuple):
    """A kernel of exponentials: it adds ``projection exp(−lags/τ) select`` to G(τ).

    Attributes
    ----------
    projection
        Shape (P, grid of lags).
    lags_ms
        Grid of lags, ms.
    select
        Amplitudes among the coefficients, shape (terms, Q).
    log_range
        Logarithms of the shortest and the longest time constant in ms, shape (2,).
    """

    projection: jax.Array
    lags_ms: jax.Array
    select: jax.Array
    log_range: jax.Array


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
    fixed, bend, keep
        Prior precision of y and the constant part of G, as in `WeightPrior`.
    sd_scale
        Scale of the half-normal prior of each kernel's sd.
    exponentials
        Kernels of exponentials, by name.
    """

    estimate: jax.Array
    precision: jax.Array
    rank: jax.Array
    freedom: jax.Array
    fixed: jax.Array
    bend: jax.Array
    keep: jax.Array
    sd_scale: jax.Array
    exponentials: dict[str, ExponentialTerms]


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
    root, (n, n_coefficients) = prior.root, prior.keep.shape
    terms = {}
    for name, one in prior.exponentials.items():
        in_x, in_y = prior.places[name]
        projection, select = np.zeros((n, len(one.lags_ms))), np.zeros((one.terms, n_coefficients))
        projection[in_x] = one.projection
        select[:, in_y] = np.eye(one.terms)
        terms[name] = ExponentialTerms(
            *(jnp.asarray(a) for a in (projection, one.lags_ms, select, np.log(one.range_ms)))
        )
    return VoltageEvidence(
        # Along directions never excited the estimate is arbitrary and has precision zero.
        estimate=jnp.linalg.solve(root, weights - prior.mean),
        precision=jnp.asarray(root.T @ precision @ root),
        rank=jnp.asarray(float(rank)),
        freedom=jnp.asarray(freedom),
        fixed=jnp.asarray(prior.fixed),
        bend=jnp.asarray(prior.bend),
        keep=jnp.asarray(prior.keep),
        sd_scale=jnp.asarray(prior.sd_scale),
        exponentials=terms,
    )


def voltage_model(evidence: VoltageEvidence) -> None:
    """NumPyro model of one cell's voltage, weights integrated out."""
    sd = numpyro.sample("sd", dist.HalfNormal(evidence.sd_scale).to_event(1))
    phi = numpyro.sample("phi", dist.Gamma(evidence.freedom / 2, evidence.freedom / 2))
    tau = {}
    for name, one in evidence.exponentials.items():
        # In any order, so that each has a coordinate of its own; sorted they are reported.
        shape = (one.select.shape[0],)
        places = numpyro.sample(f"places_{name}", dist.Uniform(0.0, 1.0).expand(shape).to_event(1))
        numpyro.factor(f"gaps_{name}", log_gap_density(places))
        tau[name] = numpyro.deterministic(
            f"{TAU_SITE}{name}", time_constants(places, one.log_range)
        )
    numpyro.factor("voltage", log_marginal(evidence, sd, phi, tau))


def log_marginal(
    evidence: VoltageEvidence,
    sd: jax.Array,
    phi: jax.Array,
    tau_ms: Mapping[str, jax.Array] | None = None,
) -> jax.Array:
    """``log p(ŵ | σ, φ, τ)`` with the weights integrated out, up to a constant.

    Parameters
    ----------
    evidence
        What the voltage says.
    sd
        Sd of each kernel that has one, shape (n_sd,).
    phi
        Factor of the precision.
    tau_ms
        Time constants of each kernel of exponentials, ms, shape (terms,).
    """
    prior = evidence.fixed + sd**-2.0 @ evidence.bend
    data, pulled = evidence.precision, evidence.precision @ evidence.estimate
    known = evidence.estimate @ pulled
    if evidence.exponentials:
        basis = _coefficients_to_x(evidence, tau_ms or {})
        data, pulled = basis.T @ data @ basis, basis.T @ pulled
    total = jnp.linalg.cholesky(jnp.diag(prior) + phi * data)
    whitened = jax.scipy.linalg.solve_triangular(total, phi * pulled, lower=True)
    log_total = jnp.sum(jnp.log(jnp.diagonal(total)))
    misfit = phi * known - whitened @ whitened
    return 0.5 * (evidence.rank * jnp.log(phi) + jnp.sum(jnp.log(prior)) - misfit) - log_total


def _coefficients_to_x(evidence: VoltageEvidence, tau_ms: Mapping[str, jax.Array]) -> jax.Array:
    """G(τ), shape (P, Q)."""
    basis = evidence.keep
    for name, one in evidence.exponentials.items():
        shapes = jnp.exp(-one.lags_ms[:, None] / tau_ms[name])
        basis = basis + one.projection @ shapes @ one.select
    return basis


def _stack_to_x(evidence: VoltageEvidence, tau_ms: Mapping[str, FloatArray], n: int) -> FloatArray:
    """G(τ) of many draws, shape (n, P, Q), in NumPy."""
    basis = np.broadcast_to(np.asarray(evidence.keep), (n, *evidence.keep.shape))
    for name, one in evidence.exponentials.items():
        shapes = np.exp(-np.asarray(one.lags_ms)[:, None] / tau_ms[name][:, None, :])
        basis = basis + np.asarray(one.projection) @ shapes @ np.asarray(one.select)
    return basis


def conditional_weights(
    evidence: VoltageEvidence,
    sd: FloatArray,
    phi: FloatArray,
    tau_ms: Mapping[str, FloatArray] | None = None,
) -> tuple[FloatArray, FloatArray]:
    """Mean and Cholesky factor of the precision of the coefficients y, given σ, φ and τ.

    Parameters
    ----------
    evidence
        What the voltage says.
    sd
        Sds of the kernels, shape (D, n_sd).
    phi
        Shape (D,).
    tau_ms
        Time constants of each kernel of exponentials, ms, shape (D, terms).

    Returns
    -------
    (mean, factor)
        Shapes (D, Q) and (D, Q, Q); the factor L is lower triangular, ``LLᵀ`` is the precision.
        Without exponentials y is x.
    """
    # NumPy and not a vmapped JAX function: XLA's batched triangular solves on the CPU were seen
    # to wait for each other for ever on two cores (jaxlib 0.10.2).
    data = np.asarray(evidence.precision)[None]
    pulled = (data[0] @ np.asarray(evidence.estimate))[None]
    if evidence.exponentials:
        basis = _stack_to_x(evidence, tau_ms or {}, len(phi))
        transposed = np.swapaxes(basis, 1, 2)
        data, pulled = transposed @ data @ basis, transposed @ pulled[0]
    prior = np.asarray(evidence.fixed) + sd**-2.0 @ np.asarray(evidence.bend)
    precision = phi[:, None, None] * data
    each = np.arange(prior.shape[1])
    precision[:, each, each] += prior
    factor = np.linalg.cholesky(precision)
    half = np.linalg.solve(factor, (phi[:, None] * pulled)[..., None])
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
        Prior of the weights; of time constants its `tau_ms` are taken.
    sd
        Sd of each kernel that has one, shape (n_sd,).
    """
    tau_ms = {name: tau[None] for name, tau in prior.tau_ms.items()}
    mean, factor = conditional_weights(evidence, sd[None], np.ones(1), tau_ms)
    to_weights = prior.root @ _stack_to_x(evidence, tau_ms, 1)[0]
    root = to_weights @ np.linalg.inv(factor[0]).T
    return prior.mean + to_weights @ mean[0], root @ root.T


def draw_weights(
    evidence: VoltageEvidence,
    sd: FloatArray,
    phi: FloatArray,
    key: jax.Array,
    tau_ms: Mapping[str, FloatArray] | None = None,
) -> FloatArray:
    """Draw the weights exactly, given draws of σ, φ and τ.

    Parameters
    ----------
    evidence
        What the voltage says.
    sd
        Sds of the kernels, shape (D, n_sd).
    phi
        Shape (D,).
    key
        Random key.
    tau_ms
        Time constants of each kernel of exponentials, ms, shape (D, terms).

    Returns
    -------
    Draws in the coordinates x, shape (D, P).
    """
    n, n_coefficients = len(phi), evidence.keep.shape[1]
    noise = np.asarray(jax.random.normal(key, (n, n_coefficients)))
    at_once = max(1, _STACK // evidence.keep.size)
    parts = []
    for start in range(0, n, at_once):
        here = slice(start, start + at_once)
        tau = {name: values[here] for name, values in (tau_ms or {}).items()}
        mean, factor = conditional_weights(evidence, sd[here], phi[here], tau)
        spread = np.linalg.solve(np.swapaxes(factor, 1, 2), noise[here, :, None])[..., 0]
        draws = mean + spread
        if evidence.exponentials:
            draws = np.einsum("dpq,dq->dp", _stack_to_x(evidence, tau, len(draws)), draws)
        parts.append(draws)
    return np.concatenate(parts)

"""Sums of exponentials as a constraint on the weights of splines.

The digest of a recording holds columns that do not depend on time constants. A sum of
exponentials ``k(s) = Σ_i a_i exp(−s/τ_i)`` is therefore written on B-splines: its weights are
``w = A(τ) a``, where column i of A is the least-squares fit of ``exp(−s/τ_i)`` on a grid of lags, a
fixed matrix times a vector. `worst_error` tells how exact it is.

Prior of the time constants: the gaps of log τ between the finest lag and the duration are
Dirichlet(3, …, 3). Time constants are ordered, and are log-spaced in the mean; two of them are
unlikely to be the same.
"""

from __future__ import annotations

from dataclasses import dataclass

import jax
import jax.numpy as jnp
import numpy as np

from bayesglm import backend as backend
from bayesglm.kernels.basis import KernelSpec
from bayesglm.recording.recording import FloatArray

#: Concentration of the gaps of log τ: at 1 all orders are equally likely, also equal ones.
GAP_CONCENTRATION = 3.0

_GRID = 400


@dataclass(frozen=True, eq=False)
class Exponentials:
    """What a kernel of exponentials needs of its splines.

    Attributes
    ----------
    lags_ms
        Grid of lags, even on the warped axis, ms, shape (G,).
    projection
        Least-squares fit of values on the grid, shape (weights, G).
    range_ms
        Shortest and longest time constant, ms.
    terms
        Number of exponentials.
    """

    lags_ms: FloatArray
    projection: FloatArray
    range_ms: tuple[float, float]
    terms: int

    def weights(self, tau_ms: FloatArray) -> FloatArray:
        """A(τ): weights of ``exp(−s/τ)``, shape (…, weights, terms) for τ of shape (…, terms)."""
        shapes = np.exp(-self.lags_ms[:, None] / np.asarray(tau_ms)[..., None, :])
        weights: FloatArray = self.projection @ shapes
        return weights

    @property
    def typical_ms(self) -> FloatArray:
        """Time constants with equal gaps: the means of their logarithms, ms, shape (terms,)."""
        places = np.arange(1, self.terms + 1) / (self.terms + 1)
        lower, upper = self.range_ms
        typical: FloatArray = lower * (upper / lower) ** places
        return typical

    def draw(self, n: int, rng: np.random.Generator) -> FloatArray:
        """Draw time constants from their prior, ms, shape (n, terms)."""
        gaps = rng.dirichlet(np.full(self.terms + 1, GAP_CONCENTRATION), size=n)
        lower, upper = self.range_ms
        drawn: FloatArray = lower * (upper / lower) ** np.cumsum(gaps, axis=1)[:, :-1]
        return drawn


def exponentials(spec: KernelSpec) -> Exponentials:
    """Prepare a kernel of exponentials; its time constants lie between row and duration."""
    lags = spec.unwarp(np.linspace(0.0, 1.0, _GRID))
    return Exponentials(
        lags_ms=lags,
        projection=np.linalg.pinv(spec.evaluate(lags)),
        range_ms=(spec.finest_ms, spec.duration_ms),
        terms=spec.terms,
    )


def time_constants(places: jax.Array, log_range: jax.Array) -> jax.Array:
    """Ordered time constants from places in the range of their logarithms.

    Parameters
    ----------
    places
        Between 0 and 1, in any order, shape (…, terms).
    log_range
        Logarithms of the shortest and the longest time constant in ms, shape (2,).

    Returns
    -------
    τ in ms, ascending, shape (…, terms).
    """
    return jnp.exp(log_range[0] + (log_range[1] - log_range[0]) * jnp.sort(places, axis=-1))


def log_gap_density(places: jax.Array) -> jax.Array:
    """Log density, up to a constant, of places, shape (terms,), whose gaps are Dirichlet."""
    gaps = jnp.diff(jnp.sort(places), prepend=0.0, append=1.0)
    # Two places may be equal in float64: the density is then zero, its log −inf, never NaN.
    return (GAP_CONCENTRATION - 1.0) * jnp.sum(jnp.log(gaps))


def worst_error(spec: KernelSpec, tau_ms: FloatArray) -> FloatArray:
    """Largest error over lags of ``exp(−s/τ)`` written on the splines, shape (n,).

    Parameters
    ----------
    spec
        The kernel's shape.
    tau_ms
        Time constants, ms, shape (n,).
    """
    lags = spec.unwarp(np.linspace(0.0, 1.0, 10 * _GRID))
    fitted = spec.evaluate(lags) @ exponentials(spec).weights(np.asarray(tau_ms))
    error: FloatArray = np.abs(fitted - np.exp(-lags[:, None] / tau_ms)).max(axis=0)
    return error

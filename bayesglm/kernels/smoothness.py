"""The second-order random-walk prior of a kernel, in the kernel's own units.

The prior penalises bends of the kernel on the warped axis. Its precision is scaled so that the
kernel's prior sd, taken as the geometric mean over the axis, is one whatever the basis and the
number of its weights (Sørbye & Rue 2014, Spatial Statistics 8:39–51); the sampled scale is then an
sd in MΩ/ms or mV. Bends leave one direction free, the straight line on the warped axis that ends
at zero; a weak ridge makes the prior proper there.

A kernel that is large at short lags and small at long ones bends much more early than late, and a
prior with one sd for all lags would iron out the early part. Where a kernel *falls*, the prior is
put on ``k(s)·√(1 + s/s0)`` instead: its sd then falls as ``1/√(1 + s/s0)``. Such a kernel, κ, is
close to one exponential (common practice, no source); the exponential with a fifth of the
duration as its time constant is a second free direction, so that only departures from it are
smoothed.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from bayesglm.kernels.basis import KernelSpec
from bayesglm.recording.recording import FloatArray

#: Prior sd along the free direction, in multiples of the half-normal scale of the kernel's sd.
RIDGE_FACTOR = 2.0

#: A kernel that falls has a prior sd that falls as ``(1 + s/s0)`` to minus this power.
_FALL_POWER = 0.5
#: Its duration is about so many time constants, by default and by good use.
_DURATION_IN_TAU = 5.0

_GRID = 400


@dataclass(frozen=True, eq=False)
class SmoothnessPrior:
    """Prior of a kernel's weights, ``w = σ·bends x + RIDGE_FACTOR·scale·free y``, x and y normal.

    Attributes
    ----------
    bends
        Bends that make a kernel of unit sd, shape (weights, weights − free directions).
    free
        The free directions: the line, with a kernel of unit sd, and where the kernel falls the
        exponential, one at lag 0; shape (weights, 1 or 2).
    """

    bends: FloatArray
    free: FloatArray

    def covariance(self, sd: float, scale: float) -> FloatArray:
        """Prior covariance for kernel sd `sd` where its half-normal prior has scale `scale`."""
        ridge = (RIDGE_FACTOR * scale) ** 2 * self.free @ self.free.T
        total: FloatArray = sd**2 * self.bends @ self.bends.T + ridge
        return total


def smoothness_prior(spec: KernelSpec, falls: bool = False) -> SmoothnessPrior:
    """Build the prior of one kernel of splines, cosines or lags.

    Parameters
    ----------
    spec
        The kernel's shape.
    falls
        Whether the prior sd falls with the lag as ``1/√(1 + s/s0)`` and an exponential is free.

    Returns
    -------
    SmoothnessPrior
        Scaled to a kernel of unit sd (geometric mean over the warped axis), separately for the
        bends and for the line.
    """
    n = spec.weights
    fall = _FALL_POWER if falls else 0.0
    # Second differences of (w_1 … w_n, 0). The places of the weights are uneven, crowded by
    # clamped ends or rounded to rows, hence divided differences: a straight line on the warped
    # axis must be free of penalty.
    centres = spec.centres
    lift = np.exp(fall * centres * np.log1p(spec.duration_ms / spec.warp_ms))
    differences = (_divided_second_differences(centres) * lift)[:, :n]
    lags = spec.unwarp(np.linspace(0, 1, _GRID, endpoint=False))
    basis = spec.evaluate(lags)
    free = ((1.0 - centres) / lift)[:n, None]
    free = free / _mean_sd(basis @ free)
    lifted = basis * (1.0 + lags[:, None] / spec.warp_ms) ** fall
    if falls:
        free = np.column_stack([free, _decay(spec, lags, basis)])

    # The pseudo-inverse is a root of the covariance; the inverse of the precision, its square,
    # would lose all digits with hundreds of weights.
    bends = np.linalg.pinv(differences)
    # It is orthogonal to the line as vectors of weights, which depends on where weights crowd.
    # Kernels that are orthogonal on the axis do not.
    shapes = lifted @ free
    bends = bends - free @ np.linalg.lstsq(shapes, lifted @ bends)[0]
    # As many columns as directions are left.
    vectors, size, _ = np.linalg.svd(bends, full_matrices=False)
    left = n - free.shape[1]
    bends = vectors[:, :left] * size[:left]
    return SmoothnessPrior(bends=bends / _mean_sd(basis @ bends), free=free)


def _decay(spec: KernelSpec, lags: FloatArray, basis: FloatArray) -> FloatArray:
    """Weights of the exponential with a fifth of the duration as its time constant, (weights,)."""

    def curve(at: FloatArray) -> FloatArray:
        decay: FloatArray = np.exp(-at * _DURATION_IN_TAU / spec.duration_ms)
        return decay - np.exp(-_DURATION_IN_TAU)

    if spec.basis == "lags":
        return curve(spec.edges_ms[1:])
    weights: FloatArray = np.linalg.lstsq(basis, curve(lags))[0]
    return weights


def _mean_sd(responses: FloatArray) -> float:
    """Geometric mean over lags of the sd of a kernel, from its response to each unit normal."""
    variance = np.sum(responses**2, axis=1)
    return float(np.exp(np.mean(np.log(variance)) / 2))


def _divided_second_differences(x: FloatArray) -> FloatArray:
    """Rows that give ∫-weighted second derivatives of values at uneven points `x`."""
    rows = np.zeros((len(x) - 2, len(x)))
    for i in range(len(x) - 2):
        left, right = x[i + 1] - x[i], x[i + 2] - x[i + 1]
        span = left + right
        # Times √(span/2), so that the squares sum to the integral of the squared bend.
        rows[i, i : i + 3] = np.array(
            [2 / (left * span), -2 / (left * right), 2 / (right * span)]
        ) * np.sqrt(span / 2)
    return rows

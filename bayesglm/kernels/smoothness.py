"""The second-order random-walk prior of a kernel, in the kernel's own units.

The prior penalises bends of the kernel on the warped axis. Its precision is scaled so that the
kernel's prior sd, taken as the geometric mean over the axis, is one whatever the number of
knots (Sørbye & Rue 2014, Spatial Statistics 8:39–51); the sampled scale is then an sd in
MΩ/ms or mV. Bends leave one direction free, the straight line on the warped axis that ends at
zero; a weak ridge makes the prior proper there.

A kernel that is large at short lags and small at long ones bends much more early than late, and a
prior with one sd for all lags would iron out the early part. Where a kernel *falls*, the prior is
put on ``k(s)·(1 + s/s0)`` instead: its sd then falls as ``1/(1 + s/s0)``.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from bayesglm.kernels.basis import KernelSpec
from bayesglm.recording.recording import FloatArray

#: Prior sd along the free direction, in multiples of the half-normal scale of the kernel's sd.
RIDGE_FACTOR = 2.0

_GRID = 400


@dataclass(frozen=True, eq=False)
class SmoothnessPrior:
    """Prior precision of a kernel's weights, ``bend/σ² + ridge/(RIDGE_FACTOR·scale)²``.

    Attributes
    ----------
    bend
        Precision of the bends for a kernel sd of one, shape (weights, weights), of rank
        weights − 1.
    ridge
        Precision of the free direction for an sd of one, same shape, of rank one.
    """

    bend: FloatArray
    ridge: FloatArray

    def precision(self, sd: float, scale: float) -> FloatArray:
        """Prior precision for kernel sd `sd` where its half-normal prior has scale `scale`."""
        return self.bend / sd**2 + self.ridge / (RIDGE_FACTOR * scale) ** 2


def smoothness_prior(spec: KernelSpec, falls: bool = False) -> SmoothnessPrior:
    """Build the prior of one kernel.

    Parameters
    ----------
    spec
        The kernel's shape.
    falls
        Whether the prior sd falls with the lag as ``1/(1 + s/s0)``.

    Returns
    -------
    SmoothnessPrior
        Scaled to a kernel of unit sd (geometric mean over the warped axis), separately for the
        bends and for the free direction.
    """
    n = spec.weights
    # Second differences of (w_1 … w_n, 0). The weights belong to the knots' means (Greville
    # abscissae), which clamped ends crowd, hence divided differences: a straight line on the
    # warped axis must be free of penalty.
    centres = _greville(spec)
    lift = np.exp(centres * np.log1p(spec.duration_ms / spec.warp_ms)) if falls else np.ones(n + 1)
    differences = (_divided_second_differences(centres) * lift)[:, :n]
    structure = differences.T @ differences
    free = ((1.0 - centres) / lift)[:n]
    grid = np.expm1(
        np.linspace(0, 1, _GRID, endpoint=False) * np.log1p(spec.duration_ms / spec.warp_ms)
    )
    basis = spec.evaluate(spec.warp_ms * grid)

    covariance = np.linalg.pinv(structure, rcond=1e-12, hermitian=True)
    bend = structure * _mean_variance(basis, covariance)
    direction = free / np.linalg.norm(free)
    ridge = np.outer(direction, direction) * _mean_variance(basis, np.outer(direction, direction))
    return SmoothnessPrior(bend=bend, ridge=ridge)


def _mean_variance(basis: FloatArray, covariance: FloatArray) -> float:
    """Geometric mean over lags of the kernel's variance."""
    variance = np.einsum("lj,jk,lk->l", basis, covariance, basis)
    return float(np.exp(np.mean(np.log(variance))))


def _greville(spec: KernelSpec) -> FloatArray:
    knots = spec._spline.t
    degree = spec._spline.k
    return np.array([knots[j + 1 : j + 1 + degree].mean() for j in range(spec.weights + 1)])


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

"""Offsets of sweeps, integrated out of a digest.

Each sweep s has an offset ``e_s ~ N(0, σ_e²)`` on top of the common one. The sweep's rows are
then weighted by ``I − c_s 11ᵀ`` with ``c_s = ρ/(1 + n_s ρ)``, ``ρ = σ_e²/σ_r²``. The sums that this
needs, ``1ᵀX`` and ``1ᵀv``, are the row and entry of the Gram matrix that belong to the constant
column. ρ is estimated by restricted maximum likelihood (Patterson & Thompson 1971, Biometrika
58:545–554).

σ_r² is the residual's *long-run* variance, its spectrum at the lowest frequencies. It is what
decides how well a sweep's mean is known. The plain variance of a correlated residual is
hundreds of times smaller and would take every wander of the noise for an offset: REML is
therefore told that the rows hold ``n σ²/σ_r²`` independent values.
"""

from __future__ import annotations

import numpy as np
from scipy.optimize import minimize_scalar

from bayesglm.recording.recording import FloatArray, IntArray

#: Range of log ρ that is searched; the ends are "no offsets" and "offsets 12 sd of the noise".
_LOG_RATIO_RANGE = (-20.0, 5.0)


def sweep_sums(gram: FloatArray, sweep: IntArray) -> FloatArray:
    """Sum the units' Gram matrices by sweep, shape (S, P + 1, P + 1)."""
    n_sweeps = int(sweep.max()) + 1
    sums = np.zeros((n_sweeps, *gram.shape[1:]))
    np.add.at(sums, sweep, gram)
    return sums


def shrinkage(sums: FloatArray, ratio: float) -> FloatArray:
    """``c_s = ρ/(1 + n_s ρ)`` of each Gram matrix of a whole sweep, shape (...)."""
    shrink: FloatArray = ratio / (1.0 + ratio * sums[..., 0, 0])
    return shrink


def marginalise(gram: FloatArray, ratio: float) -> FloatArray:
    """Take the offset out of Gram matrices of whole sweeps.

    Parameters
    ----------
    gram
        Gram matrices of (x, v) with x[0] = 1, shape (..., P + 1, P + 1).
    ratio
        ρ, variance of the offsets in units of the residual's long-run variance.

    Returns
    -------
    ``Σ zzᵀ − c (Σz)(Σz)ᵀ``, same shape.
    """
    totals = gram[..., 0, :]
    return (
        gram - shrinkage(gram, ratio)[..., None, None] * totals[..., :, None] * totals[..., None, :]
    )


def reml_ratio(sums: FloatArray, scale: FloatArray, tolerance: float) -> float:
    """Restricted-maximum-likelihood estimate of ρ for rows with white residuals.

    Parameters
    ----------
    sums
        Gram matrices by sweep, shape (S, P + 1, P + 1); divided by σ_r²/σ² where the residual
        is correlated.
    scale
        Scale of the weights, shape (P, P); see `calibration.whitening`.
    tolerance
        Directions with less information than this share of the best are left out.

    Returns
    -------
    ρ ≥ 0; 0 where there are fewer than three sweeps, since one offset more than the common one
    says nothing about their spread.
    """
    rows = sums[:, 0, 0]
    if np.count_nonzero(rows) < 3:
        return 0.0

    def minus_twice_log_likelihood(log_ratio: float) -> float:
        ratio = float(np.exp(log_ratio))
        total = marginalise(sums, ratio).sum(axis=0)
        eigenvalues, vectors = np.linalg.eigh(scale.T @ total[:-1, :-1] @ scale)
        kept = eigenvalues > tolerance * eigenvalues[-1]
        z = vectors[:, kept].T @ scale.T @ total[:-1, -1] / np.sqrt(eigenvalues[kept])
        freedom = max(rows.sum() - np.count_nonzero(kept), 1.0)
        variance = max((total[-1, -1] - z @ z) / freedom, np.finfo(float).tiny)
        return float(
            freedom * np.log(variance)
            + np.log1p(rows * ratio).sum()
            + np.log(eigenvalues[kept]).sum()
        )

    best = minimize_scalar(minus_twice_log_likelihood, bounds=_LOG_RATIO_RANGE, method="bounded")
    return float(np.exp(best.x)) if best.x > _LOG_RATIO_RANGE[0] + 1 else 0.0

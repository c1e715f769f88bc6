"""Offsets and drifts of sweeps, integrated out of a digest.

Each sweep s has an offset ``e_s ~ N(0, σ_e²)`` on top of the common one and, where the design has
it, a linear drift ``d_s t`` with ``d_s ~ N(0, σ_d²)``. With Z the columns of a sweep that have such
effects (the ones, and t) and ``D = diag(ρ)``, ``ρ = σ_e²/σ_r², σ_d²/σ_r²``, the sweep's rows are
weighted by

    (I + Z D Zᵀ)⁻¹ = I − Z K Zᵀ,   K = (I + D ZᵀZ)⁻¹ D.

The sums that this needs, ``ZᵀX`` and ``Zᵀv``, are rows of ``Σ zzᵀ`` with z = (x, v) or (x, t, v).
ρ is estimated by restricted maximum likelihood (Patterson & Thompson 1971, Biometrika 58:545–554).

σ_r² is the residual's *long-run* variance, its spectrum at the lowest frequencies. It is what
decides how well a sweep's mean is known. The plain variance of a correlated residual is
hundreds of times smaller and would take every wander of the noise for an offset: REML is
therefore told that the rows hold ``n σ²/σ_r²`` independent values.
"""

from __future__ import annotations

import numpy as np
from scipy.optimize import minimize_scalar

from bayesglm.recording.recording import FloatArray, IntArray

#: Range of log ρ that is searched; the ends are "no offsets" and "offsets 400 sd of the noise".
_LOG_RATIO_RANGE = (-20.0, 12.0)

#: Rounds over the effects, each with the others held: offset and drift hardly depend on each other.
_ROUNDS = 2


def sweep_sums(sums: FloatArray, sweep: IntArray) -> FloatArray:
    """Add the units' sums by sweep, shape (S, …)."""
    n_sweeps = int(sweep.max()) + 1
    total = np.zeros((n_sweeps, *sums.shape[1:]))
    np.add.at(total, sweep, sums)
    return total


def effect_columns(n_effects: int) -> IntArray:
    """Places in z of the columns with an effect of each sweep: the ones, and t before v."""
    return np.array([0, -2][:n_effects])


def shrinkage(sums: FloatArray, ratios: FloatArray) -> FloatArray:
    """K of each Gram matrix of a whole sweep: ``ê = K Zᵀ(v − Xw)``, shape (..., R, R).

    Parameters
    ----------
    sums
        ``Σ zzᵀ`` of whole sweeps, shape (..., Z, Z).
    ratios
        ρ of the R effects, shape (R,).
    """
    spread = np.diag(ratios)
    shrink: FloatArray = np.linalg.solve(
        np.eye(len(ratios)) + spread @ effect_products(sums, len(ratios)), spread
    )
    return shrink


def effect_products(sums: FloatArray, n_effects: int) -> FloatArray:
    """``ZᵀZ`` of whole sweeps, shape (..., R, R)."""
    columns = effect_columns(n_effects)
    return sums[..., columns[:, None], columns]


def marginalise(sums: FloatArray, ratios: FloatArray) -> FloatArray:
    """Take offsets and drifts out of the sums of whole sweeps.

    Parameters
    ----------
    sums
        ``Σ zzᵀ`` with z = (x, v) for one effect and z = (x, t, v) for two, shape (..., Z, Z).
    ratios
        ρ, variances of the effects in units of the residual's long-run variance, shape (R,).

    Returns
    -------
    ``zᵀ(I − Z K Zᵀ)z`` with z = (x, v), shape (..., P + 1, P + 1).
    """
    totals = sums[..., effect_columns(len(ratios)), :]
    left = sums - np.swapaxes(totals, -1, -2) @ shrinkage(sums, ratios) @ totals
    if len(ratios) == 1:
        return left
    kept = np.delete(np.arange(left.shape[-1]), -2)
    return left[..., kept[:, None], kept]


def reml_ratios(
    sums: FloatArray, n_effects: int, scale: FloatArray, tolerance: float
) -> FloatArray:
    """Restricted-maximum-likelihood estimate of ρ for rows with white residuals.

    Parameters
    ----------
    sums
        ``Σ zzᵀ`` by sweep, shape (S, Z, Z); divided by σ_r²/σ² where the residual is correlated.
    n_effects
        R: 1 for offsets, 2 for offsets and drifts.
    scale
        Scale of the weights, shape (P, P); see `least_squares.column_scale`.
    tolerance
        Directions with less information than this share of the best are left out.

    Returns
    -------
    ρ ≥ 0, shape (R,); 0 where there are fewer than three sweeps, since one offset more than the
    common one says nothing about their spread.
    """
    ratios = np.zeros(n_effects)
    if np.count_nonzero(sums[:, 0, 0]) < 3:
        return ratios
    for _ in range(1 if n_effects == 1 else _ROUNDS):
        for effect in range(n_effects):

            def objective(log_ratio: float, effect: int = effect) -> float:
                tried = ratios.copy()
                tried[effect] = np.exp(log_ratio)
                return _minus_twice_log_likelihood(sums, tried, scale, tolerance)

            best = minimize_scalar(objective, bounds=_LOG_RATIO_RANGE, method="bounded").x
            ratios[effect] = np.exp(best) if best > _LOG_RATIO_RANGE[0] + 1 else 0.0
    return ratios


def _minus_twice_log_likelihood(
    sums: FloatArray, ratios: FloatArray, scale: FloatArray, tolerance: float
) -> float:
    total = marginalise(sums, ratios).sum(axis=0)
    eigenvalues, vectors = np.linalg.eigh(scale.T @ total[:-1, :-1] @ scale)
    kept = eigenvalues > tolerance * eigenvalues[-1]
    z = vectors[:, kept].T @ scale.T @ total[:-1, -1] / np.sqrt(eigenvalues[kept])
    freedom = max(sums[:, 0, 0].sum() - np.count_nonzero(kept), 1.0)
    variance = max((total[-1, -1] - z @ z) / freedom, np.finfo(float).tiny)
    n = len(ratios)
    volume = np.linalg.slogdet(np.eye(n) + np.diag(ratios) @ effect_products(sums, n))[1].sum()
    return float(freedom * np.log(variance) + volume + np.log(eigenvalues[kept]).sum())

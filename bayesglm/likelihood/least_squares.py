"""Least squares on a digest, and what its residual looks like.

The estimate is ordinary least squares with the sweeps' offsets and drifts taken out, on the
directions that the recording excites, in whitened coordinates z: ``w = M z`` with ``MᵀHM = I``.
Scores, the plain cluster sandwich and the residual's spectrum are read off the same digest.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from bayesglm.likelihood.clusters import stimulus_clusters, two_way
from bayesglm.likelihood.digest import VoltageDigest
from bayesglm.likelihood.offsets import (
    effect_columns,
    marginalise,
    reml_ratios,
    shrinkage,
    sweep_sums,
)
from bayesglm.recording.recording import FloatArray

#: Directions with less than this share of the largest information count as never excited.
RANK_TOLERANCE = 1e-10

#: A band's residual keeps at least this share of its freedom, however much the fit takes.
_MIN_FREE_SHARE = 0.1

#: Bands, from the lowest, that make up the long-run variance: up to 1 Hz.
_SLOW_BANDS = 3

_EFFECT_ROUNDS = 3


@dataclass(frozen=True, eq=False)
class LeastSquares:
    """Least squares on a digest, in whitened coordinates.

    Attributes
    ----------
    weights
        Estimate ŵ, shape (P,); zero along directions never excited.
    basis
        M, shape (P, K): ``w = M z``, ``MᵀHM = I``.
    back
        ``MᵀH``, shape (K, P): ``z = back @ w``. It is zero along directions never excited, which
        a pseudo-inverse of M is not.
    residual_variance
        Residual variance σ̂² of the rows, mV².
    sweep_ratios
        ρ, variances of the sweeps' offsets, and of their drifts where the design has them, in
        units of the residual's long-run variance, shape (R,).
    sweep_variances
        σ_e² (and σ_d²), the same in mV², shape (R,).
    lost
        Directions of the weights that the recording never excites, shape (P, P − K).
    """

    weights: FloatArray
    basis: FloatArray
    back: FloatArray
    residual_variance: float
    sweep_ratios: FloatArray
    sweep_variances: FloatArray
    lost: FloatArray

    @property
    def drifts(self) -> bool:
        """Whether sweeps were found to drift."""
        return bool(np.any(self.sweep_variances[1:] > 0))

    @property
    def rank(self) -> int:
        """Number of directions that are excited, K."""
        return self.basis.shape[1]

    @property
    def white_covariance(self) -> FloatArray:
        """Covariance of ŵ if residuals were white, shape (P, P)."""
        return self.residual_variance * self.basis @ self.basis.T


def column_scale(digest: VoltageDigest) -> FloatArray:
    """Scale of the weights from the columns alone, 1/norm of each, shape (P, P)."""
    norms = np.sqrt(np.diagonal(digest.gram.sum(axis=0))[:-1])
    return np.diag(1.0 / np.where(norms > 0, norms, 1.0))


def least_squares(
    digest: VoltageDigest,
    scale: FloatArray,
    sweep_ratios: FloatArray | None = None,
    sweep_variances: FloatArray | None = None,
) -> LeastSquares:
    """Least squares on the directions that the recording excites.

    Parameters
    ----------
    digest
        The digest.
    scale
        Scale of the weights, shape (P, P): a square root of the prior covariance, or
        `column_scale`. What counts as "never excited" is judged after scaling.
    sweep_ratios, sweep_variances
        ρ and σ_e² (σ_d²) of the sweeps' offsets (and drifts), shape (R,), see
        `with_sweep_effects`; None for none.

    Returns
    -------
    LeastSquares
    """
    none = np.zeros(digest.design.n_sweep_effects)
    ratios = none if sweep_ratios is None else sweep_ratios
    total = marginalise(sweep_sums(digest.sums, digest.sweep), ratios).sum(axis=0)
    eigenvalues, vectors = np.linalg.eigh(scale.T @ total[:-1, :-1] @ scale)
    kept = eigenvalues > RANK_TOLERANCE * eigenvalues[-1]
    basis = scale @ vectors[:, kept] / np.sqrt(eigenvalues[kept])
    z = basis.T @ total[:-1, -1]
    freedom = max(digest.n_rows - basis.shape[1], 1.0)
    return LeastSquares(
        weights=basis @ z,
        basis=basis,
        back=np.sqrt(eigenvalues[kept])[:, None] * np.linalg.solve(scale.T, vectors[:, kept]).T,
        residual_variance=max(float(total[-1, -1] - z @ z), 0.0) / freedom,
        sweep_ratios=ratios,
        sweep_variances=none if sweep_variances is None else sweep_variances,
        lost=scale @ vectors[:, ~kept],
    )


def with_sweep_effects(digest: VoltageDigest, scale: FloatArray) -> LeastSquares:
    """Least squares with offsets (and drifts) of sweeps, their variances estimated by REML.

    The residual's long-run variance, which REML needs, depends on the fit; a few rounds settle.

    Parameters
    ----------
    digest, scale
        As for `least_squares`.

    Returns
    -------
    LeastSquares
    """
    fit = least_squares(digest, scale)
    sums = sweep_sums(digest.sums, digest.sweep)
    for _ in range(_EFFECT_ROUNDS):
        long_run = _long_run_variance(digest, fit)
        if long_run <= 0:
            return fit
        effective = sums * min(1.0, fit.residual_variance / long_run)
        found = reml_ratios(effective, digest.design.n_sweep_effects, scale, RANK_TOLERANCE)
        ratios = found * fit.residual_variance / long_run
        fit = least_squares(digest, scale, ratios, ratios * long_run)
    return fit


def unit_scores(digest: VoltageDigest, fit: LeastSquares) -> FloatArray:
    """Scores ``s_b = Σ_{rows of b} x (v − xᵀŵ − ê_s)`` in whitened coordinates, shape (B, K)."""
    residual = residual_vectors(digest, fit)
    scores: FloatArray = np.einsum(
        "pk,bpq,bq->bk", fit.basis, digest.sums[:, : len(fit.weights), :], residual
    )
    return scores


def sandwich(digest: VoltageDigest, fit: LeastSquares) -> FloatArray:
    """Cluster-robust covariance ``H⁻¹ J H⁻¹`` of ŵ, uncorrected and not floored, shape (P, P).

    J holds the products of the scores of units; where currents are repeated, of two-way clusters
    by stimulus and by sweep.
    """
    scores, stimulus = unit_scores(digest, fit) @ fit.basis.T, stimulus_clusters(digest)
    if len(np.unique(stimulus)) < digest.n_units:
        return two_way(scores, stimulus, digest.sweep)
    return scores.T @ scores


def correlation_time_ms(digest: VoltageDigest, fit: LeastSquares) -> float:
    """Integrated correlation time of the residual, ms: τ where it decays as ``exp(−t/τ)``."""
    if fit.residual_variance <= 0:
        return 0.0
    return _long_run_variance(digest, fit) / fit.residual_variance * digest.design.row_ms / 2


def rows_apart(correlation_ms: float, row_ms: float) -> float:
    """How many rows are worth one independent row where the residual has a correlation time."""
    return max(1.0, 2 * correlation_ms / row_ms)


def noise_log_sd(digest: VoltageDigest, fit: LeastSquares) -> tuple[float, float]:
    """Log of the residual's sd in mV, and the jackknife error of that log over units."""
    residual = residual_vectors(digest, fit)
    power = np.einsum("bi,bij,bj->b", residual, digest.sums, residual)
    rows = digest.sums[:, 0, 0]
    whole = max(power.sum(), np.finfo(float).tiny)
    others = np.maximum(whole - power, np.finfo(float).tiny) / np.maximum(rows.sum() - rows, 1.0)
    n = len(rows)
    spread = (n - 1) / n * np.sum((np.log(others) - np.log(others).mean()) ** 2)
    return float(0.5 * np.log(whole / rows.sum())), float(0.5 * np.sqrt(spread))


def spectral_covariance(digest: VoltageDigest, fit: LeastSquares) -> tuple[FloatArray, FloatArray]:
    """V0 within sweeps, (K, K), and the residual spectrum, (F,)."""
    by_band, spectrum = _by_band(digest, fit, slice(None))
    return np.einsum("f,fkl->kl", spectrum, by_band), spectrum


def _by_band(
    digest: VoltageDigest, fit: LeastSquares, bands: slice
) -> tuple[FloatArray, FloatArray]:
    """Whitened Gram matrices of the columns, (F, K, K), and residual spectrum, (F,), of bands."""
    band_sums = digest.band_sums[:, bands]
    residual = residual_vectors(digest, fit)
    power = np.einsum("bi,bfij,bj->f", residual, band_sums, residual)
    sums = sweep_sums(digest.sums, digest.sweep)
    shrink = shrinkage(sums, fit.sweep_ratios)
    effects, n_weights = effect_columns(len(fit.sweep_ratios)), len(fit.weights)
    # Columns with their sweep's effects taken out: X − Z K ZᵀX, as combinations of z.
    columns = np.zeros((digest.n_units, digest.sums.shape[-1], fit.rank))
    columns[:, :n_weights] = fit.basis
    pulled = shrink @ sums[:, effects, :n_weights] @ fit.basis
    columns[:, effects] -= pulled[digest.sweep]
    by_band = np.einsum("bpk,bfpq,bql->fkl", columns, band_sums, columns, optimize=True)
    freedom = _band_rows(digest)[bands]
    # The fit takes freedom from the residual, most of it at low frequencies.
    taken = np.trace(by_band, axis1=1, axis2=2)
    left = np.maximum(freedom - taken, _MIN_FREE_SHARE * freedom)
    return by_band, np.divide(power, left, out=np.zeros_like(power), where=left > 0)


def _long_run_variance(digest: VoltageDigest, fit: LeastSquares) -> float:
    """Residual spectrum at the lowest frequencies, as variance of white noise of that level."""
    slow = slice(_SLOW_BANDS)
    spectrum, weight = _by_band(digest, fit, slow)[1], _band_rows(digest)[slow]
    return float(spectrum @ weight / weight.sum()) if weight.sum() > 0 else 0.0


def _band_rows(digest: VoltageDigest) -> FloatArray:
    """Rows' worth of white noise in each band, shape (F,)."""
    rows: FloatArray = (digest.sums[:, 0, 0, None] * digest.band_share).sum(axis=0)
    return rows


def residual_vectors(digest: VoltageDigest, fit: LeastSquares) -> FloatArray:
    """Vectors a with ``zᵀa`` the residual of a row z, shape (B, Z).

    The effects of the row's sweep are removed.
    """
    sums = sweep_sums(digest.sums, digest.sweep)
    plain = np.zeros(sums.shape[-1])
    plain[: len(fit.weights)], plain[-1] = -fit.weights, 1.0
    columns = effect_columns(len(fit.sweep_ratios))
    shrink = shrinkage(sums, fit.sweep_ratios)
    effects = np.einsum("sij,sj->si", shrink, sums[:, columns, :] @ plain)
    vectors = np.tile(plain, (digest.n_units, 1))
    vectors[:, columns] -= effects[digest.sweep]
    return vectors

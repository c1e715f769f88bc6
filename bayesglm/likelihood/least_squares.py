"""Least squares on a digest, and what its residual looks like.

The estimate is ordinary least squares with sweep offsets taken out, on the directions that the
recording excites, in whitened coordinates z: ``w = M z`` with ``MᵀHM = I``. Scores, the plain
cluster sandwich and the residual's spectrum are read off the same digest.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from bayesglm.likelihood.digest import VoltageDigest
from bayesglm.likelihood.offsets import marginalise, reml_ratio, shrinkage, sweep_sums
from bayesglm.recording.recording import FloatArray

#: Directions with less than this share of the largest information count as never excited.
RANK_TOLERANCE = 1e-10

#: A band's residual keeps at least this share of its freedom, however much the fit takes.
_MIN_FREE_SHARE = 0.1

#: Bands, from the lowest, that make up the long-run variance: up to 1 Hz.
_SLOW_BANDS = 3

_OFFSET_ROUNDS = 3


@dataclass(frozen=True, eq=False)
class LeastSquares:
    """Least squares on a digest, in whitened coordinates.

    Attributes
    ----------
    weights
        Estimate ŵ, shape (P,); zero along directions never excited.
    basis
        M, shape (P, K): ``w = M z``, ``MᵀHM = I``.
    residual_variance
        Residual variance σ̂² of the rows, mV².
    offset_ratio
        ρ, variance of the sweep offsets in units of the residual's long-run variance.
    offset_variance
        σ_e², variance of the sweep offsets, mV².
    lost
        Directions of the weights that the recording never excites, shape (P, P − K).
    """

    weights: FloatArray
    basis: FloatArray
    residual_variance: float
    offset_ratio: float
    offset_variance: float
    lost: FloatArray

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
    offset_ratio: float = 0.0,
    offset_variance: float = 0.0,
) -> LeastSquares:
    """Least squares on the directions that the recording excites.

    Parameters
    ----------
    digest
        The digest.
    scale
        Scale of the weights, shape (P, P): a square root of the prior covariance, or
        `column_scale`. What counts as "never excited" is judged after scaling.
    offset_ratio, offset_variance
        ρ and σ_e² of the sweep offsets, see `with_sweep_offsets`; zero for none.

    Returns
    -------
    LeastSquares
    """
    sums = sweep_sums(digest.gram, digest.sweep)
    total = marginalise(sums, offset_ratio).sum(axis=0)
    eigenvalues, vectors = np.linalg.eigh(scale.T @ total[:-1, :-1] @ scale)
    kept = eigenvalues > RANK_TOLERANCE * eigenvalues[-1]
    basis = scale @ vectors[:, kept] / np.sqrt(eigenvalues[kept])
    z = basis.T @ total[:-1, -1]
    freedom = max(digest.n_rows - basis.shape[1], 1.0)
    return LeastSquares(
        weights=basis @ z,
        basis=basis,
        residual_variance=max(float(total[-1, -1] - z @ z), 0.0) / freedom,
        offset_ratio=offset_ratio,
        offset_variance=offset_variance,
        lost=scale @ vectors[:, ~kept],
    )


def with_sweep_offsets(digest: VoltageDigest, scale: FloatArray) -> LeastSquares:
    """Least squares with sweep offsets, their variance estimated by REML.

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
    sums = sweep_sums(digest.gram, digest.sweep)
    for _ in range(_OFFSET_ROUNDS):
        long_run = _long_run_variance(digest, fit)
        if long_run <= 0:
            return fit
        effective = sums * min(1.0, fit.residual_variance / long_run)
        ratio = reml_ratio(effective, scale, RANK_TOLERANCE) * fit.residual_variance / long_run
        fit = least_squares(digest, scale, ratio, ratio * long_run)
    return fit


def unit_scores(digest: VoltageDigest, fit: LeastSquares) -> FloatArray:
    """Scores ``s_b = Σ_{rows of b} x (v − xᵀŵ − ê_s)`` in whitened coordinates, shape (B, K)."""
    residual = residual_vectors(digest, fit)
    scores: FloatArray = np.einsum("pk,bpq,bq->bk", fit.basis, digest.gram[:, :-1, :], residual)
    return scores


def sandwich(digest: VoltageDigest, fit: LeastSquares) -> FloatArray:
    """Cluster-robust covariance ``H⁻¹ (Σ_b s_b s_bᵀ) H⁻¹`` of ŵ, uncorrected, shape (P, P)."""
    scores = unit_scores(digest, fit) @ fit.basis.T
    return scores.T @ scores


def correlation_time_ms(digest: VoltageDigest, fit: LeastSquares) -> float:
    """Integrated correlation time of the residual, ms: τ where it decays as ``exp(−t/τ)``."""
    if fit.residual_variance <= 0:
        return 0.0
    return _long_run_variance(digest, fit) / fit.residual_variance * digest.design.row_ms / 2


def noise_log_sd(digest: VoltageDigest, fit: LeastSquares) -> tuple[float, float]:
    """Log of the residual's sd in mV, and the jackknife error of that log over units."""
    residual = residual_vectors(digest, fit)
    power = np.einsum("bi,bij,bj->b", residual, digest.gram, residual)
    rows = digest.gram[:, 0, 0]
    whole = max(power.sum(), np.finfo(float).tiny)
    others = np.maximum(whole - power, np.finfo(float).tiny) / np.maximum(rows.sum() - rows, 1.0)
    n = len(rows)
    spread = (n - 1) / n * np.sum((np.log(others) - np.log(others).mean()) ** 2)
    return float(0.5 * np.log(whole / rows.sum())), float(0.5 * np.sqrt(spread))


def spectral_covariance(digest: VoltageDigest, fit: LeastSquares) -> tuple[FloatArray, FloatArray]:
    """V0 within sweeps, (K, K), and the residual spectrum, (F,)."""
    residual = residual_vectors(digest, fit)
    power = np.einsum("bi,bfij,bj->f", residual, digest.bands, residual)
    sums = sweep_sums(digest.gram, digest.sweep)
    shrink = shrinkage(sums, fit.offset_ratio)
    # Columns with their sweep's offset taken out: x − c 1 (1ᵀX).
    columns = np.tile(fit.basis, (digest.n_units, 1, 1))
    columns[:, 0, :] -= (shrink[:, None] * (sums[:, 0, :-1] @ fit.basis))[digest.sweep]
    by_band = np.einsum(
        "bpk,bfpq,bql->fkl", columns, digest.bands[:, :, :-1, :-1], columns, optimize=True
    )
    freedom = _band_rows(digest)
    # The fit takes freedom from the residual, most of it at low frequencies.
    taken = np.trace(by_band, axis1=1, axis2=2)
    left = np.maximum(freedom - taken, _MIN_FREE_SHARE * freedom)
    spectrum = np.divide(power, left, out=np.zeros_like(power), where=left > 0)
    return np.einsum("f,fkl->kl", spectrum, by_band), spectrum


def _long_run_variance(digest: VoltageDigest, fit: LeastSquares) -> float:
    """Residual spectrum at the lowest frequencies, as variance of white noise of that level."""
    spectrum, weight = spectral_covariance(digest, fit)[1], _band_rows(digest)
    slow = weight[:_SLOW_BANDS].sum()
    return float(spectrum[:_SLOW_BANDS] @ weight[:_SLOW_BANDS] / slow) if slow > 0 else 0.0


def _band_rows(digest: VoltageDigest) -> FloatArray:
    """Rows' worth of white noise in each band, shape (F,)."""
    rows: FloatArray = (digest.gram[:, 0, 0, None] * digest.band_share).sum(axis=0)
    return rows


def residual_vectors(digest: VoltageDigest, fit: LeastSquares) -> FloatArray:
    """Vectors a with ``zᵀa`` the residual of a row z = (x, v), sweep offset removed, (B, P + 1)."""
    sums = sweep_sums(digest.gram, digest.sweep)
    plain = np.append(-fit.weights, 1.0)
    offsets = shrinkage(sums, fit.offset_ratio) * (sums[:, 0, :] @ plain)
    vectors = np.tile(plain, (digest.n_units, 1))
    vectors[:, 0] -= offsets[digest.sweep]
    return vectors

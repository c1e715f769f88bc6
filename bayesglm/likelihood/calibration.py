"""Least squares on a digest, and what its error really is.

The estimate is ordinary least squares (with offsets and drifts of sweeps taken out). Its
covariance is not ``σ²H⁻¹``: the residual of a cell is correlated and holds the cell's
nonlinearity. It is estimated from how much the estimate changes when independent units are left
out, shrunk towards what the residual's own spectrum predicts:

    V = (B·V_jack + K·D V0 D) / (B + K)

with B units and K excited directions. V_jack is the delete-one-unit jackknife;
``V0 = H⁻¹ Σ_f S_f C_f H⁻¹`` is the least-squares sandwich under a residual of spectrum S (C_f the
Gram matrix of band f);
``D² = max(1, tr(V0⁻¹V_jack)/K_kernel)`` scales it kernel by kernel. Sources: Künsch (1989, Ann
Statist 17:1217–1241) for blocks, Cameron, Gelbach & Miller (2011, J Bus Econ Stat 29:238–249)
for clusters, Müller (2013, Econometrica 81:1805–1849) for posteriors built on a sandwich, Bell &
McCaffrey (2002, Survey Methodology 28:169–181) for the degrees of freedom.

Where currents are repeated, V_jack is that of two-way clusters (by stimulus and by sweep, see
`clusters`) and B the number of different stimuli. Blocks shorter than 20 correlation times of the
residual add the products of neighbours. What comes out negative is set to zero and counted.

All of it happens in whitened coordinates z, ``w = M z`` with ``MᵀHM = I``, on the directions that
the recording excites.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from scipy.stats import norm
from scipy.stats import t as student_t

from bayesglm.kernels.basis import KernelSpec
from bayesglm.kernels.design import VoltageDesign
from bayesglm.likelihood.clusters import stimulus_clusters
from bayesglm.likelihood.digest import VoltageDigest
from bayesglm.likelihood.jackknife import MAX_LEVERAGE, UnitCount, jackknife, satterthwaite
from bayesglm.likelihood.least_squares import RANK_TOLERANCE, LeastSquares, spectral_covariance
from bayesglm.likelihood.offsets import effect_columns, effect_products, shrinkage, sweep_sums
from bayesglm.recording.recording import FloatArray, IntArray

#: The spread between units is held against the spectrum on kernels of so many splines, …
_RATIO_WEIGHTS = 14
#: … on a grid of so many lags, even on the warped axis.
_GRID = 400


@dataclass(frozen=True, eq=False)
class Calibration:
    """The estimate with its calibrated covariance.

    Attributes
    ----------
    fit
        The least-squares estimate.
    covariance
        V in whitened coordinates, shape (K, K).
    jackknife, spectral
        V_jack and V0 in whitened coordinates, shape (K, K).
    ratio
        Of each kernel: sd between units over sd from the residual's spectrum.
    inflation
        D of each kernel: the ratio, but at least one.
    spectrum
        Residual spectrum by band, as variance of white noise of that level, mV², shape (F,).
    freedom
        ν, the smallest Satterthwaite degrees of freedom of the reported scalars.
    leverage
        Largest share of any direction that each unit, with the repeats of its current, carries,
        shape (B,).
    changes
        ẑ − ẑ without each unit, shape (B, K).
    units
        How many units are independent, and how they were counted.
    """

    fit: LeastSquares
    covariance: FloatArray
    jackknife: FloatArray
    spectral: FloatArray
    ratio: dict[str, float]
    inflation: dict[str, float]
    spectrum: FloatArray
    freedom: float
    leverage: FloatArray
    changes: FloatArray
    units: UnitCount

    @property
    def precision(self) -> FloatArray:
        """Precision of the weights, shape (P, P); zero along directions never excited."""
        back = self.fit.back
        inner: FloatArray = back.T @ np.linalg.inv(self.covariance) @ back
        return (inner + inner.T) / 2

    @property
    def white_precision(self) -> FloatArray:
        """Precision of the weights if residuals were white, shape (P, P)."""
        back = self.fit.back
        inner: FloatArray = back.T @ back / self.fit.residual_variance
        return (inner + inner.T) / 2


def calibrate(
    digest: VoltageDigest,
    fit: LeastSquares,
    contrasts: FloatArray,
    inflation: dict[str, float] | None = None,
) -> Calibration:
    """Calibrate the covariance of a least-squares estimate.

    Parameters
    ----------
    digest
        The digest `fit` was made from; at least two units.
    fit
        The estimate.
    contrasts
        Reported scalars as combinations of the weights, shape (C, P); they set ν.
    inflation
        D of each kernel, taken from a larger digest. Given it, V is ``D V0 D`` alone: a few
        units tell too little of their own spread.

    Returns
    -------
    Calibration
    """
    between = _between_sweeps(digest, fit)
    spread = jackknife(digest, fit, between[1])
    rank = fit.rank
    within, spectrum = spectral_covariance(digest, fit)
    spectral: FloatArray = within + between[0]
    ratio = inflation or _kernel_ratio(digest.design, fit, spread.covariance, spectral)
    if inflation is None:
        inflation = {name: max(1.0, value) for name, value in ratio.items()}
        target = _inflated(digest.design, fit, spectral, inflation)
        n = spread.units.clusters
        covariance: FloatArray = (n * spread.covariance + rank * target) / (n + rank)
        covariance = _where_one_decides(spread.shares, covariance, target)
    else:
        covariance = _inflated(digest.design, fit, spectral, inflation)
    leverage = np.linalg.eigvalsh(spread.shares)[:, -1]
    return Calibration(
        fit=fit,
        covariance=(covariance + covariance.T) / 2,
        jackknife=spread.covariance,
        spectral=spectral,
        ratio=ratio,
        inflation=inflation,
        spectrum=spectrum,
        freedom=satterthwaite(spread.shares, contrasts @ fit.basis),
        leverage=np.asarray(leverage[spread.labels], dtype=np.float64),
        changes=spread.changes,
        units=spread.units,
    )


def _where_one_decides(
    shares: FloatArray, covariance: FloatArray, target: FloatArray
) -> FloatArray:
    """Raise the covariance to ``D V0 D`` in directions that one cluster carries to more than half.

    Leaving that cluster out tells nothing there, so that the jackknife would be too small.
    """
    values, vectors = np.linalg.eigh(shares)
    decided = np.swapaxes(vectors, 1, 2)[values > MAX_LEVERAGE]
    if not len(decided):
        return covariance
    _, size, rows = np.linalg.svd(decided, full_matrices=False)
    span = rows[size > RANK_TOLERANCE * size[0]]
    missing, directions = np.linalg.eigh(span @ (target - covariance) @ span.T)
    root = span.T @ (directions * np.sqrt(np.maximum(missing, 0.0)))
    raised: FloatArray = covariance + root @ root.T
    return raised


def _between_sweeps(digest: VoltageDigest, fit: LeastSquares) -> tuple[FloatArray, FloatArray]:
    """What the spread of sweeps' effects adds to the covariance: of all sweeps, of cut ones.

    A jackknife over whole sweeps sees their effects vary; one over blocks of a sweep does not.
    The variance of S effects is known with S − 1 degrees of freedom: it is raised so that a 90 %
    interval of the normal is as wide as that of Student's t.
    """
    sums = sweep_sums(digest.sums, digest.sweep)
    n_effects, n_weights = len(fit.sweep_ratios), len(fit.weights)
    # A sweep's effects enter the scores as XᵀZ(I − K ZᵀZ).
    inner = effect_products(sums, n_effects)
    left = np.eye(n_effects) - shrinkage(sums, fit.sweep_ratios) @ inner
    across = sums[:, effect_columns(n_effects), :n_weights]
    pull = np.einsum("pk,srp,srq->sqk", fit.basis, across, left, optimize=True)
    freedom = float(max(int(np.count_nonzero(sums[:, 0, 0])) - 1, 1))
    widened = student_t.ppf(0.95, freedom) / norm.ppf(0.95)
    pull = pull * (widened * np.sqrt(fit.sweep_variances))[:, None]
    cut = np.bincount(digest.sweep, minlength=len(sums)) > 1
    return _products(pull), _products(pull[cut])


def _products(vectors: FloatArray) -> FloatArray:
    flat = vectors.reshape(-1, vectors.shape[-1])
    products: FloatArray = flat.T @ flat
    return products


def inflation_within(
    digest: VoltageDigest, calibration: Calibration, groups: Sequence[IntArray]
) -> dict[str, float]:
    """D of each kernel from the spread of clusters inside groups, differences between them removed.

    Parameters
    ----------
    digest, calibration
        The whole digest and its calibration.
    groups
        Indices of the units of each group; groups of one unit say nothing.

    Returns
    -------
    dict
        By kernel, at least one.
    """
    rank = calibration.fit.rank
    within, found, stimulus = np.zeros((rank, rank)), 0, stimulus_clusters(digest)
    for group in groups:
        clusters = np.unique(stimulus[group], return_inverse=True)[1]
        n = int(clusters.max(initial=-1)) + 1
        if n > 1:
            changes = np.zeros((n, rank))
            np.add.at(changes, clusters, calibration.changes[group])
            centred = changes - changes.mean(axis=0)
            within += n / (n - 1) * centred.T @ centred
            found += n
    if not found:
        return dict.fromkeys(digest.design.kernels, 1.0)
    # As if the groups held all the clusters there are.
    within *= calibration.units.clusters / found
    ratio = _kernel_ratio(digest.design, calibration.fit, within, calibration.spectral)
    return {name: max(1.0, value) for name, value in ratio.items()}


def _kernel_ratio(
    design: VoltageDesign, fit: LeastSquares, jackknife: FloatArray, spectral: FloatArray
) -> dict[str, float]:
    ratios = {}
    for name, spec in design.kernels.items():
        rows = _on_splines(spec) @ fit.basis[design.columns[name]]
        expected, found = rows @ spectral @ rows.T, rows @ jackknife @ rows.T
        # Scaled to unit diagonal, so that what counts as excited does not depend on units.
        sd = np.sqrt(np.diagonal(expected))
        unit = 1.0 / np.where(sd > 0, sd, 1.0)
        values, vectors = np.linalg.eigh(unit[:, None] * expected * unit)
        kept = values > RANK_TOLERANCE * values[-1]
        white = unit[:, None] * vectors[:, kept] / np.sqrt(values[kept])
        ratio = np.trace(white.T @ found @ white) / np.count_nonzero(kept)
        ratios[name] = float(np.sqrt(ratio))
    return ratios


@lru_cache(maxsize=32)
def _on_splines(spec: KernelSpec) -> FloatArray:
    """Weights of a kernel as those of the nearest kernel of a few splines, shape (n, weights).

    The ratio is a mean over directions. What units differ by is smooth; over hundreds of weights it
    would be thinned out.
    """
    if spec.weights <= _RATIO_WEIGHTS:
        return np.eye(spec.weights)
    few = KernelSpec(spec.duration_ms, _RATIO_WEIGHTS, spec.warp_ms)
    lags = spec.unwarp(np.linspace(0.0, 1.0, _GRID + 1)[1:-1])
    projection: FloatArray = np.linalg.pinv(few.evaluate(lags)) @ spec.evaluate(lags)
    return projection


def _inflated(
    design: VoltageDesign, fit: LeastSquares, spectral: FloatArray, inflation: dict[str, float]
) -> FloatArray:
    """D V0 D in whitened coordinates."""
    factors = np.ones(design.n_weights)
    for name, factor in inflation.items():
        if name in design.columns:
            factors[design.columns[name]] = factor
    map_ = fit.back @ (factors[:, None] * fit.basis)
    inflated: FloatArray = map_ @ spectral @ map_.T
    return inflated

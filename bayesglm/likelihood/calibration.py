"""Least squares on a digest, and what its error really is.

The estimate is ordinary least squares (with sweep offsets taken out). Its covariance is not
``σ²H⁻¹``: the residual of a cell is correlated and holds the cell's nonlinearity. It is
estimated from how much the estimate changes when independent units are left out, shrunk
towards what the residual's own spectrum predicts:

    V = (B·V_jack + K·D V0 D) / (B + K)

with B units and K weights. V_jack is the delete-one-unit jackknife; ``V0 = H⁻¹ Σ_f S_f C_f H⁻¹``
is the least-squares sandwich under a residual of spectrum S (C_f the Gram matrix of band f);
``D² = max(1, tr(V0⁻¹V_jack)/K_kernel)`` scales it kernel by kernel. Sources: Künsch (1989, Ann
Statist 17:1217–1241) for blocks, Cameron, Gelbach & Miller (2011, J Bus Econ Stat 29:238–249)
for clusters, Müller (2013, Econometrica 81:1805–1849) for posteriors built on a sandwich, Bell &
McCaffrey (2002, Survey Methodology 28:169–181) for the degrees of freedom.

All of it happens in whitened coordinates z, ``w = M z`` with ``MᵀHM = I``, on the directions that
the recording excites.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy.stats import norm
from scipy.stats import t as student_t

from bayesglm.kernels.design import VoltageDesign
from bayesglm.likelihood.digest import VoltageDigest
from bayesglm.likelihood.least_squares import (
    RANK_TOLERANCE,
    LeastSquares,
    spectral_covariance,
)
from bayesglm.likelihood.offsets import marginalise, sweep_sums
from bayesglm.recording.recording import FloatArray, IntArray

#: Of a direction that one unit carries to more than this share, leaving it out tells nothing.
_MAX_LEVERAGE = 0.5


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
        Largest share of any direction that each unit carries, shape (B,).
    changes
        ẑ − ẑ without each unit, shape (B, K).
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

    @property
    def precision(self) -> FloatArray:
        """Precision of the weights, shape (P, P); zero along directions never excited."""
        back = np.linalg.pinv(self.fit.basis)
        inner: FloatArray = back.T @ np.linalg.inv(self.covariance) @ back
        return (inner + inner.T) / 2

    @property
    def white_precision(self) -> FloatArray:
        """Precision of the weights if residuals were white, shape (P, P)."""
        back = np.linalg.pinv(self.fit.basis)
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
    shares, changes = _leave_one_out(digest, fit)
    between = _between_sweeps(digest, fit)
    n_units, rank = digest.n_units, fit.rank
    jackknife = (n_units - 1) / n_units * changes.T @ changes + between[1]
    within, spectrum = spectral_covariance(digest, fit)
    spectral: FloatArray = within + between[0]
    ratio = inflation or _kernel_ratio(digest.design, fit, jackknife, spectral)
    if inflation is None:
        inflation = {name: max(1.0, value) for name, value in ratio.items()}
        target = _inflated(digest.design, fit, spectral, inflation)
        covariance: FloatArray = (n_units * jackknife + rank * target) / (n_units + rank)
    else:
        covariance = _inflated(digest.design, fit, spectral, inflation)
    return Calibration(
        fit=fit,
        covariance=(covariance + covariance.T) / 2,
        jackknife=jackknife,
        spectral=spectral,
        ratio=ratio,
        inflation=inflation,
        spectrum=spectrum,
        freedom=_satterthwaite(shares, contrasts @ fit.basis),
        leverage=np.asarray(np.linalg.eigvalsh(shares)[:, -1], dtype=np.float64),
        changes=changes,
    )


def _leave_one_out(digest: VoltageDigest, fit: LeastSquares) -> tuple[FloatArray, FloatArray]:
    """Share of the information each unit carries, (B, K, K), and ẑ − ẑ without it, (B, K).

    Leaving a block out of a sweep leaves the rest of that sweep, with an offset of its own.
    """
    sums = sweep_sums(digest.gram, digest.sweep)[digest.sweep]
    lost = marginalise(sums, fit.offset_ratio) - marginalise(sums - digest.gram, fit.offset_ratio)
    shares = np.einsum("pk,bpq,ql->bkl", fit.basis, lost[:, :-1, :-1], fit.basis)
    plain = np.append(-fit.weights, 1.0)
    scores = np.einsum("pk,bpq,q->bk", fit.basis, lost[:, :-1, :], plain)
    return shares, np.einsum("bkl,bl->bk", _left_over_inverse(shares), scores)


def _left_over_inverse(shares: FloatArray) -> FloatArray:
    """``(I − L_b)⁻¹`` of each unit, leverage clipped, shape (B, K, K).

    Where one unit carries nearly all, the rest says nothing and the change without it would be
    noise over nothing; the spectral part then speaks for that direction.
    """
    values, vectors = np.linalg.eigh(shares)
    factor = 1.0 / (1.0 - np.clip(values, 0.0, _MAX_LEVERAGE))
    inverse: FloatArray = np.einsum("bkj,bj,blj->bkl", vectors, factor, vectors)
    return inverse


def _between_sweeps(digest: VoltageDigest, fit: LeastSquares) -> tuple[FloatArray, FloatArray]:
    """What the spread of sweep offsets adds to the covariance: of all sweeps, of cut ones.

    A jackknife over whole sweeps sees their offsets vary; one over blocks of a sweep does not.
    The variance of S offsets is known with S − 1 degrees of freedom: it is raised so that a 90 %
    interval of the normal is as wide as that of Student's t.
    """
    sums = sweep_sums(digest.gram, digest.sweep)
    weight = 1.0 / (1.0 + fit.offset_ratio * sums[:, 0, 0])
    pull = weight[:, None] * sums[:, 0, :-1] @ fit.basis
    freedom = float(max(int(np.count_nonzero(sums[:, 0, 0])) - 1, 1))
    variance = fit.offset_variance * (student_t.ppf(0.95, freedom) / norm.ppf(0.95)) ** 2
    cut = np.bincount(digest.sweep, minlength=len(sums)) > 1
    of_all: FloatArray = variance * pull.T @ pull
    return of_all, variance * pull[cut].T @ pull[cut]


def inflation_within(
    digest: VoltageDigest, calibration: Calibration, groups: Sequence[IntArray]
) -> dict[str, float]:
    """D of each kernel from the spread of units inside groups, differences between them removed.

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
    within, units = np.zeros((rank, rank)), 0
    for group in groups:
        if len(group) > 1:
            centred = calibration.changes[group] - calibration.changes[group].mean(axis=0)
            within += len(group) / (len(group) - 1) * centred.T @ centred
            units += len(group)
    if not units:
        return dict.fromkeys(digest.design.kernels, 1.0)
    # As if the groups were all the units there are.
    within *= digest.n_units / units
    ratio = _kernel_ratio(digest.design, calibration.fit, within, calibration.spectral)
    return {name: max(1.0, value) for name, value in ratio.items()}


def _kernel_ratio(
    design: VoltageDesign, fit: LeastSquares, jackknife: FloatArray, spectral: FloatArray
) -> dict[str, float]:
    ratios = {}
    for name in design.kernels:
        rows = fit.basis[design.columns[name]]
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


def _inflated(
    design: VoltageDesign, fit: LeastSquares, spectral: FloatArray, inflation: dict[str, float]
) -> FloatArray:
    """D V0 D in whitened coordinates."""
    factors = np.ones(design.n_weights)
    for name, factor in inflation.items():
        if name in design.columns:
            factors[design.columns[name]] = factor
    map_ = np.linalg.pinv(fit.basis) @ (factors[:, None] * fit.basis)
    inflated: FloatArray = map_ @ spectral @ map_.T
    return inflated


def _satterthwaite(shares: FloatArray, contrasts: FloatArray) -> float:
    """Smallest degrees of freedom of the jackknife variance of the given contrasts.

    The jackknife variance of ``cᵀz`` is a sum of squares of the units' changes. Under white
    residuals these have covariance ``G_b(δ_bb' L_b − L_b L_b')G_b'`` with L the units' shares and
    ``G = (I − L)⁻¹``; matching two moments gives ν = (tr)²/tr(squared).
    """
    inverse = _left_over_inverse(shares)
    smallest = float(len(shares) - 1)
    for contrast in contrasts:
        moved = inverse @ contrast
        pulled = np.einsum("bkl,bl->bk", shares, moved)
        cross = -pulled @ pulled.T
        cross[np.diag_indices_from(cross)] += np.einsum("bk,bk->b", moved, pulled)
        total = np.trace(cross)
        if total > 0:
            smallest = min(smallest, float(total**2 / np.sum(cross**2)))
    return max(smallest, 1.0)

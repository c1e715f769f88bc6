"""The spread of the estimate between independent units: delete-one-cluster jackknife.

A cluster is a unit, or all units with one stimulus where currents are repeated; see `clusters`.
The degrees of freedom follow Bell & McCaffrey (2002, Survey Methodology 28:169–181).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from bayesglm.likelihood.clusters import (
    both,
    effective_number,
    neighbour_products,
    stimulus_clusters,
)
from bayesglm.likelihood.digest import VoltageDigest
from bayesglm.likelihood.least_squares import (
    RANK_TOLERANCE,
    LeastSquares,
    correlation_time_ms,
)
from bayesglm.likelihood.offsets import marginalise, sweep_sums
from bayesglm.recording.recording import FloatArray, IntArray

#: Of a direction that one cluster carries to more than this share, leaving it out tells nothing.
MAX_LEVERAGE = 0.5

#: With fewer sweeps their spread says too little for clusters by sweep; of one it is zero.
_FEWEST_SWEEPS = 6

#: Blocks at least this many correlation times long count as independent of their neighbours.
INDEPENDENT_TIMES = 20.0


@dataclass(frozen=True)
class UnitCount:
    """How many units are independent, and how they were counted.

    Attributes
    ----------
    clusters
        Number of independent clusters: of units, or of currents where currents are repeated.
    effective
        How many equal ones would carry the information as evenly.
    repeated
        Whether currents are repeated, and clusters two-way.
    neighbours
        Whether blocks are so short that products of neighbours were added.
    floored
        Number of negative eigenvalues of the jackknife covariance that were set to zero.
    """

    clusters: int
    effective: float
    repeated: bool = False
    neighbours: bool = False
    floored: int = 0


@dataclass(frozen=True, eq=False)
class Jackknife:
    """Spread of the estimate between clusters, in whitened coordinates.

    Attributes
    ----------
    covariance
        Shape (K, K), without negative eigenvalues.
    shares
        Share of the information that each cluster carries, shape (C, K, K).
    changes
        ẑ − ẑ without each unit, shape (B, K).
    labels
        Cluster of each unit, shape (B,).
    units
        Number of clusters and how they were counted.
    """

    covariance: FloatArray
    shares: FloatArray
    changes: FloatArray
    labels: IntArray
    units: UnitCount


def jackknife(digest: VoltageDigest, fit: LeastSquares, of_sweeps: FloatArray) -> Jackknife:
    """Delete-one-cluster jackknife of a least-squares estimate.

    Parameters
    ----------
    digest, fit
        The estimate and what it was made from; at least two units.
    of_sweeps
        What the effects of sweeps add where blocks of a sweep cannot see it, shape (K, K).

    Returns
    -------
    Jackknife
    """
    units, stimulus = np.arange(digest.n_units), stimulus_clusters(digest)
    shares, changes = _leave_out(digest, fit, units)
    covariance = _spread(changes)
    repeated = len(np.unique(stimulus)) < digest.n_units
    labels = stimulus if repeated else units
    if repeated:
        shares, by_stimulus = _leave_out(digest, fit, stimulus)
        covariance = _spread(by_stimulus)
    sweep = np.unique(digest.sweep, return_inverse=True)[1].astype(np.int64)
    two_way = repeated and int(sweep.max()) + 1 >= _FEWEST_SWEEPS
    neighbours = not two_way and _short_blocks(digest, fit)
    if two_way:
        by_sweep = _leave_out(digest, fit, sweep)[1]
        by_both = _leave_out(digest, fit, both(stimulus, sweep))[1]
        covariance = covariance + _spread(by_sweep) - _spread(by_both)
    else:
        covariance = covariance + of_sweeps
    if neighbours:
        share = (digest.n_units - 1) / digest.n_units
        covariance = covariance + share * neighbour_products(changes, digest.sweep)
    values, vectors = np.linalg.eigh(covariance)
    floored = int(np.count_nonzero(values < -RANK_TOLERANCE * max(values[-1], 0.0)))
    if floored:
        covariance = (vectors * np.maximum(values, 0.0)) @ vectors.T
    count = UnitCount(len(shares), effective_number(shares), repeated, neighbours, floored)
    return Jackknife(covariance, shares, changes, labels, count)


def _spread(changes: FloatArray) -> FloatArray:
    n = len(changes)
    spread: FloatArray = (n - 1) / n * changes.T @ changes
    return spread


def _short_blocks(digest: VoltageDigest, fit: LeastSquares) -> bool:
    """Whether units are blocks of sweeps too short to be independent of their neighbours."""
    cut = np.bincount(digest.sweep)[digest.sweep] > 1
    needed_s = INDEPENDENT_TIMES * correlation_time_ms(digest, fit) / 1e3
    return bool(cut.any() and np.median(digest.seconds[cut]) < needed_s)


def _leave_out(
    digest: VoltageDigest, fit: LeastSquares, labels: IntArray
) -> tuple[FloatArray, FloatArray]:
    """Share of the information each cluster carries, (C, K, K), and ẑ − ẑ without it, (C, K).

    Leaving a block out of a sweep leaves the rest of that sweep, with effects of its own.
    """
    sums = sweep_sums(digest.sums, digest.sweep)
    # What a cluster takes from each sweep it reaches into.
    pieces, piece = np.unique(np.column_stack([labels, digest.sweep]), axis=0, return_inverse=True)
    removed = np.zeros((len(pieces), *digest.sums.shape[1:]))
    np.add.at(removed, piece.reshape(-1), digest.sums)
    whole = sums[pieces[:, 1]]
    marginal = marginalise(whole, fit.sweep_ratios)
    of_piece = marginal - marginalise(whole - removed, fit.sweep_ratios)
    lost = np.zeros((int(labels.max()) + 1, *of_piece.shape[1:]))
    np.add.at(lost, pieces[:, 0], of_piece)
    shares = np.einsum("pk,cpq,ql->ckl", fit.basis, lost[:, :-1, :-1], fit.basis, optimize=True)
    plain = np.append(-fit.weights, 1.0)
    scores = np.einsum("pk,cpq,q->ck", fit.basis, lost[:, :-1, :], plain, optimize=True)
    return shares, np.einsum("ckl,cl->ck", _left_over_inverse(shares), scores)


def _left_over_inverse(shares: FloatArray) -> FloatArray:
    """``(I − L_b)⁻¹`` of each unit, leverage clipped, shape (B, K, K).

    Where one unit carries nearly all, the rest says nothing and the change without it would be
    noise over nothing; the spectral part then speaks for that direction.
    """
    values, vectors = np.linalg.eigh(shares)
    factor = 1.0 / (1.0 - np.clip(values, 0.0, MAX_LEVERAGE))
    inverse: FloatArray = np.einsum("bkj,bj,blj->bkl", vectors, factor, vectors)
    return inverse


def satterthwaite(shares: FloatArray, contrasts: FloatArray) -> float:
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

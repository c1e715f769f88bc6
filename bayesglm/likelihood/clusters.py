"""Which units are independent of which: repeats of one current, blocks of one sweep.

The same current given again is the same stimulus: what a linear model misses of the cell comes
back with it. Units are therefore clustered two ways, by stimulus across repeats and by sweep,

    J = J_stimulus + J_sweep − J_both

(Cameron, Gelbach & Miller 2011, J Bus Econ Stat 29:238–249). Blocks that are short beside the
residual's correlation time are joined to their neighbours by the products of neighbouring scores.
"""

from __future__ import annotations

import numpy as np

from bayesglm.likelihood.digest import VoltageDigest
from bayesglm.recording.recording import FloatArray, IntArray


def stimulus_clusters(digest: VoltageDigest) -> IntArray:
    """Index of each unit's stimulus, shape (B,): 0, 1, …

    Constant current says nothing that a repeat could say again: it is each time one of its own.
    """
    constant = digest.current_sd_nA == 0
    own = np.where(constant, np.arange(digest.n_units), -1)
    return both(np.where(constant, 0, digest.stimulus), own)


def clustered(scores: FloatArray, labels: IntArray) -> FloatArray:
    """``Σ_c s_c s_cᵀ`` with s_c the sum of the scores of cluster c.

    Parameters
    ----------
    scores
        Shape (B, K).
    labels
        Cluster of each unit, 0, 1, …, shape (B,).

    Returns
    -------
    Array of shape (K, K).
    """
    sums = np.zeros((int(labels.max()) + 1, scores.shape[1]))
    np.add.at(sums, labels, scores)
    products: FloatArray = sums.T @ sums
    return products


def both(first: IntArray, second: IntArray) -> IntArray:
    """Clusters of the units that share both labels, shape (B,)."""
    pairs = np.column_stack([first, second])
    labels: IntArray = np.unique(pairs, axis=0, return_inverse=True)[1].reshape(-1)
    return labels.astype(np.int64)


def two_way(scores: FloatArray, first: IntArray, second: IntArray) -> FloatArray:
    """Two-way clustered products of scores, not floored, shape (K, K).

    Parameters
    ----------
    scores
        Shape (B, K).
    first, second
        Cluster of each unit, shape (B,).
    """
    together = clustered(scores, both(first, second))
    return clustered(scores, first) + clustered(scores, second) - together


def neighbour_products(changes: FloatArray, sweep: IntArray) -> FloatArray:
    """``Σ_b (d_b d_{b+1}ᵀ + d_{b+1} d_bᵀ)`` over neighbouring blocks of a sweep, shape (K, K).

    Parameters
    ----------
    changes
        Shape (B, K), in the order of the recording.
    sweep
        Sweep of each unit, shape (B,).
    """
    adjoin = sweep[:-1] == sweep[1:]
    cross = changes[:-1][adjoin].T @ changes[1:][adjoin]
    products: FloatArray = cross + cross.T
    return products


def effective_number(shares: FloatArray) -> float:
    """How many equal units would spread the information as evenly, ``1/Σ_c (tr L_c/K)²``.

    Parameters
    ----------
    shares
        Share L_c of the information that each cluster carries, shape (C, K, K).
    """
    carried = np.trace(shares, axis1=1, axis2=2)
    return float(carried.sum() ** 2 / np.sum(carried**2))

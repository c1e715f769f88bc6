"""Clusters of units against explicit loops."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from simulated_cells import neuron, recording_of_noise

from bayesglm.checks.simulation import simulate
from bayesglm.kernels.basis import KernelSpec
from bayesglm.kernels.design import VoltageDesign
from bayesglm.likelihood.clusters import (
    both,
    clustered,
    effective_number,
    neighbour_products,
    stimulus_clusters,
    two_way,
)
from bayesglm.likelihood.digest import VoltageDigest
from bayesglm.likelihood.voltage import voltage_digest


def test_two_way_products_are_those_of_all_pairs_that_share_a_label() -> None:
    """Source: inclusion and exclusion over pairs, one pair after the other."""
    rng = np.random.default_rng(0)
    scores = rng.normal(size=(12, 3))
    first, second = rng.integers(0, 4, 12), rng.integers(0, 3, 12)
    expected = np.zeros((3, 3))
    for a in range(12):
        for b in range(12):
            if first[a] == first[b] or second[a] == second[b]:
                expected += np.outer(scores[a], scores[b])
    np.testing.assert_allclose(two_way(scores, first, second), expected, atol=1e-12)
    assert np.abs(clustered(scores, first) - expected).max() > 0.1


def test_units_that_share_both_labels_are_one_cluster() -> None:
    labels = both(np.array([5, 5, 1, 5, 1]), np.array([0, 1, 0, 0, 0]))
    assert labels[0] == labels[3]
    assert labels[2] == labels[4]
    assert len(set(labels.tolist())) == 3
    assert labels.max() == 2


def test_neighbours_are_blocks_of_one_sweep() -> None:
    changes = np.random.default_rng(1).normal(size=(5, 2))
    expected = np.zeros((2, 2))
    for a, b in ((0, 1), (1, 2), (3, 4)):
        expected += np.outer(changes[a], changes[b]) + np.outer(changes[b], changes[a])
    found = neighbour_products(changes, np.array([0, 0, 0, 1, 1]))
    np.testing.assert_allclose(found, expected, atol=1e-14)


@pytest.mark.parametrize(("carried", "number"), [([1, 1, 1, 1], 4.0), ([1, 0, 0], 1.0)])
def test_effective_number_of_equal_clusters_and_of_one(carried: list[int], number: float) -> None:
    shares = np.array(carried)[:, None, None] / sum(carried) * np.eye(3)
    assert effective_number(shares) == pytest.approx(number)


def digest_of(currents: np.ndarray, block_ms: float | None = 500.0) -> VoltageDigest:
    recording = simulate(neuron(), currents, 0.5, np.random.default_rng(2))
    return voltage_digest((recording,), VoltageDesign(KernelSpec(100.0), None), block_ms)


def test_a_repeated_current_is_found_by_its_place() -> None:
    once = np.random.default_rng(3).normal(0.1, 0.1, 4000)
    digest = digest_of(np.stack([once, np.roll(once, 7), once]))
    clusters = stimulus_clusters(digest)
    assert digest.n_units == 12
    assert len(np.unique(clusters)) == 8
    np.testing.assert_array_equal(clusters[:4], clusters[8:])
    assert len(set(clusters[:4].tolist())) == 4
    merged = stimulus_clusters(digest.merge(2))
    assert merged[:2].tolist() == merged[4:].tolist()
    assert len(np.unique(merged)) == 4


def test_constant_current_is_no_repeat() -> None:
    digest = digest_of(np.zeros((3, 2000)))
    assert len(np.unique(stimulus_clusters(digest))) == 6
    assert len(np.unique(stimulus_clusters(digest.merge(2)))) == 3


def test_a_stretch_of_constant_current_does_not_hide_a_repeat() -> None:
    """Blocks of noise after one of holding current: merged, they are still the same stimulus."""
    once = np.concatenate([np.zeros(1000), np.random.default_rng(4).normal(0.1, 0.1, 3000)])
    once[0] = -0.0
    digest = digest_of(np.stack([once, np.abs(once[:1]).tolist() + once[1:].tolist()]))
    assert len(np.unique(stimulus_clusters(digest))) == 2 + 3
    assert len(np.unique(stimulus_clusters(digest.merge(2)))) == 2


@pytest.mark.parametrize("factor", [1, 3])
def test_repeats_in_joined_sweeps_are_cut_at_the_seams(factor: int) -> None:
    """Eight periods of 4.85 s in one stretch: blocks begin anew with each period."""
    once = np.random.default_rng(5).normal(0.1, 0.1, 9700)
    recording = simulate(neuron(), np.tile(once, 8)[None], 0.5, np.random.default_rng(6))
    (sweep,) = recording.sweeps
    joined = replace(sweep, joined=tuple((k, 9700 * k) for k in range(8)))
    design = VoltageDesign(KernelSpec(100.0), None)
    digest = voltage_digest((replace(recording, sweeps=(joined,)),), design, 500.0).merge(factor)
    assert digest.n_units == (72 if factor == 1 else 24)
    assert len(np.unique(stimulus_clusters(digest))) == digest.n_units // 8


def test_currents_of_their_own_are_no_repeats() -> None:
    recording = recording_of_noise(neuron(), seed=0, n_sweeps=3, seconds=2.0)
    digest = voltage_digest((recording,), VoltageDesign(KernelSpec(100.0), None), 500.0)
    assert len(np.unique(stimulus_clusters(digest))) == digest.n_units

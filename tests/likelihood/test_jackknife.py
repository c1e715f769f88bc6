"""The spread between clusters against refits without them."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.signal import lfilter
from simulated_cells import matrix_digest, plain_design

from bayesglm.likelihood.calibration import calibrate
from bayesglm.likelihood.digest import VoltageDigest
from bayesglm.likelihood.jackknife import jackknife
from bayesglm.likelihood.least_squares import LeastSquares, column_scale, least_squares
from bayesglm.likelihood.voltage import row_digest

Labels = np.ndarray


def repeated(seed: int, bend: float = 0.0) -> tuple[np.ndarray, np.ndarray, Labels, Labels]:
    """Columns repeated in six sweeps of ten blocks; a part of v that is the same in each."""
    rng = np.random.default_rng(seed)
    once = rng.normal(size=(600, 6))
    x = np.column_stack([np.ones(3600), np.tile(once, (6, 1))])
    missed = np.tile(lfilter([1.0], [1.0, -0.9], rng.normal(size=600)), 6)
    v = x @ np.arange(7.0) + rng.normal(size=3600) + bend * missed
    return x, v, np.repeat(np.arange(6), 600), np.tile(np.repeat(np.arange(10), 60), 6)


def refit_spread(x: np.ndarray, v: np.ndarray, labels: Labels) -> np.ndarray:
    """``(C − 1)/C Σ (ŵ − ŵ₋c)(…)ᵀ`` with every fit made anew."""
    whole = np.linalg.lstsq(x, v)[0]
    names = np.unique(labels)
    changes = [whole - np.linalg.lstsq(x[labels != c], v[labels != c])[0] for c in names]
    return (len(names) - 1) / len(names) * np.array(changes).T @ np.array(changes)


def spread_of(digest: VoltageDigest, fit: LeastSquares) -> np.ndarray:
    none = np.zeros((fit.rank, fit.rank))
    return fit.basis @ jackknife(digest, fit, none).covariance @ fit.basis.T


def test_repeats_are_left_out_by_stimulus_and_by_sweep() -> None:
    x, v, sweep, block = repeated(0, bend=1.0)
    digest = row_digest(x, v, sweep * 10 + block, sweep, plain_design(5), stimuli=block)
    fit = least_squares(digest, column_scale(digest))
    found = jackknife(digest, fit, np.zeros((7, 7)))
    expected = refit_spread(x, v, block) + refit_spread(x, v, sweep)
    expected -= refit_spread(x, v, sweep * 10 + block)
    assert found.units.repeated
    assert found.units.clusters == 10
    values, vectors = np.linalg.eigh(
        np.linalg.solve(fit.basis, expected) @ np.linalg.pinv(fit.basis).T
    )
    assert found.units.floored == np.count_nonzero(values < 0)
    floored = fit.basis @ (vectors * np.maximum(values, 0)) @ vectors.T @ fit.basis.T
    sd = np.sqrt(np.diagonal(refit_spread(x, v, block)))
    np.testing.assert_allclose(
        spread_of(digest, fit) / np.outer(sd, sd), floored / np.outer(sd, sd), atol=1e-6
    )


def test_what_comes_back_with_the_current_is_seen_only_by_stimulus() -> None:
    """Negative control: the same rows, the repeats not told, have a spread far too small."""
    x, v, sweep, block = repeated(1, bend=2.0)
    unit = sweep * 10 + block
    told = row_digest(x, v, unit, sweep, plain_design(5), stimuli=block)
    fit = least_squares(told, column_scale(told))
    untold = row_digest(x, v, unit, sweep, plain_design(5))
    ratio = np.trace(spread_of(told, fit)) / np.trace(spread_of(untold, fit))
    assert ratio > 3


@pytest.mark.parametrize("n_sweeps", [1, 2, 4])
def test_repeats_in_few_sweeps_are_left_out_by_stimulus_alone(n_sweeps: int) -> None:
    """One sweep has no spread between sweeps; clusters by sweep would leave nothing."""
    x, v, _, block = repeated(2)
    # White, so that short blocks are not joined to their neighbours besides.
    v = v + np.tile(np.random.default_rng(3).normal(0.0, 2.0, 600), 6)
    sweep = np.repeat(np.arange(n_sweeps), -(-3600 // n_sweeps))[:3600]
    unit = np.repeat(np.arange(60), 60)
    digest = row_digest(x, v, unit, sweep, plain_design(5), stimuli=block)
    fit = least_squares(digest, column_scale(digest))
    found = jackknife(digest, fit, np.zeros((7, 7)))
    assert found.units.repeated
    assert found.units.clusters == 10
    np.testing.assert_allclose(spread_of(digest, fit), refit_spread(x, v, block), rtol=1e-6)


def slow_noise(rng: np.random.Generator, n: int, tau: float) -> np.ndarray:
    keep = np.exp(-1 / tau)
    noise: np.ndarray = lfilter([1.0], [1.0, -keep], rng.normal(0, np.sqrt(1 - keep**2), n))
    return noise


@pytest.mark.parametrize("short", [True, False])
def test_short_blocks_are_joined_to_their_neighbours(short: bool) -> None:
    """Blocks of 2 correlation times see 57 % of the variance alone, nearly all with neighbours.

    Source: captured variance ``1 − (1 − e^{−m})/m`` of blocks m correlation times long; with
    neighbours it becomes ``1 − (…)`` of products at most two blocks apart.
    """
    rng, n = np.random.default_rng(4), 12000
    # White columns would see nothing of the correlation: these are as slow as the noise.
    length = 80 if short else 1200
    found, alone = [], []
    for _ in range(12):
        x = np.column_stack([np.ones(n), *(slow_noise(rng, n, 40.0) for _ in range(6))])
        v = x @ np.ones(7) + slow_noise(rng, n, 40.0)
        digest = matrix_digest(x, v, n // length, sweep_of_unit=lambda _: 0)
        fit = least_squares(digest, column_scale(digest))
        spread = jackknife(digest, fit, np.zeros((7, 7)))
        assert spread.units.neighbours == short
        covariance = fit.basis @ spread.covariance @ fit.basis.T
        # Correlation times of column and noise add: Σ ρ_x ρ_v over lags, in rows.
        true = (1 + np.exp(-2 / 40)) / (1 - np.exp(-2 / 40)) / n
        found.append(np.diagonal(covariance)[1:] / true)
        b = len(digest.gram)
        plain = (b - 1) / b * spread.changes.T @ spread.changes
        alone.append(np.diagonal(fit.basis @ plain @ fit.basis.T)[1:] / true)
    assert np.mean(found) == pytest.approx(1.0, abs=0.15)
    if short:
        assert np.mean(alone) < 0.9


def test_a_direction_of_one_unit_keeps_what_the_spectrum_says() -> None:
    """Negative control: without it the covariance there is what leaving out cannot tell."""
    rng = np.random.default_rng(5)
    x = np.column_stack([np.ones(5000), rng.normal(size=(5000, 6))])
    x[500:, 5] = 0.0
    digest = matrix_digest(x, x @ np.ones(7) + rng.normal(size=5000), 10)
    fit = least_squares(digest, column_scale(digest))
    calibration = calibrate(digest, fit, np.eye(7))
    assert calibration.leverage[0] == pytest.approx(1.0)
    sd = np.sqrt((fit.basis @ calibration.covariance @ fit.basis.T)[5, 5])
    assert sd == pytest.approx(1 / np.sqrt(500), rel=0.3)
    raw = np.sqrt((fit.basis @ calibration.jackknife @ fit.basis.T)[5, 5])
    assert raw < 0.3 * sd

"""Offsets of sweeps against explicit weighting, a published data set and a mixed model."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.stats import multivariate_normal

from bayesglm.likelihood.offsets import marginalise, reml_ratios, sweep_sums

#: Yield of dyestuff, six batches of five: Davies, quoted by Box & Tiao (1973), Bayesian
#: Inference in Statistical Analysis.
DYESTUFF = np.array(
    [
        [1545, 1440, 1440, 1520, 1580],
        [1540, 1555, 1490, 1560, 1495],
        [1595, 1550, 1605, 1510, 1560],
        [1445, 1440, 1595, 1465, 1545],
        [1595, 1630, 1515, 1635, 1625],
        [1520, 1455, 1450, 1480, 1445],
    ],
    dtype=float,
)


def grams(x: np.ndarray, v: np.ndarray, group: np.ndarray) -> np.ndarray:
    """Gram matrices of (x, v) by group."""
    z = np.column_stack([x, v])
    return np.array([z[group == g].T @ z[group == g] for g in np.unique(group)])


def made_groups(
    rng: np.random.Generator, sizes: list[int], sd: float
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Rows (1, x), values with offsets of the given sd and unit noise, and their groups."""
    group = np.repeat(np.arange(len(sizes)), sizes)
    x = np.column_stack([np.ones(len(group)), rng.normal(size=len(group))])
    offsets = rng.normal(0.0, sd, len(sizes))
    v = x @ [3.0, -2.0] + offsets[group] + rng.normal(size=len(group))
    return x, v, group


def test_sums_are_by_sweep() -> None:
    gram = np.arange(12.0).reshape(3, 2, 2)
    sums = sweep_sums(gram, np.array([0, 1, 0]))
    np.testing.assert_array_equal(sums, [gram[0] + gram[2], gram[1]])


def test_marginal_gram_is_that_of_correlated_rows() -> None:
    """``zᵀ (I + ρ 11ᵀ)⁻¹ z`` with the inverse taken as a matrix."""
    x, v, group = made_groups(np.random.default_rng(0), [7, 1, 4], 1.0)
    z, ratio = np.column_stack([x, v]), 0.7
    found = marginalise(grams(x, v, group), np.array([ratio]))
    for g in range(3):
        rows = z[group == g]
        weight = np.linalg.inv(np.eye(len(rows)) + ratio)
        np.testing.assert_allclose(found[g], rows.T @ weight @ rows, atol=1e-11)


def test_no_offsets_and_boundless_offsets() -> None:
    """ρ = 0 changes nothing; ρ → ∞ leaves deviations from the sweep's mean."""
    x, v, group = made_groups(np.random.default_rng(1), [9, 6], 1.0)
    gram = grams(x, v, group)
    np.testing.assert_array_equal(marginalise(gram, np.zeros(1)), gram)
    z = np.column_stack([x, v])
    centred = np.concatenate([z[group == g] - z[group == g].mean(axis=0) for g in (0, 1)])
    expected = np.array([centred[group == g].T @ centred[group == g] for g in (0, 1)])
    np.testing.assert_allclose(marginalise(gram, np.array([1e12])), expected, atol=1e-8)


def test_dyestuff_batches() -> None:
    """Published REML: sd between batches 42.0006, within 49.5101."""
    n = DYESTUFF.size
    gram = grams(np.ones((n, 1)), DYESTUFF.ravel(), np.repeat(np.arange(6), 5))
    ratio = reml_ratios(gram, 1, np.eye(1), 1e-10)[0]
    assert np.sqrt(ratio) == pytest.approx(42.0006 / 49.5101, rel=1e-4)


def test_unbalanced_offsets_are_at_the_top_of_the_restricted_likelihood() -> None:
    """Source: the density of contrasts orthogonal to the columns, by SciPy."""
    x, v, group = made_groups(np.random.default_rng(2), [12, 5, 9, 20, 3, 8], 1.5)
    found = reml_ratios(grams(x, v, group), 1, np.eye(2), 1e-10)[0]
    contrasts = np.linalg.svd(x.T)[2][2:]
    same = (group[:, None] == group).astype(float)

    def log_likelihood(ratio: float) -> float:
        covariance = contrasts @ (np.eye(len(v)) + ratio * same) @ contrasts.T
        y = contrasts @ v
        variance = y @ np.linalg.solve(covariance, y) / len(y)
        return float(multivariate_normal.logpdf(y, cov=variance * covariance))

    best = log_likelihood(found)
    for factor in (0.5, 0.97, 1.03, 2.0):
        assert log_likelihood(factor * found) < best


@pytest.mark.parametrize("sizes", [[30, 40], [50]])
def test_fewer_than_three_sweeps_tell_nothing_of_their_spread(sizes: list[int]) -> None:
    x, v, group = made_groups(np.random.default_rng(3), sizes, 5.0)
    assert reml_ratios(grams(x, v, group), 1, np.eye(2), 1e-10)[0] == 0.0


def test_groups_more_alike_than_chance_have_no_offsets() -> None:
    x, v, group = made_groups(np.random.default_rng(4), [20] * 8, 0.0)
    for g in range(8):
        v[group == g] -= (v - x @ [3.0, -2.0])[group == g].mean()
    assert reml_ratios(grams(x, v, group), 1, np.eye(2), 1e-10)[0] == 0.0


def test_ratio_is_right_on_average() -> None:
    """Mean over 60 made data sets of 30 groups: 0.5 within 4 standard errors."""
    rng = np.random.default_rng(5)
    found = []
    for _ in range(60):
        x, v, group = made_groups(rng, [8] * 30, np.sqrt(0.5))
        found.append(reml_ratios(grams(x, v, group), 1, np.eye(2), 1e-10)[0])
    error = np.std(found, ddof=1) / np.sqrt(60)
    assert abs(np.mean(found) - 0.5) < 4 * error
    assert error < 0.04


def test_drifts_are_weighted_out_as_correlated_rows() -> None:
    """``zᵀ (I + Z D Zᵀ)⁻¹ z`` with ones and a line t in Z, the inverse taken as a matrix."""
    rng = np.random.default_rng(6)
    sizes = [9, 2, 14]
    line = np.concatenate([np.linspace(-1.7, 1.7, n) for n in sizes])
    group = np.repeat(np.arange(3), sizes)
    x = np.column_stack([np.ones(25), rng.normal(size=25)])
    v, ratios = rng.normal(size=25), np.array([0.7, 0.2])
    found = marginalise(grams(np.column_stack([x, line]), v, group), ratios)
    z, effects = np.column_stack([x, v]), np.column_stack([np.ones(25), line])
    for g in range(3):
        rows, own = z[group == g], effects[group == g]
        inverse = np.linalg.inv(np.eye(len(rows)) + (own * ratios) @ own.T)
        np.testing.assert_allclose(found[g], rows.T @ inverse @ rows, atol=1e-11)


def test_offsets_and_drifts_are_those_of_a_mixed_model() -> None:
    """Means over 40 made data sets of 30 groups: 0.5 and 0.1 within 4 standard errors."""
    rng = np.random.default_rng(7)
    found = []
    for _ in range(40):
        group = np.repeat(np.arange(30), 20)
        line = np.tile(np.sqrt(3) * np.linspace(-1, 1, 20), 30)
        x = np.column_stack([np.ones(600), rng.normal(size=600)])
        offsets = rng.normal(0, np.sqrt(0.5), 30)[group]
        drifts = rng.normal(0, np.sqrt(0.1), 30)[group]
        v = x @ [3.0, -2.0] + offsets + drifts * line + rng.normal(size=600)
        rows = np.column_stack([x, line])
        found.append(reml_ratios(grams(rows, v, group), 2, np.eye(2), 1e-10))
    error = np.std(found, axis=0, ddof=1) / np.sqrt(40)
    assert np.all(np.abs(np.mean(found, axis=0) - [0.5, 0.1]) < 4 * error)
    assert np.all(error < [0.05, 0.01])

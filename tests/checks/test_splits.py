"""Parts of a recording: who belongs to which, what each says, and how far they are apart."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy.stats import chi2, norm
from simulated_cells import matrix_digest

from bayesglm.checks.splits import (
    between_sd,
    disagreement,
    drive,
    drive_ranges,
    estimate_part,
    exciting_units,
    range_label,
)
from bayesglm.inference.results import CellFit
from bayesglm.likelihood.calibration import calibrate
from bayesglm.likelihood.digest import VoltageDigest
from bayesglm.likelihood.least_squares import column_scale, least_squares
from bayesglm.models.priors import weight_prior
from bayesglm.recording.settings import PriorsSection


@pytest.fixture(scope="module")
def digest() -> VoltageDigest:
    """Fourteen units with a rising mean current, the first two silent, one without current."""
    rng = np.random.default_rng(0)
    x = np.column_stack([np.ones(2800), rng.normal(size=(2800, 6))])
    made = matrix_digest(x, x @ np.ones(7) + rng.normal(size=2800), 14)
    spread = np.full(14, 0.05)
    spread[5] = 0.0
    return replace(
        made,
        drive_nA=np.arange(14)[::-1] * 0.025,
        current_sd_nA=spread,
        spikes=np.array([0, 0, *range(1, 13)]),
        seconds=np.full(14, 2.0),
    )


def test_exciting_units(digest: VoltageDigest) -> None:
    """κ needs a current that varies, η a spike."""
    assert exciting_units(digest, "input").tolist() == [0, 1, 2, 3, 4, *range(6, 14)]
    assert exciting_units(digest, "after_spike").tolist() == list(range(2, 14))


def test_ranges_are_ordered_by_drive_with_extras_to_the_lower(digest: VoltageDigest) -> None:
    """Thirteen units: five, four, four, from the weakest drive, which is the last unit."""
    ranges = drive_ranges(digest, "input")
    assert [part.tolist() for part in ranges] == [[13, 12, 11, 10, 9], [8, 7, 6, 4], [3, 2, 1, 0]]
    assert range_label(digest, ranges[0]) == "0–100 pA"


def test_negative_drive_has_a_minus_sign(digest: VoltageDigest) -> None:
    lower = replace(digest, drive_nA=digest.drive_nA - 0.1)
    assert "−100" in range_label(lower, np.array([13, 12]))
    assert range_label(lower, np.array([13])) == "−100 pA"


@pytest.mark.parametrize(("n", "ranges"), [(5, 0), (6, 3)])
def test_fewer_than_six_units_are_not_split(digest: VoltageDigest, n: int, ranges: int) -> None:
    assert len(drive_ranges(digest.take(np.arange(6, 6 + n)), "input")) == ranges


def test_stationary_current_is_told_apart_by_firing_rate(digest: VoltageDigest) -> None:
    """Means of a stationary current differ by chance only."""
    still = replace(digest, drive_nA=0.1 + 0.001 * np.arange(14))
    values, unit = drive(still)
    assert unit == "Hz"
    np.testing.assert_array_equal(values, still.spikes / 2.0)
    assert range_label(still, np.array([2, 13])) == "0.5–6.0 Hz"
    assert drive(digest)[1] == "pA"


def test_a_part_is_fitted_with_its_own_rows_alone(digest: VoltageDigest) -> None:
    """Against the dense Gaussian formula, with the covariance of the part and D as given."""
    prior = weight_prior(digest.design, PriorsSection())
    whole = calibrate(digest, least_squares(digest, prior.root), np.eye(7))
    units, sd = np.array([1, 3, 8]), np.array([4.0])
    found = estimate_part(digest, units, whole, {"input": 1.5}, prior, sd)
    part = digest.take(units)
    alone = least_squares(part, column_scale(part))
    spread = calibrate(part, alone, np.empty((0, 7)), {"input": 1.5})
    precision = np.linalg.inv(alone.basis @ spread.covariance @ alone.basis.T)
    total = np.linalg.inv(prior.precision(sd) + precision)
    expected = total @ (prior.precision(sd) @ prior.mean + precision @ alone.weights)
    size = np.sqrt(np.diagonal(total))
    np.testing.assert_allclose((found.mean - expected) / size, 0.0, atol=1e-6)
    np.testing.assert_allclose((found.covariance - total) / np.outer(size, size), 0, atol=1e-6)


def test_draws_of_a_part_have_its_mean_and_covariance(linear_fit: CellFit) -> None:
    fit = linear_fit
    sd = np.median(fit.chains.draws["sd"], axis=(0, 1))
    part = estimate_part(
        fit.digest, np.arange(10), fit.calibration, fit.calibration.inflation, fit.prior, sd
    )
    draws = part.sample(20_000, np.random.default_rng(1))
    size = np.sqrt(np.diagonal(part.covariance))
    assert np.abs((draws.mean(axis=0) - part.mean) / size).max() < 5 / np.sqrt(20_000)
    error = np.abs(np.cov(draws.T) - part.covariance) / np.outer(size, size)
    assert error.max() < 5 * np.sqrt(2 / 20_000)


@pytest.mark.parametrize("apart", [0.5, 2.0, 5.0, 12.0])
def test_disagreement_of_two_parts_is_their_distance_in_sds(apart: float) -> None:
    """Two parts: Σ(x − x̄)²/sd² is the squared distance over its own variance."""
    sds = np.array([[1.0, 3.0], [2.0, 3.0]])
    means = np.array([[0.0, 0.0], [apart * np.sqrt(5), 0.0]])
    assert disagreement(means, sds) == pytest.approx(apart, rel=1e-6)


def test_disagreement_of_three_parts_is_as_surprising_as_chi_square() -> None:
    means, sds = np.array([[0.0], [3.0], [-2.0]]), np.array([[1.0], [1.5], [0.7]])
    weight = 1 / sds[:, 0] ** 2
    centre = weight @ means[:, 0] / weight.sum()
    statistic = weight @ (means[:, 0] - centre) ** 2
    expected = norm.isf(chi2.sf(statistic, 2) / 2)
    assert disagreement(means, sds) == pytest.approx(expected, rel=1e-9)


def test_disagreement_is_capped_where_the_normal_tail_ends_and_zero_without_errors() -> None:
    assert disagreement(np.array([[0.0], [1e4]]), np.ones((2, 1))) == 37.0
    assert disagreement(np.zeros((2, 3)), np.zeros((2, 3))) == 0.0
    assert disagreement(np.full((2, 3), np.nan), np.full((2, 3), np.nan)) == 0.0


def test_lags_pinned_by_construction_do_not_count() -> None:
    """Where both sds are below 2 % of the largest, a difference is no surprise."""
    sds = np.array([[1.0, 0.01], [1.0, 0.01]])
    assert disagreement(np.array([[0.0, 0.0], [0.0, 1.0]]), sds) == 0.0


def test_chance_seldom_exceeds_three_sds() -> None:
    """Three parts of one curve with six independent lags: fewer than 3 % beyond 3."""
    rng = np.random.default_rng(2)
    found = [disagreement(rng.normal(size=(3, 6)), np.ones((3, 6))) for _ in range(2000)]
    assert 0.005 < np.mean(np.array(found) > 3) < 0.03


def test_spread_between_parts_beyond_their_errors() -> None:
    means = np.array([[0.0, 1.0], [2.0, 1.0], [4.0, 1.0]])
    sds = np.full((3, 2), 1.0)
    np.testing.assert_allclose(between_sd(means, sds), [np.sqrt(4 - 1), 0.0])


def test_spread_between_parts_is_right_on_average() -> None:
    """Kernels that differ by 2 between ranges, measured with errors of 1."""
    rng = np.random.default_rng(3)
    means = 2 * rng.normal(size=(3, 40_000)) + rng.normal(size=(3, 40_000))
    squares = means.var(axis=0, ddof=1) - 1.0
    assert squares.mean() == pytest.approx(4.0, rel=0.03)
    found = between_sd(means, np.ones_like(means))
    np.testing.assert_allclose(found, np.sqrt(np.maximum(squares, 0)))

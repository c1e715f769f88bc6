"""Bases on the warped axis, against SciPy's splines and against their defining properties."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.interpolate import BSpline

from bayesglm.errors import InputError
from bayesglm.kernels.basis import DEFAULT_WEIGHTS, KernelSpec
from bayesglm.recording.settings import Basis


def knots_of(weights: int) -> np.ndarray:
    """Clamped cubic knots, evenly spaced, for `weights` splines and the one left out."""
    return np.concatenate([np.zeros(3), np.linspace(0, 1, weights - 1), np.ones(3)])


@pytest.mark.parametrize("weights", [5, 8, 14, 30])
@pytest.mark.parametrize(("duration", "warp"), [(100.0, 2.0), (300.0, 0.5), (50.0, 1000.0)])
def test_splines_equal_scipys_on_log_one_plus_lag(
    weights: int, duration: float, warp: float
) -> None:
    """Source: scipy.interpolate.BSpline.basis_element, one spline at a time."""
    lags = np.linspace(0, duration, 500, endpoint=False)
    x = np.log(1 + lags / warp) / np.log(1 + duration / warp)
    knots = knots_of(weights)
    values = KernelSpec(duration, weights, warp).evaluate(lags)
    for j in range(weights):
        own = BSpline.basis_element(knots[j : j + 5], extrapolate=False)(x)
        expected = np.nan_to_num(own)
        np.testing.assert_allclose(values[:, j], expected, atol=1e-12)


def test_all_splines_but_the_last_sum_to_one_until_the_last_begins() -> None:
    """Partition of unity: what is missing is the spline left out."""
    spec = KernelSpec(100.0, 10)
    lags = np.linspace(0, 100, 400, endpoint=False)
    before_last = spec.warp(lags) < 1 - 1 / 8
    total = spec.evaluate(lags).sum(axis=1)
    np.testing.assert_allclose(total[before_last], 1.0, atol=1e-12)
    assert np.all(total[~before_last] < 1.0 + 1e-12)


@pytest.mark.parametrize("basis", list(DEFAULT_WEIGHTS))
def test_every_basis_is_zero_before_lag_zero_and_beyond_the_end(basis: Basis) -> None:
    spec = KernelSpec(100.0, 20, 2.0, basis, 0.5)
    lags = np.array([-5.0, -1e-9, 0.0, 0.05, 50.0, 99.9, 100.0, 100.01, 1e4])
    values = spec.evaluate(lags)
    assert values.shape == (9, 20)
    outside = [0, 1, 7, 8] + ([6] if basis in ("splines", "cosines") else [])
    for k in range(len(lags)):
        assert values[k].any() == (k not in outside), lags[k]
    # No weight without an effect, and no two that cannot be told apart.
    assert np.linalg.matrix_rank(spec.evaluate(spec.lags(0.05))) == 20


@pytest.mark.parametrize("weights", [5, 14, 30])
def test_cosines_equal_their_formula_and_end_at_zero(weights: int) -> None:
    """Source: ½(1 + cos(π(x − c)/2Δ)) one bump at a time; the last less its mirror image."""
    spec = KernelSpec(200.0, weights, 3.0, "cosines")
    gap = 1 / (weights - 1)
    for lag in (0.0, 0.7, 5.0, 40.0, 150.0, 199.0):
        x = np.log(1 + lag / 3) / np.log(1 + 200 / 3)
        expected = np.zeros(weights)
        for j in range(weights):
            for centre, sign in (((j - 1) * gap, 1), (2 - (j - 1) * gap, -1)):
                if abs(x - centre) < 2 * gap:
                    expected[j] += sign * (1 + np.cos(np.pi * (x - centre) / (2 * gap))) / 2
        np.testing.assert_allclose(spec.evaluate(np.array([lag]))[0], expected, atol=1e-12)
    assert np.abs(spec.evaluate(np.array([200 * (1 - 1e-9)]))).max() < 1e-6


def test_cosines_of_one_height_are_a_plateau() -> None:
    """Four bumps overlap everywhere and sum to two, until the end draws near."""
    spec = KernelSpec(100.0, 12, basis="cosines")
    lags = spec.unwarp(np.linspace(0.0, 1 - 2 / 11, 200))
    np.testing.assert_allclose(spec.evaluate(lags).sum(axis=1), 2.0, atol=1e-12)


@pytest.mark.parametrize("duration", [300.0, 57.3, 100.0, 20.0])
@pytest.mark.parametrize("row", [0.5, 0.6, 1.0])
@pytest.mark.parametrize("weights", [1, 5, 20, 60, 10**6])
def test_lags_are_whole_rows_that_widen_and_none_is_idle(
    duration: float, row: float, weights: int
) -> None:
    weights = min(weights, int(duration / row + 1e-9))
    spec = KernelSpec(duration, weights, 2.0, "lags", row)
    edges = spec.edges_ms
    assert (len(edges), edges[0], edges[-1]) == (weights + 1, 0.0, duration)
    rows = np.diff(edges[:-1]) / row
    np.testing.assert_allclose(rows, rows.round(), atol=1e-9)
    assert np.all(np.diff(edges) > row * (1 - 1e-9))
    assert np.all(np.diff(rows) > -1.5)
    for values in (spec.evaluate(spec.lags(row / 5)), spec.bins(spec.lags(row / 5))):
        np.testing.assert_allclose(values.sum(axis=1), 1.0, atol=1e-12)
        assert values.any(axis=0).all()


def test_one_coefficient_for_every_row_of_lag() -> None:
    """A kernel of K lags has K coefficients, with straight lines between them."""
    spec = KernelSpec(50.0, 100, 2.0, "lags", 0.5)
    np.testing.assert_allclose(spec.evaluate(spec.lags(0.5)), np.eye(100), atol=1e-9)
    weights = np.random.default_rng(0).normal(size=100)
    fine = spec.lags(0.1)
    expected = np.interp(fine, spec.lags(0.5), weights)
    np.testing.assert_allclose(spec.evaluate(fine) @ weights, expected, atol=1e-9)


def test_bins_are_closed_on_the_right() -> None:
    spec = KernelSpec(50.0, 100, 2.0, "lags", 0.5)
    np.testing.assert_array_equal(spec.bins(spec.lags(0.1)), np.repeat(np.eye(100), 5, axis=0))


def test_few_lags_are_even_on_the_warped_axis() -> None:
    spec = KernelSpec(300.0, 12, 20.0, "lags", 0.1)
    places = spec.warp(spec.edges_ms)
    np.testing.assert_allclose(np.diff(places), 1 / 12, atol=0.01)


@given(
    weights=st.lists(st.floats(-100, 100), min_size=5, max_size=40),
    duration=st.floats(5, 1000),
    warp=st.floats(0.1, 100),
)
@settings(deadline=None, max_examples=50)
def test_every_kernel_ends_at_zero_and_begins_at_its_first_weight(
    weights: list[float], duration: float, warp: float
) -> None:
    spec = KernelSpec(duration, len(weights), warp)
    w = np.array(weights)
    ends = np.array([-1e-9, 0.0, duration * (1 - 1e-9), duration, 2 * duration])
    before, start, end, at_end, after = spec.evaluate(ends) @ w
    assert (before, at_end, after) == (0.0, 0.0, 0.0)
    assert start == pytest.approx(w[0])
    assert abs(end) < 1e-4 * (1 + np.abs(w).max())


def test_straight_lines_on_the_warped_axis_are_exact() -> None:
    """Linear precision: weights at the means of three knots give a straight line."""
    spec = KernelSpec(200.0, 12, 3.0)
    lags = np.linspace(0, 199.9, 300)
    knots = knots_of(12)
    means = np.array([knots[j + 1 : j + 4].mean() for j in range(12)])
    np.testing.assert_allclose(
        spec.evaluate(lags) @ (1 - means), 1 - spec.warp(lags), rtol=0, atol=1e-12
    )


def test_knots_are_finer_at_short_lags() -> None:
    """Half of the axis lies within the first tenth of the lags for the default warp."""
    spec = KernelSpec(300.0)
    assert spec.warp(np.array([30.0]))[0] > 0.5
    assert spec.warp(np.array([0.0, 300.0])).tolist() == [0.0, 1.0]


@pytest.mark.parametrize(
    ("duration", "step", "n"),
    [(100.0, 0.1, 1000), (0.3, 0.1, 3), (100.0, 0.3, 333), (50, 0.02, 2500)],
)
def test_lags_begin_one_step_after_and_reach_the_duration(
    duration: float, step: float, n: int
) -> None:
    """Strict causality, and no lag lost to rounding."""
    lags = KernelSpec(duration).lags(step)
    assert len(lags) == n
    assert lags[0] == step
    assert lags[-1] == pytest.approx(n * step)


@pytest.mark.parametrize(
    ("duration", "weights", "warp", "message"),
    [
        (0.0, 14, 2.0, "kernel of 0.0 ms .* expected both above zero"),
        (100.0, 14, 0.0, "warped at 0.0 ms; expected both above zero"),
        (100.0, 4, 2.0, "4 weights; expected at least 5"),
    ],
)
def test_refuses_impossible_kernels(
    duration: float, weights: int, warp: float, message: str
) -> None:
    with pytest.raises(InputError, match=message):
        KernelSpec(duration, weights, warp)


@pytest.mark.parametrize(
    ("spec", "message"),
    [
        ((100.0, 14, 2.0, "lags"), "finest_ms 0; expected the length of a row, above 0"),
        ((100.0, 14, 2.0, "exponentials"), "finest_ms 0; expected the length of a row"),
        ((100.0, 201, 2.0, "lags", 0.5), "201 lags .* 100 ms; expected at most 200 lags"),
        ((100.0, 0, 2.0, "lags", 0.5), "0 weights; expected at least 1"),
        (
            (100.0, 14, 2.0, "exponentials", 0.5, 0),
            "0 exponentials on 14 splines; expected 1 to 14",
        ),
    ],
)
def test_refuses_what_a_basis_cannot_be(spec: tuple[float, ...], message: str) -> None:
    with pytest.raises(InputError, match=message):
        KernelSpec(*spec)  # type: ignore[arg-type]

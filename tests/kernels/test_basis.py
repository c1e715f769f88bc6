"""B-splines on the warped axis, against SciPy's and against their defining properties."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.interpolate import BSpline

from bayesglm.errors import InputError
from bayesglm.kernels.basis import KernelSpec


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

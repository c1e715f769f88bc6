"""The step behind printed times, its jumps and its jitter."""

import numpy as np
import pytest
from hypothesis import example, given
from hypothesis import strategies as st

from bayesglm.recording import timegrid


def printed(n: int, step: float, decimals: int, start: float = 0.0) -> np.ndarray:
    return np.array([float(f"{start + step * i:.{decimals}f}") for i in range(n)])


def step_of(times: np.ndarray) -> float:
    resolution = timegrid.print_resolution(times)
    estimate = timegrid.estimate_step(times, resolution)
    step, odd = timegrid.common_step([estimate], resolution)
    assert odd is None
    return step


@pytest.mark.parametrize(
    ("decimals", "resolution"), [(0, 1.0), (1, 0.1), (2, 0.01), (5, 1e-5), (12, 1e-9)]
)
def test_print_resolution(decimals: int, resolution: float) -> None:
    times = printed(1000, np.pi, decimals)
    assert timegrid.print_resolution(times) == pytest.approx(resolution)


@pytest.mark.parametrize(
    ("step", "decimals"),
    [
        (0.05, 2),
        (0.05, 1),  # 20 kHz printed to 0.1 ms: neighbours share a time
        (0.025, 2),
        (0.125, 1),  # rounding moves a difference by more than half a step
        (1 / 30, 3),
        (1 / 30, 2),
        (1.0, 0),
        (0.1, 1),
        (0.02, 9),
    ],
)
@pytest.mark.parametrize("start", [0.0, 12_345.6])
def test_step_is_found_behind_rounding(step: float, decimals: int, start: float) -> None:
    times = printed(20_000, step, decimals, start)
    found = step_of(times)
    assert found == pytest.approx(step, rel=1e-7)
    resolution = timegrid.print_resolution(times)
    assert len(timegrid.find_jumps(times, found, resolution)) == 0
    assert timegrid.jitter(times, found, np.array([], dtype=np.int64)) <= 0.51 * resolution


@example(hertz=1001, decimals=7, n=5000)
@given(
    hertz=st.integers(1000, 50_000),
    decimals=st.integers(3, 7),
    n=st.integers(5_000, 8_000),
)
def test_step_of_any_rate(hertz: int, decimals: int, n: int) -> None:
    step = 1000 / hertz
    times = np.round(step * np.arange(n), decimals)
    # Within what the printing leaves open: one decimal over the whole length.
    assert step_of(times) * n == pytest.approx(step * n, abs=2 * 10.0**-decimals)


@pytest.mark.parametrize(("at", "gap"), [(50, 1.0), (1, 0.1), (99, 500.0), (50, -3.0), (50, -0.1)])
def test_jump_is_found_and_does_not_move_the_step(at: int, gap: float) -> None:
    times = printed(100, 0.1, 1)
    times[at:] += gap
    step = step_of(times)
    assert step == pytest.approx(0.1, rel=1e-9)
    jumps = timegrid.find_jumps(times, step, 0.1)
    assert jumps.tolist() == [at]
    assert timegrid.jitter(times, step, jumps) < 1e-9


def test_one_missing_sample_of_whole_milliseconds_is_a_jump() -> None:
    times = np.delete(np.arange(100.0), 40)
    assert timegrid.find_jumps(times, step_of(times), 1.0).tolist() == [40]


def test_jitter_is_the_deviation_of_a_wobbling_clock() -> None:
    times = np.arange(1000.0)
    times[500] += 0.2
    assert timegrid.find_jumps(times, 1.0, 1e-9).tolist() == []
    assert timegrid.jitter(times, 1.0, np.array([], dtype=np.int64)) == pytest.approx(0.1)


@pytest.mark.parametrize("times", [np.zeros(10), np.arange(10.0)[::-1]])
def test_time_that_does_not_advance_has_no_step(times: np.ndarray) -> None:
    assert timegrid.estimate_step(times, 1.0).step <= 0


def test_sweep_of_another_step_is_told() -> None:
    estimates = [timegrid.estimate_step(printed(500, s, 2), 0.01) for s in (0.1, 0.1, 0.2)]
    assert timegrid.common_step(estimates, 0.01) == (0.1, 2)

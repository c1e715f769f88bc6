"""Reading a grid of durations and a row of spike windows: numbers small enough to check by eye."""

from __future__ import annotations

import numpy as np

from bayesglm.inference.sensitivity import DurationGrid, SpikeWindows

GRID = DurationGrid(
    input_ms=np.array([50.0, 105.2, 400.0]),
    after_spike_ms=np.array([100.0, 300.0]),
    chosen=(1, 1),
    held_out_mV2=np.array([[5.0, 4.0], [3.0, 2.1], [2.05, 2.0]]),
    held_out_se_mV2=np.array([[0.5, 0.5], [0.4, 0.2], [0.02, 0.0]]),
    folds=4,
    features={
        "input_resistance": (
            np.array([[80.0, 81.0], [95.0, 100.0], [130.0, 112.0]]),
            np.array([[1.0, 1.0], [2.0, 3.0], [4.0, 6.0]]),
        )
    },
)


def test_as_good_is_within_one_standard_error_of_the_best() -> None:
    assert GRID.best == (2, 1)
    np.testing.assert_allclose(GRID.excess_mV2, [[3.0, 2.0], [1.0, 0.1], [0.05, 0.0]])
    assert GRID.as_good.tolist() == [[False, False], [False, True], [False, True]]


def test_moves_are_in_the_larger_sd_and_only_where_the_error_is_as_good() -> None:
    """130 MΩ is farther, but predicts worse; 12 MΩ are two of the larger sd."""
    assert GRID.farthest("input_resistance") == (2, 1)
    assert GRID.moved("input_resistance") == 2.0


def test_durations_in_words() -> None:
    assert GRID.named((1, 1)) == "105/300 ms"


def test_windows_move_in_the_larger_sd() -> None:
    windows = SpikeWindows(
        np.array([3.0, 5.0, 8.0]), 1,
        {"after_spike_at_10ms": (np.array([-1.0, -3.0, np.nan]), np.array([4.0, 1.0, np.nan]))},
    )  # fmt: skip
    np.testing.assert_allclose(windows.moved("after_spike_at_10ms"), [0.5, 0.0, np.nan])

"""Steps are found where the current steps, and nowhere else."""

from __future__ import annotations

import numpy as np
import pytest
from rc_cell import FloatArray, recording_of, step_current
from scipy.signal import lfilter

from bayesglm.recording.current import find_steps, holding_nA, leading_samples


def _steps(*currents: FloatArray, step_ms: float = 0.1) -> list[tuple[int, int, int, float, float]]:
    recording = recording_of([(one, np.zeros(len(one))) for one in currents], step_ms=step_ms)
    return [
        (s.sweep, s.start, s.stop, round(s.baseline_nA, 4), round(s.level_nA, 4))
        for s in find_steps(recording)
    ]


def _noise(n: int, correlation_ms: float) -> FloatArray:
    f = np.exp(-0.1 / correlation_ms) if correlation_ms else 0.0
    white = np.random.default_rng(2).standard_normal(n) * np.sqrt(1 - f**2)
    return 0.05 * lfilter([1.0], [1.0, -f], white)


def test_a_step_has_its_samples_and_levels() -> None:
    assert _steps(step_current(-100, holding_pA=-20)) == [(0, 2000, 7000, -0.02, -0.1)]


def test_steps_that_follow_each_other_keep_the_current_before_them() -> None:
    current = np.concatenate([np.full(1000, x) for x in (0.0, -0.1, 0.05, 0.0)])
    assert _steps(current) == [(0, 1000, 2000, 0.0, -0.1), (0, 2000, 3000, -0.1, 0.05)]


def test_a_measured_current_with_noise_and_a_filtered_edge_has_its_steps() -> None:
    rng = np.random.default_rng(3)
    filtered = lfilter([0.5], [1.0, -0.5], step_current(100))
    found = _steps(filtered + 0.002 * rng.standard_normal(len(filtered)))
    assert len(found) == 1
    _, start, stop, baseline, level = found[0]
    assert abs(start - 2000) <= 2
    assert abs(stop - 7000) <= 2
    assert baseline == pytest.approx(0, abs=3e-4)
    assert level == pytest.approx(0.1, abs=3e-4)


@pytest.mark.parametrize(
    "current",
    [
        _noise(10_000, 0.0),
        _noise(10_000, 5.0),
        np.repeat(_noise(200, 0.0), 50),  # a staircase that changes every 5 ms
        np.concatenate([np.zeros(6_000), _noise(4_000, 2.0)]),
        0.1 * np.sin(np.arange(10_000) * 2e-3),
        np.concatenate([np.zeros(400), 0.02 * np.sin(2 * np.pi * 5e-5 * np.arange(50_000))]),
        np.linspace(0.0, 0.1, 10_000),
        np.concatenate([np.zeros(3_000), np.linspace(0.0, 0.3, 5_000), np.zeros(2_000)]),
        np.concatenate([np.zeros(3_000), np.linspace(0.1, 0.3, 5_000), np.zeros(2_000)]),
        np.full(10_000, 0.05),
        np.full(10_000, np.nan),
        np.zeros(1),
    ],
    ids=[
        "white noise",
        "correlated noise",
        "staircase noise",
        "noise after silence",
        "sine",
        "slow sine after silence",
        "ramp",
        "ramp and return",
        "jump to a ramp",
        "constant",
        "missing",
        "one sample",
    ],
)
def test_other_currents_have_no_steps(current: FloatArray) -> None:
    assert _steps(current) == []


def test_the_holding_current_is_the_one_most_sweeps_begin_with() -> None:
    currents = [step_current(50, holding_pA=held) for held in (-30, -30, 10)]
    recording = recording_of([(one, np.zeros(len(one))) for one in currents])
    assert holding_nA(recording) == pytest.approx(-0.03)


def test_the_leading_stretch_ends_where_the_current_leaves_it() -> None:
    ramp = np.concatenate([np.zeros(500), np.linspace(0, 0.1, 1000)])
    assert leading_samples(step_current(50), 0.1) == 2000
    assert leading_samples(ramp, 0.1) == pytest.approx(500, abs=12)
    assert leading_samples(_noise(10_000, 0.0), 0.1) < 20

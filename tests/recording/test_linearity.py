"""The proposed range is linear, as wide as it can be, and free of spikes."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest
from rc_cell import REST_MV, rc_recording, recording_of, step_current

from bayesglm.recording.linearity import deflection_noise_mV, linear_range
from bayesglm.recording.recording import Recording
from bayesglm.recording.steps import measure_steps

LEVELS = [float(level) for level in range(-100, 101, 25)]


def _cell(steady_mV: Callable[[float], float], slow_mV: float = 0.0, seed: int = 5) -> Recording:
    """Return a cell that settles at ``steady_mV(level_pA)``, on a slowly wandering baseline."""
    rng = np.random.default_rng(seed)
    pairs = []
    for level in LEVELS:
        current = step_current(level)
        voltage = np.full(len(current), REST_MV)
        voltage[2000:7000] += steady_mV(level) * (1 - np.exp(-np.arange(5000) * 0.1 / 20))
        # One value before the steady stretch and one in it: the baseline wanders in between.
        wander = slow_mV * rng.standard_normal(2)
        voltage[:2000] += wander[0]
        voltage[2000:] += wander[1]
        pairs.append((current, voltage))
    return recording_of(pairs)


def _range_pA(recording: Recording) -> tuple[int, int] | None:
    found = linear_range(measure_steps(recording))
    return found and (round(found.lower_nA * 1e3), round(found.upper_nA * 1e3))


def test_a_linear_cell_is_linear_everywhere() -> None:
    found = linear_range(measure_steps(rc_recording(LEVELS, series_MOhm=10)))
    assert found is not None
    assert found.complete
    assert (found.lower_nA, found.upper_nA) == pytest.approx((-0.1, 0.1))
    assert found.resistance_MOhm == pytest.approx(110, abs=1e-3)
    assert found.departure_mV == pytest.approx(0, abs=1e-3)


@pytest.mark.parametrize(
    ("steady_mV", "expected"),
    [
        # Resistance doubles above rest: the two halves are linear, and equally wide.
        (lambda level: 0.1 * level if level < 0 else 0.2 * level, {(-100, 0), (0, 100)}),
        # Next to no more deflection beyond −50 pA, as by a strong inward rectifier.
        (lambda level: 0.1 * max(level, -50), {(-50, 100)}),
        # A persistent inward current from 75 pA on.
        (lambda level: 0.1 * level + (6 if level >= 75 else 0), {(-100, 50)}),
        # 10 % more resistance at one end than at the other is linear enough.
        (lambda level: 0.1 * level * (1 + 0.0005 * level), {(-100, 100)}),
    ],
    ids=["rectifies at rest", "inward rectifier", "persistent current", "nearly linear"],
)
def test_the_range_ends_where_the_cell_bends(
    steady_mV: Callable[[float], float], expected: set[tuple[int, int]]
) -> None:
    assert _range_pA(_cell(steady_mV)) in expected


def test_levels_at_which_the_cell_spikes_are_not_linear() -> None:
    recording = rc_recording(LEVELS)
    sweeps = list(recording.sweeps)
    sweeps[6] = replace(sweeps[6], spikes=np.array([5000]))  # at 50 pA
    assert _range_pA(replace(recording, sweeps=tuple(sweeps))) == (-100, 25)


def test_a_level_is_out_if_the_cell_spikes_in_any_of_its_steps() -> None:
    recording = rc_recording([*LEVELS, 50.0])
    sweeps = list(recording.sweeps)
    sweeps[6] = replace(sweeps[6], spikes=np.array([5000]))
    assert _range_pA(replace(recording, sweeps=tuple(sweeps))) == (-100, 25)


@pytest.mark.parametrize("seed", range(5))
def test_a_wandering_baseline_does_not_cut_a_linear_cell_short(seed: int) -> None:
    recording = _cell(lambda level: 0.1 * level, slow_mV=0.5, seed=seed)
    assert deflection_noise_mV(measure_steps(recording)) == pytest.approx(0.7, rel=0.6)
    assert _range_pA(recording) == (-100, 100)


def test_noise_does_not_hide_a_strong_nonlinearity() -> None:
    recording = _cell(lambda level: 0.1 * min(level, 25) + 0.4 * max(level - 25, 0), slow_mV=0.5)
    found = _range_pA(recording)
    assert found is not None
    assert found[1] <= 25


def test_one_level_or_spikes_next_to_rest_propose_nothing() -> None:
    assert linear_range(measure_steps(rc_recording([-100]))) is None
    recording = rc_recording([50, 100])
    sweeps = (replace(recording.sweeps[0], spikes=np.array([5000])), recording.sweeps[1])
    assert linear_range(measure_steps(replace(recording, sweeps=sweeps))) is None

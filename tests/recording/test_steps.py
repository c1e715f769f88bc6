"""Measures of steps against an RC membrane in closed form and a real cell."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from rc_cell import R_MOHM, REST_MV, TAU_MS, rc_recording, rc_voltage, recording_of, step_current
from scipy import stats

from bayesglm.errors import InputError
from bayesglm.recording.reading import read_recording
from bayesglm.recording.recording import Recording, TimeJump
from bayesglm.recording.settings import RecordingSection
from bayesglm.recording.spikes import detect_spikes
from bayesglm.recording.steps import (
    input_resistance_by_level,
    mean_interval,
    measure_steps,
    membrane_time_constant,
)

REAL_CELL = Path(__file__).parents[1] / "data" / "cell_a_steps.csv.gz"


@pytest.fixture(scope="module")
def real_cell() -> Recording:
    return detect_spikes(read_recording(REAL_CELL), RecordingSection())


def test_the_simulator_gives_the_textbook_values() -> None:
    voltage = rc_voltage(step_current(100))
    at_ms = np.array([5, 10, 20, 40, 60, 100])
    expected = [-67.788008, -66.065307, -63.678794, -61.353353, -60.497871, -60.067379]
    assert voltage[2000 + at_ms * 10] == pytest.approx(expected, abs=1e-6)


def test_resistance_time_constant_and_series_jump_of_an_rc_cell() -> None:
    recording = rc_recording([-100, -50, 50], series_MOhm=15)
    measures = measure_steps(recording)
    # Over 400 ms of 20 ms each the membrane is settled to 1e-7 mV.
    for one in measures.levels:
        assert one.steady_MOhm.mean == pytest.approx(R_MOHM + 15, abs=1e-4)
        assert one.peak_MOhm.mean == pytest.approx(R_MOHM + 15, abs=1e-4)
    # The straight line misses the curvature R/(2 tau²) times 0.24 ms².
    assert measures.series_MOhm == pytest.approx([15, 15, 15], abs=0.05)
    assert measures.baselines_mV == pytest.approx([REST_MV] * 3, abs=1e-9)
    assert membrane_time_constant(recording) == pytest.approx(TAU_MS, rel=1e-4)


def test_measures_hold_under_noise_within_their_errors() -> None:
    recording = rc_recording([-100] * 12, series_MOhm=15, noise_mV=0.3)
    measures = measure_steps(recording)
    (level,) = measures.levels
    # Steady over 1,000 samples, baseline over 500: sd of one deflection 0.3·√(3/1000) mV.
    assert level.steady_MOhm.sd == pytest.approx(0.3 * np.sqrt(3 / 1000) / 0.1, rel=0.6)
    assert level.steady_MOhm.mean == pytest.approx(115, abs=0.3)
    jumps = mean_interval(measures.series_MOhm)
    assert jumps.mean == pytest.approx(15, abs=4 * jumps.sd / np.sqrt(12))
    assert membrane_time_constant(recording) == pytest.approx(TAU_MS, rel=0.05)


def test_the_holding_current_is_taken_off_the_level() -> None:
    current = step_current(-120, holding_pA=-20)
    (level,) = measure_steps(recording_of([(current, rc_voltage(current))])).levels
    assert level.level_nA == pytest.approx(-0.12)
    assert level.change_nA == pytest.approx(-0.1)
    assert level.steady_MOhm.mean == pytest.approx(R_MOHM, abs=1e-4)


def test_sag_shows_as_a_peak_above_the_steady_resistance() -> None:
    current = step_current(-100)
    sag = np.zeros(len(current))
    sag[2000:7000] = 3 * (1 - np.exp(-np.arange(5000) * 0.1 / 60))
    recording = recording_of([(current, rc_voltage(current) + sag)])
    (level,) = input_resistance_by_level(recording)
    assert level.steady_MOhm.mean == pytest.approx(70, abs=0.5)
    # The deflection 10(1 − exp(−t/20)) − 3(1 − exp(−t/60)) turns at t = 30 ln 10.
    assert level.peak_MOhm.mean == pytest.approx(76.32, abs=0.01)


def test_a_spike_in_a_step_or_shortly_before_it_makes_it_unfit() -> None:
    recording = rc_recording([-100, -100, 50])
    sweeps = list(recording.sweeps)
    sweeps[1] = replace(sweeps[1], spikes=np.array([1500]))
    sweeps[2] = replace(sweeps[2], spikes=np.array([5000]))
    measures = measure_steps(replace(recording, sweeps=tuple(sweeps)))
    assert [one.quiet for one in measures.steps] == [True, False, False]
    below, above = measures.levels
    assert (below.steady_MOhm.n, below.spikes) == (1, False)
    assert (above.steady_MOhm.n, above.spikes) == (0, True)
    assert np.isnan(above.steady_MOhm.mean)


def test_steps_with_missing_left_out_or_jumping_samples_are_not_measured() -> None:
    recording = rc_recording([-100, -100, -100, -50])
    missing, left_out, jumping, whole = recording.sweeps
    voltage = missing.voltage.copy()
    voltage[3000] = np.nan
    keep = left_out.keep.copy()
    keep[:1990] = False
    sweeps = (
        replace(missing, voltage=voltage),
        replace(left_out, keep=keep),
        replace(jumping, jumps=(TimeJump(5000, 4000, 399.9, 500.0),)),
        whole,
    )
    measures = measure_steps(replace(recording, sweeps=sweeps))
    assert [one.step.sweep for one in measures.steps] == [3]
    assert np.isnan(measures.series_MOhm).tolist() == [True, True, True, False]


def test_without_steps_nothing_is_measured() -> None:
    current = 0.05 * np.random.default_rng(4).standard_normal(10_000)
    recording = recording_of([(current, rc_voltage(current))])
    assert measure_steps(recording).levels == ()
    assert input_resistance_by_level(recording) == ()
    assert membrane_time_constant(recording) is None


def test_a_drifting_voltage_has_no_time_constant() -> None:
    current = step_current(-100)
    drift = np.zeros(len(current))
    drift[2000:7000] = -np.linspace(0, 10, 5000)
    assert membrane_time_constant(recording_of([(current, REST_MV + drift)])) is None


def test_the_time_constant_comes_from_depolarising_steps_where_there_are_no_others() -> None:
    assert membrane_time_constant(rc_recording([50, 100])) == pytest.approx(TAU_MS, rel=1e-4)


def test_coarse_sampling_gives_no_series_jump() -> None:
    current = step_current(-100, step_ms=0.5)
    recording = recording_of([(current, rc_voltage(current, 0.5, 15))], step_ms=0.5)
    measures = measure_steps(recording)
    assert np.isnan(measures.series_MOhm).all()
    assert measures.levels[0].steady_MOhm.mean == pytest.approx(115, abs=1e-4)


def test_the_interval_is_the_t_interval() -> None:
    values = np.array([1.0, 2.0, 4.0, np.nan])
    found = mean_interval(values, 0.9)
    expected = stats.ttest_1samp(values[:3], 0).confidence_interval(0.9)
    assert (found.lower, found.upper) == pytest.approx((expected.low, expected.high))
    assert found.n == 3
    assert np.isnan(mean_interval([1.0]).lower)
    assert mean_interval([]).n == 0


def test_spikes_have_to_be_looked_for_first() -> None:
    recording = rc_recording([-100])
    bare = replace(recording, sweeps=(replace(recording.sweeps[0], spikes=None),))
    with pytest.raises(InputError, match="cell: sweep 0: spikes were not looked for; detect them"):
        measure_steps(bare)


def test_the_real_cell(real_cell: Recording) -> None:
    # Measured beforehand, by hand, on the same trace.
    measures = measure_steps(real_cell)
    lowest = measures.levels[0]
    assert lowest.level_nA == pytest.approx(-0.1)
    assert lowest.steady_MOhm.mean == pytest.approx(110, abs=4)
    assert lowest.peak_MOhm.mean == pytest.approx(141, abs=4)
    assert len(measures.steps) == 48
    assert np.mean(measures.baselines_mV) == pytest.approx(-62.1, abs=0.2)
    # By hand, from the voltage up to 1 ms after the onset, 13–16 MΩ; less what the membrane
    # itself charges by then, 2–3 MΩ.
    assert np.isfinite(measures.series_MOhm).all()
    assert 11 < np.mean(measures.series_MOhm) < 16
    tau = membrane_time_constant(real_cell)
    assert tau is not None
    assert 25 < tau < 45

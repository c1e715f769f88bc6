"""Repeats of a current, and the variance they let one explain, against known signal and noise."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from numpy.typing import NDArray
from rc_cell import rc_recording, rc_voltage, recording_of
from scipy.signal import lfilter

from bayesglm.recording.reading import read_recording
from bayesglm.recording.recording import Recording
from bayesglm.recording.repeats import (
    Stretch,
    explainable_variance,
    repeated_current,
    repeats_row,
)
from bayesglm.recording.settings import RecordingSection, Settings
from bayesglm.recording.spikes import detect_spikes

FloatArray = NDArray[np.float64]
SWEEP_AND_RAMP = Path(__file__).parents[1] / "data" / "cell_a_sweep_and_ramp.csv.gz"


def _coloured(rng: np.random.Generator, shape: tuple[int, ...], tau: float) -> FloatArray:
    """Noise of unit variance with an exponential autocorrelation of `tau` samples."""
    keep = np.exp(-1 / tau)
    white = rng.normal(0, np.sqrt(1 - keep**2), (*shape[:-1], shape[-1] + 20 * round(tau)))
    out: FloatArray = lfilter([1.0], [1.0, -keep], white, axis=-1)[..., 20 * round(tau) :]
    return out


def _kept(voltage: FloatArray) -> NDArray[np.bool_]:
    return np.ones(voltage.shape, dtype=np.bool_)


def _fluctuating(seeds: list[int], seconds: int = 1) -> Recording:
    """Sweeps of fluctuating current, one for each seed; equal seeds give equal currents."""
    pairs = []
    for k, seed in enumerate(seeds):
        current = 0.05 * np.random.default_rng(seed).standard_normal(seconds * 10_000)
        noise = np.random.default_rng(100 + k).standard_normal(len(current))
        pairs.append((current, rc_voltage(current) + 0.1 * noise))
    return recording_of(pairs)


@pytest.mark.parametrize(("n_repeats", "seconds", "signal_mV"), [(2, 10, 1.0), (3, 30, 2.0)])
def test_the_share_is_that_of_the_signal_and_its_interval_covers(
    n_repeats: int, seconds: int, signal_mV: float
) -> None:
    truth = signal_mV**2 / (signal_mV**2 + 1)
    rng = np.random.default_rng(2)
    found = []
    for _ in range(60):
        signal = signal_mV * _coloured(rng, (seconds * 1000,), 15)
        noise = _coloured(rng, (n_repeats, seconds * 1000), 25)
        offsets = rng.normal(size=(n_repeats, 1))
        voltage = -65 + signal + noise + offsets
        found.append(explainable_variance(voltage, _kept(voltage), 1000))
    share = np.array([one.share for one in found])
    assert share.mean() == pytest.approx(truth, abs=4 * share.std() / np.sqrt(60))
    assert share.std() < 0.05
    covered = sum(one.lower <= truth <= one.upper for one in found)
    assert covered >= 46  # of 60 at 90 %: fewer in 1 of 1500
    assert {one.by for one in found} == {"blocks"}


def test_in_short_sweeps_repeats_are_left_out_in_turn() -> None:
    rng = np.random.default_rng(3)
    signal = 2 * _coloured(rng, (1500,), 15)
    noises = _coloured(rng, (80, 5, 1500), 25)
    truth = signal.var() / (signal.var() + noises.var(axis=-1).mean())
    found = [explainable_variance(signal + noise, _kept(noise), 1000) for noise in noises]
    assert {one.by for one in found} == {"repeats"}
    assert (
        sum(one.lower <= truth <= one.upper for one in found) >= 62
    )  # of 80 at 90 %: fewer in 1 of 3500


def test_the_estimate_equals_the_formula() -> None:
    """Sahani & Linden (2003): (N·P(mean) − mean P)/(N − 1), over the mean power."""
    voltage = np.random.default_rng(4).normal(size=(4, 3000)) + np.sin(np.arange(3000) / 30)
    n = len(voltage)
    total = voltage.var(axis=1).mean()
    signal = (n * voltage.mean(axis=0).var() - total) / (n - 1)
    found = explainable_variance(voltage, _kept(voltage), 1000)
    assert found.share == pytest.approx(signal / total, rel=1e-10)


def test_noise_alone_explains_nothing_and_no_noise_everything() -> None:
    rng = np.random.default_rng(5)
    noise = explainable_variance(noise := _coloured(rng, (3, 20_000), 25), _kept(noise), 1000)
    assert noise.lower < 0 < noise.upper
    signal = np.tile(_coloured(rng, (20_000,), 25), (3, 1))
    assert explainable_variance(signal, _kept(signal), 1000).share == pytest.approx(1)


def test_samples_left_out_of_one_repeat_are_left_out_of_all() -> None:
    rng = np.random.default_rng(6)
    voltage = _coloured(rng, (20_000,), 15) + _coloured(rng, (3, 20_000), 25)
    keep = _kept(voltage)
    keep[1, 4000:9000] = False
    spoilt = voltage.copy()
    spoilt[1, 4000:9000] = 1e6
    spoilt[1, 5000] = np.nan
    cut = np.delete(voltage, np.arange(4000, 9000), axis=1)
    found = explainable_variance(spoilt, keep, 1000)
    assert found.share == pytest.approx(explainable_variance(cut, _kept(cut), 1000).share)


def test_too_few_repeats_or_samples_have_no_share_or_no_interval() -> None:
    one = np.random.default_rng(7).normal(size=(1, 5000))
    assert np.isnan(explainable_variance(one, _kept(one), 1000).share)
    two = np.random.default_rng(7).normal(size=(2, 5000))
    found = explainable_variance(two, _kept(two), 1000)
    assert np.isfinite(found.share)
    assert np.isnan(found.lower)
    assert found.by == ""
    assert np.isnan(explainable_variance(two, ~_kept(two), 1000).share)
    still = np.full((3, 5000), -65.0)
    assert np.isnan(explainable_variance(still, _kept(still), 1000).share)


def test_sweeps_of_one_current_are_found() -> None:
    groups = repeated_current(_fluctuating([1, 2, 1, 3, 2, 1]))
    assert [[one.sweep for one in group] for group in groups] == [[0, 2, 5], [1, 4]]
    assert repeated_current(_fluctuating([1, 2, 3])) == ()


def test_constant_currents_are_no_repeats_nor_are_sweeps_with_defects() -> None:
    still = (np.full(5000, 0.1), np.full(5000, -60.0))
    assert repeated_current(recording_of([still, still])) == ()
    recording = _fluctuating([1, 1])
    current = recording.sweeps[1].current.copy()
    current[7] = np.nan
    broken = replace(recording.sweeps[1], current=current)
    assert repeated_current(replace(recording, sweeps=(recording.sweeps[0], broken))) == ()


def test_a_current_frozen_inside_a_sweep_is_found_at_whole_seconds_only() -> None:
    frozen = _fluctuating([1]).sweeps[0].current
    other = _fluctuating([2]).sweeps[0].current
    whole = np.concatenate([frozen, other, frozen])
    recording = recording_of([(whole, rc_voltage(whole))])
    assert repeated_current(recording) == ((Stretch(0, 0, 10_000), Stretch(0, 20_000, 30_000)),)
    assert repeats_row(recording, Settings()).value.startswith("2 blocks of 1 s in sweep 0 have")
    # Blind spot: a period that is no whole number of seconds.
    odd = np.concatenate([frozen, other[:5000], frozen, other[5000:]])
    assert repeated_current(recording_of([(odd, rc_voltage(odd))])) == ()


def test_a_test_pulse_in_every_sweep_is_no_repeat() -> None:
    levels = [-100.0, -50.0, 50.0]
    pulse = np.zeros(10_000)
    pulse[3000:6000] = -0.1
    pairs = []
    for one in rc_recording(levels).sweeps:
        current = np.concatenate([pulse, one.current])
        pairs.append((current, rc_voltage(current)))
    assert repeated_current(recording_of(pairs)) == ()


def test_the_row_names_the_groups_and_judges_the_largest() -> None:
    row = repeats_row(_fluctuating([1, 2, 1, 3, 2, 1]), Settings())
    assert row.verdict == "passed"
    assert row.value.startswith(
        "2 currents are given more than once (sweeps 0, 2, 5; sweeps 1, 4); "
        "explainable variance of the voltage in sweeps 0, 2, 5: "
    )
    assert "jackknife over repeats" in row.value
    assert "count once as a stimulus" in row.advice
    none = repeats_row(_fluctuating([1, 2]), Settings())
    assert (none.value, none.advice) == ("no current is given twice", "")


def _shown(recording: Recording) -> float:
    """The explainable variance that the row names, %."""
    return float(repeats_row(recording, Settings()).value.split("voltage: ")[1].split(" %")[0])


def test_spike_windows_are_left_out() -> None:
    recording = _fluctuating([1, 1, 1], seconds=10)
    plain = _shown(recording)
    voltage = recording.sweeps[1].voltage.copy()
    voltage[4992:5040] = 30.0  # the window is from 1 ms before the spike to 5 ms after
    spike = np.array([5000])
    spiking = replace(recording.sweeps[1], voltage=voltage, spikes=spike)
    sweeps = (recording.sweeps[0], spiking, recording.sweeps[2])
    # 6 ms of 10 s are gone, and so is the spike.
    assert _shown(replace(recording, sweeps=sweeps)) == pytest.approx(plain, abs=1)
    unseen = replace(spiking, spikes=np.empty(0, dtype=np.int64))
    sweeps = (recording.sweeps[0], unseen, recording.sweeps[2])
    assert _shown(replace(recording, sweeps=sweeps)) < plain - 20


def test_the_real_cell() -> None:
    """Its sine sweep, given three times; beforehand about 0.78 of the variance."""
    recording = detect_spikes(read_recording(SWEEP_AND_RAMP), RecordingSection())
    row = repeats_row(recording, Settings())
    assert row.value.startswith(
        "sweeps 0–2 have the same current; explainable variance of the voltage: 78 % (90 % interval"
    )
    assert "jackknife over 1 s blocks" in row.value

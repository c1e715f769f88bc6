"""Spikes on made-up traces with a known answer, and on a real one."""

from pathlib import Path

import numpy as np
import pytest

from bayesglm.recording.reading import read_recording
from bayesglm.recording.recording import Recording, Sweep
from bayesglm.recording.settings import RecordingSection
from bayesglm.recording.spikes import detect_spikes, find_spikes

DATA = Path(__file__).parents[1] / "data" / "cell_a_steps.csv.gz"
STEP = 0.1
CROSSING = RecordingSection()
PEAK = RecordingSection(spike_moment="peak")


def trace(n: int = 400) -> np.ndarray:
    return np.full(n, -65.0)


def add_spike(voltage: np.ndarray, at: int, top: float = 30.0) -> None:
    """Rise over 5 samples from −65 mV to `top` at sample `at`, and fall over 10."""
    voltage[at - 5 : at + 1] = np.linspace(-65, top, 6)
    voltage[at : at + 11] = np.linspace(top, -65, 11)


def test_crossing_and_peak() -> None:
    voltage = trace()
    add_spike(voltage, 100)
    add_spike(voltage, 250)
    # −65, −46, −27, −8: the third sample of the rise is the first at or above −10 mV.
    assert find_spikes(voltage, STEP, CROSSING).tolist() == [98, 248]
    assert find_spikes(voltage, STEP, PEAK).tolist() == [100, 250]


def test_no_spikes() -> None:
    assert find_spikes(trace(), STEP, CROSSING).tolist() == []
    assert find_spikes(np.full(50, np.nan), STEP, CROSSING).tolist() == []


@pytest.mark.parametrize("moment", [CROSSING, PEAK])
def test_too_low_or_too_slow_is_no_spike(moment: RecordingSection) -> None:
    low = trace()
    add_spike(low, 100, top=-12.0)
    assert find_spikes(low, STEP, moment).tolist() == []
    slow = -65 + 70 * np.sin(np.linspace(0, np.pi, 4000))  # at most 0.6 mV/ms
    assert find_spikes(slow, STEP, moment).tolist() == []


def test_noise_of_single_samples_is_no_rise() -> None:
    slow = -65 + 70 * np.sin(np.linspace(0, np.pi, 4000))
    slow[::2] += 1.5  # 15 mV/ms between neighbours
    assert find_spikes(slow, STEP, CROSSING).tolist() == []


def test_dead_time_keeps_the_higher_peak() -> None:
    voltage = trace()
    add_spike(voltage, 100, top=20.0)
    voltage[104] = 35.0
    assert find_spikes(voltage, STEP, PEAK).tolist() == [104]


def test_peaks_without_return_share_their_crossing() -> None:
    voltage = trace()
    add_spike(voltage, 100)
    voltage[104:120] = 0.0
    add = np.linspace(0, 40, 6)
    voltage[120:126] = add
    voltage[126:136] = np.linspace(35, -65, 10)
    assert find_spikes(voltage, STEP, CROSSING).tolist() == [98]
    assert find_spikes(voltage, STEP, PEAK).tolist() == [100, 125]


def test_rise_of_the_spike_before_is_not_the_rise_of_a_slow_bump() -> None:
    voltage = trace()
    add_spike(voltage, 100)
    voltage[104:120] = 0.0
    voltage[120:131] = np.linspace(0, 4, 11)  # 4 mV/ms
    voltage[131:141] = np.linspace(3, -65, 10)
    assert find_spikes(voltage, STEP, PEAK).tolist() == [100]


def test_clipped_spike_counts_with_the_start_of_its_top() -> None:
    voltage = trace()
    add_spike(voltage, 100)
    voltage = np.minimum(voltage, 5.0)
    long = trace()
    long[100:200] = 5.0  # clipped for longer than the rise is looked for
    (crossing,) = find_spikes(voltage, STEP, CROSSING)
    (top,) = find_spikes(voltage, STEP, PEAK)
    assert crossing == 98
    assert top == np.argmax(voltage)
    assert find_spikes(long, STEP, PEAK).tolist() == [100]


def test_missing_voltage_is_no_spike() -> None:
    voltage = trace()
    add_spike(voltage, 100)
    add_spike(voltage, 250)
    voltage[93:112] = np.nan
    assert find_spikes(voltage, STEP, CROSSING).tolist() == [248]
    voltage[250] = np.nan  # the peak is lost, its flank still stands out
    assert find_spikes(voltage, STEP, CROSSING).tolist() == [248]


def test_coarse_step() -> None:
    voltage = trace(50)
    voltage[20] = 10.0
    assert find_spikes(voltage, 1.0, CROSSING).tolist() == [20]


def test_given_spikes_are_left_alone() -> None:
    given = np.array([3], dtype=np.int64)
    sweep = Sweep(0, np.zeros(9), np.zeros(9), np.ones(9, dtype=bool), spikes=given)
    recording = Recording("a", STEP, (sweep,), spikes_from="spike column of the file")
    assert detect_spikes(recording, CROSSING) is recording


def test_origin_is_told_in_words() -> None:
    sweep = Sweep(0, np.zeros(9), np.zeros(9), np.ones(9, dtype=bool))
    recording = Recording("a", STEP, (sweep,))
    crossing = detect_spikes(recording, CROSSING).spikes_from
    assert "peaks of at least −10 mV with a rise of at least 10 mV/ms" in crossing
    assert "1 ms apart" in crossing
    assert crossing.endswith("the first sample at or above −10 mV on the rise")
    assert detect_spikes(recording, PEAK).spikes_from.endswith("the sample of the peak")


def test_real_recording_has_as_many_spikes_as_upward_crossings() -> None:
    recording = detect_spikes(read_recording(DATA), CROSSING)
    assert recording.n_spikes == 117
    for sweep in recording.sweeps:
        above = sweep.voltage >= -10
        crossings = np.flatnonzero(above[1:] & ~above[:-1]) + 1
        np.testing.assert_array_equal(sweep.spikes, crossings)
    assert detect_spikes(read_recording(DATA), PEAK).n_spikes == 117

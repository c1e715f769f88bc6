"""Where the spikes are: peaks of the voltage that are high enough and rise steeply enough."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from scipy.signal import find_peaks

from bayesglm.recording.recording import FloatArray, IntArray, Recording
from bayesglm.recording.settings import RecordingSection
from bayesglm.recording.wording import minus

#: The rise is looked for in this time before the peak, ms.
RISE_MS = 5.0
#: The slope is taken over this time (at least one step), so that the noise of single samples is
#: no rise, ms.
SLOPE_SPAN_MS = 0.2


def detect_spikes(recording: Recording, settings: RecordingSection) -> Recording:
    """Find the spikes of every sweep, unless the recording brings its own.

    A spike is a peak of at least `spike_height_mV` whose rise, in the 5 ms before it, is at least
    `spike_slope_mV_per_ms` over 0.2 ms; of two peaks closer than `spike_dead_time_ms` only the
    higher counts. A clipped spike counts with the first sample of its flat top. A missing voltage
    is never part of a spike.

    Parameters
    ----------
    recording
        Voltage in mV.
    settings
        Height, slope, dead time and moment of a spike.

    Returns
    -------
    Recording
        The same where spikes are given; else with `spikes` of every sweep and `spikes_from`.
    """
    if all(sweep.spikes is not None for sweep in recording.sweeps):
        return recording
    return replace(
        recording,
        sweeps=tuple(
            replace(sweep, spikes=find_spikes(sweep.voltage, recording.step_ms, settings))
            for sweep in recording.sweeps
        ),
        spikes_from=describe(settings),
    )


def find_spikes(voltage: FloatArray, step_ms: float, settings: RecordingSection) -> IntArray:
    """Find the spikes of one stretch of voltage.

    Parameters
    ----------
    voltage
        Voltage in mV, shape (n,); NaN where missing.
    step_ms
        Sampling step in ms.
    settings
        Height, slope, dead time and moment of a spike.

    Returns
    -------
    array of int
        Index of the sample of each spike, strictly increasing, shape (n_spikes,).
    """
    height = settings.spike_height_mV
    # Below everything, a missing sample can neither be a peak nor lie within a spike.
    filled = np.where(np.isnan(voltage), -np.inf, voltage)
    _, found = find_peaks(
        filled,
        height=height,
        distance=max(1, round(settings.spike_dead_time_ms / step_ms)),
        plateau_size=1,
    )
    peaks = np.asarray(found["left_edges"], dtype=np.int64)
    steep = _rise(voltage, peaks, step_ms) >= settings.spike_slope_mV_per_ms
    peaks = peaks[steep]
    if settings.spike_moment == "peak":
        return peaks
    # A missing sample is neither below nor above: the rise is looked for across it, and the
    # crossing is the first sample seen above.
    indices = np.arange(len(voltage))
    last_below = np.maximum.accumulate(np.where(voltage < height, indices, -1))
    above = np.where(voltage >= height, indices, len(voltage))
    next_above = np.minimum.accumulate(above[::-1])[::-1]
    # Two peaks without a return below the height share their crossing.
    crossings: IntArray = np.unique(next_above[last_below[peaks] + 1])
    return crossings


def describe(settings: RecordingSection) -> str:
    """Return in words how spikes are found and when they are said to happen."""
    moment = (
        f"the first sample at or above {minus(f'{settings.spike_height_mV:g}')} mV on the rise"
        if settings.spike_moment == "crossing"
        else "the sample of the peak"
    )
    return (
        f"peaks of at least {minus(f'{settings.spike_height_mV:g}')} mV with a rise of at least "
        f"{settings.spike_slope_mV_per_ms:g} mV/ms in the {RISE_MS:g} ms before, at least "
        f"{settings.spike_dead_time_ms:g} ms apart; a spike's time is {moment}"
    )


def _rise(voltage: FloatArray, peaks: IntArray, step_ms: float) -> FloatArray:
    """Return the steepest rise before each peak, mV/ms, shape (n_peaks,); -inf where none is."""
    span = max(1, round(SLOPE_SPAN_MS / step_ms))
    slopes = (voltage[span:] - voltage[:-span]) / (span * step_ms)
    slopes[np.isnan(slopes)] = -np.inf
    window = max(1, round(RISE_MS / step_ms))
    # The rise of the peak before is not the rise of this one.
    begins = np.maximum(peaks - window, np.concatenate([[0], peaks[:-1]]))
    return np.array(
        [
            slopes[begin:peak].max(initial=-np.inf)
            for begin, peak in zip(begins, peaks, strict=True)
        ],
        dtype=np.float64,
    )

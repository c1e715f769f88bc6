"""Simulated recordings with a known truth: the escape-noise neuron with correlated noise.

The membrane follows the model of the methods page, spikes are drawn from the escape rate of the
noise-free membrane, and the recorded voltage adds correlated noise, synaptic-like events, an
unbalanced bridge, offsets of sweeps and the shape of the spike itself. Two options break the
model on purpose: noise that triggers spikes, and a membrane that rectifies. Nothing here is data.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from scipy.signal import fftconvolve, lfilter

from bayesglm.recording.recording import FloatArray, IntArray, Recording, Sweep


@dataclass(frozen=True, eq=False)
class Noise:
    """What is added to the membrane potential that the current did not cause.

    Attributes
    ----------
    sd_mV, time_constant_ms
        A sum of independent first-order autoregressive noises, one for each pair.
    event_rate_Hz, event_mV, event_decay_ms
        Synaptic-like events: rate, mean amplitude (exponentially distributed) and decay.
    sweep_sd_mV
        Sd of the sweeps' offsets.
    """

    sd_mV: tuple[float, ...] = (1.0,)
    time_constant_ms: tuple[float, ...] = (20.0,)
    event_rate_Hz: float = 0.0
    event_mV: float = 0.0
    event_decay_ms: float = 10.0
    sweep_sd_mV: float = 0.0


@dataclass(frozen=True, eq=False)
class Neuron:
    """A neuron with known kernels.

    Attributes
    ----------
    input
        κ at lags step, 2·step, …, MΩ/ms, shape (K,).
    after_spike
        η at lags step, 2·step, …, mV, shape (L,).
    offset_mV
        E.
    electrode_MOhm
        Resistance left in series by the bridge.
    threshold_mV, softness_mV
        θ0 and Δu of the escape rate ``exp((u − θ0)/Δu)`` per ms.
    dead_time_ms
        Time after a spike without another.
    noise
        What the current did not cause.
    noise_triggers
        Whether the escape rate follows the membrane with its noise, ``exp((u + r − θ0)/Δu)``,
        instead of the noise-free one.
    rectification_mV
        Outward rectification a: the current's deflection x from E becomes ``x/(1 + x/a)`` where
        it is positive, and never exceeds a; infinite for a linear cell.
    """

    input: FloatArray
    after_spike: FloatArray
    offset_mV: float = -65.0
    electrode_MOhm: float = 0.0
    threshold_mV: float = -50.0
    softness_mV: float = 1.5
    dead_time_ms: float = 2.0
    noise: Noise = field(default_factory=Noise)
    noise_triggers: bool = False
    rectification_mV: float = np.inf


def exponential_input(resistance_MOhm: float, tau_ms: float, lags_ms: FloatArray) -> FloatArray:
    """κ of an RC membrane, binned: ``κ_k dt = R (1 − f) f^{k−1}``, f = exp(−dt/τ), MΩ/ms.

    Lags must be step, 2·step, … ms.
    """
    step = float(lags_ms[0])
    decay = np.exp(-step / tau_ms)
    kernel: FloatArray = resistance_MOhm * (1 - decay) * decay ** (lags_ms / step - 1) / step
    return kernel


def simulate(
    neuron: Neuron,
    currents: FloatArray,
    step_ms: float,
    rng: np.random.Generator,
    name: str = "simulated",
) -> Recording:
    """Simulate a recording.

    Parameters
    ----------
    neuron
        The truth.
    currents
        Injected current, nA, shape (sweeps, n).
    step_ms
        Sampling step, ms.
    rng
        Source of randomness.
    name
        Name of the recording.

    Returns
    -------
    Recording
        With the simulated spikes.
    """
    sweeps = []
    for number, current in enumerate(currents):
        driven = membrane(neuron, current, step_ms)
        if neuron.noise_triggers:
            noise = background(neuron.noise, len(current), step_ms, rng)
            spikes, after = _spikes(neuron, driven + noise, step_ms, rng)
        else:
            spikes, after = _spikes(neuron, driven, step_ms, rng)
            noise = background(neuron.noise, len(current), step_ms, rng)
        voltage = driven + after + neuron.electrode_MOhm * current + noise
        _add_spike_shapes(voltage, spikes, step_ms)
        sweeps.append(Sweep(number, current, voltage, np.ones(len(current), np.bool_), spikes))
    return Recording(name, step_ms, tuple(sweeps), spikes_from="simulation")


def membrane(neuron: Neuron, current: FloatArray, step_ms: float) -> FloatArray:
    """Membrane potential without spikes and noise, mV, shape (n,); causal, I before = I[0]."""
    n_lags = len(neuron.input)
    past = np.concatenate([np.full(n_lags, current[0]), current[:-1]])
    convolved = fftconvolve(past, neuron.input)[n_lags - 1 : n_lags - 1 + len(current)]
    deflection = convolved * step_ms
    # Dividing by one plus a share of the positive part leaves hyperpolarisation as it is.
    rectified = deflection / (1 + np.maximum(deflection, 0.0) / neuron.rectification_mV)
    driven: FloatArray = neuron.offset_mV + rectified
    return driven


def background(noise: Noise, n: int, step_ms: float, rng: np.random.Generator) -> FloatArray:
    """Noise of one sweep, mV, shape (n,)."""
    total = np.full(n, rng.normal(0.0, noise.sweep_sd_mV) if noise.sweep_sd_mV else 0.0)
    for sd, tau in zip(noise.sd_mV, noise.time_constant_ms, strict=True):
        keep = np.exp(-step_ms / tau)
        drive = rng.normal(0.0, sd * np.sqrt(1 - keep**2), n)
        drive[0] = rng.normal(0.0, sd)
        total += lfilter([1.0], [1.0, -keep], drive)
    if noise.event_rate_Hz:
        events = rng.poisson(noise.event_rate_Hz * step_ms / 1e3, n)
        sizes = events * rng.exponential(noise.event_mV, n)
        total += lfilter([1.0], [1.0, -np.exp(-step_ms / noise.event_decay_ms)], sizes)
    return total


def _spikes(
    neuron: Neuron, driven: FloatArray, step_ms: float, rng: np.random.Generator
) -> tuple[IntArray, FloatArray]:
    """Draw spikes bin by bin; return them with the sum of after-spike kernels.

    Between spikes the rate is known, so the next spike is where the summed hazard first exceeds
    an exponential variate: the same as a draw with ``1 − exp(−λ dt)`` in each bin.
    """
    n, after = len(driven), np.zeros(len(driven))
    dead = max(1, round(neuron.dead_time_ms / step_ms))
    spikes: list[int] = []
    start, budget, look = 0, rng.exponential(), round(200 / step_ms)
    while start < n:
        here = slice(start, min(start + look, n))
        u = driven[here] + after[here]
        hazard = np.exp(np.minimum((u - neuron.threshold_mV) / neuron.softness_mV, 50.0)) * step_ms
        summed = np.cumsum(hazard)
        if summed[-1] < budget:
            budget -= summed[-1]
            start = here.stop
            continue
        spike = start + int(np.searchsorted(summed, budget))
        spikes.append(spike)
        tail = after[spike + 1 : spike + 1 + len(neuron.after_spike)]
        tail += neuron.after_spike[: len(tail)]
        start, budget = spike + dead, rng.exponential()
    return np.array(spikes, dtype=np.int64), after


def _add_spike_shapes(voltage: FloatArray, spikes: IntArray, step_ms: float) -> None:
    """Replace a spike's first milliseconds by an action potential, in place."""
    length = round(2.0 / step_ms)
    time = np.arange(length) * step_ms
    shape = 30.0 * np.exp(-time / 0.4)
    for spike in spikes:
        piece = voltage[spike : spike + length]
        piece += shape[: len(piece)] * (30.0 - voltage[spike]) / 30.0

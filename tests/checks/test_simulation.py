"""The simulator against closed forms: membrane, noise, spikes and after-spike kernels."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy.stats import kstest

from bayesglm.checks.simulation import (
    Neuron,
    Noise,
    background,
    exponential_input,
    membrane,
    simulate,
)

SILENT = Noise((), ())


def rc_neuron(step_ms: float = 0.1, **changes: object) -> Neuron:
    """R = 100 MΩ, C = 200 pF: τ = 20 ms (Johnston & Wu 1995), resting at −70 mV, silent."""
    lags = step_ms * np.arange(1, round(400 / step_ms) + 1)
    plain = Neuron(
        exponential_input(100.0, 20.0, lags),
        np.zeros(1),
        offset_mV=-70.0,
        threshold_mV=1e3,
        noise=SILENT,
    )
    return replace(plain, **changes)  # type: ignore[arg-type]


@pytest.mark.parametrize(
    ("at_ms", "voltage"),
    [
        (5, -67.788008),
        (10, -66.065307),
        (20, -63.678794),
        (40, -61.353353),
        (60, -60.497871),
        (100, -60.067379),
    ],
)
def test_step_response_of_an_rc_membrane(at_ms: float, voltage: float) -> None:
    """Closed form ``V = E + R I (1 − e^(−t/τ))`` for a step of 0.1 nA."""
    current = np.zeros(4000)
    current[1000:] = 0.1
    found = membrane(rc_neuron(), current, 0.1)
    assert found[1000 + round(at_ms / 0.1)] == pytest.approx(voltage, abs=2e-6)
    # Causal: the sample of the step still holds the past.
    assert found[1000] == pytest.approx(-70.0, abs=1e-9)


def test_gain_and_phase_of_an_rc_membrane_at_its_corner() -> None:
    """At 1/(2πτ) = 7.957747 Hz the gain is 70.710678 MΩ and the phase −45°."""
    time = 0.1 * np.arange(20000)
    omega = 1 / 20.0
    found = membrane(rc_neuron(), np.sin(omega * time), 0.1)[10000:] + 70.0
    basis = np.column_stack([np.sin(omega * time), np.cos(omega * time)])[10000:]
    a, b = np.linalg.lstsq(basis, found, rcond=None)[0]
    # A current held over bins acts half a step late: 0.14 degrees here.
    assert np.hypot(a, b) == pytest.approx(70.710678, rel=1e-3)
    assert np.degrees(np.arctan2(b, a)) == pytest.approx(-45.0, abs=0.2)


def test_held_current_is_settled_from_the_start() -> None:
    held = membrane(rc_neuron(), np.full(500, 0.1), 0.1)
    np.testing.assert_allclose(held, -60.0, atol=1e-6)


def test_kernel_is_that_of_the_continuous_membrane_in_bins() -> None:
    """``R(1 − f) f^(k−1)`` sums to R(1 − f^K) whatever the step."""
    for step in (0.05, 0.5, 1.0):
        lags = step * np.arange(1, round(100 / step) + 1)
        total = exponential_input(100.0, 20.0, lags).sum() * step
        assert total == pytest.approx(100 * (1 - np.exp(-5)), rel=1e-12)


def test_noise_is_an_ornstein_uhlenbeck_process() -> None:
    """φ = e^(−dt/τ) and the stationary variance; Euler's φ = 0.8 would fail (0.8187 is right)."""
    noise = background(Noise((2.0,), (5.0,)), 400_000, 1.0, np.random.default_rng(0))
    assert np.exp(-1 / 5) == pytest.approx(0.8187307530779818)
    phi = noise[1:] @ noise[:-1] / (noise @ noise)
    assert phi == pytest.approx(0.8187307530779818, abs=4 * np.sqrt((1 - 0.67) / 400_000))
    assert noise.std() == pytest.approx(2.0, rel=0.01)


def test_noise_is_stationary_from_the_first_sample() -> None:
    rng = np.random.default_rng(1)
    first = np.array(
        [background(Noise((1.0,), (50.0,)), 200, 0.5, rng)[[0, 199]] for _ in range(4000)]
    )
    np.testing.assert_allclose(first.std(axis=0), 1.0, atol=4 / np.sqrt(8000))


def test_noises_add_and_sweeps_have_offsets() -> None:
    rng = np.random.default_rng(2)
    noise = Noise((1.0, 2.0), (5.0, 1.0), sweep_sd_mV=3.0)
    sweeps = np.array([background(noise, 4000, 0.5, rng) for _ in range(600)])
    assert sweeps.mean(axis=1).std() == pytest.approx(3.0, rel=0.1)
    within = sweeps - sweeps.mean(axis=1, keepdims=True)
    assert within.std() == pytest.approx(np.sqrt(5.0), rel=0.02)


def test_synaptic_events_have_the_stated_mean() -> None:
    """Campbell's theorem: rate × amplitude × decay = 20/s × 0.5 mV × 10 ms = 0.1 mV."""
    noise = Noise((), (), event_rate_Hz=20.0, event_mV=0.5, event_decay_ms=10.0)
    found = background(noise, 2_000_000, 0.5, np.random.default_rng(3))
    decay = 0.5 / (1 - np.exp(-0.05))
    assert found.mean() == pytest.approx(20e-3 * 0.5 * decay, rel=0.03)
    assert found.min() >= 0


@pytest.mark.parametrize(("step_ms", "dead_ms", "mean", "cv"), [(1.0, 6.0, 15.508332, 0.644546)])
def test_intervals_at_constant_rate_with_dead_time(
    step_ms: float, dead_ms: float, mean: float, cv: float
) -> None:
    """λ = 0.1 per ms in 1 ms bins: p = 1 − e^(−0.1) and five dead bins, discrete closed form."""
    cell = rc_neuron(
        step_ms, threshold_mV=-70 + 2 * np.log(10), softness_mV=2.0, dead_time_ms=dead_ms
    )
    recording = simulate(cell, np.zeros((1, 1_000_000)), step_ms, np.random.default_rng(4))
    spikes = recording.sweeps[0].spikes
    assert spikes is not None
    intervals = np.diff(spikes)
    error = intervals.std() / np.sqrt(len(intervals))
    assert abs(intervals.mean() - mean) < 4 * error
    assert intervals.std() / intervals.mean() == pytest.approx(cv, rel=0.02)
    assert intervals.min() == dead_ms


def test_spikes_follow_the_escape_rate_of_the_noise_free_membrane() -> None:
    """Time rescaling (Brown et al. 2002) in the form exact for bins (Haslinger et al. 2010):
    ``z = Σ λ dt over silent bins − log(1 − r p)`` is exponential.
    """
    noise = Noise((3.0,), (10.0,))
    cell = rc_neuron(0.5, threshold_mV=-58.0, softness_mV=2.0, dead_time_ms=0.5, noise=noise)
    rng = np.random.default_rng(5)
    current = 0.05 + np.repeat(0.05 * rng.normal(size=(1, 20_000)), 20, axis=1)
    recording = simulate(cell, current, 0.5, rng)
    q = np.exp((membrane(cell, current[0], 0.5) + 58.0) / 2.0) * 0.5
    summed = np.concatenate([[0.0], np.cumsum(q)])
    spikes = recording.sweeps[0].spikes
    assert spikes is not None
    assert len(spikes) > 5000
    silent = summed[spikes[1:]] - summed[spikes[:-1] + 1]
    last = -np.log1p(rng.uniform(size=len(silent)) * np.expm1(-q[spikes[1:]]))
    assert kstest(1 - np.exp(-silent - last), "uniform").pvalue > 1e-3
    # The same test sees a threshold that is 0.2 mV off.
    assert kstest(1 - np.exp(-1.1 * (silent + last)), "uniform").pvalue < 1e-3


def test_after_spike_kernels_add_up_under_regular_spiking() -> None:
    """A = −5 mV, τ = 50 ms, a spike every 20 ms: −15.166224 just after, −10.166224 just before."""
    lags = 0.1 * np.arange(1, 20001)
    cell = rc_neuron(0.1, after_spike=-5 * np.exp(-lags / 50), threshold_mV=-1e4, dead_time_ms=20.0)
    recording = simulate(cell, np.zeros((1, 10_000)), 0.1, np.random.default_rng(6))
    sweep = recording.sweeps[0]
    assert sweep.spikes is not None
    assert set(np.diff(sweep.spikes)) == {200}
    last = sweep.spikes[-2]
    late = sweep.voltage[last + 30 : last + 200] + 70.0
    time = 0.1 * np.arange(30, 200)
    np.testing.assert_allclose(late * np.exp(time / 50), -15.166224, atol=1e-6)
    assert sweep.voltage[last + 199] + 70 == pytest.approx(-10.166224 * np.exp(0.1 / 50), abs=1e-6)


def test_unbalanced_bridge_and_seed() -> None:
    cell = rc_neuron(electrode_MOhm=15.0, noise=Noise((1.0,), (10.0,)))
    current = 0.1 * np.random.default_rng(7).normal(size=(2, 500))
    one, same, other = (simulate(cell, current, 0.1, np.random.default_rng(s)) for s in (1, 1, 2))
    plain = simulate(replace(cell, electrode_MOhm=0.0), current, 0.1, np.random.default_rng(1))
    for k in range(2):
        np.testing.assert_array_equal(one.sweeps[k].voltage, same.sweeps[k].voltage)
        assert np.any(one.sweeps[k].voltage != other.sweeps[k].voltage)
        jump = one.sweeps[k].voltage - plain.sweeps[k].voltage
        np.testing.assert_allclose(jump, 15 * current[k], atol=1e-9)


def test_spikes_look_like_spikes() -> None:
    """They rise above 0 mV and are over after 2 ms."""
    cell = rc_neuron(threshold_mV=-65.0, dead_time_ms=50.0)
    sweep = simulate(cell, np.full((1, 5000), 0.05), 0.1, np.random.default_rng(8)).sweeps[0]
    assert sweep.spikes is not None
    assert len(sweep.spikes) > 3
    assert np.all(sweep.voltage[sweep.spikes] == 30.0)
    assert np.all(sweep.voltage[sweep.spikes[:-1] + 21] < -60)


@pytest.mark.parametrize(("current_nA", "deflection_mV"), [(-0.2, -20.0), (0.1, 5.0), (0.4, 8.0)])
def test_rectification_compresses_depolarisation_only(
    current_nA: float, deflection_mV: float
) -> None:
    """R I = −20, 10, 40 mV and a = 10 mV: x/(1 + x/a) is −20 (as it is), 5 and 8 mV."""
    cell = rc_neuron(rectification_mV=10.0)
    held = membrane(cell, np.full(500, current_nA), 0.1)
    np.testing.assert_allclose(held, -70.0 + deflection_mV, atol=1e-6)


def test_weak_rectification_is_none() -> None:
    current = np.random.default_rng(9).normal(0.1, 0.1, 500)
    linear = membrane(rc_neuron(), current, 0.1)
    np.testing.assert_allclose(
        membrane(rc_neuron(rectification_mV=1e9), current, 0.1), linear, atol=1e-6
    )


def test_spikes_triggered_by_noise_come_when_it_is_high() -> None:
    """Weighting by exp(r/Δu) shifts a Gaussian noise of sd σ by σ²/Δu: 1/2 mV here.

    Rare spikes, so that none is kept away by the one before it; without the option the mean is 0.
    """
    noise = Noise((1.0,), (10.0,))
    found = {}
    for triggers in (False, True):
        cell = rc_neuron(
            0.5,
            threshold_mV=-70 + 2 * np.log(200),
            softness_mV=2.0,
            noise=noise,
            noise_triggers=triggers,
        )
        sweep = simulate(cell, np.zeros((1, 2_000_000)), 0.5, np.random.default_rng(10)).sweeps[0]
        assert sweep.spikes is not None
        assert len(sweep.spikes) > 3000
        # The sample before a spike: the spike's own is replaced by its shape.
        before = sweep.voltage[sweep.spikes[sweep.spikes > 0] - 1] + 70.0
        found[triggers] = before[before < 8.0].mean()
    error = 1.0 / np.sqrt(3000)
    assert found[False] == pytest.approx(0.0, abs=4 * error)
    assert found[True] == pytest.approx(0.5 * np.exp(-0.5 / 10), abs=4 * error)

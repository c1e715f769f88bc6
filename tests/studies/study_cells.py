"""Cells, noises and currents of the studies. Nothing here is data.

Kernels are made of the fitted splines, so that the basis can hold the truth; all else is as a
recording has it: an unbalanced bridge, correlated noise, levels that differ between sweeps.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.signal import lfilter

from bayesglm.checks.simulation import Neuron, Noise, exponential_input, simulate
from bayesglm.kernels.basis import KernelSpec
from bayesglm.recording.recording import FloatArray, Recording
from bayesglm.recording.settings import Settings
from bayesglm.recording.settings_input import override

STEP_MS = 0.5
INPUT = KernelSpec(150.0, 14)
AFTER_SPIKE = KernelSpec(300.0, 14)
SETTINGS = override(
    Settings(), ["kernels.input.duration_ms=150", "kernels.after_spike.duration_ms=300"]
)

#: Without the sensitivity to durations and window, which changes no band and costs most of a fit.
PLAIN_SETTINGS = override(SETTINGS, ["model.duration_grid=false", "model.window_sensitivity=false"])


@dataclass(frozen=True)
class Scenario:
    """A cell, its noise and its current.

    Attributes
    ----------
    words
        What it is.
    resistance_MOhm, tau_ms
        Of the exponential input kernel.
    after_spike
        Amplitudes in mV, decays in ms of the exponentials of η.
    bump
        Height in mV, lag and width in ms of a bump of η.
    noise
        Noise of the voltage.
    mean_nA, sd_nA, current_ms
        The current: a first-order autoregressive one.
    """

    words: str
    resistance_MOhm: float
    tau_ms: float
    after_spike: tuple[tuple[float, float], ...]
    bump: tuple[float, float, float]
    noise: Noise
    mean_nA: float
    sd_nA: float
    current_ms: float

    @property
    def noise_words(self) -> str:
        """The noise in words."""
        pairs = zip(self.noise.sd_mV, self.noise.time_constant_ms, strict=True)
        parts = [f"{sd:g} mV ({tau:g} ms)" for sd, tau in pairs]
        if self.noise.event_rate_Hz:
            parts.append(
                f"events of {self.noise.event_mV:g} mV on average, {self.noise.event_rate_Hz:g} "
                f"a second, decay {self.noise.event_decay_ms:g} ms"
            )
        return ", ".join(parts)

    @property
    def offset_mV(self) -> float:
        """The offset: rest, and the mean of the events where there are any (Campbell)."""
        decay = STEP_MS / (1 - np.exp(-STEP_MS / self.noise.event_decay_ms))
        return REST_MV + self.noise.event_rate_Hz / 1e3 * self.noise.event_mV * decay


REST_MV = -65.0
PYRAMIDAL = ((-6.0, 8.0), (-8.0, 60.0))
USUAL = Noise((1.0, 0.5), (20.0, 3.0), sweep_sd_mV=0.3)

SCENARIOS = {
    "pyramidal": Scenario(
        "R 100 MΩ, τ 20 ms, η −6 mV (8 ms) −8 mV (60 ms)",
        100.0, 20.0, PYRAMIDAL, (0.0, 70.0, 25.0), USUAL, 0.10, 0.15, 10.0,
    ),
    "interneuron": Scenario(
        "R 160 MΩ, τ 11 ms, η −9 mV (14 ms), then +1.4 mV at 70 ms",
        160.0, 11.0, ((-9.0, 14.0),), (1.4, 70.0, 25.0), USUAL, 0.06, 0.10, 10.0,
    ),
    "slow noise": Scenario(
        "as pyramidal, noise of 2 mV and 50 ms",
        100.0, 20.0, PYRAMIDAL, (0.0, 70.0, 25.0),
        Noise((2.0, 0.5), (50.0, 3.0), sweep_sd_mV=0.3), 0.10, 0.15, 10.0,
    ),
    "shot noise": Scenario(
        "as pyramidal, noise mostly of depolarising events",
        100.0, 20.0, PYRAMIDAL, (0.0, 70.0, 25.0),
        Noise((0.3,), (3.0,), 15.0, 1.0, 15.0, sweep_sd_mV=0.3), 0.10, 0.15, 10.0,
    ),
    "white noise": Scenario(
        "as pyramidal, white noise",
        100.0, 20.0, PYRAMIDAL, (0.0, 70.0, 25.0), Noise((1.0,), (1e-3,)), 0.10, 0.15, 10.0,
    ),
    "triggering noise": Scenario(
        "as pyramidal, noise of 1.7 mV and 20 ms",
        100.0, 20.0, PYRAMIDAL, (0.0, 70.0, 25.0), Noise((1.7,), (20.0,)), 0.10, 0.15, 10.0,
    ),
}  # fmt: skip


def kernel_in_basis(spec: KernelSpec, values: FloatArray) -> FloatArray:
    """The kernel nearest to `values` that the splines can make, at lags step, 2·step, …"""
    basis = spec.evaluate(spec.lags(STEP_MS))
    return basis @ np.linalg.lstsq(basis, values, rcond=None)[0]


def make_neuron(scenario: Scenario) -> Neuron:
    """The truth of a scenario."""
    lags = AFTER_SPIKE.lags(STEP_MS)
    height, centre, width = scenario.bump
    eta = height * np.exp(-0.5 * ((lags - centre) / width) ** 2)
    for size, decay in scenario.after_spike:
        eta = eta + size * np.exp(-lags / decay) * (1 - lags / AFTER_SPIKE.duration_ms)
    kappa = exponential_input(scenario.resistance_MOhm, scenario.tau_ms, INPUT.lags(STEP_MS))
    return Neuron(
        input=kernel_in_basis(INPUT, kappa),
        after_spike=kernel_in_basis(AFTER_SPIKE, eta),
        offset_mV=REST_MV,
        electrode_MOhm=5.0,
        threshold_mV=-48.0,
        softness_mV=1.5,
        noise=scenario.noise,
    )


def make_currents(
    scenario: Scenario, seconds: float, rng: np.random.Generator, sweeps: int = 4
) -> FloatArray:
    """Currents of a scenario in sweeps of equal length, nA, shape (sweeps, n)."""
    n = round(seconds * 1e3 / STEP_MS / sweeps)
    keep = np.exp(-STEP_MS / scenario.current_ms)
    drive = rng.normal(size=(sweeps, n)) * np.sqrt(1 - keep**2)
    currents: FloatArray = scenario.mean_nA + scenario.sd_nA * lfilter(
        [1.0], [1.0, -keep], drive, axis=1
    )
    return currents


def make_recording(
    scenario: Scenario, neuron: Neuron, seconds: float, rng: np.random.Generator, sweeps: int = 4
) -> Recording:
    """A recording of a scenario, in sweeps of equal length."""
    return simulate(neuron, make_currents(scenario, seconds, rng, sweeps), STEP_MS, rng)


#: Steps of the real protocol in `tests/data`: each level twice with −100 pA in between, nA and ms.
STEP_LEVELS_NA = np.arange(-100, 301, 25) / 1e3
STEP_SWEEP_MS = 2500.0
_STEPS_MS = ((147.0, 647.0), (1647.0, 2147.0))
_TEST_STEP_MS, _TEST_STEP_NA = (1147.0, 1647.0), -0.1


def step_currents(levels_nA: FloatArray) -> FloatArray:
    """Currents of the step protocol, nA, shape (levels, n)."""
    time = STEP_MS * np.arange(round(STEP_SWEEP_MS / STEP_MS))

    def within(span: tuple[float, float]) -> FloatArray:
        return ((span[0] <= time) & (time < span[1])).astype(np.float64)

    own = levels_nA[:, None] * sum(within(span) for span in _STEPS_MS)
    currents: FloatArray = own + _TEST_STEP_NA * within(_TEST_STEP_MS)
    return currents

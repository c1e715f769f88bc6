"""Fits of small simulated recordings, for the tests of the report."""

from __future__ import annotations

from dataclasses import replace
from functools import lru_cache

import numpy as np

from bayesglm.checks.simulation import Neuron, Noise, exponential_input, simulate
from bayesglm.fitting.run import fit
from bayesglm.inference.results import CellFit
from bayesglm.recording.recording import Recording
from bayesglm.recording.settings import SamplingSection, Settings
from bayesglm.recording.study import CellEntry
from bayesglm.report.truth import Truth
from bayesglm.verdict import Reason, worst

STEP_MS = 0.5
SETTINGS = Settings(sampling=SamplingSection(chains=2, warmup=50, draws=100))
PASSED = Reason("rhat", "1.003", "< 1.01")
CAUTION = Reason(
    "drive_split_after_spike",
    "4.1 sd apart: after spike at 30ms −0.1 mV at 50–125 pA, −5.3 mV at 250–300 pA",
    "≤ 3",
    "caution",
    "the after-spike kernel η depends on the drive",
    "bayesglm fit steps.csv --select 'current=-100:125pA' --out steps_selected",
)
FAILED = Reason("divergences", "3", "0", "failed", "transitions diverged", "bayesglm fit steps.csv")


def made_neuron(spikes: bool = True) -> Neuron:
    """Return the truth: 100 MΩ, 20 ms, η(30 ms) about −3.8 mV."""
    lags = STEP_MS * np.arange(1, round(300 / STEP_MS) + 1)
    return Neuron(
        input=exponential_input(100.0, 20.0, lags[lags <= 150]),
        after_spike=-7.0 * np.exp(-lags / 60.0) * (1 - lags / 300.0),
        threshold_mV=-50.0 if spikes else 100.0,
        noise=Noise((1.0, 0.4), (20.0, 3.0), sweep_sd_mV=0.2),
    )


def made_truth(neuron: Neuron) -> Truth:
    """Return what the report may hold the fit against."""
    curves = {
        name: (STEP_MS * np.arange(1, len(kernel) + 1), kernel)
        for name, kernel in (("input", neuron.input), ("after_spike", neuron.after_spike))
    }
    at_30ms = float(neuron.after_spike[round(30 / STEP_MS) - 1])
    return Truth({"input_resistance": 100.0, "after_spike_at_30ms": at_30ms}, curves)


def step_recording(spikes: bool = True, seed: int = 1, name: str = "steps") -> Recording:
    """Simulate a family of current steps, 1.5 s a sweep, from −100 to 300 pA."""
    levels = np.arange(-100, 301, 50) * 1e-3
    currents = np.zeros((len(levels), round(1500 / STEP_MS)))
    currents[:, round(200 / STEP_MS) : round(1000 / STEP_MS)] = levels[:, None]
    rng = np.random.default_rng(seed)
    recording = simulate(made_neuron(spikes), currents, STEP_MS, rng, name)
    return replace(recording, sha256="0123456789abcdef" * 4, left_out=("sweep 9: rate above 5 Hz",))


def noise_recording(seconds: float = 10.0, seed: int = 3) -> Recording:
    """Simulate four sweeps of a fluctuating current."""
    rng = np.random.default_rng(seed)
    currents = 0.1 + 0.15 * rng.normal(size=(4, round(seconds * 1e3 / STEP_MS / 20), 1))
    return simulate(
        made_neuron(), np.repeat(currents, 20, axis=2).reshape(4, -1), STEP_MS, rng, "noise"
    )


@lru_cache(maxsize=4)
def make_fit(spikes: bool = True, protocol: str = "steps") -> CellFit:
    """Fit a simulated recording of steps or of noise, with few draws."""
    recording = step_recording(spikes) if protocol == "steps" else noise_recording()
    return fit(recording, SETTINGS, CellEntry("cell-1", (), cell_class="regular", animal="a1"))


def renamed(fit: CellFit, cell: str, cell_class: str = "", condition: str = "") -> CellFit:
    """Return the fit as that of another cell."""
    return replace(fit, cell=cell, cell_class=cell_class, condition=condition)


def with_reasons(fit: CellFit, *reasons: Reason) -> CellFit:
    """Return the fit with other reasons for its verdict."""
    severity = worst(reason.verdict for reason in reasons)
    return replace(fit, verdict=replace(fit.verdict, verdict=severity, reasons=reasons))

"""Small simulated recordings and digests of known truth, for all tests.

Nothing here is data: the neurons are those of `bayesglm.checks.simulation`.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray
from scipy.signal import lfilter

from bayesglm.checks.simulation import Neuron, Noise, exponential_input, simulate
from bayesglm.kernels.basis import KernelSpec
from bayesglm.kernels.design import VoltageDesign
from bayesglm.likelihood.digest import VoltageDigest
from bayesglm.likelihood.voltage import row_digest
from bayesglm.recording.recording import Recording, Sweep

FloatArray = NDArray[np.float64]

STEP_MS = 0.5
QUIET = Noise((0.7,), (15.0,))


def after_spike_kernel(shape: str, step_ms: float = STEP_MS) -> FloatArray:
    """η of 300 ms: a monotone undershoot, or an undershoot followed by a bump of about 1 mV."""
    lags = step_ms * np.arange(1, round(300 / step_ms) + 1)
    fade = 1 - lags / 300
    undershoot: FloatArray = -6.0 * np.exp(-lags / 50) * fade
    if shape == "monotone":
        return undershoot
    assert shape == "bump"
    # Its area is negative, so that the cell does not excite itself.
    bump: FloatArray = -12.0 * np.exp(-lags / 15) * fade + np.exp(-((lags - 90) ** 2) / 800)
    return bump


def neuron(
    resistance_MOhm: float = 100.0,
    tau_ms: float = 20.0,
    shape: str = "monotone",
    noise: Noise = QUIET,
    threshold_mV: float = -50.0,
    step_ms: float = STEP_MS,
) -> Neuron:
    """A neuron with an exponential κ of ten time constants."""
    lags = step_ms * np.arange(1, round(10 * tau_ms / step_ms) + 1)
    return Neuron(
        input=exponential_input(resistance_MOhm, tau_ms, lags),
        after_spike=after_spike_kernel(shape, step_ms),
        threshold_mV=threshold_mV,
        noise=noise,
    )


def coloured_current(
    rng: np.random.Generator,
    n_sweeps: int,
    seconds: float,
    mean_nA: float = 0.1,
    sd_nA: float = 0.1,
    tau_ms: float = 5.0,
    step_ms: float = STEP_MS,
) -> FloatArray:
    """Fluctuating current with an exponential autocorrelation, shape (n_sweeps, n)."""
    n = round(seconds * 1e3 / step_ms)
    keep = np.exp(-step_ms / tau_ms)
    white = rng.normal(0.0, sd_nA * np.sqrt(1 - keep**2), (n_sweeps, n))
    current: FloatArray = mean_nA + lfilter([1.0], [1.0, -keep], white, axis=1)
    return current


def steps_current(
    levels_nA: FloatArray, sweep_ms: float = 1500.0, step_ms: float = STEP_MS
) -> FloatArray:
    """A step of 800 ms from 200 ms on in each sweep, shape (n_levels, n)."""
    current = np.zeros((len(levels_nA), round(sweep_ms / step_ms)))
    current[:, round(200 / step_ms) : round(1000 / step_ms)] = levels_nA[:, None]
    return current


def recording_of_noise(
    cell: Neuron,
    seed: int,
    n_sweeps: int = 10,
    seconds: float = 4.0,
    mean_nA: float = 0.1,
    sd_nA: float = 0.1,
) -> Recording:
    """A cell under fluctuating current."""
    rng = np.random.default_rng(seed)
    return simulate(
        cell, coloured_current(rng, n_sweeps, seconds, mean_nA, sd_nA), STEP_MS, rng, "simulated"
    )


def interleaved(first: Recording, second: Recording) -> Recording:
    """The sweeps of two recordings in turn, as one recording."""
    pairs = zip(first.sweeps, second.sweeps, strict=True)
    sweeps = [replace(one, number=0) for pair in pairs for one in pair]
    numbered = tuple(replace(sweep, number=k) for k, sweep in enumerate(sweeps))
    return replace(first, name="interleaved", sweeps=numbered)


def arbitrary_recording(
    step_ms: float, lengths: tuple[int, ...], seed: int = 0, masked: bool = True
) -> Recording:
    """Sweeps of unequal length with arbitrary current, voltage, masks and spikes.

    The first sweep spikes in its first and in its last bin.
    """
    rng = np.random.default_rng(seed)
    sweeps = []
    for number, n in enumerate(lengths):
        keep = np.ones(n, dtype=np.bool_)
        voltage = -65 + lfilter([1.0], [1.0, -0.9], rng.normal(size=n))
        if masked:
            start = int(rng.integers(0, n - n // 10))
            keep[start : start + n // 10] = False
            voltage[start + 1] = np.nan
        spikes = np.sort(rng.choice(n, size=max(3, n // 150), replace=False))
        if number == 0:
            spikes = np.unique(np.concatenate([[0], spikes, [n - 1]]))
        sweeps.append(Sweep(number, rng.normal(0.1, 0.1, n), voltage, keep, spikes))
    return Recording(f"arbitrary{seed}", step_ms, tuple(sweeps), sha256=f"hash{seed}")


def plain_design(n_input: int = 5, electrode: bool = True, spikes: bool = False) -> VoltageDesign:
    """A small design; only the names and numbers of its columns matter to a `matrix_digest`."""
    return VoltageDesign(
        KernelSpec(50.0, n_input), KernelSpec(50.0, 5) if spikes else None, electrode=electrode
    )


def matrix_digest(
    x: FloatArray,
    v: FloatArray,
    n_units: int,
    design: VoltageDesign | None = None,
    sweep_of_unit: Callable[[int], int] = lambda unit: unit,
) -> VoltageDigest:
    """Digest of rows given as a matrix, cut into units of equal length."""
    units = np.arange(len(v)) * n_units // len(v)
    sweeps = np.array([sweep_of_unit(int(unit)) for unit in units])
    return row_digest(x, v, units, sweeps, design or plain_design(x.shape[1] - 2))

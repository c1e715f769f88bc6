"""An RC membrane behind a series resistance, in closed form, and recordings made of it.

Johnston & Wu (1995), Foundations of Cellular Neurophysiology: R = 100 MΩ, C = 200 pF, 20 ms.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.signal import lfilter

from bayesglm.recording.recording import Recording, Sweep

FloatArray = NDArray[np.float64]

REST_MV = -70.0
R_MOHM = 100.0
TAU_MS = 20.0


def step_current(level_pA: float, step_ms: float = 0.1, holding_pA: float = 0.0) -> FloatArray:
    """Return 200 ms of holding, 500 ms at `level_pA`, 300 ms of holding, in nA."""
    current = np.full(round(1000 / step_ms), holding_pA * 1e-3)
    current[round(200 / step_ms) : round(700 / step_ms)] = level_pA * 1e-3
    return current


def rc_voltage(
    current: FloatArray, step_ms: float = 0.1, series_MOhm: float = 0.0, tau_ms: float = TAU_MS
) -> FloatArray:
    """Return the exact response to a current that is constant in each bin, in mV."""
    f = np.exp(-step_ms / tau_ms)
    # Settled at the first value of the current, as a held cell is.
    drive = current - current[0]
    membrane = lfilter([0.0, R_MOHM * (1 - f)], [1.0, -f], drive)
    held = (R_MOHM + series_MOhm) * current[0]
    return REST_MV + held + membrane + series_MOhm * drive


def recording_of(
    pairs: list[tuple[FloatArray, FloatArray]],
    spikes: dict[int, list[int]] | None = None,
    step_ms: float = 0.1,
) -> Recording:
    """Return a recording of (current, voltage) sweeps with spikes at the given samples."""
    at = spikes or {}
    sweeps = tuple(
        Sweep(
            number=k,
            current=current,
            voltage=voltage,
            keep=np.ones(len(current), dtype=np.bool_),
            spikes=np.array(at.get(k, []), dtype=np.int64),
            first_row=2 + k * len(current),
        )
        for k, (current, voltage) in enumerate(pairs)
    )
    return Recording("cell", step_ms, sweeps, spikes_from="given in the test")


def rc_recording(
    levels_pA: list[float], series_MOhm: float = 0.0, noise_mV: float = 0.0
) -> Recording:
    """Return one sweep a level; the noise is white."""
    rng = np.random.default_rng(1)
    pairs = []
    for level in levels_pA:
        current = step_current(level)
        noise = noise_mV * rng.standard_normal(len(current))
        pairs.append((current, rc_voltage(current, series_MOhm=series_MOhm) + noise))
    return recording_of(pairs)

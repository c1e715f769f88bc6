"""The demo's invented study: six cells of two classes from three animals, made from a seed.

Nothing here is data. Pyramidal-like cells are pulled down for a hundred milliseconds after a
spike; interneuron-like cells are pulled down briefly and then lifted a little. Currents
fluctuate around a level that differs between sweeps, after a small test pulse; the noise is
correlated and holds synaptic-like events, and each bridge is a few MΩ off.
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Final

import numpy as np
import pandas as pd
from scipy.signal import lfilter

from bayesglm.checks.simulation import Neuron, Noise, exponential_input, simulate
from bayesglm.recording.recording import FloatArray, Recording

STEP_MS: Final = 0.2
INPUT_MS: Final = 150.0
AFTER_SPIKE_MS: Final = 300.0
_SWEEPS: Final = 10
_SWEEP_MS: Final = 4000.0
#: The test pulse: from, to in ms, and nA.
_PULSE: Final = (300.0, 600.0, -0.04)
_FLUCTUATION_FROM_MS: Final = 900.0

_STUDY = """\
# An invented study: nothing here was recorded.
[study]
name = "Demo: six invented cells"
notes = "Simulated from seed {seed}; the truth is known and drawn beside the result."

[recording]
holding_pA = 0.0
holding_included = true
synaptic_blockers = "none (simulated synaptic-like events)"
internal_solution = "none (simulated)"

# Long enough for the whole kernel of the slowest cell.
[kernels.input]
duration_ms = 150.0

# The interneurons' after-spike kernel falls fast and turns: 14 splines are a little coarse.
[kernels.after_spike]
weights = 20

[sampling]
seed = {seed}
"""


@dataclass(frozen=True, eq=False)
class DemoCell:
    """An invented cell with its truth."""

    name: str
    cell_class: str
    animal: str
    neuron: Neuron
    resistance_MOhm: float
    tau_ms: float
    levels_nA: tuple[float, float]
    fluctuation_nA: float


def demo_cells() -> tuple[DemoCell, ...]:
    """The six cells, three a class, two an animal."""
    pyramidal = [(118, 24, -7.0, 70), (96, 20, -8.5, 55), (134, 27, -6.0, 85)]
    inter = [(172, 11, -9.0, 14), (150, 9, -11.0, 12), (195, 13, -8.0, 16)]
    bridges = (6.0, 9.0, 4.0, 7.0, 11.0, 5.0)
    cells = []
    for index, (r, tau, depth, decay) in enumerate(pyramidal):
        after = _pyramidal_after_spike(depth, decay)
        cells.append(_cell(f"pyr-{index + 1}", "pyramidal", index, r, tau, after, bridges[index]))
    for index, (r, tau, depth, decay) in enumerate(inter):
        after = _inter_after_spike(depth, decay, lift=1.4 + 0.2 * index)
        bridge = bridges[3 + index]
        cells.append(_cell(f"int-{index + 1}", "interneuron", index, r, tau, after, bridge))
    return tuple(cells)


def record(cell: DemoCell, rng: np.random.Generator) -> Recording:
    """Simulate the recording of a cell."""
    return simulate(cell.neuron, _currents(cell, rng), STEP_MS, rng, cell.name)


def write_study(folder: Path, seed: int) -> tuple[DemoCell, ...]:
    """Write the invented study: ``study.toml``, its tables, and a CSV.gz a cell.

    Parameters
    ----------
    folder
        Where to; made if it does not exist.
    seed
        Seed of the simulation and of the fits.

    Returns
    -------
    tuple of DemoCell
        The truth.
    """
    cells = demo_cells()
    (folder / "recordings").mkdir(parents=True, exist_ok=True)
    (folder / "study.toml").write_text(_STUDY.format(seed=seed), encoding="utf-8")
    table = pd.DataFrame(
        {
            "cell": [cell.name for cell in cells],
            "class": [cell.cell_class for cell in cells],
            "animal": [cell.animal for cell in cells],
        }
    )
    table.to_csv(folder / "cells.csv", index=False)
    files = [f"recordings/{cell.name}.csv.gz" for cell in cells]
    listing = pd.DataFrame({"cell": table["cell"], "file": files})
    listing.to_csv(folder / "recordings.csv", index=False)
    streams = np.random.default_rng(seed).spawn(len(cells))
    for cell, file, rng in zip(cells, files, streams, strict=True):
        _write_recording(record(cell, rng), folder / file)
    return cells


def _cell(
    name: str,
    cell_class: str,
    animal: int,
    resistance: float,
    tau: float,
    after_spike: FloatArray,
    bridge: float,
) -> DemoCell:
    noise = Noise(
        sd_mV=(0.8, 0.3),
        time_constant_ms=(25.0, 3.0),
        event_rate_Hz=2.0,
        event_mV=0.8,
        event_decay_ms=12.0,
        sweep_sd_mV=0.3,
    )
    neuron = Neuron(
        input=exponential_input(resistance, tau, _lags(INPUT_MS)),
        after_spike=after_spike,
        offset_mV=-66.0 if cell_class == "pyramidal" else -64.0,
        electrode_MOhm=bridge,
        threshold_mV=-48.0,
        softness_mV=1.5,
        noise=noise,
    )
    # The level that brings the membrane to about 7 mV below the soft threshold.
    rheobase = (neuron.threshold_mV - 7.0 - neuron.offset_mV) / resistance
    levels = (0.4 * rheobase, 1.5 * rheobase)
    return DemoCell(
        name, cell_class, f"animal-{animal + 1}", neuron, resistance, tau, levels, 0.9 * rheobase
    )


def _lags(duration_ms: float) -> FloatArray:
    return STEP_MS * np.arange(1, round(duration_ms / STEP_MS) + 1)


def _pyramidal_after_spike(depth_mV: float, decay_ms: float) -> FloatArray:
    lags = _lags(AFTER_SPIKE_MS)
    # The taper brings the kernel to zero at its end, as the model has it.
    return (depth_mV * np.exp(-lags / decay_ms)) * (1 - lags / AFTER_SPIKE_MS)


def _inter_after_spike(depth_mV: float, decay_ms: float, lift: float) -> FloatArray:
    lags = _lags(AFTER_SPIKE_MS)
    bump = lift * np.exp(-0.5 * ((lags - 70.0) / 25.0) ** 2)
    return (depth_mV * np.exp(-lags / decay_ms)) * (1 - lags / AFTER_SPIKE_MS) + bump


def _currents(cell: DemoCell, rng: np.random.Generator) -> FloatArray:
    """Currents of all sweeps in nA, whole pA, shape (sweeps, n)."""
    n = round(_SWEEP_MS / STEP_MS)
    time = np.arange(n) * STEP_MS
    currents = np.zeros((_SWEEPS, n))
    pulse = (time >= _PULSE[0]) & (time < _PULSE[1])
    currents[:, pulse] = _PULSE[2]
    free = time >= _FLUCTUATION_FROM_MS
    levels = rng.permutation(np.linspace(*cell.levels_nA, _SWEEPS))
    keep = np.exp(-STEP_MS / 8.0)
    for current, level in zip(currents, levels, strict=True):
        noise = lfilter([np.sqrt(1 - keep**2)], [1.0, -keep], rng.normal(size=free.sum()))
        current[free] = level + cell.fluctuation_nA * noise
    return np.round(currents, 3)


def _write_recording(recording: Recording, path: Path) -> None:
    sweeps = [
        pd.DataFrame(
            {
                "time_ms": np.round(np.arange(sweep.n_samples) * recording.step_ms, 3),
                "current_pA": np.round(sweep.current * 1e3, 1),
                "voltage_mV": np.round(sweep.voltage, 2),
                "sweep": sweep.number,
            }
        )
        for sweep in recording.sweeps
    ]
    # Level 1 and no time stamp: quick to write, and the same bytes for the same seed.
    compression = {"method": "gzip", "compresslevel": 1, "mtime": 1}
    pd.concat(sweeps).to_csv(path, index=False, compression=compression)

"""Make ``spreadsheet.csv``: a small simulated recording, as one could save it from a spreadsheet.

Six sweeps of 3 s at 1 kHz. After 100 ms without current, the current fluctuates around another
mean in each sweep. The cell has a membrane of 120 MΩ and 18 ms, and an after-potential of −4 mV
that decays with 60 ms. It is simulated, not measured: use it to try the commands.

    python examples/make_spreadsheet.py
"""

from __future__ import annotations

import csv
from pathlib import Path

import numpy as np
from scipy.signal import lfilter

from bayesglm import Neuron, Noise, simulate
from bayesglm.checks.simulation import exponential_input

SEED = 20
STEP_MS = 1.0
SWEEP_MS = 3000.0
MEAN_CURRENTS_PA = (20.0, 35.0, 50.0, 65.0, 80.0, 95.0)
CURRENT_SD_PA = 60.0
CURRENT_MS = 5.0
QUIET_MS = 100.0


def make_spreadsheet(path: Path) -> None:
    """Simulate the recording and write it as comma-separated text."""
    rng = np.random.default_rng(SEED)
    lags = STEP_MS * np.arange(1, 301)
    neuron = Neuron(
        input=exponential_input(120.0, 18.0, lags),
        after_spike=-4.0 * np.exp(-lags / 60.0),
        offset_mV=-66.0,
        threshold_mV=-52.0,
        noise=Noise(sd_mV=(0.6,), time_constant_ms=(15.0,), sweep_sd_mV=0.3),
    )
    n = round(SWEEP_MS / STEP_MS)
    keep = np.exp(-STEP_MS / CURRENT_MS)
    drive = CURRENT_SD_PA * np.sqrt(1 - keep**2) * rng.normal(size=(len(MEAN_CURRENTS_PA), n))
    fluctuation = lfilter([1.0], [1.0, -keep], drive, axis=1)
    # Whole pA, as a command is sent to the amplifier.
    currents_pA = np.round(np.array(MEAN_CURRENTS_PA)[:, None] + fluctuation)
    currents_pA[:, : round(QUIET_MS / STEP_MS)] = 0.0
    recording = simulate(neuron, currents_pA / 1e3, STEP_MS, rng)
    with path.open("w", encoding="utf-8", newline="") as file:
        writer = csv.writer(file, lineterminator="\n")
        writer.writerow(["time_ms", "current_pA", "voltage_mV", "sweep"])
        for sweep, current_pA in zip(recording.sweeps, currents_pA, strict=True):
            for k in range(n):
                row = [k, int(current_pA[k]), f"{sweep.voltage[k]:.2f}", sweep.number]
                writer.writerow(row)


if __name__ == "__main__":
    make_spreadsheet(Path(__file__).with_name("spreadsheet.csv"))

"""Predict a real cell's answer to a sine sweep and to a ramp from its answer to small steps.

The cell is fitted on the steps of `tests/data/cell_a_steps.csv.gz` from −100 to 25 pA, where it
is about linear, and predicts `tests/data/cell_a_sweep_and_ramp.csv.gz`, which it was not fitted
on: three repeats of a sine sweep of ±20 pA and a ramp from 0 to 100 pA. Both stem from the data
folder of the pyABF repository, copyright (c) 2018 Scott W Harden, MIT licence (its text is in
`tests/data/LICENSE-MIT.txt`, and what is known of the cell in `tests/data/README.md`). That both
are of one cell is very likely, and stated nowhere.

    python examples/predict_real_cell.py

The sines are predicted nearly as well as the repeats agree with each other. The ramp is not:
the residual grows with the current, because the cell is not linear up there.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from bayesglm import CellFit, Settings, detect_spikes, fit, parse_select, read_recording, select
from bayesglm.kernels.design import row_means
from bayesglm.likelihood.voltage import predict_rows
from bayesglm.recording.joining import join_contiguous
from bayesglm.recording.recording import Recording, Sweep
from bayesglm.recording.settings_input import override

DATA = Path(__file__).resolve().parent.parent / "tests" / "data"
# The kernel is known to last: five membrane time constants hold 95 % of R_in, not all of it.
SETTINGS = override(Settings(), ["kernels.input.duration_ms=400"])
REPEATS = 3

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Prediction:
    """Rows of a sweep: current in nA, voltage measured and predicted in mV, shape (n,)."""

    current: FloatArray
    measured: FloatArray
    predicted: FloatArray

    def cut(self, start: int, stop: int) -> Prediction:
        """Some of the rows alone."""
        rows = slice(start, stop)
        return Prediction(self.current[rows], self.measured[rows], self.predicted[rows])

    @property
    def residual(self) -> FloatArray:
        """Measured minus predicted, mV."""
        return self.measured - self.predicted

    @property
    def bias(self) -> float:
        """Mean residual, mV."""
        return float(self.residual.mean())

    @property
    def rms(self) -> float:
        """Root mean square of the residual, mV."""
        return float(np.sqrt(np.mean(self.residual**2)))

    @property
    def rms_without_offset(self) -> float:
        """The same after the mean residual is taken out, mV."""
        return float(self.residual.std())

    @property
    def explained(self) -> float:
        """Explained variance, the mean residual taken out."""
        return float(1 - self.residual.var() / self.measured.var())


def fit_steps(largest_pA: float = 25.0) -> CellFit:
    """Fit the sweeps with steps from −100 pA up to a level."""
    steps = detect_spikes(read_recording(DATA / "cell_a_steps.csv.gz"), SETTINGS.recording)
    return fit(select(steps, parse_select([f"current=-100:{largest_pA:g}pA"])), SETTINGS)


def sines_and_ramp() -> tuple[Recording, Sweep, Sweep]:
    """The other recording; its three sine sweeps, which follow on each other, and its ramp."""
    recording = read_recording(DATA / "cell_a_sweep_and_ramp.csv.gz")
    recording = detect_spikes(recording, SETTINGS.recording)
    recording = join_contiguous(recording, SETTINGS.recording)
    sines, ramp = recording.sweeps
    return recording, sines, ramp


def predict(cell: CellFit, sweep: Sweep, step_ms: float) -> Prediction:
    """Predict a sweep with the posterior mean, electrode and all."""
    rows = predict_rows(sweep, cell.design, step_ms, cell.mean_weights[:, None])[:, 0]
    m = cell.design.samples_per_row(step_ms)
    return Prediction(row_means(sweep.current, m), row_means(sweep.voltage, m), rows)


def repeats_of(sines: Prediction) -> list[Prediction]:
    """Each of the three sine sweeps by itself."""
    edges = np.linspace(0, len(sines.current), REPEATS + 1).round().astype(int)
    return [sines.cut(start, stop) for start, stop in pairwise(edges)]


def before_spikes(ramp: Prediction, sweep: Sweep, step_ms: float, row_ms: float) -> Prediction:
    """The ramp up to 1 ms before its first spike: the fit of small steps knows no spikes."""
    assert sweep.spikes is not None
    return ramp.cut(0, int((sweep.spikes[0] * step_ms - 1.0) / row_ms))


def repeats_allow(measured: FloatArray) -> float:
    """Share of the variance that repeats of one current have in common, 1 − noise/total.

    Parameters
    ----------
    measured
        Shape (repeats, n); each repeat's mean is taken out.
    """
    centred = measured - measured.mean(axis=1, keepdims=True)
    return float(1 - centred.var(axis=0, ddof=1).mean() / centred.var(axis=1).mean())


def main() -> None:
    """Print how well the sines and the ramp are predicted."""
    recording, sines, ramp = sines_and_ramp()
    for largest_pA in (25.0, 50.0, 75.0):
        cell = fit_steps(largest_pA)
        print(f"\nfitted on −100 to {largest_pA:g} pA")
        repeats = repeats_of(predict(cell, sines, recording.step_ms))
        found = {f"sine {number}": one for number, one in enumerate(repeats)}
        whole = predict(cell, ramp, recording.step_ms)
        found["ramp to its first spike"] = before_spikes(
            whole, ramp, recording.step_ms, cell.design.row_ms
        )
        for name, one in found.items():
            print(
                f"  {name}: bias {one.bias:+.2f} mV, rms {one.rms:.2f} mV, without offset "
                f"{one.rms_without_offset:.2f} mV, explained variance {one.explained:.2f}"
            )
        measured = np.array([one.measured for one in repeats])
        print(f"  the repeats of the sine allow {repeats_allow(measured):.2f}")
        second = round(1000 / cell.design.row_ms)
        by_second = [f"{part.mean():+.1f}" for part in np.split(whole.residual[: 7 * second], 7)]
        print(f"  mean residual of the ramp by second (10 pA each from the second on): {by_second}")


if __name__ == "__main__":
    main()

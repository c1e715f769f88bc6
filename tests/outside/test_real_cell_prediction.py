"""A real cell's answer to a sine sweep and a ramp, predicted from its answer to small steps.

Recordings are described in `tests/data/README.md`. Values "measured beforehand" stem from an
earlier program of ours: residual rms of the three sine sweeps 0.39, 0.77, 0.58 mV, explained
variance 0.86, 0.64, 0.73 where the three repeats allow 0.78, and a ramp that is missed by
+1.4 mV on average, rms 1.7 mV.
"""

from __future__ import annotations

import importlib.util
import sys
from pathlib import Path
from types import ModuleType
from typing import Any

import numpy as np
import pandas as pd
import pytest
from scipy.signal import fftconvolve

from bayesglm.inference.results import CellFit
from bayesglm.recording.recording import FloatArray

ROOT = Path(__file__).resolve().parents[2]
FILE = ROOT / "tests" / "data" / "cell_a_sweep_and_ramp.csv.gz"
STEP_MS = 0.1


def _example() -> ModuleType:
    path = ROOT / "examples" / "predict_real_cell.py"
    spec = importlib.util.spec_from_file_location("predict_real_cell", path)
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    # Its dataclasses look their module up by name.
    sys.modules["predict_real_cell"] = module
    spec.loader.exec_module(module)
    return module


example = _example()


@pytest.fixture(scope="module")
def cell() -> CellFit:
    return example.fit_steps()


@pytest.fixture(scope="module")
def sines(cell: CellFit) -> list[Any]:
    recording, sweep, _ = example.sines_and_ramp()
    return list(example.repeats_of(example.predict(cell, sweep, recording.step_ms)))


@pytest.fixture(scope="module")
def ramp(cell: CellFit) -> Any:
    recording, _, sweep = example.sines_and_ramp()
    whole = example.predict(cell, sweep, recording.step_ms)
    return example.before_spikes(whole, sweep, recording.step_ms, cell.design.row_ms)


def table(sweeps: range) -> tuple[FloatArray, FloatArray]:
    """Current in nA and voltage in mV of sweeps, one after the other, straight from the file."""
    read = pd.read_csv(FILE)
    read = read[read["sweep"].isin(sweeps)]
    return read["current_pA"].to_numpy() / 1e3, read["voltage_mV"].to_numpy()


def by_convolution(cell: CellFit, current: FloatArray) -> FloatArray:
    """The prediction at every sample, in one plain convolution; current before is the first."""
    design, weights = cell.design, cell.mean_weights
    lags = STEP_MS * np.arange(1, round(design.input.duration_ms / STEP_MS) + 1)
    kernel = design.input.evaluate(lags) @ weights[design.columns["input"]]
    past = np.concatenate([np.full(len(lags), current[0]), current[:-1]])
    driven = fftconvolve(past, kernel, mode="valid") * STEP_MS
    offset, electrode = (weights[design.columns[name]][0] for name in ("offset", "electrode"))
    return np.asarray(offset + electrode * current + driven)


def test_prediction_is_a_plain_convolution(cell: CellFit, sines: list[Any]) -> None:
    """Over all three repeats: each is driven by the end of the one before it, too."""
    current, voltage = table(range(3))
    expected = by_convolution(cell, current).reshape(3, -1, 5).mean(axis=2)
    measured = voltage.reshape(3, -1, 5).mean(axis=2)
    for number, one in enumerate(sines):
        np.testing.assert_allclose(one.predicted, expected[number], atol=1e-8)
        np.testing.assert_allclose(one.measured, measured[number], atol=1e-9)


def test_the_ramp_is_predicted_in_one_piece(cell: CellFit, ramp: Any) -> None:
    """Its pieces follow each other: the current of one acts on the voltage of the next."""
    current, _ = table(range(3, 14))
    expected = by_convolution(cell, current).reshape(-1, 5).mean(axis=1)
    np.testing.assert_allclose(ramp.predicted, expected[: len(ramp.predicted)], atol=1e-8)
    # Nothing in the model jumps where one piece ends: 2000 rows of 0.5 ms each.
    steps = np.abs(np.diff(ramp.predicted))
    assert steps[1999::2000].max() < 2 * np.delete(steps, slice(1999, None, 2000)).max()
    assert 0.0690 < ramp.current[-1] < 0.0695


def test_sines_are_predicted_as_beforehand(sines: list[Any]) -> None:
    """The level of this recording is 0.2–0.4 mV below that of the steps, and is left in the rms."""
    np.testing.assert_allclose([one.rms for one in sines], [0.39, 0.77, 0.58], atol=0.08)
    np.testing.assert_allclose([one.explained for one in sines], [0.86, 0.64, 0.73], atol=0.06)
    np.testing.assert_allclose(
        [one.rms_without_offset for one in sines], [0.38, 0.69, 0.55], atol=0.03
    )
    for one in sines:
        assert -0.5 < one.bias < -0.1


def test_repeats_of_the_sine_allow_what_was_found_beforehand(sines: list[Any]) -> None:
    measured = np.array([one.measured for one in sines])
    allowed = example.repeats_allow(measured)
    assert allowed == pytest.approx(0.78, abs=0.01)
    # A prediction cannot beat what repeats have in common by more than chance.
    assert np.mean([one.explained for one in sines]) < allowed + 0.03


def test_what_repeats_allow_is_the_share_of_the_signal() -> None:
    """Signal of variance 3, noise of variance 1: ¾, whatever the repeats' offsets."""
    rng = np.random.default_rng(0)
    signal = np.sqrt(3.0) * rng.normal(size=200_000)
    repeats = signal + rng.normal(size=(3, 200_000)) + np.array([[0.0], [5.0], [-2.0]])
    assert example.repeats_allow(repeats) == pytest.approx(0.75, abs=0.005)


def test_ramp_is_missed_as_beforehand(ramp: Any) -> None:
    """Above the linear range the cell answers more strongly than its kernel has it."""
    assert ramp.bias == pytest.approx(1.4, abs=0.15)
    assert ramp.rms == pytest.approx(1.7, abs=0.35)
    by_second = [float(part.mean()) for part in np.split(ramp.residual[:14_000], 7)]
    assert by_second[0] < 0.8
    assert by_second[-1] > 2.0 * by_second[1]


@pytest.mark.slow
def test_more_steps_do_not_mend_it() -> None:
    """Fitted on steps to 50 pA, the ramp's bias shrinks only a little: 1.4 to 1.2 mV."""
    recording, _, sweep = example.sines_and_ramp()
    cell = example.fit_steps(50.0)
    whole = example.predict(cell, sweep, recording.step_ms)
    ramp = example.before_spikes(whole, sweep, recording.step_ms, cell.design.row_ms)
    assert 0.9 < ramp.bias < 1.4

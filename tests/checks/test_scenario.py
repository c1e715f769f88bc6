"""The demo's invented study is what it says, and the same for the same seed."""

from __future__ import annotations

from pathlib import Path

import numpy as np

from bayesglm.checks.scenario import STEP_MS, demo_cells, write_study
from bayesglm.recording.reading import read_recording
from bayesglm.recording.settings import RecordingSection
from bayesglm.recording.spikes import detect_spikes
from bayesglm.recording.study import read_study


def test_six_cells_of_two_classes_with_their_kernels() -> None:
    cells = demo_cells()
    assert [cell.cell_class for cell in cells] == ["pyramidal"] * 3 + ["interneuron"] * 3
    for cell in cells:
        # Over 150 ms the kernel holds all but exp(−150/τ) of the resistance.
        held = 1 - np.exp(-150.0 / cell.tau_ms)
        assert np.isclose(cell.neuron.input.sum() * STEP_MS, cell.resistance_MOhm * held)
        later = cell.neuron.after_spike[round(40 / STEP_MS) :]
        assert (later.max() > 1.0) == (cell.cell_class == "interneuron")


def test_written_study_reads_back_with_its_spikes(tmp_path: Path) -> None:
    write_study(tmp_path / "a", seed=5)
    write_study(tmp_path / "b", seed=5)
    study = read_study(tmp_path / "a")
    assert [entry.name for entry in study.cells] == [cell.name for cell in demo_cells()]
    for entry in study.cells:
        (one,) = entry.recordings
        assert one.path.read_bytes() == (tmp_path / "b/recordings" / one.path.name).read_bytes()
    recording = detect_spikes(read_recording(study.cells[0].recordings[0].path), RecordingSection())
    assert len(recording.sweeps) == 10
    assert recording.step_ms == STEP_MS
    assert recording.n_spikes > 50

"""A cell's entry becomes recordings ready to be fitted."""

from __future__ import annotations

from pathlib import Path

import pytest

from bayesglm.errors import InputError
from bayesglm.recording.loading import load_cell, load_recording
from bayesglm.recording.settings import Settings
from bayesglm.recording.settings_input import add_selection, override
from bayesglm.recording.study import CellEntry, RecordingEntry


@pytest.fixture
def path(tmp_path: Path) -> Path:
    """Four sweeps of 200 ms; the third lacks a voltage."""
    rows = ["time_ms,current_pA,voltage_mV,sweep"]
    for sweep in range(4):
        for i in range(200):
            voltage = "" if (sweep, i) == (2, 7) else f"{-65 - 0.01 * i:.2f}"
            rows.append(f"{i},{10 * (i > 100) * (sweep + 1)},{voltage},{sweep}")
    file = tmp_path / "cell.csv"
    file.write_text("\n".join(rows) + "\n")
    return file


def test_own_sweeps_are_taken_and_spikes_looked_for(path: Path) -> None:
    recording = load_recording(RecordingEntry(path, sweeps="0-1,3"), Settings())
    assert [sweep.number for sweep in recording.sweeps] == [0, 1, 3]
    assert recording.spikes_from
    # Sweeps of another cell were not left out of this one.
    assert recording.left_out == ()


def test_selection_applies_and_defects_are_refused(path: Path) -> None:
    entry = CellEntry("x", (RecordingEntry(path),))
    with pytest.raises(InputError, match="row 409"):
        load_cell(entry, Settings())
    (recording,) = load_cell(entry, add_selection(Settings(), ["sweeps=0-1,3"]))
    assert len(recording.sweeps) == 3
    assert recording.left_out


def test_excluded_and_held_out_files_are_passed_over(path: Path) -> None:
    excluded = RecordingEntry(path, exclude=True, exclude_reason="seal lost")
    held_out = RecordingEntry(path, role="held-out")
    assert load_cell(CellEntry("x", (excluded, held_out)), Settings()) == ()


def test_defects_are_told_in_the_numbers_of_the_file(path: Path) -> None:
    """Before sweeps are joined: the advice can be copied."""
    settings = override(Settings(), ['recording.contiguous=["0-3"]'])
    with pytest.raises(InputError, match=r"row 409: .* of sweep 2.*--select 'sweeps=0-1,3'"):
        load_cell(CellEntry("x", (RecordingEntry(path),)), settings)
    (recording,) = load_cell(
        CellEntry("x", (RecordingEntry(path),)), add_selection(settings, ["sweeps=0-1,3"])
    )
    assert [sweep.label for sweep in recording.sweeps] == ["sweeps 0–1", "sweep 3"]

"""The examples run, and the made one is what its maker makes."""

from __future__ import annotations

import importlib.util
from pathlib import Path
from types import ModuleType

import numpy as np
import pytest

from bayesglm.recording.loading import load_cell
from bayesglm.recording.reading import read_recording
from bayesglm.recording.study import read_study

EXAMPLES = Path(__file__).resolve().parents[2] / "examples"


def example(name: str) -> ModuleType:
    """Import an example by its file."""
    spec = importlib.util.spec_from_file_location(name, EXAMPLES / f"{name}.py")
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


def test_the_spreadsheet_is_made_by_its_maker(tmp_path: Path) -> None:
    example("make_spreadsheet").make_spreadsheet(tmp_path / "made.csv")
    made, kept = read_recording(tmp_path / "made.csv"), read_recording(EXAMPLES / "spreadsheet.csv")
    assert (EXAMPLES / "spreadsheet.csv").stat().st_size < 400_000
    for one, other in zip(made.sweeps, kept.sweeps, strict=True):
        np.testing.assert_array_equal(one.current, other.current)
        # One unit of the last decimal: libraries may round the last bit otherwise.
        np.testing.assert_allclose(one.voltage, other.voltage, atol=0.011)


def test_the_real_cell_is_fitted_and_told(capsys: pytest.CaptureFixture[str]) -> None:
    module = example("real_cell")
    module.print_cell(module.fit_real_cell())
    printed = capsys.readouterr().out
    assert printed.startswith("cell_a_steps: caution")
    assert "input_resistance" in printed
    assert "drive_split_after_spike" in printed


def test_the_study_can_be_loaded() -> None:
    study = read_study(EXAMPLES / "study")
    assert [cell.name for cell in study.cells] == ["simulated", "real"]
    for cell in study.cells:
        assert load_cell(cell, study.settings)

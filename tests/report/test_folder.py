"""A study becomes a folder; what cannot be used is refused before anything is written."""

from __future__ import annotations

from pathlib import Path

import pytest

from bayesglm.errors import InputError
from bayesglm.recording.settings import Settings
from bayesglm.recording.settings_input import override
from bayesglm.recording.study import Study, study_from_recordings
from bayesglm.report.folder import STAGES, fit_to_folder

SPREADSHEET = Path(__file__).parents[2] / "examples" / "spreadsheet.csv"


def study_of(*paths: Path) -> Study:
    """A quick study of single recordings."""
    settings = override(Settings(), ["sampling.draws=60", "sampling.warmup=60"])
    return study_from_recordings(paths, settings)


def test_folder_and_stages(tmp_path: Path) -> None:
    told: list[str] = []
    result = fit_to_folder(study_of(SPREADSHEET), tmp_path / "out", told.append)
    assert len(told) == STAGES
    assert all(stage.startswith("spreadsheet: ") for stage in told)
    assert result.page.is_file()
    assert "spreadsheet" in result.page.read_text(encoding="utf-8")
    content = result.as_dict()
    assert content["verdict"] == result.fits[0].verdict.verdict
    assert content["cells"][0]["cell"] == "spreadsheet"


def test_one_bad_recording_and_nothing_is_written(tmp_path: Path) -> None:
    bad = tmp_path / "bad.csv"
    bad.write_text("time_ms,current_pA,voltage_mV\n0,1,-65\n1,2,\n2,1,-65\n")
    with pytest.raises(InputError, match=r"bad\.csv"):
        fit_to_folder(study_of(SPREADSHEET, bad), tmp_path / "out", lambda _: None)
    assert not (tmp_path / "out").exists()

"""Numbers and commands read as a person at the rig would write them."""

from __future__ import annotations

import shlex
from dataclasses import replace
from pathlib import Path

from rc_cell import rc_recording

from bayesglm.recording.settings import Settings
from bayesglm.recording.settings_input import add_selection, override
from bayesglm.recording.wording import fit_command, fixed, number


def test_commands_survive_a_shell_even_where_the_path_has_spaces() -> None:
    recording = replace(rc_recording([50]), path=Path("my data/cell 1.csv"), name="cell 1")
    assert shlex.split(fit_command(recording, "current=-100:25pA", Settings())) == [
        *("bayesglm", "fit", "my data/cell 1.csv"),
        *("--select", "current=-100:25pA"),
        *("--out", "cell 1_selected"),
    ]
    assert "--select" not in fit_command(recording, "", Settings())


def test_commands_keep_what_the_user_stated() -> None:
    recording = replace(rc_recording([50]), path=Path("cell.csv"), name="cell")
    settings = add_selection(
        override(Settings(), ["kernels.input.duration_ms=200", "study.name=mine"]), ["sweeps=0-4"]
    )
    words = shlex.split(fit_command([recording, recording], "current=-100:25pA", settings))
    assert words == [
        *("bayesglm", "fit", "cell.csv", "cell.csv", "--cell", "cell"),
        *("--select", "sweeps=0-4", "--set", "kernels.input.duration_ms=200"),
        *("--select", "current=-100:25pA", "--out", "cell_selected"),
    ]


def test_numbers_have_minus_signs_and_no_negative_zero() -> None:
    assert number(-62.149, 3) == "−62.1"
    assert fixed(-62.15, 1) == "−62.1"
    assert fixed(-0.04, 1) == "0.0"

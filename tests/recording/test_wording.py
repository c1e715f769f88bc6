"""Numbers and commands read as a person at the rig would write them."""

from __future__ import annotations

import shlex
from dataclasses import replace
from pathlib import Path

from rc_cell import rc_recording

from bayesglm.recording.wording import fit_command, fixed, number


def test_commands_survive_a_shell_even_where_the_path_has_spaces() -> None:
    recording = replace(rc_recording([50]), path=Path("my data/cell 1.csv"), name="cell 1")
    assert shlex.split(fit_command(recording, "current=-100:25pA")) == [
        *("bayesglm", "fit", "my data/cell 1.csv"),
        *("--select", "current=-100:25pA"),
        *("--out", "cell 1_selected"),
    ]
    assert "--select" not in fit_command(recording, "")


def test_numbers_have_minus_signs_and_no_negative_zero() -> None:
    assert number(-62.149, 3) == "−62.1"
    assert fixed(-62.15, 1) == "−62.1"
    assert fixed(-0.04, 1) == "0.0"

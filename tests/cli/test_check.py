"""``bayesglm check``: bad stretches are rows, not errors; exit 3 says that it cannot be fitted."""

from __future__ import annotations

import json
from collections.abc import Callable
from pathlib import Path
from typing import Any

from csv_rows import HEADER, rows_of


def test_sound_recording_passes(program: Callable, write: Callable) -> None:
    ran = program("check", write([HEADER, *rows_of()]))
    assert ran.code == 0, ran.out
    assert "no missing values" in ran.out
    assert max(len(line) for line in ran.out.splitlines() if "bayesglm" not in line) <= 80


def test_nan_jump_and_constant_current_are_failed_rows(program: Callable, write: Callable) -> None:
    gap = [r for i, r in enumerate(rows_of()) if not 50 <= i < 60]
    blank = [r if i != 20 else "20,100," for i, r in enumerate(rows_of())]
    still = [f"{i},100,{-65 + 0.1 * (i % 7):.2f}" for i in range(3000)]
    for rows, check in ((gap, "time_jumps"), (blank, "missing"), (still, "current")):
        ran = program("check", write([HEADER, *rows]), "--json")
        assert ran.code == 3
        content = json.loads(ran.out)[0]
        assert content["verdict"] == "failed"
        failed = [row for row in content["rows"] if row["verdict"] == "failed"]
        assert [row["check"] for row in failed] == [check]
        assert all(row["advice"] and row["command"] for row in failed)


def test_commands_are_printed_whole(program: Callable, write: Callable) -> None:
    blank = [r if i != 20 else "20,100," for i, r in enumerate(rows_of())]
    path = write([HEADER, *blank])
    ran = program("check", path)
    assert any(
        line.strip().startswith("bayesglm ") and str(path) in line for line in ran.out.splitlines()
    )


DESIGN_ROWS = ["identifies_input", "identifies_after_spike", "few_sweeps"]


def _names(content: dict[str, Any]) -> list[str]:
    return [row["check"] for row in content["rows"]]


def test_what_the_design_identifies_follows_the_rows_of_the_one_file(
    program: Callable, write: Callable
) -> None:
    ran = program("check", write([HEADER, *rows_of()]), "--json")
    (content,) = json.loads(ran.out)
    assert _names(content)[-3:] == DESIGN_ROWS
    shown = program("check", write([HEADER, *rows_of()])).out
    # What is not judged did not pass.
    (line,) = [line for line in shown.splitlines() if "not judged: no spikes" in line]
    assert line.split()[-1] == "–"


def test_files_that_are_fitted_together_are_judged_together(
    program: Callable, write: Callable
) -> None:
    paths = [write([HEADER, *rows_of()], name) for name in ("a.csv", "b.csv")]
    first, second, both = json.loads(program("check", *paths, "--cell", "c1", "--json").out)
    assert [one["file"] for one in (first, second, both)] == [*map(str, paths), None]
    assert not set(DESIGN_ROWS) & {*_names(first), *_names(second)}
    assert _names(both) == DESIGN_ROWS
    # The same 3 s of current twice.
    assert both["rows"][-1]["value"] == "6 blocks of 1 s, 3 different currents"
    shown = program("check", *paths, "--cell", "c1").out
    assert "c1: its fitted recordings together" in shown


def test_a_held_out_file_takes_no_part_in_what_the_design_identifies(
    program: Callable, write: Callable, tmp_path: Path
) -> None:
    write([HEADER, *rows_of()], "a.csv")
    write([HEADER, *rows_of()], "b.csv")
    (tmp_path / "study.toml").write_text("", encoding="utf-8")
    (tmp_path / "cells.csv").write_text("cell,class,animal\nc1,x,m1\n", encoding="utf-8")
    (tmp_path / "recordings.csv").write_text(
        "cell,file,role\nc1,a.csv,held-out\nc1,b.csv,fit\n", encoding="utf-8"
    )
    ran = program("check", tmp_path, "--json")
    assert ran.code == 0, ran.err
    held_out, fitted = json.loads(ran.out)
    assert not set(DESIGN_ROWS) & set(_names(held_out))
    assert fitted["file"].endswith("b.csv")
    assert _names(fitted)[-3:] == DESIGN_ROWS
    assert fitted["rows"][-1]["value"] == "3 blocks of 1 s"


def test_quiet_prints_nothing(program: Callable, write: Callable) -> None:
    ran = program("check", write([HEADER, *rows_of()]), "--quiet")
    assert (ran.out, ran.err) == ("", "")

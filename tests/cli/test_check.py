"""``bayesglm check``: bad stretches are rows, not errors; exit 3 says that it cannot be fitted."""

from __future__ import annotations

import json
from collections.abc import Callable

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


def test_quiet_prints_nothing(program: Callable, write: Callable) -> None:
    ran = program("check", write([HEADER, *rows_of()]), "--quiet")
    assert (ran.out, ran.err) == ("", "")

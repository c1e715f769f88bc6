"""The program, called in this process as from a shell."""

from __future__ import annotations

import sys
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import pytest

from bayesglm.cli.main import run


@dataclass(frozen=True)
class Ran:
    """What a command left: exit code and streams."""

    code: int
    out: str
    err: str


@pytest.fixture
def program(
    monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> Callable[..., Ran]:
    """Call the program with arguments as a shell would."""

    def call(*arguments: object) -> Ran:
        monkeypatch.setattr(sys, "argv", ["bayesglm", *map(str, arguments)])
        monkeypatch.setenv("COLUMNS", "80")
        code = 0
        try:
            run()
        except SystemExit as stop:
            code = int(stop.code or 0)
        out, err = capsys.readouterr()
        return Ran(code, out, err)

    return call


@pytest.fixture
def write(tmp_path: Path) -> Callable[..., Path]:
    """Write a recording from its lines."""

    def to_file(lines: list[str], name: str = "cell.csv") -> Path:
        path = tmp_path / name
        path.write_text("\n".join(lines) + "\n", encoding="utf-8")
        return path

    return to_file

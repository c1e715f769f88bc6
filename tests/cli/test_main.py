"""The program as a whole: help, caution, errors without a traceback, lazy imports."""

from __future__ import annotations

import subprocess
import sys
from collections.abc import Callable

import pytest

from bayesglm.cli.main import CAUTION


@pytest.mark.parametrize("command", [(), ("demo",), ("check",), ("fit",)])
def test_help_carries_the_caution(command: tuple[str, ...], program: Callable) -> None:
    ran = program(*command, "--help")
    assert ran.code == 0
    words = " ".join(ran.out.replace("│", " ").split())
    assert CAUTION in words


def test_version(program: Callable) -> None:
    from importlib.metadata import version

    assert program("--version").out == f"bayesglm {version('bayesglm')}\n"


def test_usage_errors_leave_with_2(program: Callable) -> None:
    assert program("fit").code == 2
    assert program("nonsense").code == 2


def test_errors_have_no_traceback() -> None:
    ran = subprocess.run(
        [sys.executable, "-m", "bayesglm", "check", "no_such_file.csv"],
        capture_output=True,
        text=True,
        check=False,
    )
    assert ran.returncode == 2
    assert ran.stderr.count("\n") == 1
    assert "no_such_file.csv" in ran.stderr


def test_help_does_not_import_jax() -> None:
    code = (
        "import sys; import bayesglm.cli.main; print('jax' in sys.modules, 'scipy' in sys.modules)"
    )
    ran = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert ran.stdout.split() == ["False", "False"]

"""The benches run: each with tiny sizes, whose times are not judged."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import pytest

BENCHES = sorted(Path(__file__).parent.glob("*_bench.py"))


def test_all_benches_are_found() -> None:
    names = [path.stem for path in BENCHES]
    assert names == ["flatness_bench", "help_bench", "memory_bench", "voltage_bench"]


@pytest.mark.parametrize("path", BENCHES, ids=lambda path: path.stem)
def test_bench_prints_its_table(path: Path) -> None:
    done = subprocess.run(
        [sys.executable, str(path), "--small"], capture_output=True, text=True, check=False
    )
    assert done.returncode == 0, done.stderr[-2000:]
    # A title, the heads, at least two rows and the limit.
    lines = [line for line in done.stdout.splitlines() if line.strip()]
    assert len(lines) >= 5
    assert lines[-1].startswith("limit ")

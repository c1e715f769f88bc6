"""The page of settings is what the models say."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

from bayesglm.recording.settings_input import known_keys
from bayesglm.recording.settings_table import settings_table

ROOT = Path(__file__).resolve().parents[2]


def test_the_page_is_up_to_date() -> None:
    # If this fails: python -m bayesglm.recording.settings_table > docs/settings.md
    assert (ROOT / "docs" / "settings.md").read_text(encoding="utf-8") == settings_table()


def test_every_key_has_a_row_with_a_meaning() -> None:
    table = settings_table()
    for key, field in known_keys():
        section, _, name = key.rpartition(".")
        assert f"## `[{section}]`" in table or not section or section == "kernels"
        assert f"| `{name}` |" in table or f"## `[{key}]`" in table or key == "kernels"
        assert field.description or not section


def test_types_limits_and_defaults_are_in_words() -> None:
    table = settings_table()
    assert "| `seed` | whole number, at least 0 | `0` |" in table
    assert "| `level` | number, above 0, below 1 | `0.9` |" in table
    assert "| `spike_window_ms` | two numbers | `[-1.0, 5.0]` |" in table
    assert '| `noise` | `"calibrated"` or `"white"` |' in table


def test_the_command_prints_it() -> None:
    command = [sys.executable, "-m", "bayesglm.recording.settings_table"]
    printed = subprocess.run(command, cwd=ROOT, capture_output=True, check=True)
    assert printed.stdout.decode("utf-8") == settings_table()

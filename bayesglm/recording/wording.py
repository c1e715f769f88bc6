"""How numbers and commands are written in the rows of a check."""

from __future__ import annotations

import json
import shlex
from collections.abc import Sequence
from typing import Any

from bayesglm.recording.ranges import format_sweeps
from bayesglm.recording.recording import Recording
from bayesglm.recording.settings import Settings


def fit_command(
    recordings: Recording | Sequence[Recording],
    selection: str,
    settings: Settings,
    suffix: str = "selected",
) -> str:
    """Return the command that fits what `selection` leaves of a cell, settings kept.

    Parameters
    ----------
    recordings
        The cell's recordings; several are pooled.
    selection
        An expression for ``--select``; empty for none.
    settings
        Settings in force; those that differ from the defaults are repeated.
    suffix
        What the results' folder is named after, beside the recording.
    """
    several = (recordings,) if isinstance(recordings, Recording) else tuple(recordings)
    name = several[0].name
    words = ["bayesglm", "fit", *(one.source for one in several)]
    if len(several) > 1:
        words += ["--cell", name]
    words += _stated(settings)
    if selection:
        words += ["--select", selection]
    return _quoted([*words, "--out", f"{name}_{suffix}"])


def check_command(recordings: Recording | Sequence[Recording]) -> str:
    """Return the command that checks the recordings again."""
    several = (recordings,) if isinstance(recordings, Recording) else tuple(recordings)
    return _quoted(["bayesglm", "check", *(one.source for one in several)])


def _stated(settings: Settings) -> list[str]:
    """The settings that differ from the defaults, as options of the command line."""
    defaults = _flat(Settings().model_dump(mode="json"))
    words = []
    for key, value in _flat(settings.model_dump(mode="json")).items():
        if value == defaults[key] or key.startswith("study."):
            continue
        selected = key.removeprefix("recording.select.")
        if selected != key:
            words += ["--select", f"{selected}={value}"]
        else:
            shown = f"{value:g}" if isinstance(value, float) else json.dumps(value)
            words += ["--set", f"{key}={shown}"]
    return words


def _flat(sections: dict[str, Any], prefix: str = "") -> dict[str, Any]:
    flat: dict[str, Any] = {}
    for name, value in sections.items():
        if isinstance(value, dict):
            flat |= _flat(value, f"{prefix}{name}.")
        else:
            flat[prefix + name] = value
    return flat


def _quoted(words: Sequence[str]) -> str:
    # Single quotes around what holds a bracket or =range, as a person would type it.
    return " ".join(
        f"'{word}'" if word.partition("=")[2] and "'" not in word else shlex.quote(word)
        for word in words
    )


def sweeps_in_words(numbers: Sequence[int]) -> str:
    """Name sweeps by their numbers, such as ``sweep 3`` or ``sweeps 0–4, 7``."""
    listed = format_sweeps(numbers).replace("-", "–").replace(",", ", ")
    return f"{'sweep' if len(set(numbers)) == 1 else 'sweeps'} {listed}"


def minus(text: str) -> str:
    """Write hyphens as minus signs."""
    return text.replace("-", "−")


def number(value: float, digits: int) -> str:
    """Write `value` to `digits` significant digits."""
    return minus(f"{value:.{digits}g}")


def fixed(value: float, digits: int) -> str:
    """Write `value` with `digits` decimals and no negative zero."""
    return minus(f"{round(value, digits) + 0.0:.{digits}f}")

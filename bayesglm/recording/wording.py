"""How numbers and commands are written in the rows of a check."""

from __future__ import annotations

import shlex

from bayesglm.recording.recording import Recording


def fit_command(recording: Recording, selection: str) -> str:
    """Return the command that fits what `selection` leaves of the recording."""
    select = f" --select '{selection}'" if selection else ""
    out = f"{recording.name}_selected" if selection else f"{recording.name}_fit"
    return f"bayesglm fit {shlex.quote(recording.source)}{select} --out {shlex.quote(out)}"


def check_command(recording: Recording) -> str:
    """Return the command that checks the recording again."""
    return f"bayesglm check {shlex.quote(recording.source)}"


def minus(text: str) -> str:
    """Write hyphens as minus signs."""
    return text.replace("-", "−")


def number(value: float, digits: int) -> str:
    """Write `value` to `digits` significant digits."""
    return minus(f"{value:.{digits}g}")


def fixed(value: float, digits: int) -> str:
    """Write `value` with `digits` decimals and no negative zero."""
    return minus(f"{round(value, digits) + 0.0:.{digits}f}")

"""Reasons and verdicts: what a check found, and what to do about it.

Checks of a recording and diagnoses of a fit speak the same language: a row with the value
found, the limit it was held to, a severity, advice in words and the next command to try.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import asdict, dataclass
from typing import Any, Literal

Severity = Literal["passed", "caution", "failed"]

_ORDER: dict[Severity, int] = {"passed": 0, "caution": 1, "failed": 2}


@dataclass(frozen=True)
class Reason:
    """One row of a check or a diagnosis.

    Attributes
    ----------
    check
        Name of the check, in snake case.
    value
        What was found, in words with its unit.
    limit
        What was expected, in words with its unit; empty where the row only informs.
    verdict
        ``passed``, ``caution`` or ``failed``.
    advice
        What it means and what to do; empty where nothing is to be done.
    command
        The next command to try, ready to copy; empty where there is none.
    """

    check: str
    value: str
    limit: str = ""
    verdict: Severity = "passed"
    advice: str = ""
    command: str = ""

    def as_dict(self) -> dict[str, Any]:
        """Return the row as it stands in ``verdict.json``."""
        return asdict(self)


def worst(severities: Iterable[Severity]) -> Severity:
    """Return the most severe of `severities`; ``passed`` where there are none."""
    return max(severities, key=_ORDER.__getitem__, default="passed")

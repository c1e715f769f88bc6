"""The worst wins, and a reason is what stands in verdict.json."""

from __future__ import annotations

import pytest

from bayesglm.verdict import Reason, Severity, worst


@pytest.mark.parametrize(
    ("given", "expected"),
    [
        ([], "passed"),
        (["passed"], "passed"),
        (["passed", "caution"], "caution"),
        (["failed", "caution", "passed"], "failed"),
    ],
)
def test_worst(given: list[Severity], expected: Severity) -> None:
    assert worst(given) == expected


def test_reason_as_dict_has_the_keys_of_the_file() -> None:
    reason = Reason("rhat", "1.2", "< 1.01", "failed", "run longer", "bayesglm fit a.csv")
    assert reason.as_dict() == {
        "check": "rhat",
        "value": "1.2",
        "limit": "< 1.01",
        "verdict": "failed",
        "advice": "run longer",
        "command": "bayesglm fit a.csv",
    }
    assert Reason("sweeps", "3").verdict == "passed"

"""Row on what lies between sweeps."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import pytest
from rc_cell import rc_recording

from bayesglm.recording.gaps import gaps_row, overlaps
from bayesglm.recording.reading import read_recording
from bayesglm.recording.recording import Recording
from bayesglm.recording.settings import Settings

DATA = Path(__file__).parents[1] / "data"


def _starting(*starts_s: float | None) -> Recording:
    """Sweeps of 1 s that begin at these times."""
    recording = rc_recording([-100] * len(starts_s))
    sweeps = tuple(
        replace(sweep, start_s=start)
        for sweep, start in zip(recording.sweeps, starts_s, strict=True)
    )
    return replace(recording, sweeps=sweeps)


@pytest.mark.parametrize(
    ("starts_s", "value"),
    [
        ((3.0,), "one sweep"),
        ((0.0, 1.0, 2.0), "sweeps 0–2 follow without a gap and are joined"),
        (
            (0.0, 1.0, 2.5, 4.5, 5.5),
            "sweeps 0–1 and sweeps 3–4 follow without a gap and are joined; "
            "0.5 to 1 s between the others",
        ),
        ((0.0, 1.5, 3.0), "0.5 s between sweeps"),
        ((0.0, 1.5, 7.5), "0.5 to 5 s between sweeps"),
        ((7.5, 0.0, 1.5), "0.5 to 5 s between sweeps"),
        ((None, None), "starts of the sweeps are not stated"),
        ((0.0, None), "starts of the sweeps are not stated"),
    ],
)
def test_gaps_are_told(starts_s: tuple[float | None, ...], value: str) -> None:
    row = gaps_row(_starting(*starts_s), Settings())
    assert (row.value, row.verdict) == (value, "passed")


def test_sweeps_that_are_declared_to_follow_are_joined() -> None:
    settings = Settings.model_validate({"recording": {"contiguous": ["1-2"]}})
    row = gaps_row(_starting(None, None, None), settings)
    assert row.value == (
        "sweeps 1–2 follow without a gap and are joined; starts of the sweeps are not stated"
    )


def test_an_overlap_within_the_rounding_of_the_starts_is_none() -> None:
    """Starts to a tenth of a second: 1 s from 0.06 on and 1 s from 1.09 on, rounded."""
    row = gaps_row(_starting(0.1, 1.05, 3.0), Settings())
    assert row.verdict == "caution"
    assert gaps_row(_starting(0.2, 1.1, 3.4), Settings()).value == "0 to 1.3 s between sweeps"


def test_sweeps_that_overlap_are_a_caution() -> None:
    row = gaps_row(_starting(0.0, 0.8, 3.0), Settings())
    assert row.value == "by the stated starts, sweeps overlap by up to 0.2 s"
    assert row.verdict == "caution"
    assert row.command == "bayesglm check cell"


def test_without_starts_it_says_how_to_state_them() -> None:
    row = gaps_row(_starting(None, None), Settings())
    assert "recording.contiguous" in row.advice
    assert "sweep_start_s" in row.advice


def test_the_gaps_of_the_real_cell() -> None:
    """By its headers, sweeps of 3 s of which the last 0.5 s is cut off."""
    row = gaps_row(read_recording(DATA / "cell_a_steps.csv.gz"), Settings())
    assert row.value == "0.5 s between sweeps"
    assert row.advice == "what happened between sweeps is unknown, so they count as apart"


@pytest.mark.parametrize("starts_s", [(0.0, 0.0, 1.0, 1.0, 2.0), (0.0, 0.9, 1.8, 2.7)])
def test_overlaps_that_add_up_are_no_rounding(starts_s: tuple[float, ...]) -> None:
    """Each is within the last decimal of the starts, together they are not."""
    recording = _starting(*starts_s)
    assert overlaps(recording)
    assert gaps_row(recording, Settings()).verdict == "caution"
    assert not overlaps(_starting(0.0, 1.0, 2.0, 3.0))

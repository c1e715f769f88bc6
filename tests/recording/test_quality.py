"""Each row of the check: one recording that passes, one that must not."""

from __future__ import annotations

import subprocess
import sys
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from rc_cell import rc_recording, recording_of

from bayesglm.errors import InputError
from bayesglm.recording.quality import check_recording
from bayesglm.recording.reading import read_recording
from bayesglm.recording.recording import Recording, Sweep, TimeJump
from bayesglm.recording.selection import parse_select, refuse_defects, select
from bayesglm.recording.settings import RecordingSection, Settings
from bayesglm.recording.spikes import detect_spikes
from bayesglm.verdict import Reason

REAL_CELL = Path(__file__).parents[1] / "data" / "cell_a_steps.csv.gz"
ORDER = [
    "step",
    "jitter",
    "missing",
    "time_jumps",
    "gaps",
    "current",
    "repeats",
    "clipping",
    "spikes",
    "baseline",
    "baseline_drift",
    "resistance_drift",
    "input_resistance",
    "series_jump",
    "linearity",
]


def _rows(recording: Recording, settings: Settings | None = None) -> dict[str, Reason]:
    """Return the rows by name; of several input resistances the last."""
    return {row.check: row for row in check_recording(recording, settings or Settings())}


def _with(recording: Recording, index: int, **changes: object) -> Recording:
    sweeps = list(recording.sweeps)
    sweeps[index] = replace(sweeps[index], **changes)  # type: ignore[arg-type]
    return replace(recording, sweeps=tuple(sweeps))


@pytest.fixture
def recording() -> Recording:
    return rc_recording([-100, -50, 50, 100], series_MOhm=5, noise_mV=0.1)


def test_a_sound_recording_passes_in_the_stated_order(recording: Recording) -> None:
    rows = check_recording(recording, Settings())
    assert list(dict.fromkeys(row.check for row in rows)) == ORDER
    assert {row.verdict for row in rows} == {"passed"}
    assert not any(row.command for row in rows)


def test_every_row_that_does_not_pass_names_a_command() -> None:
    recording = rc_recording([-100, 50, 100], series_MOhm=40)
    recording = _with(recording, 2, spikes=np.array([5000]), jitter_ms=0.05)
    rows = [row for row in check_recording(recording, Settings()) if row.verdict != "passed"]
    assert [row.check for row in rows] == ["jitter", "series_jump", "linearity"]
    assert all(row.command.startswith("bayesglm ") and row.advice for row in rows)


def test_missing_rows_fail_with_place_length_and_the_sweeps_that_are_left(
    recording: Recording,
) -> None:
    voltage = recording.sweeps[1].voltage.copy()
    voltage[[10, 11, 12, 500]] = np.nan
    row = _rows(_with(recording, 1, voltage=voltage))["missing"]
    assert row.verdict == "failed"
    # Sweep 1 begins on row 2 + 10,000.
    assert row.value == "row 10012: 3 samples without a value (sweep 1), and 1 more"
    assert "--select 'sweeps=0,2-3'" in row.command


def test_missing_voltage_that_is_left_out_does_not_matter(recording: Recording) -> None:
    voltage = recording.sweeps[1].voltage.copy()
    voltage[10] = np.nan
    keep = recording.sweeps[1].keep.copy()
    keep[10] = False
    rows = _rows(_with(recording, 1, voltage=voltage, keep=keep))
    assert rows["missing"].verdict == "passed"


def test_jumps_in_time_fail(recording: Recording) -> None:
    jumps = (TimeJump(row=302, sample=300, before_ms=29.9, after_ms=35.0),)
    row = _rows(_with(recording, 0, jumps=jumps))["time_jumps"]
    assert (row.verdict, row.value) == ("failed", "row 302: time goes from 29.9 to 35 ms (sweep 0)")
    assert "--select 'sweeps=1-3'" in row.command


def test_the_command_leaves_out_every_kind_of_defect(recording: Recording) -> None:
    jumps = (TimeJump(row=302, sample=300, before_ms=29.9, after_ms=35.0),)
    voltage = recording.sweeps[2].voltage.copy()
    voltage[10] = np.nan
    rows = _rows(_with(_with(recording, 0, jumps=jumps), 2, voltage=voltage))
    assert rows["missing"].command == rows["time_jumps"].command
    assert "--select 'sweeps=1,3'" in rows["missing"].command


def test_jitter_and_step_are_held_to_their_limits(recording: Recording) -> None:
    assert _rows(_with(recording, 0, jitter_ms=0.009))["jitter"].verdict == "passed"
    assert _rows(_with(recording, 0, jitter_ms=2e-13))["jitter"].value == "0 ms"
    assert _rows(_with(recording, 0, jitter_ms=0.011))["jitter"].verdict == "caution"
    assert _rows(replace(recording, step_ms=2.0))["step"].verdict == "caution"


def test_a_constant_current_fails_even_where_sweeps_differ() -> None:
    pairs = [(np.full(5000, level), np.full(5000, -70.0)) for level in (0.0, 0.1)]
    row = _rows(recording_of(pairs))["current"]
    assert (row.verdict, row.value) == ("failed", "0 to 100 pA, constant in every sweep")


def test_a_current_without_values_fails() -> None:
    rows = _rows(recording_of([(np.full(5000, np.nan), np.full(5000, -70.0))]))
    assert rows["current"].verdict == "failed"
    assert rows["missing"].verdict == "failed"
    assert rows["baseline"].value == "not measured"


def test_a_clipped_voltage_is_a_caution(recording: Recording) -> None:
    clipped = np.minimum(recording.sweeps[3].voltage, -60.5)
    row = _rows(_with(recording, 3, voltage=clipped))["clipping"]
    assert row.verdict == "caution"
    assert "at −60.5 mV" in row.value
    assert "sweeps=0-2" in row.command


def test_a_trace_without_noise_is_not_taken_for_clipped() -> None:
    assert _rows(rc_recording([50, 100]))["clipping"].verdict == "passed"


def test_spikes_are_counted_and_without_them_a_kernel_is_left_out(recording: Recording) -> None:
    none = _rows(recording)["spikes"]
    assert none.value == "0 spikes in 4 s (0 Hz); given in the test"
    assert "after-spike kernel is left out" in none.advice
    one = _rows(_with(recording, 3, spikes=np.array([5000])))["spikes"]
    assert one.value == "1 spike in 4 s (0.25 Hz); given in the test"
    assert one.advice == ""


def test_a_sweep_of_one_sample_does_no_harm(recording: Recording) -> None:
    tiny = Sweep(
        9, np.zeros(1), np.full(1, -70.0), np.ones(1, dtype=np.bool_), np.empty(0, dtype=np.int64)
    )
    assert _rows(replace(recording, sweeps=(*recording.sweeps, tiny)))["step"].verdict == "passed"


def test_what_one_recording_shows_loads_no_jax() -> None:
    """JAX takes a second to load, and only what the design identifies needs it."""
    code = "import sys, bayesglm.recording.quality; sys.exit('jax' in sys.modules)"
    assert subprocess.run([sys.executable, "-c", code], check=False).returncode == 0


def test_the_real_cell() -> None:
    recording = detect_spikes(read_recording(REAL_CELL), RecordingSection())
    rows = check_recording(recording, Settings())
    by_name = {row.check: row for row in rows}
    # Measured beforehand, by hand, on the same trace.
    assert by_name["spikes"].value.startswith("117 spikes in 42.5 s (2.8 Hz)")
    assert by_name["baseline"].value == "baseline at holding −62.1 mV (sd 0.46 over 17 sweeps)"
    assert by_name["current"].value == "−100 to 300 pA"
    assert by_name["linearity"].verdict == "caution"
    assert by_name["linearity"].command == (
        f"bayesglm fit {recording.source} --select 'current=-100:25pA' "
        f"--out {recording.name}_selected"
    )
    proposed = parse_select(["current=-100:25pA"])
    assert [sweep.number for sweep in select(recording, proposed).sweeps] == [0, 1, 2, 3, 4, 5]
    assert by_name["gaps"].value == "0.5 s between sweeps"
    others = {row.verdict for row in rows if row.check != "linearity"}
    assert others == {"passed"}
    levels = [row.value.split(":")[0] for row in rows if row.check == "input_resistance"]
    assert levels == ["−100 pA", "−75 pA", "−50 pA", "−25 pA", "25 pA"]


def test_a_step_of_seconds_is_a_wrong_unit_of_time(recording: Recording) -> None:
    """Milliseconds in a column of seconds: refused by the fit, failed by the check."""
    slow = replace(recording, step_ms=50.0)
    row = _rows(slow)["step"]
    assert row.verdict == "failed"
    assert "time_ms or time_s" in row.advice
    with pytest.raises(InputError, match=r"the step is 50 ms; expected 0\.02 to 1 ms"):
        refuse_defects(slow)


def test_a_current_of_a_picoampere_is_a_wrong_unit(recording: Recording) -> None:
    """Nanoamperes in a column of picoamperes."""
    sweeps = tuple(replace(sweep, current=sweep.current / 1e3) for sweep in recording.sweeps)
    assert _rows(recording)["current"].verdict == "passed"
    row = _rows(replace(recording, sweeps=sweeps))["current"]
    assert row.verdict == "caution"
    assert "current_nA" in row.advice

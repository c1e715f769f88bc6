"""What one sees on the trace, and whether it can be fitted.

`check_recording` turns a recording into rows of value, limit, verdict, advice and command. The rows
made here say whether the file is sound: its times, its current, its spikes. The others are made
where what they rest on is measured.
"""

from __future__ import annotations

from typing import Final

import numpy as np

from bayesglm.recording.gaps import gaps_row
from bayesglm.recording.membrane import baseline_row, membrane_rows
from bayesglm.recording.ranges import format_sweeps
from bayesglm.recording.recording import BoolArray, FloatArray, Recording, Sweep
from bayesglm.recording.repeats import repeats_row
from bayesglm.recording.selection import LONGEST_STEP_MS, WRONG_TIME_UNIT
from bayesglm.recording.settings import Settings
from bayesglm.recording.stability import stability_rows
from bayesglm.recording.steps import measure_steps
from bayesglm.recording.wording import check_command, fit_command, number
from bayesglm.verdict import Reason

_STEP_MS: Final = (0.02, 1.0)
#: A sample that is off the grid by more than this share of the step smears fast kernels.
_LARGEST_JITTER: Final = 0.1
_SMALLEST_RANGE_PA: Final = 0.1
#: Hardly 1 mV in a cell of 500 MΩ.
_SMALL_RANGE_PA: Final = 2.0
_CLIPPED_IN_A_ROW: Final = 5
_SETTLED_MV: Final = 1e-3


def check_recording(recording: Recording, settings: Settings) -> tuple[Reason, ...]:
    """Check a recording before it is fitted.

    Parameters
    ----------
    recording
        The recording, its spikes detected.
    settings
        The study's settings: what is known of the holding current, the level of intervals.

    Returns
    -------
    tuple of Reason
        Rows in this order: ``step``, ``jitter``, ``missing``, ``time_jumps``, ``gaps``,
        ``current``, ``repeats``, ``clipping``, ``spikes``, ``baseline``, ``baseline_drift``,
        ``resistance_drift``, one ``input_resistance`` for each level, ``series_jump``,
        ``linearity``.

    Raises
    ------
    InputError
        If spikes have not been looked for.
    """
    measures = measure_steps(recording, settings.sampling.level)
    return (
        _step(recording),
        _jitter(recording),
        _missing(recording, settings),
        _time_jumps(recording, settings),
        gaps_row(recording, settings),
        _current(recording),
        repeats_row(recording, settings),
        _clipping(recording, settings),
        _spikes(recording),
        baseline_row(measures, settings),
        *stability_rows(recording, measures, settings),
        *membrane_rows(recording, measures, settings),
    )


def _step(recording: Recording) -> Reason:
    step = recording.step_ms
    shortest, longest = _STEP_MS
    fits = shortest * 0.999 <= step <= longest * 1.001
    value = f"{number(step, 4)} ms ({number(1 / step, 4)} kHz)"
    limit = f"{shortest:g} to {longest:g} ms"
    if step > LONGEST_STEP_MS:
        return Reason("step", value, limit, "failed", WRONG_TIME_UNIT, check_command(recording))
    return Reason(
        "step",
        value,
        limit,
        "passed" if fits else "caution",
        "" if fits else "the kernels were checked for steps in this range: resample the recording",
        "" if fits else check_command(recording),
    )


def _jitter(recording: Recording) -> Reason:
    worst = max(recording.sweeps, key=lambda sweep: sweep.jitter_ms)
    allowed = _LARGEST_JITTER * recording.step_ms
    fits = worst.jitter_ms <= allowed
    jitter = round(worst.jitter_ms, 6)  # below a nanosecond it is the rounding of the times
    place = f" (sweep {worst.number})" if jitter else ""
    return Reason(
        "jitter",
        f"{number(jitter, 2)} ms{place}",
        f"at most {number(allowed, 3)} ms",
        "passed" if fits else "caution",
        "" if fits else "the fit takes samples as evenly spaced: write times with more digits",
        "" if fits else check_command(recording),
    )


def _missing(recording: Recording, settings: Settings) -> Reason:
    """Name the runs of missing values, in the current or in voltage that would be used."""
    runs = [
        (sweep, start, stop)
        for sweep in recording.sweeps
        for start, stop in _true_runs(_absent(sweep))
    ]
    if not runs:
        return Reason("missing", "no missing values", "none")
    sweep, start, stop = runs[0]
    samples = "sample" if stop - start == 1 else "samples"
    others = f", and {len(runs) - 1} more" if len(runs) > 1 else ""
    return Reason(
        "missing",
        f"{recording.place(sweep.first_row + start)}: {stop - start} {samples} without a value "
        f"(sweep {sweep.number}){others}",
        "none",
        "failed",
        "leave these sweeps out, or cut the recording there",
        _sound_sweeps(recording, settings),
    )


def _time_jumps(recording: Recording, settings: Settings) -> Reason:
    jumps = [(sweep, jump) for sweep in recording.sweeps for jump in sweep.jumps]
    if not jumps:
        return Reason("time_jumps", "no jumps in time", "none")
    sweep, first = jumps[0]
    others = f", and {len(jumps) - 1} more" if len(jumps) > 1 else ""
    return Reason(
        "time_jumps",
        f"{recording.place(first.row)}: time goes from {number(first.before_ms, 7)} to "
        f"{number(first.after_ms, 7)} ms (sweep {sweep.number}){others}",
        "none",
        "failed",
        "leave these sweeps out, or give each stretch between jumps a sweep number of its own",
        _sound_sweeps(recording, settings),
    )


def _current(recording: Recording) -> Reason:
    finite = [sweep.current[np.isfinite(sweep.current)] * 1e3 for sweep in recording.sweeps]
    finite = [current for current in finite if len(current)]
    if not finite:
        return _constant_current("no value of the current", recording)
    lowest = min(float(current.min()) for current in finite)
    highest = max(float(current.max()) for current in finite)
    value = f"{number(lowest, 4)} to {number(highest, 4)} pA"
    if max(float(np.ptp(current)) for current in finite) < _SMALLEST_RANGE_PA:
        return _constant_current(f"{value}, constant in every sweep", recording)
    if highest - lowest < _SMALL_RANGE_PA:
        return Reason(
            "current",
            value,
            f"spans at least {_SMALL_RANGE_PA:g} pA",
            "caution",
            "so small a current moves no neuron: the unit in the header is probably wrong "
            "(current_pA or current_nA)",
            check_command(recording),
        )
    return Reason("current", value, "changes within a sweep")


def _constant_current(value: str, recording: Recording) -> Reason:
    return Reason(
        "current",
        value,
        "changes within a sweep",
        "failed",
        "it says nothing about the input kernel: record steps or fluctuating current",
        check_command(recording),
    )


def _clipping(recording: Recording, settings: Settings) -> Reason:
    """Look for plateaus at the highest or lowest voltage of the recording."""
    limit = f"fewer than {_CLIPPED_IN_A_ROW} equal samples in a row at an extreme"
    finite = [one.voltage[np.isfinite(one.voltage)] for one in recording.sweeps]
    every = np.array([[v.min(), v.max()] for v in finite if len(v)]).reshape(-1, 2)
    extremes = (every[:, 0].min(), every[:, 1].max()) if len(every) else ()
    plateaus = (
        (sweep, start, stop)
        for sweep in recording.sweeps
        for extreme in extremes
        for start, stop in _true_runs(sweep.voltage == extreme)
        if stop - start >= _CLIPPED_IN_A_ROW and _reached_at_once(sweep.voltage, start)
    )
    found = next(plateaus, None)
    if found is None:
        return Reason("clipping", "none seen", limit)
    sweep, start, stop = found
    return Reason(
        "clipping",
        f"{stop - start} samples at {number(sweep.voltage[start], 4)} mV from "
        f"{recording.place(sweep.first_row + start)} (sweep {sweep.number})",
        limit,
        "caution",
        "the amplifier or converter seems to be at the end of its range there: leave the sweep out",
        _without(recording, {sweep.number}, settings),
    )


def _reached_at_once(voltage: FloatArray, start: int) -> bool:
    """Tell a cut-off trace from a simulated one that settles at its extreme without noise."""
    return start > 0 and bool(abs(voltage[start] - voltage[start - 1]) > _SETTLED_MV)


def _spikes(recording: Recording) -> Reason:
    count = recording.n_spikes
    rate = count / recording.seconds
    how = f"; {recording.spikes_from}" if recording.spikes_from else ""
    noun = "spike" if count == 1 else "spikes"
    return Reason(
        "spikes",
        f"{count} {noun} in {number(recording.seconds, 4)} s ({number(rate, 2)} Hz){how}",
        advice="" if count else "without spikes the after-spike kernel is left out of the fit",
    )


def _true_runs(flags: BoolArray) -> list[tuple[int, int]]:
    """Return first and past-the-end index of each run of True."""
    edges = np.flatnonzero(np.diff(np.concatenate(([False], flags, [False])).astype(np.int8)))
    return [(int(start), int(stop)) for start, stop in edges.reshape(-1, 2)]


def _absent(sweep: Sweep) -> BoolArray:
    """Return where a value is missing; current that is left out still acts, voltage does not."""
    return np.isnan(sweep.current) | (np.isnan(sweep.voltage) & sweep.keep)


def _sound_sweeps(recording: Recording, settings: Settings) -> str:
    """Return the command that fits the sweeps without jumps or missing values."""
    faulty = {one.number for one in recording.sweeps if one.jumps or _absent(one).any()}
    return _without(recording, faulty, settings)


def _without(recording: Recording, numbers: set[int], settings: Settings) -> str:
    """Return the command that fits all other sweeps; a check where none is left."""
    left = [sweep.number for sweep in recording.sweeps if sweep.number not in numbers]
    if not left:
        return check_command(recording)
    return fit_command(recording, f"sweeps={format_sweeps(left)}", settings)

"""What one sees on the trace, and whether it can be fitted.

`check_recording` turns a recording into rows of value, limit, verdict, advice and command: first
whether the file is sound, then what the cell did, then the conventional measures with their
intervals and the widest range of current in which a linear kernel is a fair description.
"""

from __future__ import annotations

from collections.abc import Iterable
from typing import Final

import numpy as np

from bayesglm.recording.current import SAME_LEVEL_NA
from bayesglm.recording.linearity import LARGEST_SHARE, linear_range
from bayesglm.recording.ranges import format_sweeps
from bayesglm.recording.recording import BoolArray, FloatArray, Recording, Sweep
from bayesglm.recording.settings import Settings
from bayesglm.recording.steps import (
    LevelMeasure,
    MeanInterval,
    StepMeasures,
    mean_interval,
    measure_steps,
)
from bayesglm.recording.wording import (
    check_command,
    fit_command,
    fixed,
    minus,
    number,
)
from bayesglm.verdict import Reason

_STEP_MS: Final = (0.02, 1.0)
#: A sample that is off the grid by more than this share of the step smears fast kernels.
_LARGEST_JITTER: Final = 0.1
_SMALLEST_RANGE_PA: Final = 0.1
_CLIPPED_IN_A_ROW: Final = 5
_SETTLED_MV: Final = 1e-3
_LARGEST_DRIFT_MV: Final = 3.0
_LARGEST_SERIES_MOHM: Final = 20.0
_LARGEST_SERIES_SHARE: Final = 0.15
_NO_STEPS: Final = "not measured: no complete steps of current"


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
        Rows in this order: ``step``, ``jitter``, ``missing``, ``time_jumps``, ``current``,
        ``clipping``, ``spikes``, ``baseline``, ``baseline_drift``, one ``input_resistance`` for
        each level, ``series_jump``, ``linearity``.

    Raises
    ------
    InputError
        If spikes have not been looked for.
    """
    level = settings.sampling.level
    measures = measure_steps(recording, level)
    return (
        _step(recording),
        _jitter(recording),
        _missing(recording, settings),
        _time_jumps(recording, settings),
        _current(recording),
        _clipping(recording, settings),
        _spikes(recording),
        _baseline(measures, settings),
        _drift(recording, measures, settings),
        *_input_resistance(measures, level),
        _series_jump(recording, measures, settings),
        _linearity(recording, measures, settings),
    )


def _step(recording: Recording) -> Reason:
    step = recording.step_ms
    shortest, longest = _STEP_MS
    fits = shortest * 0.999 <= step <= longest * 1.001
    return Reason(
        "step",
        f"{number(step, 4)} ms ({number(1 / step, 4)} kHz)",
        f"{shortest:g} to {longest:g} ms",
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
    rows = "row" if stop - start == 1 else "rows"
    others = f", and {len(runs) - 1} more" if len(runs) > 1 else ""
    return Reason(
        "missing",
        f"row {sweep.first_row + start}: {stop - start} {rows} without a value "
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
        f"row {first.row}: time goes from {number(first.before_ms, 7)} to "
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
        f"{stop - start} samples at {number(sweep.voltage[start], 4)} mV from row "
        f"{sweep.first_row + start} (sweep {sweep.number})",
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


def _baseline(measures: StepMeasures, settings: Settings) -> Reason:
    """Report the voltage at the holding current; it is called rest only where nothing is held."""
    found = mean_interval(measures.baselines_mV)
    if not found.n:
        advice = "no sweep begins with 20 ms of constant current free of spikes"
        return Reason("baseline", "not measured", advice=advice)
    held_nothing = settings.recording.holding_pA == 0 and abs(measures.holding_nA) <= SAME_LEVEL_NA
    name = "rest" if held_nothing else "baseline at holding"
    spread = f" (sd {fixed(found.sd, 2)} over {found.n} sweeps)" if found.n > 1 else " (one sweep)"
    unknown = settings.recording.holding_pA is None
    return Reason(
        "baseline",
        f"{name} {fixed(found.mean, 1)} mV{spread}",
        advice="the holding current is not stated, so this need not be the resting potential: "
        "set holding_pA in [recording]"
        if unknown
        else "",
    )


def _drift(recording: Recording, measures: StepMeasures, settings: Settings) -> Reason:
    """Compare the first and the last sweep on a straight line through all baselines."""
    limit = f"at most {_LARGEST_DRIFT_MV:g} mV"
    sweeps = np.flatnonzero(np.isfinite(measures.baselines_mV))
    if len(sweeps) < 3:
        return Reason("baseline_drift", "not measured: fewer than 3 sweeps with a baseline", limit)
    slope = np.polyfit(sweeps, measures.baselines_mV[sweeps], 1)[0]
    drift = float(slope * (sweeps[-1] - sweeps[0]))
    fits = abs(drift) <= _LARGEST_DRIFT_MV
    numbers = [sweep.number for sweep in recording.sweeps]
    first_half = f"sweeps={format_sweeps(numbers[: (len(numbers) + 1) // 2])}"
    return Reason(
        "baseline_drift",
        f"{fixed(drift, 1)} mV from the first to the last sweep",
        limit,
        "passed" if fits else "caution",
        ""
        if fits
        else "offsets of the sweeps absorb it, but the cell may have changed: "
        "compare fits of the first and the last sweeps",
        "" if fits else fit_command(recording, first_half, settings),
    )


def _input_resistance(measures: StepMeasures, level: float) -> Iterable[Reason]:
    if not measures.levels:
        yield Reason("input_resistance", _NO_STEPS)
        return
    quiet = [one for one in measures.levels if one.steady_MOhm.n]
    for one in quiet:
        yield _resistance_row(one, level)
    if not quiet:
        yield Reason("input_resistance", "not measured: spikes in or up to 1 s before every step")


def _resistance_row(one: LevelMeasure, level: float) -> Reason:
    n = one.steady_MOhm.n
    return Reason(
        "input_resistance",
        f"{number(one.level_nA * 1e3, 4)} pA: steady {_with_interval(one.steady_MOhm, level, 0)}, "
        f"peak {_with_interval(one.peak_MOhm, level, 0)}, n = {n}",
        advice="holds the series jump",
    )


def _series_jump(recording: Recording, measures: StepMeasures, settings: Settings) -> Reason:
    limit = (
        f"at most {_LARGEST_SERIES_MOHM:g} MΩ and "
        f"{100 * _LARGEST_SERIES_SHARE:.0f} % of the input resistance"
    )
    level = settings.sampling.level
    found = mean_interval(measures.series_MOhm, level)
    if not found.n:
        why = _NO_STEPS if not measures.steps else "not measured: sampled too coarsely, or spikes"
        return Reason("series_jump", why, limit)
    quiet = [one.steady_MOhm.mean for one in measures.levels if one.steady_MOhm.n]
    resistance = float(np.median(quiet)) if quiet else np.nan
    share = abs(found.mean) / resistance
    beyond = abs(found.mean) > _LARGEST_SERIES_MOHM or share > _LARGEST_SERIES_SHARE
    of_input = f", {100 * share:.0f} % of the input resistance" if np.isfinite(share) else ""
    return Reason(
        "series_jump",
        f"{_with_interval(found, level, 1)} over {found.n} sweeps{of_input}",
        limit,
        "caution" if beyond else "passed",
        "the bridge is not balanced; the fit takes the jump up as its electrode term, and the "
        "resistances by level hold it"
        if beyond
        else "",
        fit_command(recording, "", settings) if beyond else "",
    )


def _linearity(recording: Recording, measures: StepMeasures, settings: Settings) -> Reason:
    limit = f"every level within {100 * LARGEST_SHARE:.0f} % of a line, or within chance"
    if not measures.levels:
        return Reason("linearity", _NO_STEPS, limit)
    if len(measures.levels) == 1:
        return Reason("linearity", "not measured: steps to one level only", limit)
    found = linear_range(measures)
    if found is None:
        return Reason(
            "linearity",
            "no two neighbouring levels on a line through the baseline without spikes",
            limit,
            "caution",
            "the kernels describe this protocol, not the cell: give smaller steps",
            fit_command(recording, "", settings),
        )
    lower, upper = found.whole_pA
    value = (
        f"linear from {minus(f'{lower:g}')} to {minus(f'{upper:g}')} pA "
        f"({found.resistance_MOhm:.0f} MΩ; largest departure {found.departure_mV:.1f} mV at "
        f"{number(found.departure_nA * 1e3, 4)} pA)"
    )
    if found.complete:
        return Reason("linearity", value, limit)
    return Reason(
        "linearity",
        value,
        limit,
        "caution",
        "beyond this range the cell spikes or bends, and a linear kernel averages over what it "
        f"does there; inside, departures below {found.chance_mV:.1f} mV would not be seen at a "
        "level given once",
        fit_command(recording, found.selection, settings),
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


def _with_interval(found: MeanInterval, level: float, digits: int) -> str:
    mean = f"{fixed(found.mean, digits)} MΩ"
    if found.n < 2:
        return mean
    bounds = f"{fixed(found.lower, digits)} to {fixed(found.upper, digits)}"
    return f"{mean} ({100 * level:g} % interval {bounds}, sd {fixed(found.sd, digits)})"

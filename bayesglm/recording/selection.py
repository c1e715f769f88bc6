"""What part of a recording is fitted, and the defects that a fit refuses.

A selection leaves whole sweeps out or masks samples; it never cuts a sweep, because the current
before a sample acts on it whether or not that earlier time is used. Everything stated must hold.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import replace

import numpy as np

from bayesglm.errors import InputError, nearest
from bayesglm.recording.current import begins_settled
from bayesglm.recording.ranges import RANGES, Range, format_sweeps, parse_range, parse_sweeps
from bayesglm.recording.recording import BoolArray, FloatArray, Recording, Sweep
from bayesglm.recording.settings import RowSelection, SelectSection

_KEYS = ("sweeps", *RANGES)


def check_select(section: SelectSection) -> None:
    """Raise an `InputError` unless every range and list of a selection can be read."""
    for key, text in _stated(section).items():
        if key == "sweeps":
            parse_sweeps(text)
        else:
            parse_range(key, text)


#: A membrane has long settled within such a step, ms.
LONGEST_STEP_MS = 5.0
WRONG_TIME_UNIT = "the unit of time in the header is probably wrong (time_ms or time_s)"


def parse_select(expressions: Sequence[str], base: SelectSection | None = None) -> SelectSection:
    """Add selections given on the command line to those of the study.

    Parameters
    ----------
    expressions
        Such as ``current=-100:25pA``, ``rows.voltage=-90:-40mV``, ``sweeps=0-4,7``,
        ``window=100:2400ms`` or ``rate=0:5Hz``.
    base
        What is selected already; default everything.

    Returns
    -------
    SelectSection
        In which all of them hold: where a key is stated twice, what both leave.

    Raises
    ------
    InputError
        If an expression cannot be read or leaves nothing together with another of its key.
    """
    stated = _stated(base if base is not None else SelectSection())
    for expression in expressions:
        key, sign, text = (part.strip() for part in expression.partition("="))
        if not sign or not text:
            raise InputError(
                f"selection {expression!r}: expected KEY=RANGE, such as current=-100:25pA or "
                "sweeps=0-4,7"
            )
        if key not in _KEYS:
            raise InputError(
                f"selection {expression!r}: unknown key {key!r}; expected one of "
                f"{', '.join(_KEYS)}{nearest(key, _KEYS)}"
            )
        stated[key] = _both(key, stated.get(key), text)
    rows = RowSelection(current=stated.get("rows.current"), voltage=stated.get("rows.voltage"))
    return SelectSection(
        sweeps=stated.get("sweeps"),
        current=stated.get("current"),
        rate=stated.get("rate"),
        window=stated.get("window"),
        rows=rows,
    )


def select(recording: Recording, section: SelectSection) -> Recording:
    """Leave out the sweeps and mask the samples that a selection does not want.

    Parameters
    ----------
    recording
        With spikes where `section.rate` is stated.
    section
        What is wanted. `sweeps`, `current` and `rate` leave out whole sweeps; `window`, counted
        from the first sample of each sweep, and `rows` mask samples.

    Returns
    -------
    Recording
        With `keep` False where a sample is masked, and one sentence in `left_out` for each part
        of the selection that removed something.

    Raises
    ------
    InputError
        If a sweep that is asked for does not exist, or nothing is left.
    """
    stated = _stated(section)
    result = recording
    if "sweeps" in stated:
        result = _select_numbers(result, stated["sweeps"])
    if "current" in stated:
        allowed = parse_range("current", stated["current"])
        # A missing current says nothing about the sweep here; a fit refuses it later.
        result = _drop(
            result,
            lambda s: bool(np.all(allowed.holds(s.current) | np.isnan(s.current))),
            f"some of their current lies outside {allowed}",
        )
    if "rate" in stated:
        rates = parse_range("rate", stated["rate"])
        step_s = recording.step_ms / 1e3
        result = _drop(
            result,
            lambda s: bool(rates.holds(_rate(s, step_s))),
            f"their rate lies outside {rates}",
        )
    for key, values in (
        ("window", lambda s: np.arange(s.n_samples) * recording.step_ms),
        ("rows.current", lambda s: s.current),
        ("rows.voltage", lambda s: s.voltage),
    ):
        if key in stated:
            result = _mask(result, parse_range(key, stated[key]), values, key)
    if not any(sweep.keep.any() for sweep in result.sweeps):
        _nothing_left(recording, stated)
    return result


def leave_out_unsettled(recording: Recording, duration_ms: float) -> Recording:
    """Leave out the beginning of sweeps that begin under a changing current.

    The voltage there still answers to a current that was not recorded. A sweep that would be
    left out whole stays: `fit` refuses it by itself where nothing else is left.

    Parameters
    ----------
    recording
        The recording.
    duration_ms
        How long the voltage answers: the duration of the input kernel, ms.

    Returns
    -------
    Recording
        With `keep` false there, and a sentence in `left_out`.
    """
    samples = round(duration_ms / recording.step_ms)
    sweeps, cut = [], 0
    for sweep in recording.sweeps:
        if samples < sweep.n_samples and not begins_settled(sweep.current, recording.step_ms):
            keep = sweep.keep.copy()
            keep[:samples] = False
            sweep, cut = replace(sweep, keep=keep), cut + 1
        sweeps.append(sweep)
    if not cut:
        return recording
    told = (
        f"the first {duration_ms:.0f} ms of {cut} of {len(sweeps)} sweeps, which do not begin with "
        "a constant current: what drove the cell before is unknown"
    )
    return replace(recording, sweeps=tuple(sweeps), left_out=(*recording.left_out, told))


def refuse_defects(recording: Recording) -> None:
    """Refuse what a fit cannot take.

    That are jumps in time, missing values, steps in which a membrane has long settled, a current
    that never varies.

    Parameters
    ----------
    recording
        After selection. A voltage may be missing where `keep` is False; a current may be missing
        nowhere, because it acts on the voltage after it.

    Raises
    ------
    InputError
        For the first defect, with the selection that leaves out all of them where there is one.
    """
    defects = [(sweep, _defect(sweep)) for sweep in recording.sweeps]
    faulty = [(sweep, defect) for sweep, defect in defects if defect is not None]
    if faulty:
        _, (row, words) = faulty[0]
        more = f" (and {len(faulty) - 1} more sweeps with defects)" if len(faulty) > 1 else ""
        sound = [n for sweep, defect in defects if defect is None for n in sweep.numbers]
        raise InputError(
            f"{recording.source}, {recording.place(row)}: {words}{more}; a fit needs every value "
            f"in its place; {_mend(recording, sound)}"
        )
    if recording.step_ms > LONGEST_STEP_MS:
        raise InputError(
            f"{recording.source}: the step is {recording.step_ms:g} ms; expected 0.02 to 1 ms; "
            f"{WRONG_TIME_UNIT}"
        )
    low = min(float(sweep.current.min()) for sweep in recording.sweeps)
    high = max(float(sweep.current.max()) for sweep in recording.sweeps)
    if low == high:
        raise InputError(
            f"{recording.source}: current never varies (it is {low * 1e3:g} pA throughout); the "
            "input kernel cannot be fitted; record or select sweeps in which it does"
        )


def _defect(sweep: Sweep) -> tuple[int, str] | None:
    """Return the row and description of the first defect of a sweep; None where it is sound."""
    if sweep.jumps:
        jump = sweep.jumps[0]
        return jump.row, (
            f"time jumps from {jump.before_ms:.10g} to {jump.after_ms:.10g} ms in {sweep.label}"
        )
    for name, missing in (
        ("current", np.isnan(sweep.current)),
        ("voltage", np.isnan(sweep.voltage) & sweep.keep),
    ):
        if missing.any():
            first, length = _first_run(missing)
            rows = "row" if length == 1 else "rows"
            return sweep.first_row + first, (
                f"{name} is missing in {length} {rows} of {sweep.label}"
            )
    return None


def _first_run(flags: BoolArray) -> tuple[int, int]:
    """Return the start and length of the first run of True."""
    first = int(np.argmax(flags))
    rest = flags[first:]
    return first, int(np.argmin(rest)) if not rest.all() else len(rest)


def _mend(recording: Recording, sound: Sequence[int]) -> str:
    """Return what leaves the defects out: sound sweeps, else a window without missing voltage."""
    if sound:
        return f"leave it out with --select 'sweeps={format_sweeps(sound)}'"
    if any(sweep.jumps for sweep in recording.sweeps):
        return "give the rows from the jump on a sweep number of their own, or export again"
    if any(np.isnan(sweep.current).any() for sweep in recording.sweeps):
        return "export the recording again with its whole current"
    usable = np.zeros(max(sweep.n_samples for sweep in recording.sweeps) + 2, dtype=np.bool_)
    usable[1:-1] = True
    for sweep in recording.sweeps:
        usable[1 : sweep.n_samples + 1] &= sweep.keep & ~np.isnan(sweep.voltage)
    if not usable.any():
        return "export the recording again with its whole voltage"
    # With a False at either end, edges come in pairs: start of a run, end of a run.
    starts, ends = np.flatnonzero(np.diff(usable)).reshape(-1, 2).T
    longest = int(np.argmax(ends - starts))
    begin, end = starts[longest] * recording.step_ms, (ends[longest] - 1) * recording.step_ms
    return f"leave it out with --select 'window={begin:.10g}:{end:.10g}ms'"


def _stated(section: SelectSection) -> dict[str, str]:
    """Return what a selection states, by key."""
    stated = {
        "sweeps": section.sweeps,
        "current": section.current,
        "rate": section.rate,
        "window": section.window,
        "rows.current": section.rows.current,
        "rows.voltage": section.rows.voltage,
    }
    return {key: text for key, text in stated.items() if text is not None}


def _both(key: str, old: str | None, new: str) -> str:
    """Return what two statements of one key leave together."""
    if key == "sweeps":
        wanted = set(parse_sweeps(new))
        if old is None:
            return new
        common = wanted & set(parse_sweeps(old))
        if common:
            return format_sweeps(sorted(common))
    else:
        second = parse_range(key, new)
        if old is None:
            return new
        first = parse_range(key, old)
        scale = first.factor / second.factor
        low, high = max(first.low * scale, second.low), min(first.high * scale, second.high)
        if low <= high:
            return str(replace(second, low=low, high=high))
    raise InputError(
        f"selection {key}={new}: nothing is left together with {key}={old}, which is selected "
        "already; all selections must hold; change one of the two"
    )


def _select_numbers(recording: Recording, text: str) -> Recording:
    """Keep the sweeps whose numbers are listed; all listed ones must exist."""
    wanted = set(parse_sweeps(text))
    numbers = [sweep.number for sweep in recording.sweeps]
    missing = wanted.difference(numbers)
    if missing:
        raise InputError(
            f"{recording.source}: selection sweeps={text} asks for {format_sweeps(sorted(missing))}"
            f"; expected sweeps out of {format_sweeps(numbers)}; correct the numbers"
        )
    return _drop(recording, lambda s: s.number in wanted, f"not in sweeps={text}")


def _rate(sweep: Sweep, step_s: float) -> FloatArray:
    """Return the firing rate of a sweep, Hz, shape ()."""
    if sweep.spikes is None:
        raise InputError(
            f"sweep {sweep.number}: a rate is selected and no spikes were looked for; "
            "detect spikes before selecting"
        )
    return np.asarray(len(sweep.spikes) / (sweep.n_samples * step_s))


def _drop(recording: Recording, wanted: Callable[[Sweep], bool], why: str) -> Recording:
    """Leave out the sweeps that are not wanted, and say so."""
    kept = tuple(sweep for sweep in recording.sweeps if wanted(sweep))
    left_out = [sweep.number for sweep in recording.sweeps if not wanted(sweep)]
    if not left_out:
        return recording
    if not kept:
        # A recording has at least one sweep; masking them all is what "nothing left" looks like.
        empty = tuple(replace(s, keep=np.zeros_like(s.keep)) for s in recording.sweeps)
        return replace(recording, sweeps=empty)
    sentence = (
        f"{len(left_out)} of {len(recording.sweeps)} sweeps left out "
        f"({format_sweeps(left_out)}): {why}"
    )
    return replace(recording, sweeps=kept, left_out=(*recording.left_out, sentence))


def _mask(
    recording: Recording, allowed: Range, values: Callable[[Sweep], FloatArray], key: str
) -> Recording:
    """Mask the samples whose value lies outside a range, and say how many."""
    sweeps = tuple(
        replace(sweep, keep=sweep.keep & allowed.holds(values(sweep))) for sweep in recording.sweeps
    )
    before = sum(int(sweep.keep.sum()) for sweep in recording.sweeps)
    masked = before - sum(int(sweep.keep.sum()) for sweep in sweeps)
    if not masked:
        return recording
    sentence = f"{masked} of {before} rows left out: outside {key}={allowed}"
    return replace(recording, sweeps=sweeps, left_out=(*recording.left_out, sentence))


def _nothing_left(recording: Recording, stated: dict[str, str]) -> None:
    """Raise the error for a selection that leaves nothing, with the ranges there are."""
    current = np.concatenate([sweep.current for sweep in recording.sweeps]) * 1e3
    voltage = np.concatenate([sweep.voltage for sweep in recording.sweeps])
    duration = max(sweep.n_samples for sweep in recording.sweeps) * recording.step_ms
    chosen = " ".join(f"{key}={text}" for key, text in stated.items()) or "everything"
    ranges = [
        f"sweeps {format_sweeps([sweep.number for sweep in recording.sweeps])}",
        f"current {_span(current)} pA",
        f"voltage {_span(voltage)} mV",
        f"sweeps of {duration:g} ms",
    ]
    if all(sweep.spikes is not None for sweep in recording.sweeps):
        rates = [float(_rate(sweep, recording.step_ms / 1e3)) for sweep in recording.sweeps]
        ranges.append(f"rates {min(rates):.3g} to {max(rates):.3g} Hz")
    raise InputError(
        f"{recording.source}: nothing is left by the selection {chosen}; the recording has "
        f"{', '.join(ranges)}; widen the selection"
    )


def _span(values: FloatArray) -> str:
    """Return the range of values in words, leaving missing ones aside."""
    known = values[~np.isnan(values)]
    return f"{known.min():.4g} to {known.max():.4g}" if len(known) else "(all missing)"

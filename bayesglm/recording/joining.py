"""Sweeps that follow on each other without a gap are one stretch of recording.

Cut apart, each would begin with a current and spikes that nobody knows; joined, the current and
the spikes of one act on the voltage of the next, as they did in the cell.
"""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import replace
from itertools import pairwise
from typing import Final

import numpy as np

from bayesglm.errors import InputError
from bayesglm.recording import timegrid
from bayesglm.recording.ranges import format_sweeps
from bayesglm.recording.recording import Recording, Sweep
from bayesglm.recording.settings import RecordingSection

_CHAIN: Final = re.compile(r"\s*(\d+)\s*[-–]\s*(\d+)\s*", re.ASCII)
#: A sweep follows on another if it begins within this share of a step of the other's end.
_LARGEST_GAP: Final = 0.5
#: Rounding of sums of times.
_ROUNDOFF_S: Final = 1e-9


def join_contiguous(recording: Recording, section: RecordingSection) -> Recording:
    """Join the sweeps that follow on each other without a gap.

    Parameters
    ----------
    recording
        After selection: a sweep that is left out parts those before from those after it.
    section
        `contiguous` declares chains of sweeps whose starts the file does not state.

    Returns
    -------
    Recording
        A joined sweep keeps the number, row and start of the first; `joined` tells where each
        begins. The same recording where nothing is joined.
    """
    groups = {group[0]: group for group in contiguous_groups(recording, section)}
    if not groups:
        return recording
    inside = {index for group in groups.values() for index in group[1:]}
    sweeps = tuple(
        _joined([recording.sweeps[k] for k in groups[index]]) if index in groups else sweep
        for index, sweep in enumerate(recording.sweeps)
        if index not in inside
    )
    return replace(recording, sweeps=sweeps)


def contiguous_groups(
    recording: Recording, section: RecordingSection
) -> tuple[tuple[int, ...], ...]:
    """Find the sweeps that follow on each other without a gap.

    A sweep follows on the one before it in the file if it starts within half a step of that
    one's end, or if both lie in one declared chain. Starts that are printed too coarsely to tell
    are not taken for more than they say.

    Parameters
    ----------
    recording
        The recording.
    section
        Declared chains. Numbers that the recording does not hold, because they were left out,
        part the chain.

    Returns
    -------
    tuple of tuples
        Indices of the sweeps of each group of two or more, in the order of the recording.
    """
    chains = parse_contiguous(section.contiguous)
    groups: list[list[int]] = [[0]]
    for index, (one, other) in enumerate(pairwise(recording.sweeps), start=1):
        declared = any(
            first <= one.number < last and other.number == one.number + 1 for first, last in chains
        )
        gap_s = _gap_s(one, other, recording.step_ms)
        near = gap_s is not None and (
            abs(gap_s) <= _LARGEST_GAP * recording.step_ms / 1e3 + _ROUNDOFF_S
        )
        if declared or near:
            groups[-1].append(index)
        else:
            groups.append([index])
    return tuple(tuple(group) for group in groups if len(group) > 1)


def parse_contiguous(texts: Sequence[str]) -> tuple[tuple[int, int], ...]:
    """Parse declared chains of sweeps, such as ``3-13``.

    Returns
    -------
    tuple of (first, last)
        In ascending order.

    Raises
    ------
    InputError
        If one is no such range, has a single sweep, runs backwards or overlaps another.
    """
    chains: list[tuple[int, int]] = []
    for text in texts:
        match = _CHAIN.fullmatch(text)
        if match is None:
            raise InputError(
                f"recording.contiguous: found {text!r}; expected the first and the last number of "
                'sweeps that follow without a gap, such as ["3-13"]'
            )
        first, last = int(match[1]), int(match[2])
        if last <= first:
            why = "is a single sweep" if last == first else "runs backwards"
            raise InputError(
                f"recording.contiguous: {text!r} {why}; expected at least two sweeps, the lower "
                "number first; correct or delete it"
            )
        chains.append((first, last))
    chains.sort()
    for (first, last), (second, end) in pairwise(chains):
        if second <= last:
            raise InputError(
                f"recording.contiguous: '{first}-{last}' and '{second}-{end}' overlap; expected "
                "each sweep in one range; write them as one, or correct the numbers"
            )
    return tuple(chains)


def check_contiguous(recording: Recording, section: RecordingSection) -> None:
    """Refuse declared chains that the file does not hold or contradicts.

    Parameters
    ----------
    recording
        All sweeps of the file.
    section
        Declared chains.

    Raises
    ------
    InputError
        If a number does not exist, sweeps do not stand in ascending order, or their stated starts
        lie further apart than the declared chain and the decimals of the starts allow.
    """
    numbers = [sweep.number for sweep in recording.sweeps]
    for first, last in parse_contiguous(section.contiguous):
        place = f"{recording.source}: recording.contiguous '{first}-{last}'"
        missing = set(range(first, last + 1)).difference(numbers)
        if missing:
            raise InputError(
                f"{place} names {format_sweeps(sorted(missing))}; expected sweeps out of "
                f"{format_sweeps(numbers)}; correct the numbers"
            )
        begin = numbers.index(first)
        chain = recording.sweeps[begin : begin + last - first + 1]
        if [sweep.number for sweep in chain] != list(range(first, last + 1)):
            raise InputError(
                f"{place}: these sweeps do not follow on each other in the file; expected them in "
                "ascending order without others between; sort them, or correct the numbers"
            )
        for one, other in pairwise(chain):
            _refuse_gap(recording, one, other, place)


def _refuse_gap(recording: Recording, one: Sweep, other: Sweep, place: str) -> None:
    """Refuse a declared pair whose stated starts lie apart by more than their rounding."""
    gap_s = _gap_s(one, other, recording.step_ms)
    if gap_s is None:
        return
    starts = np.array([sweep.start_s for sweep in recording.sweeps if sweep.start_s is not None])
    # Both starts may be off by half a decimal, so their difference by a whole one.
    allowed = timegrid.print_resolution(starts) + _LARGEST_GAP * recording.step_ms / 1e3
    if abs(gap_s) > allowed + _ROUNDOFF_S:
        what = "begins {:.6g} s after the end" if gap_s > 0 else "begins {:.6g} s before the end"
        raise InputError(
            f"{place}: by the starts in the file, sweep {other.number} "
            f"{what.format(abs(gap_s))} of sweep {one.number}; expected no gap; correct the "
            "starts, or delete the range"
        )


def _gap_s(one: Sweep, other: Sweep, step_ms: float) -> float | None:
    """Time from the end of one sweep to the start of another, s; None where not stated."""
    if one.start_s is None or other.start_s is None:
        return None
    return other.start_s - (one.start_s + one.n_samples * step_ms / 1e3)


def _joined(sweeps: Sequence[Sweep]) -> Sweep:
    """Put sweeps one after another."""
    first = sweeps[0]
    starts = np.concatenate([[0], np.cumsum([sweep.n_samples for sweep in sweeps])[:-1]])
    shifted = list(zip(sweeps, starts.tolist(), strict=True))
    found = [sweep.spikes + start for sweep, start in shifted if sweep.spikes is not None]
    current = np.concatenate([sweep.current for sweep in sweeps])
    voltage = np.concatenate([sweep.voltage for sweep in sweeps])
    current.flags.writeable = voltage.flags.writeable = False
    return replace(
        first,
        current=current,
        voltage=voltage,
        keep=np.concatenate([sweep.keep for sweep in sweeps]),
        spikes=np.concatenate(found) if len(found) == len(sweeps) else None,
        jumps=tuple(
            replace(jump, sample=jump.sample + start)
            for sweep, start in shifted
            for jump in sweep.jumps
        ),
        jitter_ms=max(sweep.jitter_ms for sweep in sweeps),
        joined=tuple(
            (number, start + begin)
            for sweep, start in shifted
            for number, begin in (sweep.joined or ((sweep.number, 0),))
        ),
    )

"""What lies between sweeps: nothing, a gap of known length, or something that nobody states."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Final

import numpy as np

from bayesglm.recording.joining import contiguous_groups
from bayesglm.recording.recording import FloatArray, Recording
from bayesglm.recording.settings import Settings
from bayesglm.recording.timegrid import print_resolution
from bayesglm.recording.wording import check_command, number, sweeps_in_words
from bayesglm.verdict import Reason

_LIMIT: Final = "no sweep begins before another ends"
_APART: Final = "what happened between sweeps is unknown, so they count as apart"


def gaps_row(recording: Recording, settings: Settings) -> Reason:
    """Row ``gaps`` of the check: which sweeps are joined, and what lies between the others.

    Parameters
    ----------
    recording
        The recording, its sweeps as in the file.
    settings
        Which sweeps are declared to follow on each other.
    """
    n = len(recording.sweeps)
    if n == 1:
        return Reason("gaps", "one sweep", _LIMIT)
    chains = _chains(recording, contiguous_groups(recording, settings.recording))
    joined = _joined_in_words(recording, chains)
    if any(sweep.start_s is None for sweep in recording.sweeps):
        return Reason(
            "gaps",
            "; ".join(filter(None, (joined, "starts of the sweeps are not stated"))),
            _LIMIT,
            advice=f"{_APART}; where they follow without a gap, name them in "
            "recording.contiguous, or give the file a column sweep_start_s",
        )
    if len(chains) == 1:
        return Reason("gaps", joined, _LIMIT)
    gaps = _gaps_s(recording, chains)
    if overlaps(recording):
        return overlap_reason(recording)
    # An overlap that is left is the rounding of the starts.
    shortest, longest = (f"{max(value, 0.0):.3g}" for value in (gaps.min(), gaps.max()))
    span = shortest if shortest == longest else f"{shortest} to {longest}"
    between = f"{span} s between {'the others' if joined else 'sweeps'}"
    return Reason("gaps", "; ".join(filter(None, (joined, between))), _LIMIT, advice=_APART)


def overlaps(recording: Recording) -> bool:
    """Whether sweeps begin before others end, by their stated starts.

    Starts may be rounded to their last decimal; overlaps that add up to more are none of that.
    """
    if any(sweep.start_s is None for sweep in recording.sweeps):
        return False
    starts = np.array([sweep.start_s for sweep in recording.sweeps], dtype=np.float64)
    spare = np.concatenate([[0.0], np.cumsum(_gaps_s(recording, _alone(recording)))])
    fallen = np.max(np.maximum.accumulate(spare) - spare)
    return bool(fallen > print_resolution(starts) + recording.step_ms / 2e3)


def overlap_reason(recording: Recording) -> Reason:
    """Row ``gaps`` of a recording whose sweeps overlap."""
    overlap_s = -float(_gaps_s(recording, _alone(recording)).min())
    return Reason(
        "gaps",
        f"by the stated starts, sweeps overlap by up to {number(overlap_s, 3)} s",
        _LIMIT,
        "caution",
        "the starts are wrong: correct sweep_start_s, or leave the column out",
        check_command(recording),
    )


def _alone(recording: Recording) -> tuple[tuple[int, ...], ...]:
    return tuple((index,) for index in range(len(recording.sweeps)))


def _chains(recording: Recording, joined: Sequence[tuple[int, ...]]) -> tuple[tuple[int, ...], ...]:
    """Indices of the sweeps of each stretch, those that are not joined alone."""
    in_chain = {index for chain in joined for index in chain}
    alone = [(index,) for index in range(len(recording.sweeps)) if index not in in_chain]
    return tuple(sorted([*(chain for chain in joined if len(chain) > 1), *alone]))


def _joined_in_words(recording: Recording, chains: Sequence[tuple[int, ...]]) -> str:
    names = [
        sweeps_in_words([recording.sweeps[index].number for index in chain])
        for chain in chains
        if len(chain) > 1
    ]
    if not names:
        return ""
    return f"{' and '.join(names)} follow without a gap and are joined"


def _gaps_s(recording: Recording, chains: Sequence[tuple[int, ...]]) -> FloatArray:
    """Time from the end of each stretch to the next that begins, s; negative where they overlap."""
    starts, ends = [], []
    for chain in chains:
        first, last = recording.sweeps[chain[0]], recording.sweeps[chain[-1]]
        assert first.start_s is not None
        assert last.start_s is not None
        starts.append(first.start_s)
        ends.append(last.start_s + last.n_samples * recording.step_ms / 1e3)
    order = np.argsort(starts, kind="stable")
    gaps: FloatArray = np.asarray(starts)[order][1:] - np.asarray(ends)[order][:-1]
    return np.round(gaps, 6)  # beyond a microsecond it is the rounding of the starts

"""From the entry of a cell in a study to its recordings, ready to be fitted."""

from __future__ import annotations

from dataclasses import replace

from bayesglm.recording.joining import check_contiguous, join_contiguous
from bayesglm.recording.reading import SPIKES_FROM_FILE, read_recording
from bayesglm.recording.recording import Recording
from bayesglm.recording.selection import refuse_defects, select
from bayesglm.recording.settings import RecordingSection, SelectSection, Settings
from bayesglm.recording.spikes import detect_spikes
from bayesglm.recording.study import CellEntry, RecordingEntry


def load_cell(entry: CellEntry, settings: Settings) -> tuple[Recording, ...]:
    """Read what is fitted of a cell: spikes found, parts selected, defects refused, sweeps joined.

    Parameters
    ----------
    entry
        The cell's entry in the study; excluded and held-out recordings are passed over.
    settings
        Spike detection and selection.

    Returns
    -------
    tuple of Recording
        Empty where every recording is excluded or held out.

    Raises
    ------
    InputError
        If a file cannot be read, nothing is left of it, or what is left has NaN or jumps.
    """
    recordings = []
    for one in entry.recordings:
        if one.exclude or one.role != "fit":
            continue
        recording = select(load_recording(one, settings), settings.recording.select)
        # Before sweeps are joined, so that the advice names sweeps and times as selections do.
        refuse_defects(recording)
        recordings.append(join(recording, settings.recording))
    return tuple(recordings)


def join(recording: Recording, section: RecordingSection) -> Recording:
    """Join contiguous sweeps; a spike that lies across a seam is then found as any other.

    A recording that is joined already is returned as it is.
    """
    if any(sweep.joined for sweep in recording.sweeps):
        return recording
    joined = join_contiguous(recording, section)
    if joined is recording or recording.spikes_from == SPIKES_FROM_FILE:
        return joined
    unseen = tuple(replace(sweep, spikes=None) for sweep in joined.sweeps)
    return detect_spikes(replace(joined, sweeps=unseen), section)


def load_recording(entry: RecordingEntry, settings: Settings) -> Recording:
    """Read one file with its spikes found; only the sweeps that belong to the cell, not joined."""
    recording = detect_spikes(read_recording(entry.path), settings.recording)
    check_contiguous(recording, settings.recording)
    if entry.sweeps is None:
        return recording
    own = select(recording, SelectSection(sweeps=entry.sweeps))
    return replace(own, left_out=recording.left_out)

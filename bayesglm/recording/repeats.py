"""Repeats of one current, and how much of the voltage they let any model of the current explain.

What differs between repeats of the same current is noise to every model of the current, linear
or not. What is the same in each is the explainable part of the variance: a ceiling for a fit.
"""

from __future__ import annotations

import hashlib
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np
from scipy import stats

from bayesglm.recording.current import SHORTEST_RUN_MS, samples_in
from bayesglm.recording.recording import BoolArray, FloatArray, IntArray, Recording, Sweep
from bayesglm.recording.settings import Settings
from bayesglm.recording.wording import fixed, sweeps_in_words
from bayesglm.verdict import Reason

#: Current that changes by less than this is no stimulus, nA.
_SMALLEST_RANGE_NA: Final = 0.1e-3
#: Stretches that are looked for inside sweeps, and blocks of the jackknife, ms: long beside the
#: residual's correlation time of some tens of ms.
_BLOCK_MS: Final = 1000.0
#: With fewer blocks than this a jackknife over them says little.
_FEWEST_BLOCKS: Final = 8
_FEWEST_REPEATS: Final = 3


@dataclass(frozen=True)
class Stretch:
    """Samples `start` to `stop` of the sweep with index `sweep`."""

    sweep: int
    start: int
    stop: int


@dataclass(frozen=True)
class ExplainableVariance:
    """Share of the voltage's variance that is the same in every repeat.

    Attributes
    ----------
    share
        Signal power over total power. Not held to 0…1: where there is no signal it scatters
        around 0.
    lower, upper
        Jackknife t-interval; NaN where there are too few blocks and repeats for one.
    by
        What the jackknife left out in turn: ``blocks``, ``repeats``, or empty.
    """

    share: float
    lower: float
    upper: float
    by: str


def repeated_current(recording: Recording) -> tuple[tuple[Stretch, ...], ...]:
    """Find stretches with the same current, sample by sample.

    Whole sweeps are compared first. Where none repeats, blocks of 1 s from each sweep's start
    are, if their current never stands still for 20 ms: a fluctuating current that repeats inside
    a sweep with a period of whole seconds is found so, one with another period is not. A
    measured current never repeats exactly.

    Parameters
    ----------
    recording
        The recording. Sweeps with jumps in time or a missing current are passed over.

    Returns
    -------
    tuple of groups
        Each with two stretches or more, of equal length, whose current is not constant.
    """
    usable = [
        (index, sweep)
        for index, sweep in enumerate(recording.sweeps)
        if not sweep.jumps and np.isfinite(sweep.current).all()
    ]
    whole = _alike(recording, [Stretch(index, 0, sweep.n_samples) for index, sweep in usable])
    if whole:
        return whole
    n = samples_in(_BLOCK_MS, recording.step_ms)
    blocks = [
        Stretch(index, start, start + n)
        for index, sweep in usable
        for start in range(0, sweep.n_samples - n + 1, n)
        if _never_still(sweep.current[start : start + n], recording.step_ms)
    ]
    return _alike(recording, blocks)


def explainable_variance(
    voltage: FloatArray, keep: BoolArray, block: int, level: float = 0.9
) -> ExplainableVariance:
    """Estimate the share of the variance over time that repeats have in common.

    With the power P the variance over time and N repeats r, the signal power is
    ``(N·P(mean r) − mean P(r))/(N − 1)`` (Sahani & Linden 2003, Adv Neural Inf Process Syst
    15:125–132) and the total power ``mean P(r)``. An offset of a repeat counts in neither.

    Parameters
    ----------
    voltage
        One row a repeat, shape (N, n), mV.
    keep
        False where a sample is not to be used, shape (N, n); a sample is used where it is kept
        in every repeat.
    block
        Length of the blocks of the jackknife in samples. They are left out in turn where there
        are at least 8 of them, the repeats where there are fewer blocks and at least 3 repeats.
    level
        Level of the interval.

    Returns
    -------
    ExplainableVariance
        NaN with fewer than two repeats or samples, or without any variance.
    """
    used = np.all(keep, axis=0)
    n_repeats, n_blocks = len(voltage), max(1, len(used) // block)
    data = np.zeros(voltage.shape)
    # Relative to the mean: sums of squares around −65 mV would lose digits.
    data[:, used] = voltage[:, used] - (voltage[:, used].mean() if used.any() else 0.0)
    pieces = np.array_split(np.arange(len(used)), n_blocks)
    counts = np.array([np.count_nonzero(used[piece]) for piece in pieces], dtype=np.float64)
    sums = np.array([data[:, piece].sum(axis=1) for piece in pieces])
    products = np.array([data[:, piece] @ data[:, piece].T for piece in pieces])
    total = (counts.sum(), sums.sum(axis=0), products.sum(axis=0))
    everyone = np.arange(n_repeats)
    share = _share(*total, everyone)
    filled = np.flatnonzero(counts)
    if len(filled) >= _FEWEST_BLOCKS:
        left = [
            _share(total[0] - counts[b], total[1] - sums[b], total[2] - products[b], everyone)
            for b in filled
        ]
        return _jackknife(share, left, level, "blocks")
    if n_repeats >= _FEWEST_REPEATS:
        left = [_share(*total, np.delete(everyone, repeat)) for repeat in everyone]
        return _jackknife(share, left, level, "repeats")
    return ExplainableVariance(share, np.nan, np.nan, "")


def repeats_row(recording: Recording, settings: Settings) -> Reason:
    """Row ``repeats`` of the check: what has the same current, and what it lets one explain.

    Parameters
    ----------
    recording
        The recording, its spikes detected.
    settings
        Spike windows, whose samples are left out, and the level of the interval.
    """
    groups = repeated_current(recording)
    if not groups:
        return Reason("repeats", "no current is given twice")
    largest = max(groups, key=lambda group: (len(group), group[0].stop - group[0].start))
    level = settings.sampling.level
    found = explainable_variance(
        np.array([recording.sweeps[one.sweep].voltage[one.start : one.stop] for one in largest]),
        np.array([_used(recording, one, settings) for one in largest]),
        samples_in(_BLOCK_MS, recording.step_ms),
        level,
    )
    advice = "repeats count once as a stimulus; the fit says on how many units it rests"
    if not np.isfinite(found.share):
        return Reason("repeats", _in_words(recording, groups), advice=advice)
    over = "1 s blocks" if found.by == "blocks" else found.by
    interval = (
        f" ({100 * level:g} % interval {fixed(100 * found.lower, 0)} to "
        f"{fixed(100 * found.upper, 0)}, jackknife over {over})"
        if found.by
        else ""
    )
    where = f" in {_names(recording, largest)}" if len(groups) > 1 else ""
    return Reason(
        "repeats",
        f"{_in_words(recording, groups)}; explainable variance of the voltage"
        f"{where}: {fixed(100 * found.share, 0)} %{interval}",
        advice=f"no model of the current can explain more than the explainable variance; {advice}",
    )


def _alike(recording: Recording, stretches: Sequence[Stretch]) -> tuple[tuple[Stretch, ...], ...]:
    groups: dict[tuple[int, bytes], list[Stretch]] = {}
    for one in stretches:
        current = recording.sweeps[one.sweep].current[one.start : one.stop]
        if np.ptp(current) >= _SMALLEST_RANGE_NA:
            # Adding zero turns −0 into 0, which is the same current.
            content = hashlib.sha256((np.ascontiguousarray(current) + 0.0).tobytes()).digest()
            groups.setdefault((len(current), content), []).append(one)
    return tuple(tuple(group) for group in groups.values() if len(group) > 1)


def _never_still(current: FloatArray, step_ms: float) -> bool:
    changes = np.flatnonzero(np.diff(current)) + 1
    runs = np.diff(np.concatenate(([0], changes, [len(current)])))
    return bool(runs.max() < samples_in(SHORTEST_RUN_MS, step_ms))


def _used(recording: Recording, one: Stretch, settings: Settings) -> BoolArray:
    """Samples of a stretch that are data: kept, present, outside every spike window."""
    sweep = recording.sweeps[one.sweep]
    used = sweep.keep & np.isfinite(sweep.voltage)
    first, last = (round(ms / recording.step_ms) for ms in settings.model.spike_window_ms)
    for spike in sweep.spikes if sweep.spikes is not None else ():
        used[max(0, spike + first) : spike + last + 1] = False
    return np.asarray(used[one.start : one.stop], dtype=np.bool_)


def _share(count: float, sums: FloatArray, products: FloatArray, repeats: IntArray) -> float:
    """Signal power over total power from sums over time of the given repeats."""
    n = len(repeats)
    if n < 2 or count < 2:
        return float("nan")
    mean = sums[repeats] / count
    covariance = products[np.ix_(repeats, repeats)] / count - np.outer(mean, mean)
    total = float(np.trace(covariance)) / n
    # The power of the mean is the mean of all covariances.
    signal = (n * float(covariance.mean()) - total) / (n - 1)
    return signal / total if total > 0 else float("nan")


def _jackknife(share: float, left: Sequence[float], level: float, by: str) -> ExplainableVariance:
    values = np.asarray(left)
    n = len(values)
    sd = float(np.sqrt((n - 1) / n * np.sum((values - values.mean()) ** 2)))
    half = float(stats.t.ppf(0.5 + level / 2, n - 1)) * sd
    return ExplainableVariance(share, share - half, share + half, by)


def _in_words(recording: Recording, groups: Sequence[tuple[Stretch, ...]]) -> str:
    if len(groups) == 1:
        return f"{_names(recording, groups[0])} have the same current"
    shown = [_names(recording, group) for group in groups[:3]] + ["…"] * (len(groups) > 3)
    return f"{len(groups)} currents are given more than once ({'; '.join(shown)})"


def _names(recording: Recording, group: Sequence[Stretch]) -> str:
    """Sweeps of a group, or how many blocks of which sweeps."""
    sweeps = [recording.sweeps[one.sweep] for one in group]
    names = sweeps_in_words([sweep.number for sweep in sweeps])
    whole = all(_is_whole(sweep, one) for sweep, one in zip(sweeps, group, strict=True))
    return names if whole else f"{len(group)} blocks of 1 s in {names}"


def _is_whole(sweep: Sweep, one: Stretch) -> bool:
    return one.start == 0 and one.stop == sweep.n_samples

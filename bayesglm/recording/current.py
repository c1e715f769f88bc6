"""What the injected current does: where it holds, where it steps.

Holding current and rectangular steps are found in the current alone. Ramps and fluctuating
currents have no steps, so that measures which need them are absent rather than wrong.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise
from typing import Final

import numpy as np

from bayesglm.recording.recording import FloatArray, Recording

#: Two currents closer than this are one level, nA: commands come in whole pA, and the mean of a
#: measured current over a step scatters by less.
SAME_LEVEL_NA: Final = 0.5e-3
#: The smallest step that counts, nA: smaller ones move the voltage by less than its noise.
_SMALLEST_STEP_NA: Final = 1e-3
#: Current is constant where its sd is below this share of the step.
_CONSTANT_SHARE: Final = 0.05
#: Changes from sample to sample below this are rounding, nA.
_ROUNDING_NA: Final = 0.05e-3
#: Shortest stretch of constant current that is looked at, ms.
SHORTEST_RUN_MS: Final = 20.0
_LONGEST_EDGE_MS: Final = 1.0
#: Baselines are read over this stretch before a step, ms.
BASELINE_MS: Final = 50.0


@dataclass(frozen=True)
class CurrentStep:
    """A rectangular step of current.

    Attributes
    ----------
    sweep
        Index of the sweep in ``recording.sweeps``.
    before
        First sample of the constant stretch before the step.
    start, stop
        First sample of the step and the first after it.
    baseline_nA, level_nA
        Current before and in the step, as recorded.
    """

    sweep: int
    before: int
    start: int
    stop: int
    baseline_nA: float
    level_nA: float

    @property
    def change_nA(self) -> float:
        """Amplitude of the step, nA."""
        return self.level_nA - self.baseline_nA


def find_steps(recording: Recording) -> tuple[CurrentStep, ...]:
    """Find the rectangular current steps of a recording.

    A step is at least 20 ms of constant current away from the holding current, reached within
    1 ms from at least 20 ms of constant current. Returns to the holding current are not steps.

    Parameters
    ----------
    recording
        The recording; its voltage is not looked at.

    Returns
    -------
    tuple of CurrentStep
        In the order of the recording; empty for ramps and fluctuating currents.
    """
    holding = holding_nA(recording)
    step_ms = recording.step_ms
    found: list[CurrentStep] = []
    for index, sweep in enumerate(recording.sweeps):
        runs = _runs(sweep.current, step_ms)
        for (before, before_stop), (run_start, stop) in pairwise(runs):
            if run_start - before_stop > _LONGEST_EDGE_MS / step_ms:
                continue
            window = slice(max(before, before_stop - samples_in(BASELINE_MS, step_ms)), before_stop)
            baseline = float(np.median(sweep.current[window]))
            level = float(np.median(sweep.current[run_start:stop]))
            scatter = max(np.std(sweep.current[window]), np.std(sweep.current[run_start:stop]))
            if (
                abs(level - baseline) >= _SMALLEST_STEP_NA
                and abs(level - holding) > SAME_LEVEL_NA
                and scatter <= _CONSTANT_SHARE * abs(level - baseline)
            ):
                found.append(CurrentStep(index, before, before_stop, stop, baseline, level))
    return tuple(found)


def holding_nA(recording: Recording) -> float:
    """Return the current with which most sweeps begin; of equals the one that is held longest."""
    held = [leading_samples(sweep.current, recording.step_ms) for sweep in recording.sweeps]
    leads = np.array(
        [np.median(sweep.current[:n]) for sweep, n in zip(recording.sweeps, held, strict=True)]
    )
    votes = [int(np.count_nonzero(np.abs(leads - lead) <= SAME_LEVEL_NA)) for lead in leads]
    return float(leads[max(range(len(leads)), key=lambda k: (votes[k], held[k]))])


def leading_samples(current: FloatArray, step_ms: float) -> int:
    """Return for how many samples the current stays where it begins, at least one."""
    spread = np.ptp(current[np.isfinite(current)]) if np.isfinite(current).any() else 0.0
    for start, stop in _runs(current, step_ms)[:1]:
        if start == 0 and np.std(current[:stop]) <= _CONSTANT_SHARE * spread:
            return stop
    # A slow ramp or sine leaves its beginning without an edge.
    away = ~(np.abs(current - current[0]) <= max(_ROUNDING_NA, 0.01 * spread))
    return max(1, int(np.argmax(away))) if away.any() else len(current)


def begins_settled(current: FloatArray, step_ms: float) -> bool:
    """Return whether a sweep begins with a constant current, which may be what was before it."""
    return leading_samples(current, step_ms) >= samples_in(SHORTEST_RUN_MS, step_ms)


def samples_in(ms: float, step_ms: float) -> int:
    """Return the number of samples in `ms`, at least one."""
    return max(1, round(ms / step_ms))


def _runs(current: FloatArray, step_ms: float) -> list[tuple[int, int]]:
    """Return first and past-the-end sample of each stretch without an edge, 20 ms or longer."""
    change = np.abs(np.diff(current))
    # A measured current is noisy: an edge stands out from the usual change between samples.
    usual = 1.4826 * float(np.nanmedian(change)) if np.isfinite(change).any() else 0.0
    # Written so that a missing current is an edge too.
    edges = np.flatnonzero(~(change <= max(_ROUNDING_NA, 6.0 * usual))) + 1
    bounds = np.concatenate(([0], edges, [len(current)]))
    long = np.flatnonzero(np.diff(bounds) >= samples_in(SHORTEST_RUN_MS, step_ms))
    return [(int(bounds[k]), int(bounds[k + 1])) for k in long]

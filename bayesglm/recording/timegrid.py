"""The regular grid behind a printed column of times: its step, its jumps and its jitter.

Times come rounded to the decimals they were printed with, so the difference of two neighbours may
be off by as much as the step itself. The step is therefore taken from differences over many
samples, and a jump is told from rounding by how finely the column is printed.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.floating]
IntArray = NDArray[np.int64]

_MAX_DECIMALS = 9
#: Relative error that is nothing but floating-point arithmetic on times.
_ROUNDOFF = 1e-6


@dataclass(frozen=True)
class StepEstimate:
    """The step of one sweep.

    Attributes
    ----------
    step
        Step, in the unit of the times.
    length
        Number of steps it was measured over: the longest stretch without a jump.
    tolerance
        How far printing may have moved it.
    """

    step: float
    length: int
    tolerance: float


def print_resolution(times: FloatArray) -> float:
    """Return the spacing of the decimals that times are printed with.

    Parameters
    ----------
    times
        Times as they stand in the file, shape (n,).

    Returns
    -------
    float
        1, 0.1, 0.01, … down to 1e-9, in the unit of the times.
    """
    sample = times[:10_000]
    for decimals in range(_MAX_DECIMALS):
        scaled = sample * 10.0**decimals
        if np.all(np.abs(scaled - np.rint(scaled)) < 1e-4):
            return float(10.0**-decimals)
    return float(10.0**-_MAX_DECIMALS)


def estimate_step(times: FloatArray, resolution: float) -> StepEstimate:
    """Measure the step of one sweep.

    Parameters
    ----------
    times
        Times of the sweep, shape (n,), n ≥ 2.
    resolution
        Spacing of the printed decimals, in the unit of the times.

    Returns
    -------
    StepEstimate
        Its step is zero or negative where time stands still or runs back.
    """
    n = len(times)
    lag = max(1, min(n // 4, 100))
    step = float(np.median(times[lag:] - times[:-lag])) / lag
    if step <= 0:
        return StepEstimate(step, n - 1, 0.0)
    breaks = find_jumps(times, step, resolution)
    edges = np.concatenate([[0], breaks, [n]])
    longest = int(np.argmax(np.diff(edges)))
    stretch = times[edges[longest] : edges[longest + 1]]
    length = len(stretch) - 1
    if length == 0:
        return StepEstimate(step, 1, resolution)
    differences = np.diff(stretch)
    # Equal differences are printed exactly; otherwise both ends are off by half a decimal.
    exact = float(np.ptp(differences)) < min(_ROUNDOFF * step, resolution / 2)
    tolerance = _ROUNDOFF * step if exact else resolution / length
    return StepEstimate(float(stretch[-1] - stretch[0]) / length, length, tolerance)


def snap(estimate: StepEstimate) -> float:
    """Return the roundest step, or step of the roundest rate, within the estimate's tolerance."""
    for digits in range(1, 13):
        for candidate in (
            float(f"{estimate.step:.{digits}g}"),
            1.0 / float(f"{1.0 / estimate.step:.{digits}g}"),
        ):
            if abs(candidate - estimate.step) <= estimate.tolerance:
                return candidate
    return estimate.step


def common_step(estimates: Sequence[StepEstimate], resolution: float) -> tuple[float, int | None]:
    """Return the step that all sweeps share, and the first sweep that does not share it.

    Parameters
    ----------
    estimates
        One estimate a sweep, all positive.
    resolution
        Spacing of the printed decimals, in the unit of the times.

    Returns
    -------
    (step, index)
        The snapped step of the sweep measured over the longest stretch, and the index of the
        first sweep that drifts off it by more than one step over its own stretch; None where
        there is none.
    """
    step = snap(max(estimates, key=lambda estimate: estimate.length))
    allowed = max(step, resolution) * (1 + _ROUNDOFF)
    for index, estimate in enumerate(estimates):
        drift = abs(estimate.step - step) * estimate.length
        if drift > allowed:
            return step, index
    return step, None


def find_jumps(times: FloatArray, step: float, resolution: float) -> IntArray:
    """Find where time does not advance by one step.

    Parameters
    ----------
    times
        Times of one sweep, shape (n,).
    step, resolution
        Step and spacing of the printed decimals, in the unit of the times.

    Returns
    -------
    array of int
        Index of the first sample after each jump, shape (n_jumps,).
    """
    ratio = step / resolution
    # A step that is a whole number of decimals is printed without rounding; any other is moved
    # by up to one decimal, which may be more than half a step.
    rounded = abs(ratio - round(ratio)) > 1e-3 * ratio
    allowed = max(step / 2, resolution if rounded else 0.0) * (1 + _ROUNDOFF)
    jumps: IntArray = np.flatnonzero(np.abs(np.diff(times) - step) > allowed) + 1
    return jumps


def jitter(times: FloatArray, step: float, jumps: IntArray) -> float:
    """Return the largest deviation from the grid that fits each stretch between jumps best.

    Parameters
    ----------
    times
        Times of one sweep, shape (n,).
    step
        Step, in the unit of the times.
    jumps
        Index of the first sample after each jump.

    Returns
    -------
    float
        Largest deviation, in the unit of the times.
    """
    offset = times - step * np.arange(len(times))
    starts = np.concatenate([[0], jumps]).astype(np.int64)
    spread = np.maximum.reduceat(offset, starts) - np.minimum.reduceat(offset, starts)
    return float(spread.max()) / 2

"""What a fit says under other choices: durations of the kernels, end of the spike window."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from bayesglm.recording.recording import BoolArray, FloatArray


@dataclass(frozen=True, eq=False)
class DurationGrid:
    """The fit with other durations; tables have the shape (input, after-spike).

    Attributes
    ----------
    input_ms, after_spike_ms
        Durations of κ and of η, ms, rising. Without an after-spike kernel the latter is empty, and
        the tables have one column.
    chosen
        Place of the durations that were fitted.
    held_out_mV2
        Squared error of the voltage that was left out, mV² a row.
    held_out_se_mV2
        Standard error of its difference from the smallest, paired over independent units.
    folds
        Number of parts that were left out in turn.
    features
        Mean and calibrated sd of each feature.
    """

    input_ms: FloatArray
    after_spike_ms: FloatArray
    chosen: tuple[int, int]
    held_out_mV2: FloatArray
    held_out_se_mV2: FloatArray
    folds: int
    features: dict[str, tuple[FloatArray, FloatArray]]

    @property
    def excess_mV2(self) -> FloatArray:
        """Held-out error beyond the smallest, mV² a row."""
        excess: FloatArray = self.held_out_mV2 - self.held_out_mV2.min()
        return excess

    @property
    def as_good(self) -> BoolArray:
        """Durations that predict no worse than the best by more than one se of the difference."""
        return np.asarray(self.excess_mV2 <= self.held_out_se_mV2, dtype=np.bool_)

    @property
    def best(self) -> tuple[int, int]:
        """Place of the smallest held-out error."""
        i, j = np.unravel_index(int(np.argmin(self.held_out_mV2)), self.held_out_mV2.shape)
        return int(i), int(j)

    def farthest(self, feature: str) -> tuple[int, int]:
        """Of durations that predict as well, those where a feature has moved most, in its sds."""
        moved = np.where(self.as_good, self._moved(feature), -1.0)
        i, j = np.unravel_index(int(np.argmax(moved)), moved.shape)
        return int(i), int(j)

    def moved(self, feature: str) -> float:
        """How far a feature is there from its value at the chosen durations, in sds.

        Longer kernels are less certain: the sd is the larger one of the two values.
        """
        return float(self._moved(feature)[self.farthest(feature)])

    def _moved(self, feature: str) -> FloatArray:
        mean, sd = self.features[feature]
        larger = np.maximum(np.maximum(sd, sd[self.chosen]), np.finfo(float).tiny)
        distance: FloatArray = np.abs(mean - mean[self.chosen]) / larger
        return distance

    def named(self, place: tuple[int, int]) -> str:
        """The durations at a place in words: ``105/300 ms``, κ first."""
        durations = [self.input_ms[place[0]], *self.after_spike_ms[place[1] : place[1] + 1]]
        return "/".join(f"{ms:.0f}" for ms in durations) + " ms"


@dataclass(frozen=True, eq=False)
class SpikeWindows:
    """η with other ends of the spike window.

    Attributes
    ----------
    ends_ms
        Ends, ms after a spike, rising, shape (E,).
    chosen
        Index of the end that was fitted.
    features
        Mean and calibrated sd of each feature, shape (E,) each; NaN where the window covers it.
    """

    ends_ms: FloatArray
    chosen: int
    features: dict[str, tuple[FloatArray, FloatArray]]

    def moved(self, feature: str) -> FloatArray:
        """Distance from the value at the chosen end, in the larger of their sds, shape (E,).

        Estimates share nearly all rows, so that their difference has a far smaller error than
        either: the sd is the yardstick of what the reader is told, and this is no test.
        """
        mean, sd = self.features[feature]
        distance, larger = np.abs(mean - mean[self.chosen]), np.maximum(sd, sd[self.chosen])
        # At its end a kernel is pinned to zero, where nothing can move.
        nan = np.full_like(distance, np.nan)
        return np.divide(distance, larger, out=nan, where=larger > 0)


@dataclass(frozen=True, eq=False)
class Sensitivity:
    """What a fit says under other choices; None where a choice was not varied."""

    durations: DurationGrid | None = None
    windows: SpikeWindows | None = None

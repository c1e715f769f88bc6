"""What drifts from sweep to sweep: baseline, input resistance and series jump.

A fit takes the cell for the same from the first sweep to the last. The baseline shows at the
beginning of each sweep; the input resistance only where a step recurs, since the resistance of
most cells depends on the level and on what came before.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np
from scipy import stats

from bayesglm.recording.current import SAME_LEVEL_NA
from bayesglm.recording.ranges import format_sweeps
from bayesglm.recording.recording import FloatArray, IntArray, Recording
from bayesglm.recording.settings import Settings
from bayesglm.recording.steps import StepMeasure, StepMeasures
from bayesglm.recording.wording import check_command, fit_command, fixed, sweeps_in_words
from bayesglm.verdict import Reason

#: Both limits are common practice: beyond them few would call it the same cell.
_LARGEST_DRIFT_MV: Final = 3.0
_LARGEST_RESISTANCE_DRIFT: Final = 0.15
_FEWEST_SWEEPS: Final = 3
#: Steps whose edges lie closer than this are at the same place, ms: a command may lag by some
#: samples.
_SAME_PLACE_MS: Final = 1.0


@dataclass(frozen=True, eq=False)
class BySweep:
    """Baseline, input resistance and series jump, one value a sweep.

    Attributes
    ----------
    sweeps
        Numbers of the sweeps, shape (n,).
    start_s
        Start of each sweep on the recording's clock, s, shape (n,); NaN where not stated.
    baseline_mV
        Mean voltage before the current first changes, shape (n,); NaN where the sweep does not
        begin at the holding current or spikes there.
    resistance_MOhm
        Steady input resistance in the step that recurs, shape (n,); NaN where the sweep does
        not have it, or a spike fell in it or in the second before. Holds the series jump.
    series_MOhm
        Series jump, shape (n,); NaN where the sweep has no step.
    level_nA
        Current in the step that recurs; NaN where none does in three sweeps or more.
    """

    sweeps: IntArray
    start_s: FloatArray
    baseline_mV: FloatArray
    resistance_MOhm: FloatArray
    series_MOhm: FloatArray
    level_nA: float

    @property
    def place(self) -> FloatArray:
        """Where each sweep stands: its start in s where all are stated, else its number; (n,)."""
        if np.isfinite(self.start_s).all():
            return self.start_s
        return self.sweeps.astype(np.float64)


@dataclass(frozen=True)
class Drift:
    """A straight line through values by sweep.

    Attributes
    ----------
    slope, intercept
        Of the line, in the unit of the values and of `BySweep.place`.
    change
        What the line changes by from the first to the last sweep that has a value.
    lower, upper
        t-interval of `change`, residuals taken for independent.
    n
        Number of values.
    """

    slope: float
    intercept: float
    change: float
    lower: float
    upper: float
    n: int


def by_sweep(recording: Recording, measures: StepMeasures) -> BySweep:
    """Arrange baseline, input resistance and series jump by sweep.

    Parameters
    ----------
    recording
        The recording.
    measures
        From `measure_steps`.
    """
    resistance = np.full(len(recording.sweeps), np.nan)
    recurring = _recurring(measures.steps, recording.step_ms)
    for one in recurring:
        resistance[one.step.sweep] = one.steady_MOhm
    starts = [sweep.start_s for sweep in recording.sweeps]
    return BySweep(
        sweeps=np.array([sweep.number for sweep in recording.sweeps], dtype=np.int64),
        start_s=np.array([np.nan if start is None else start for start in starts]),
        baseline_mV=measures.baselines_mV,
        resistance_MOhm=resistance,
        series_MOhm=measures.series_MOhm,
        level_nA=float(np.mean([one.step.level_nA for one in recurring])) if recurring else np.nan,
    )


def drift_of(found: BySweep, values: FloatArray, level: float = 0.9) -> Drift | None:
    """Draw a straight line through values by sweep.

    Parameters
    ----------
    found
        Says where the sweeps stand.
    values
        One value a sweep, shape (n,); NaN are passed over.
    level
        Level of the interval.

    Returns
    -------
    Drift or None
        None with fewer than three values, or where all stand at one place.
    """
    known = np.isfinite(values)
    place = found.place[known]
    if len(place) < _FEWEST_SWEEPS or np.ptp(place) == 0:
        return None
    line = stats.linregress(place, values[known])
    span = float(np.ptp(place))
    change = float(line.slope) * span
    half = float(stats.t.ppf(0.5 + level / 2, len(place) - 2) * line.stderr) * span
    return Drift(
        slope=float(line.slope),
        intercept=float(line.intercept),
        change=change,
        lower=change - half,
        upper=change + half,
        n=len(place),
    )


def stability_rows(
    recording: Recording, measures: StepMeasures, settings: Settings
) -> tuple[Reason, Reason]:
    """Rows ``baseline_drift`` and ``resistance_drift`` of the check."""
    found = by_sweep(recording, measures)
    return (
        _baseline_drift(recording, found, settings),
        _resistance_drift(recording, found, settings),
    )


def _baseline_drift(recording: Recording, found: BySweep, settings: Settings) -> Reason:
    """Compare the first and the last sweep on a straight line through all baselines."""
    limit = f"at most {_LARGEST_DRIFT_MV:g} mV"
    drift = drift_of(found, found.baseline_mV, settings.sampling.level)
    if drift is None:
        return Reason("baseline_drift", "not measured: fewer than 3 sweeps with a baseline", limit)
    fits = abs(drift.change) <= _LARGEST_DRIFT_MV
    return Reason(
        "baseline_drift",
        f"{fixed(drift.change, 1)} mV from the first to the last sweep",
        limit,
        "passed" if fits else "caution",
        ""
        if fits
        else "offsets of the sweeps absorb it, but the cell may have changed: "
        "compare fits of the first and the last sweeps",
        "" if fits else _first_half(recording, settings),
    )


def _resistance_drift(recording: Recording, found: BySweep, settings: Settings) -> Reason:
    """Compare the first and the last sweep on a straight line through the input resistances."""
    percent = 100 * _LARGEST_RESISTANCE_DRIFT
    limit = f"at most {percent:.0f} % from the first to the last sweep"
    level = settings.sampling.level
    drift = drift_of(found, found.resistance_MOhm, level)
    if drift is None:
        return Reason(
            "resistance_drift",
            "not measured: no step without spikes recurs in 3 sweeps",
            limit,
            advice="the same small step of hyperpolarising current in each sweep would show "
            "whether the cell changed",
        )
    mean = float(np.nanmean(found.resistance_MOhm))
    share, lower, upper = (
        100 * value / abs(mean) for value in (drift.change, drift.lower, drift.upper)
    )
    used = found.sweeps[np.isfinite(found.resistance_MOhm)]
    value = (
        f"{fixed(share, 0)} % ({100 * level:g} % interval {fixed(lower, 0)} to {fixed(upper, 0)}) "
        f"over {sweeps_in_words(used.tolist())}, {fixed(found.level_nA * 1e3, 0)} pA, "
        f"mean {fixed(mean, 0)} MΩ"
    )
    # A large change that could as well be none is noise of small steps.
    if abs(share) > percent and lower * upper > 0:
        return Reason(
            "resistance_drift",
            value,
            limit,
            "caution",
            "the cell or the seal changed: kernels average over it; compare fits of the first "
            "and the last sweeps",
            _first_half(recording, settings),
        )
    hidden = max(-lower, upper) > percent
    advice = f"a change of {percent:.0f} % would not be seen with certainty" if hidden else ""
    return Reason("resistance_drift", value, limit, advice=advice)


def _first_half(recording: Recording, settings: Settings) -> str:
    """Return the command that fits the first half of the sweeps; a check where there is one."""
    numbers = [sweep.number for sweep in recording.sweeps]
    if len(numbers) < 2:
        return check_command(recording)
    half = format_sweeps(numbers[: (len(numbers) + 1) // 2])
    return fit_command(recording, f"sweeps={half}", settings)


def _recurring(steps: Sequence[StepMeasure], step_ms: float) -> list[StepMeasure]:
    """Return the quiet steps of one level and place that recur in the most sweeps, at least 3.

    Of equals the largest step: its resistance is the least noisy.
    """
    quiet = [one for one in steps if one.quiet]
    if not quiet:
        return []
    edges = np.array([[one.step.start, one.step.stop] for one in quiet]) * step_ms
    currents = np.array([[one.step.baseline_nA, one.step.level_nA] for one in quiet])
    best: list[StepMeasure] = []
    seen = np.zeros(len(quiet), dtype=np.bool_)
    for k in np.argsort(-np.abs(currents[:, 1] - currents[:, 0]), kind="stable"):
        if seen[k]:
            continue
        alike = np.all(np.abs(edges - edges[k]) <= _SAME_PLACE_MS, axis=1)
        alike &= np.all(np.abs(currents - currents[k]) <= SAME_LEVEL_NA, axis=1)
        seen |= alike
        group = [quiet[i] for i in np.flatnonzero(alike)]
        if len(group) > len(best):
            best = group
    return best if len(best) >= _FEWEST_SWEEPS else []

"""The conventional measures that are read from rectangular current steps.

Baseline, steady and peak deflection, input resistance by level, the jump of the voltage at the
onset (the series resistance the bridge left over) and the membrane time constant.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import ArrayLike
from scipy import optimize, stats
from scipy.ndimage import uniform_filter1d

from bayesglm.errors import InputError
from bayesglm.recording.current import (
    BASELINE_MS,
    SAME_LEVEL_NA,
    SHORTEST_RUN_MS,
    CurrentStep,
    find_steps,
    holding_nA,
    leading_samples,
    samples_in,
)
from bayesglm.recording.recording import FloatArray, Recording, Sweep

_STEADY_SHARE: Final = 0.2
_STEADY_MS: Final = 100.0
_SMOOTH_MS: Final = 5.0
#: After-spike currents change the resistance for hundreds of ms, so that a step counts as quiet
#: only if no spike fell in it or within this time before it.
_QUIET_MS: Final = 1000.0
#: The jump is read from a straight line over this stretch after the onset: late enough for a
#: command that lags by a sample or two, early enough that the membrane's curve is still straight
#: (it adds 0.03 MΩ for R = 100 MΩ and a time constant of 20 ms, 0.5 MΩ for 5 ms).
_JUMP_MS: Final = (0.1, 1.0)
_BEFORE_JUMP_MS: Final = 2.0
_FEWEST_JUMP_SAMPLES: Final = 4
#: The relaxation is fitted from here, past the jump, to the peak deflection, at most this long.
_RELAXATION_MS: Final = (1.0, 200.0)
_SMALLEST_RELAXATION_MV: Final = 2.0


@dataclass(frozen=True)
class StepMeasure:
    """What the voltage does in one step.

    Attributes
    ----------
    step
        The step.
    baseline_mV
        Mean voltage over the last 50 ms before the step, or what there is.
    steady_mV
        Mean voltage over the last fifth of the step, at most 100 ms.
    peak_mV
        Extremum, in the step's direction, of the voltage smoothed over 5 ms; over a noisy plateau
        it lies outside the mean by the noise that is left.
    series_MOhm
        Jump of the voltage at the onset over that of the current; NaN where a spike is near or
        the sampling is coarser than about 0.2 ms.
    n_spikes
        Spikes in the step.
    quiet
        True where no spike fell in the step or in the second before it.
    from_holding
        True where the current before the step is the holding current.
    """

    step: CurrentStep
    baseline_mV: float
    steady_mV: float
    peak_mV: float
    series_MOhm: float
    n_spikes: int
    quiet: bool
    from_holding: bool

    @property
    def steady_MOhm(self) -> float:
        """Steady deflection over the step's amplitude; holds the series jump."""
        return (self.steady_mV - self.baseline_mV) / self.step.change_nA

    @property
    def peak_MOhm(self) -> float:
        """Peak deflection over the step's amplitude; holds the series jump."""
        return (self.peak_mV - self.baseline_mV) / self.step.change_nA


@dataclass(frozen=True)
class MeanInterval:
    """A mean with its t-interval; `sd`, `lower` and `upper` are NaN for fewer than two values."""

    mean: float
    sd: float
    lower: float
    upper: float
    n: int


@dataclass(frozen=True)
class LevelMeasure:
    """The quiet steps from the holding current to one level.

    Attributes
    ----------
    level_nA, change_nA
        Current in the step as recorded, and its difference from the holding current.
    steady_MOhm, peak_MOhm
        Input resistance over the quiet steps, MΩ; `n` is 0 and `mean` NaN where there are none.
    spikes
        True where the cell spiked in a step to this level.
    """

    level_nA: float
    change_nA: float
    steady_MOhm: MeanInterval
    peak_MOhm: MeanInterval
    spikes: bool


@dataclass(frozen=True, eq=False)
class StepMeasures:
    """All that is read from the steps of a recording.

    Attributes
    ----------
    holding_nA
        The recorded current with which most sweeps begin.
    steps
        Every step whose samples are all kept, present and regular in time.
    levels
        Measures by level, from the lowest current to the highest.
    baselines_mV
        Mean voltage of each sweep before its current first changes, shape (n_sweeps,); NaN where
        the sweep does not begin at the holding current or spikes there.
    series_MOhm
        Series jump of each sweep, its steps weighted by the square of their amplitude, shape
        (n_sweeps,); NaN where the sweep has none.
    """

    holding_nA: float
    steps: tuple[StepMeasure, ...]
    levels: tuple[LevelMeasure, ...]
    baselines_mV: FloatArray
    series_MOhm: FloatArray


def measure_steps(recording: Recording, level: float = 0.9) -> StepMeasures:
    """Measure every step of a recording.

    Parameters
    ----------
    recording
        The recording, its spikes detected.
    level
        Level of the intervals.

    Returns
    -------
    StepMeasures
        Without steps and levels where the current has no steps.

    Raises
    ------
    InputError
        If spikes have not been looked for.
    """
    _require_spikes(recording)
    holding = holding_nA(recording)
    measured = (
        _measure(recording.sweeps[step.sweep], step, recording.step_ms, holding)
        for step in find_steps(recording)
    )
    steps = tuple(one for one in measured if one is not None)
    return StepMeasures(
        holding_nA=holding,
        steps=steps,
        levels=_levels(steps, holding, level),
        baselines_mV=_baselines_mV(recording, holding),
        series_MOhm=_series_by_sweep(steps, len(recording.sweeps)),
    )


def input_resistance_by_level(recording: Recording, level: float = 0.9) -> tuple[LevelMeasure, ...]:
    """Return the steady and peak input resistance at each level of the steps.

    Only quiet steps from the holding current enter; both resistances hold the series jump.

    Parameters
    ----------
    recording
        The recording, its spikes detected.
    level
        Level of the t-intervals.

    Raises
    ------
    InputError
        If spikes have not been looked for.
    """
    return measure_steps(recording, level).levels


def membrane_time_constant(recording: Recording) -> float | None:
    """Return the membrane time constant in ms from the relaxation after step onsets.

    A single exponential with a free plateau is fitted from 1 ms after the onset to the peak
    deflection, at most 200 ms. The median is taken over the quiet hyperpolarising steps; where
    there are none, over the quiet depolarising ones.

    Parameters
    ----------
    recording
        The recording, its spikes detected.

    Returns
    -------
    float or None
        None where no quiet step deflects the voltage by 2 mV and relaxes within its window.

    Raises
    ------
    InputError
        If spikes have not been looked for.
    """
    steps = [one for one in measure_steps(recording).steps if one.quiet and one.from_holding]
    for sign in (-1.0, 1.0):
        fits = (
            _relaxation_ms(recording.sweeps[one.step.sweep].voltage, one, recording.step_ms)
            for one in steps
            if sign * one.step.change_nA > 0
        )
        found = [fit for fit in fits if fit is not None]
        if found:
            return float(np.median(found))
    return None


def mean_interval(values: ArrayLike, level: float = 0.9) -> MeanInterval:
    """Return the mean of the finite `values`, shape (n,), with its t-interval at `level`."""
    finite = np.asarray(values, dtype=np.float64)
    finite = finite[np.isfinite(finite)]
    n = len(finite)
    mean = float(np.mean(finite)) if n else np.nan
    if n < 2:
        return MeanInterval(mean, np.nan, np.nan, np.nan, n)
    sd = float(np.std(finite, ddof=1))
    half = float(stats.t.ppf(0.5 + level / 2, n - 1) * sd / np.sqrt(n))
    return MeanInterval(mean, sd, mean - half, mean + half, n)


def _require_spikes(recording: Recording) -> None:
    for sweep in recording.sweeps:
        if sweep.spikes is None:
            raise InputError(
                f"{recording.source}: sweep {sweep.number}: spikes were not looked for; "
                "detect them before measuring steps"
            )


def _spikes_between(sweep: Sweep, start: float, stop: float) -> int:
    spikes = np.empty(0, dtype=np.int64) if sweep.spikes is None else sweep.spikes
    return int(np.count_nonzero((spikes >= start) & (spikes < stop)))


def _measure(sweep: Sweep, step: CurrentStep, step_ms: float, holding: float) -> StepMeasure | None:
    """Measure one step; None where a sample is left out, missing, or at a jump in time."""
    begin = max(step.before, step.start - samples_in(BASELINE_MS, step_ms))
    used = slice(begin, step.stop)
    voltage = sweep.voltage[used]
    jumped = any(begin < jump.sample < step.stop for jump in sweep.jumps)
    if jumped or not np.all(sweep.keep[used]) or not np.all(np.isfinite(voltage)):
        return None
    inside = sweep.voltage[step.start : step.stop]
    last = min(samples_in(_STEADY_MS, step_ms), max(1, round(_STEADY_SHARE * len(inside))))
    smooth = uniform_filter1d(inside, samples_in(_SMOOTH_MS, step_ms), mode="nearest")
    quiet_from = step.start - _QUIET_MS / step_ms
    return StepMeasure(
        step=step,
        baseline_mV=float(np.mean(sweep.voltage[begin : step.start])),
        steady_mV=float(np.mean(inside[-last:])),
        peak_mV=float(smooth.max() if step.change_nA > 0 else smooth.min()),
        series_MOhm=_series_MOhm(sweep, step, step_ms),
        n_spikes=_spikes_between(sweep, step.start, step.stop),
        quiet=_spikes_between(sweep, quiet_from, step.stop) == 0,
        from_holding=abs(step.baseline_nA - holding) <= SAME_LEVEL_NA,
    )


def _series_MOhm(sweep: Sweep, step: CurrentStep, step_ms: float) -> float:
    """Extrapolate the first ms of the response to the onset; NaN where that cannot be done."""
    lags = np.arange(*(samples_in(ms, step_ms) for ms in _JUMP_MS))
    near = _spikes_between(sweep, step.start - 20 / step_ms, step.start + 5 / step_ms)
    if len(lags) < _FEWEST_JUMP_SAMPLES or near:
        return np.nan
    _, onset = np.polyfit(lags, sweep.voltage[step.start + lags], 1)
    before = sweep.voltage[max(0, step.start - samples_in(_BEFORE_JUMP_MS, step_ms)) : step.start]
    return float((onset - np.mean(before)) / step.change_nA)


def _relaxation_ms(voltage: FloatArray, measure: StepMeasure, step_ms: float) -> float | None:
    """Fit one exponential to the onset; None where it does not relax within the window."""
    step = measure.step
    if abs(measure.peak_mV - measure.baseline_mV) < _SMALLEST_RELAXATION_MV:
        return None
    first, longest = (samples_in(ms, step_ms) for ms in _RELAXATION_MS)
    inside = voltage[step.start : min(step.stop, step.start + longest)]
    smooth = uniform_filter1d(inside, samples_in(_SMOOTH_MS, step_ms), mode="nearest")
    peak = int(np.argmax(np.sign(step.change_nA) * smooth))
    time = np.arange(first, peak) * step_ms
    if len(time) < 10:
        return None

    def relaxation(t: FloatArray, plateau: float, depth: float, tau: float) -> FloatArray:
        return plateau + depth * np.exp(-t / tau)

    guess = (float(smooth[peak]), float(inside[first] - smooth[peak]), float(time[-1]) / 4)
    bounds = ([-np.inf, -np.inf, step_ms], [np.inf, np.inf, 10 * float(time[-1])])
    try:
        found, _ = optimize.curve_fit(relaxation, time, inside[first:peak], guess, bounds=bounds)
    except RuntimeError:  # no convergence: the step does not look like a relaxation
        return None
    tau = float(found[2])
    return tau if step_ms < tau < time[-1] else None


def _levels(
    steps: Iterable[StepMeasure], holding: float, interval: float
) -> tuple[LevelMeasure, ...]:
    """Group the steps from the holding current by level."""
    ordered = sorted((one for one in steps if one.from_holding), key=lambda m: m.step.level_nA)
    groups: list[list[StepMeasure]] = []
    for one in ordered:
        if not groups or one.step.level_nA - groups[-1][-1].step.level_nA > SAME_LEVEL_NA:
            groups.append([])
        groups[-1].append(one)
    levels = []
    for group in groups:
        level = float(np.mean([one.step.level_nA for one in group]))
        quiet = [one for one in group if one.quiet]
        levels.append(
            LevelMeasure(
                level_nA=level,
                change_nA=level - holding,
                steady_MOhm=mean_interval([one.steady_MOhm for one in quiet], interval),
                peak_MOhm=mean_interval([one.peak_MOhm for one in quiet], interval),
                spikes=any(one.n_spikes for one in group),
            )
        )
    return tuple(levels)


def _series_by_sweep(steps: Iterable[StepMeasure], n_sweeps: int) -> FloatArray:
    """Average the jumps of each sweep, weighted as least squares through the origin does."""
    sums = np.zeros((2, n_sweeps))
    for one in steps:
        if np.isfinite(one.series_MOhm):
            weight = one.step.change_nA**2
            sums[:, one.step.sweep] += weight * one.series_MOhm, weight
    jumps = np.full(n_sweeps, np.nan)
    np.divide(sums[0], sums[1], out=jumps, where=sums[1] > 0)
    return jumps


def _baselines_mV(recording: Recording, holding: float) -> FloatArray:
    """Average each sweep's voltage before its current first leaves the holding current."""
    out = np.full(len(recording.sweeps), np.nan)
    for index, sweep in enumerate(recording.sweeps):
        stop = leading_samples(sweep.current, recording.step_ms)
        use = sweep.keep[:stop] & np.isfinite(sweep.voltage[:stop])
        enough = np.count_nonzero(use) >= samples_in(SHORTEST_RUN_MS, recording.step_ms)
        at_holding = abs(sweep.current[0] - holding) <= SAME_LEVEL_NA
        if enough and at_holding and not _spikes_between(sweep, 0, stop):
            out[index] = np.mean(sweep.voltage[:stop][use])
    return out

"""What the steps of current say of the membrane: baseline, input resistance, bridge, linearity.

The rows of the check that rest on `measure_steps` and `linear_range`.
"""

from __future__ import annotations

from collections.abc import Iterable
from typing import Final

import numpy as np

from bayesglm.errors import InputError
from bayesglm.recording.current import SAME_LEVEL_NA
from bayesglm.recording.linearity import LARGEST_SHARE, linear_range
from bayesglm.recording.recording import Recording
from bayesglm.recording.selection import parse_select, select
from bayesglm.recording.settings import Settings
from bayesglm.recording.steps import LevelMeasure, MeanInterval, StepMeasures, mean_interval
from bayesglm.recording.wording import fit_command, fixed, minus, number
from bayesglm.verdict import Reason

_LARGEST_SERIES_MOHM: Final = 20.0
_LARGEST_SERIES_SHARE: Final = 0.15
#: A selection of fewer sweeps than this is not worth a fit.
_FEWEST_SWEEPS: Final = 4
_NO_STEPS: Final = "not measured: no complete steps of current"


def membrane_rows(
    recording: Recording, measures: StepMeasures, settings: Settings
) -> tuple[Reason, ...]:
    """Rows of the check that steps of current allow.

    Parameters
    ----------
    recording
        The recording.
    measures
        The measures of its steps.
    settings
        The study's settings: the level of intervals.

    Returns
    -------
    tuple of Reason
        One ``input_resistance`` for each level, ``series_jump``, ``linearity``.
    """
    return (
        *_input_resistance(measures, settings.sampling.level),
        _series_jump(recording, measures, settings),
        _linearity(recording, measures, settings),
    )


def baseline_row(measures: StepMeasures, settings: Settings) -> Reason:
    """Report the voltage at the holding current; it is called rest only where nothing is held."""
    found = mean_interval(measures.baselines_mV)
    if not found.n:
        advice = "no sweep begins with 20 ms of constant current free of spikes"
        return Reason("baseline", "not measured", advice=advice)
    held_nothing = settings.recording.holding_pA == 0 and abs(measures.holding_nA) <= SAME_LEVEL_NA
    name = "rest" if held_nothing else "baseline at holding"
    spread = f" (sd {fixed(found.sd, 2)} over {found.n} sweeps)" if found.n > 1 else " (one sweep)"
    unknown = settings.recording.holding_pA is None
    return Reason(
        "baseline",
        f"{name} {fixed(found.mean, 1)} mV{spread}",
        advice="the holding current is not stated, so this need not be the resting potential: "
        "set holding_pA in [recording]"
        if unknown
        else "",
    )


def _input_resistance(measures: StepMeasures, level: float) -> Iterable[Reason]:
    if not measures.levels:
        yield Reason("input_resistance", _NO_STEPS)
        return
    quiet = [one for one in measures.levels if one.steady_MOhm.n]
    for one in quiet:
        yield _resistance_row(one, level)
    if not quiet:
        yield Reason("input_resistance", "not measured: spikes in or up to 1 s before every step")


def _resistance_row(one: LevelMeasure, level: float) -> Reason:
    n = one.steady_MOhm.n
    steps = "1 step" if n == 1 else f"{n} steps"
    return Reason(
        "input_resistance",
        f"{number(one.level_nA * 1e3, 4)} pA: steady {_with_interval(one.steady_MOhm, level, 0)}, "
        f"peak {_with_interval(one.peak_MOhm, level, 0)}; {steps}",
        advice="holds the series jump",
    )


def _series_jump(recording: Recording, measures: StepMeasures, settings: Settings) -> Reason:
    limit = (
        f"at most {_LARGEST_SERIES_MOHM:g} MΩ and "
        f"{100 * _LARGEST_SERIES_SHARE:.0f} % of the input resistance"
    )
    level = settings.sampling.level
    found = mean_interval(measures.series_MOhm, level)
    if not found.n:
        why = _NO_STEPS if not measures.steps else "not measured: sampled too coarsely, or spikes"
        return Reason("series_jump", why, limit)
    quiet = [one.steady_MOhm.mean for one in measures.levels if one.steady_MOhm.n]
    resistance = float(np.median(quiet)) if quiet else np.nan
    share = abs(found.mean) / resistance
    beyond = abs(found.mean) > _LARGEST_SERIES_MOHM or share > _LARGEST_SERIES_SHARE
    of_input = f", {100 * share:.0f} % of the input resistance" if np.isfinite(share) else ""
    return Reason(
        "series_jump",
        f"{_with_interval(found, level, 1)} over {found.n} sweeps{of_input}",
        limit,
        "caution" if beyond else "passed",
        "the bridge is not balanced; the fit takes the jump up as its electrode term, and the "
        "resistances by level hold it"
        if beyond
        else "",
        fit_command(recording, "", settings) if beyond else "",
    )


def _linearity(recording: Recording, measures: StepMeasures, settings: Settings) -> Reason:
    limit = f"every level within {100 * LARGEST_SHARE:.0f} % of a line, or within chance"
    if not measures.levels:
        return Reason("linearity", _NO_STEPS, limit)
    if len(measures.levels) == 1:
        return Reason("linearity", "not measured: steps to one level only", limit)
    found = linear_range(measures)
    if found is None:
        return Reason(
            "linearity",
            "no two neighbouring levels on a line through the baseline without spikes",
            limit,
            "caution",
            "the kernels describe this protocol, not the cell: give smaller steps",
            fit_command(recording, "", settings),
        )
    lower, upper = found.whole_pA
    value = (
        f"linear from {minus(f'{lower:g}')} to {minus(f'{upper:g}')} pA "
        f"({found.resistance_MOhm:.0f} MΩ; largest departure {found.departure_mV:.1f} mV at "
        f"{number(found.departure_nA * 1e3, 4)} pA)"
    )
    if found.complete:
        return Reason("linearity", value, limit)
    return Reason(
        "linearity",
        value,
        limit,
        "caution",
        "beyond this range the cell spikes, bends or drifts, and a linear kernel averages over "
        f"what it does there; inside, departures below {found.chance_mV:.1f} mV would not be seen "
        "at a level given once",
        fit_command(recording, _worth_fitting(recording, found.selection), settings),
    )


def _worth_fitting(recording: Recording, selection: str) -> str:
    """A selection, or none where it would leave too few sweeps for error bars."""
    chosen = parse_select([selection])
    try:
        left = len(select(recording, chosen).sweeps)
    except InputError:
        left = 0
    return selection if left >= _FEWEST_SWEEPS else ""


def _with_interval(found: MeanInterval, level: float, digits: int) -> str:
    mean = f"{fixed(found.mean, digits)} MΩ"
    if found.n < 2:
        return mean
    bounds = f"{fixed(found.lower, digits)} to {fixed(found.upper, digits)}"
    return f"{mean} ({100 * level:g} % interval {bounds}, sd {fixed(found.sd, digits)})"

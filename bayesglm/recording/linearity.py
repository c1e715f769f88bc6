"""The widest range of current over which the steady voltage is proportional to the current.

A linear kernel describes a cell only where the cell is linear. The line is drawn through the
baseline, as the model draws it; a level belongs to the range if its steady deflection lies on
the line to within 15 %, a convention, or to within what the fluctuation of the baseline produces
by chance. Levels at which the cell spikes are never linear.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np

from bayesglm.recording.steps import LevelMeasure, StepMeasures

#: Share of the line's deflection by which a level may depart from it.
LARGEST_SHARE: Final = 0.15
#: Departure that is always allowed, mV: the reading error of a steady voltage.
SMALLEST_MV: Final = 0.5
#: Standard errors of a level's mean deflection that count as chance: 1 % of linear levels lie
#: beyond, so that ten of them are cut short in one recording of eight.
STANDARD_ERRORS: Final = 2.5
_FEWEST_LEVELS: Final = 2


@dataclass(frozen=True)
class LinearRange:
    """A range of current in which the steady deflections lie on a line through the baseline.

    Attributes
    ----------
    lower_nA, upper_nA
        Lowest and highest current of the range, as recorded; one of them may be the holding
        current.
    resistance_MOhm
        Slope of the line; holds the series jump.
    departure_mV, departure_nA
        Largest departure of a level from the line, and the level's current.
    chance_mV
        What is allowed as chance at a level measured once: a nonlinearity smaller than this
        stays unseen there.
    complete
        True where no level of the recording lies outside.
    """

    lower_nA: float
    upper_nA: float
    resistance_MOhm: float
    departure_mV: float
    departure_nA: float
    chance_mV: float
    complete: bool

    @property
    def whole_pA(self) -> tuple[float, float]:
        """The range rounded outwards to whole pA, so that its own levels lie inside."""
        lower = np.floor(round(self.lower_nA * 1e3, 3))
        upper = np.ceil(round(self.upper_nA * 1e3, 3))
        return float(lower) + 0.0, float(upper) + 0.0  # no negative zero

    @property
    def selection(self) -> str:
        """The range as an expression for ``--select``."""
        lower, upper = self.whole_pA
        return f"current={lower:g}:{upper:g}pA"


def linear_range(measures: StepMeasures) -> LinearRange | None:
    """Find the widest contiguous range of levels, around the holding current, that is linear.

    Parameters
    ----------
    measures
        The measures of a recording's steps.

    Returns
    -------
    LinearRange or None
        None where no two neighbouring levels besides the holding current are linear: through
        the baseline and one level there is always a line.
    """
    noise = deflection_noise_mV(measures)
    levels = measures.levels
    first_above = sum(one.change_nA < 0 for one in levels)
    candidates = [
        fitted
        for lower in range(first_above + 1)
        for upper in range(first_above, len(levels) + 1)
        if (fitted := _fit(levels[lower:upper], measures.holding_nA, noise, len(levels)))
    ]
    return max(
        candidates,
        key=lambda one: (one.upper_nA - one.lower_nA, -one.departure_mV),
        default=None,
    )


def deflection_noise_mV(measures: StepMeasures) -> float:
    """Return by how much a steady deflection scatters by chance, mV; 0 with fewer than 3 steps.

    A deflection is the difference of two voltages a few hundred ms apart. So are the baselines
    of successive steps, which no current tells apart: the root mean square of their differences
    holds the cell's slow fluctuation but not the drift over the recording.
    """
    baselines = [one.baseline_mV for one in measures.steps if one.quiet and one.from_holding]
    if len(baselines) < 3:
        return 0.0
    return float(np.sqrt(np.mean(np.diff(baselines) ** 2)))


def _fit(
    levels: Sequence[LevelMeasure], holding: float, noise: float, n_all: int
) -> LinearRange | None:
    """Fit one range; None where it holds too few levels, spikes or a level off the line."""
    if len(levels) < _FEWEST_LEVELS:
        return None
    if any(one.spikes or not one.steady_MOhm.n for one in levels):
        return None
    change = np.array([one.change_nA for one in levels])
    deflection = np.array([one.steady_MOhm.mean for one in levels]) * change
    count = np.array([one.steady_MOhm.n for one in levels])
    # Each level counts once: the range is about the cell, not about how often a level was given.
    resistance = float(change @ deflection / (change @ change))
    departure = np.abs(deflection - resistance * change)
    chance = STANDARD_ERRORS * noise / np.sqrt(count)
    allowed = np.maximum(LARGEST_SHARE * np.abs(resistance * change), chance)
    if np.any(departure > np.maximum(allowed, SMALLEST_MV)):
        return None
    worst = int(np.argmax(departure))
    return LinearRange(
        lower_nA=min(levels[0].level_nA, holding),
        upper_nA=max(levels[-1].level_nA, holding),
        resistance_MOhm=resistance,
        departure_mV=float(departure[worst]),
        departure_nA=levels[worst].level_nA,
        chance_mV=max(STANDARD_ERRORS * noise, SMALLEST_MV),
        complete=len(levels) == n_all,
    )

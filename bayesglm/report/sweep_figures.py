"""Figures of conventional measures: drift from sweep to sweep, and voltage against current."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Final

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from bayesglm.inference.bands import kernel_rows
from bayesglm.inference.results import CellFit
from bayesglm.recording.linearity import linear_range
from bayesglm.recording.recording import FloatArray, Recording
from bayesglm.recording.stability import BySweep, by_sweep, drift_of
from bayesglm.recording.steps import StepMeasure, StepMeasures
from bayesglm.recording.wording import fixed
from bayesglm.report.style import (
    BLUE,
    GREY,
    INK,
    PALE,
    SERIES,
    VERMILLION,
    Margins,
    label_y,
    new_figure,
    panels,
)
from bayesglm.report.wording import percent

_MARKERS: Final = ("o", "^", "s", "D", "v", "P")
#: Least height of each panel, so that noise does not look like drift: mV, MΩ and a share.
_LEAST_MV: Final = 3.0
_LEAST_MOHM: Final = 2.0
_LEAST_SHARE: Final = 0.15
#: The steady voltage of `StepMeasure` is the mean over this share of the step, at most so long.
_STEADY_SHARE: Final = 0.2
_STEADY_MS: Final = 100.0
_FEWEST_LEVELS: Final = 2


@dataclass(frozen=True)
class _Panel:
    """One quantity by sweep: its name in `BySweep`, and how it is written."""

    attribute: str
    title: str
    label: str
    unit: str


_PANELS: Final = (
    _Panel("baseline_mV", "Baseline at holding", "Voltage (mV)", "mV"),
    _Panel("resistance_MOhm", "Input resistance", "Resistance (MΩ)", "MΩ"),
    _Panel("series_MOhm", "Series jump", "Resistance (MΩ)", "MΩ"),
)


def draw_by_sweep(fit: CellFit, measures: Sequence[StepMeasures], width_mm: float) -> Figure | None:
    """Draw baseline, input resistance and series jump by sweep, each with a straight line.

    Parameters
    ----------
    fit
        The fit.
    measures
        Measures of the steps of each of its recordings.
    width_mm
        Width of the figure, mm.

    Returns
    -------
    Figure or None
        None where no quantity was measured in three sweeps of one recording.
    """
    found = _on_one_axis([by_sweep(*pair) for pair in zip(fit.recordings, measures, strict=True)])
    shown = [panel for panel in _PANELS if _has_line(found, panel)]
    if not shown:
        return None
    columns = len(shown) if width_mm > 120 else 1
    rows = len(shown) // columns
    # A single panel across the whole width would make any line look flat.
    right = width_mm / 2 if len(shown) == 1 and width_mm > 120 else 3.0
    top = 9.0 + 4.0 * len(found)
    margins = Margins(left=16.0, right=right, top=top, across=17.0, down=22.0)
    height = margins.top + margins.bottom + rows * 42.0 + (rows - 1) * margins.down
    figure = new_figure(width_mm, height)
    grid = panels(figure, rows, columns, margins)
    level = fit.settings.sampling.level
    places = np.concatenate([one.place for one in found])
    room = 0.06 * float(np.ptp(places))
    for place, panel in enumerate(shown):
        axes = grid[place // columns][place % columns][0]
        _by_sweep_panel(axes, panel, fit.recordings, found, level)
        # A step may recur in few sweeps: where they stand shows only on the axis of all.
        axes.set_xlim(places.min() - room, places.max() + room)
    return figure


def _on_one_axis(found: list[BySweep]) -> list[BySweep]:
    """Let sweeps stand at their numbers unless all recordings state when they start."""
    if all(np.isfinite(one.start_s).all() for one in found):
        return found
    return [replace(one, start_s=np.full(len(one.start_s), np.nan)) for one in found]


def _has_line(found: Sequence[BySweep], panel: _Panel) -> bool:
    return any(drift_of(one, getattr(one, panel.attribute)) is not None for one in found)


def _by_sweep_panel(
    axes: Axes,
    panel: _Panel,
    recordings: Sequence[Recording],
    found: Sequence[BySweep],
    level: float,
) -> None:
    told = []
    for k, (recording, one) in enumerate(zip(recordings, found, strict=True)):
        values = getattr(one, panel.attribute)
        color, dashes = SERIES[(k + 3) % len(SERIES)]
        marker = _MARKERS[k % len(_MARKERS)]
        axes.plot(one.place, values, marker, color=color, markersize=3.0)
        drift = drift_of(one, values, level)
        if drift is None:
            continue
        ends = one.place[np.isfinite(values)][[0, -1]]
        axes.plot(ends, drift.intercept + drift.slope * ends, color=color, linestyle=dashes)
        name = f"{recording.name}: " if len(found) > 1 else "line: "
        told.append(
            f"{name}{_signed(drift.change)} {panel.unit} "
            f"({_signed(drift.lower)} to {_signed(drift.upper)})"
        )
    at = f", step to {fixed(found[0].level_nA * 1e3, 0)} pA" if _names_level(panel, found) else ""
    axes.set_title("\n".join([panel.title + at, *told]), linespacing=1.5)
    clocked = np.isfinite(found[0].start_s).all()
    axes.set_xlabel("Start of the sweep (s)" if clocked else "Sweep")
    label_y(axes, panel.label, mm=11.0)
    _widen(axes, panel, np.concatenate([getattr(one, panel.attribute) for one in found]))
    axes.locator_params(axis="x", nbins=6, integer=True)


def _names_level(panel: _Panel, found: Sequence[BySweep]) -> bool:
    return panel.attribute == "resistance_MOhm" and len(found) == 1


def _signed(value: float) -> str:
    sign = "+" if value > 0 and fixed(value, 1) != "0.0" else ""
    return sign + fixed(value, 1)


def _widen(axes: Axes, panel: _Panel, values: FloatArray) -> None:
    least = {
        "baseline_mV": _LEAST_MV,
        "resistance_MOhm": _LEAST_SHARE * abs(float(np.nanmean(values))),
        "series_MOhm": _LEAST_MOHM,
    }[panel.attribute]
    low, high = axes.get_ylim()
    missing = max(0.0, least - (high - low)) / 2
    axes.set_ylim(low - missing, high + missing)


def draw_voltage_current(
    fit: CellFit, measures: Sequence[StepMeasures], width_mm: float
) -> Figure | None:
    """Draw steady and peak voltage change against the current step, with the model's lines.

    Parameters
    ----------
    fit
        The fit.
    measures
        Measures of the steps of each of its recordings.
    width_mm
        Width of the figure, mm.

    Returns
    -------
    Figure or None
        None where no length of step was given at two levels without spikes.
    """
    steps = comparable_steps(fit.recordings, measures)
    if not steps:
        return None
    margins = Margins(left=15.0, top=8.0, right=48.0 if width_mm > 120 else 4.0)
    bottom = margins.bottom if width_mm > 120 else 34.0
    margins = replace(margins, bottom=bottom)
    figure = new_figure(width_mm, margins.top + bottom + 62.0)
    axes = panels(figure, 1, 1, margins)[0][0][0]
    change = np.array([one.step.change_nA for one in steps]) * 1e3
    for values, marker, color, label in (
        ("steady_mV", "o", BLUE, "steady, measured"),
        ("peak_mV", "^", VERMILLION, "peak, measured"),
    ):
        deflection = [getattr(one, values) - one.baseline_mV for one in steps]
        axes.plot(
            change, deflection, marker, color=color, markersize=3.6, fillstyle="none", label=label
        )
    _model_lines(axes, fit, steps, float(change.min()), float(change.max()))
    _mark_linear(axes, measures)
    axes.axhline(0.0, color=GREY, linewidth=0.5, zorder=0.5)
    axes.axvline(0.0, color=GREY, linewidth=0.5, zorder=0.5)
    axes.set_title(f"Voltage against current, steps of {_length_ms(fit, steps):.0f} ms")
    axes.set_xlabel("Current step (pA)")
    label_y(axes, "Voltage change (mV)")
    if width_mm > 120:
        axes.legend(loc="upper left", bbox_to_anchor=(1.02, 1.0))
    else:
        figure.legend(loc="lower center", ncols=1)
    return figure


def comparable_steps(
    recordings: Sequence[Recording], measures: Sequence[StepMeasures]
) -> list[StepMeasure]:
    """Quiet steps from the holding current, all of that length which has the most levels.

    Steps of other lengths, such as test pulses, have another steady voltage. Empty where fewer
    than two levels are left.
    """
    lengths: dict[int, list[StepMeasure]] = {}
    for recording, found in zip(recordings, measures, strict=True):
        for one in found.steps:
            if one.quiet and one.from_holding:
                length_ms = round((one.step.stop - one.step.start) * recording.step_ms)
                lengths.setdefault(length_ms, []).append(one)

    def levels(length: int) -> int:
        return len({round(one.step.change_nA, 4) for one in lengths[length]})

    best = max(lengths, key=levels, default=None)
    return lengths[best] if best is not None and levels(best) >= _FEWEST_LEVELS else []


def step_resistance(fit: CellFit, n: int, step_ms: float) -> tuple[FloatArray, float]:
    """What the kernels predict of a step, per nA, the same as is measured of it.

    Parameters
    ----------
    fit
        The fit.
    n
        Length of the step in samples.
    step_ms
        Recorded step, ms.

    Returns
    -------
    (steady, peak)
        Mean response over the last fifth of the step (at most 100 ms), MΩ, for each draw, shape
        (D,); and the largest response of the posterior mean, MΩ.
    """
    lags = step_ms * np.arange(1, n + 1)
    rows = np.cumsum(kernel_rows(fit.design, "input", lags), axis=0) * step_ms
    if "electrode" in fit.design.columns:
        rows[:, fit.design.columns["electrode"]] = 1.0
    last = min(round(_STEADY_MS / step_ms), max(1, round(_STEADY_SHARE * n)))
    steady: FloatArray = fit.weights.reshape(-1, rows.shape[1]) @ rows[-last:].mean(axis=0)
    return steady, float((rows @ fit.mean_weights).max())


def _length_ms(fit: CellFit, steps: Sequence[StepMeasure]) -> float:
    step = steps[0].step
    return (step.stop - step.start) * fit.recordings[0].step_ms


def _model_lines(
    axes: Axes, fit: CellFit, steps: Sequence[StepMeasure], low_pA: float, high_pA: float
) -> None:
    step = steps[0].step
    steady, peak = step_resistance(fit, step.stop - step.start, fit.recordings[0].step_ms)
    level = fit.settings.sampling.level
    x = np.array([min(low_pA, 0.0), 0.0, max(high_pA, 0.0)])
    ends = np.quantile(steady, [(1 - level) / 2, (1 + level) / 2])
    edges = np.sort(np.outer(ends, x * 1e-3), axis=0)
    axes.fill_between(
        x, *edges, color=BLUE, alpha=0.25, linewidth=0, label=f"{percent(level)} band, steady"
    )
    axes.plot(x, steady.mean() * x * 1e-3, color=BLUE, linewidth=1.2, label="steady, model")
    axes.plot(
        x, peak * x * 1e-3, color=VERMILLION, linewidth=1.0, linestyle=(0, (5, 2)),
        label="peak, model",
    )  # fmt: skip


def _mark_linear(axes: Axes, measures: Sequence[StepMeasures]) -> None:
    """Mark the steps that lie in the linear range of every recording."""
    found = [(one, linear_range(one)) for one in measures if one.levels]
    ends = [
        (linear.lower_nA - one.holding_nA, linear.upper_nA - one.holding_nA)
        for one, linear in found
        if linear is not None
    ]
    if not ends or len(ends) < len(found):
        return
    low, high = max(end[0] for end in ends) * 1e3, min(end[1] for end in ends) * 1e3
    if low < high:
        axes.axvspan(low, high, color=PALE, alpha=0.6, linewidth=0, zorder=0, label="linear range")
        axes.axvline(low, color=INK, linewidth=0.5, linestyle=(0, (1, 1.5)))
        axes.axvline(high, color=INK, linewidth=0.5, linestyle=(0, (1, 1.5)))

"""Figures of sweeps: what was recorded, and what the kernels predict of it."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from bayesglm.checks.residuals import SweepRows
from bayesglm.inference.results import CellFit
from bayesglm.recording.recording import BoolArray, FloatArray, Recording, Sweep
from bayesglm.recording.steps import StepMeasure, measure_steps
from bayesglm.recording.wording import fixed
from bayesglm.report.predicted import Place, mean_current_nA, spread, sweeps_of, times_of
from bayesglm.report.style import (
    BLUE,
    INK,
    LIGHT,
    PALE,
    VERMILLION,
    Margins,
    hide_x,
    label_y,
    new_figure,
    panels,
    plot_thinned,
)

_MOST_SHOWN: Final = 8
#: Of a long sweep without steps only so much is shown beside its prediction, from its middle, so
#: that single responses can be seen.
_CLOSE_UP_MS: Final = 1500.0

Stack = Sequence[Axes]


@dataclass(frozen=True)
class Shown:
    """A sweep drawn beside its prediction: what to call it, and how much of it to draw, ms."""

    label: str
    longest_ms: float = np.inf


def draw_traces(fit: CellFit, width_mm: float) -> Figure:
    """Draw up to eight sweeps as recorded: voltage with its spikes marked, current below."""
    shown = _by_drive(fit, _MOST_SHOWN)
    columns = min(-(-len(shown) // 2), 4 if width_mm > 120 else 2)
    margins = Margins(left=15.0, across=4.0, top=8.0, bottom=9.0, down=11.0)
    figure, stacks = _stacked(width_mm, 39.0, len(shown), columns, margins, (3.0, 1.0))
    for place, item in enumerate(shown):
        recording = fit.recordings[item[0]]
        _raw_sweep(stacks[place], recording.sweeps[item[1]], recording.step_ms)
        stacks[place][0].set_title(_sweep_label(fit, item), fontsize=7.0, pad=7.5)
    for line in (0, 1):
        _share_limits([stack[line] for stack in stacks], columns)
    _label(stacks, columns, ("Voltage (mV)", "Current (pA)"))
    return figure


def draw_prediction(
    predicted: Mapping[Place, SweepRows], chosen: Mapping[Place, Shown], width_mm: float
) -> Figure:
    """Draw voltage and prediction of chosen sweeps, with the residual below.

    Parameters
    ----------
    predicted
        Predictions, those of the chosen sweeps among them.
    chosen
        Sweeps to draw, with what to call them.
    width_mm
        Width of the figure, mm.
    """
    columns = 2 if width_mm > 120 and len(chosen) > 1 else 1
    margins = Margins(left=15.0, across=12.0, top=11.0, bottom=9.0, down=11.0)
    figure, stacks = _stacked(width_mm, 46.0, len(chosen), columns, margins, (2.6, 1.0))
    for stack, (item, shown) in zip(stacks, chosen.items(), strict=True):
        _predicted_sweep(stack, predicted[item], shown.longest_ms)
        stack[0].set_title(shown.label)
    limit = max(abs(y) for stack in stacks for y in stack[1].get_ylim())
    for stack in stacks:
        stack[1].set_ylim(-limit, limit)
    _label(stacks, columns, ("Voltage (mV)", "Residual (mV)"))
    handles, labels = stacks[0][0].get_legend_handles_labels()
    figure.legend(handles, labels, loc="upper right", ncols=3, borderaxespad=0.2)
    return figure


def representative_sweeps(fit: CellFit) -> dict[Place, Shown]:
    """Choose sweeps that show the fit at its extremes, with what to call them.

    Of steps: the lowest level, the one nearest the holding current, the lowest at which the cell
    spikes, and the highest. Of other currents: up to four sweeps from the lowest to the highest
    mean current.
    """
    for index, recording in enumerate(fit.recordings):
        chosen = _step_sweeps(index, recording)
        if chosen:
            return chosen
    return {item: Shown(_sweep_label(fit, item), _CLOSE_UP_MS) for item in _by_drive(fit, 4)}


def _step_sweeps(index: int, recording: Recording) -> dict[Place, Shown]:
    ordered = sorted(_varied_steps(recording), key=lambda one: one.step.level_nA)
    if not ordered:
        return {}
    spiking = [one for one in ordered if one.n_spikes and one.step.change_nA > 0]
    nearest = min(ordered, key=lambda one: abs(one.step.change_nA))
    chosen = {one.step.sweep: one for one in (ordered[0], nearest, *spiking[:1], ordered[-1])}
    named = {}
    for number, one in sorted(chosen.items(), key=lambda item: item[1].step.level_nA):
        first = ", the lowest with spikes" if spiking and one is spiking[0] else ""
        named[(index, number)] = Shown(f"Step to {fixed(one.step.level_nA * 1e3, 0)} pA{first}")
    return named


def _varied_steps(recording: Recording) -> list[StepMeasure]:
    """Steps at the place in the sweep where levels differ most; test pulses do not differ."""
    places: dict[int, list[StepMeasure]] = {}
    for one in measure_steps(recording).steps:
        if one.from_holding:
            places.setdefault(one.step.start, []).append(one)

    def levels(place: int) -> int:
        return len({round(one.step.level_nA, 4) for one in places[place]})

    best = max(places, key=levels, default=None)
    return places[best] if best is not None and levels(best) > 1 else []


def _by_drive(fit: CellFit, at_most: int) -> list[Place]:
    """Take sweeps evenly from the lowest to the highest mean current, in the order of the fit."""
    ordered = sorted(
        sweeps_of(fit), key=lambda item: mean_current_nA(fit.recordings[item[0]], item[1])
    )
    return sorted(spread(ordered, at_most))


def _sweep_label(fit: CellFit, item: Place) -> str:
    recording = fit.recordings[item[0]]
    sweep = recording.sweeps[item[1]]
    label = sweep.label
    name = f"{recording.name}, {label}" if len(fit.recordings) > 1 else label.capitalize()
    count = 0 if sweep.spikes is None else len(sweep.spikes)
    counted = {0: "no spikes", 1: "1 spike"}.get(count, f"{count} spikes")
    return f"{name}: {counted}"


def _stacked(
    width_mm: float,
    row_mm: float,
    n: int,
    columns: int,
    margins: Margins,
    heights: tuple[float, float],
) -> tuple[Figure, list[Stack]]:
    """Make a figure of n pairs of axes; places left over stay empty."""
    rows = -(-n // columns)
    height = margins.top + margins.bottom + rows * row_mm + (rows - 1) * margins.down
    figure = new_figure(width_mm, height)
    stacks = [stack for line in panels(figure, rows, columns, margins, heights) for stack in line]
    for stack in stacks[n:]:
        for axes in stack:
            figure.delaxes(axes)
    return figure, list(stacks[:n])


def _label(stacks: Sequence[Stack], columns: int, y_labels: tuple[str, str]) -> None:
    """Label the lowest horizontal and the first vertical axis of each line of panels."""
    for place, stack in enumerate(stacks):
        if place + columns >= len(stacks):
            stack[1].set_xlabel("Time (ms)")
        if place % columns == 0:
            for axes, label in zip(stack, y_labels, strict=True):
                label_y(axes, label)


def _raw_sweep(stack: Stack, sweep: Sweep, step_ms: float) -> None:
    times = times_of(sweep.n_samples, step_ms)
    plot_thinned(stack[0], times, sweep.voltage, INK, 0.5)
    plot_thinned(stack[1], times, sweep.current * 1e3, BLUE, 0.6)
    if sweep.spikes is not None and len(sweep.spikes):
        _mark_spikes(stack[0], times[sweep.spikes])
    _dress(stack, (0.0, times[-1]), n_ticks=3)


def _mark_spikes(axes: Axes, times_ms: FloatArray) -> None:
    """Draw a short tick above the axes for each spike, all of them one path."""
    x = np.repeat(times_ms, 3)
    y = np.tile([1.02, 1.07, np.nan], len(times_ms))
    axes.plot(
        x, y, color=VERMILLION, linewidth=0.7, transform=axes.get_xaxis_transform(), clip_on=False
    )


def _predicted_sweep(stack: Stack, one: SweepRows, longest_ms: float) -> None:
    here = _middle(one.time_ms, longest_ms)
    times, kept = one.time_ms[here], one.kept[here]
    voltage = np.where(kept, one.voltage[here], np.nan)
    predicted = np.where(kept, one.prediction[here], np.nan)
    plot_thinned(stack[0], times, voltage, LIGHT, 1.5, "recorded")
    plot_thinned(stack[0], times, predicted, VERMILLION, 0.8, "predicted")
    plot_thinned(stack[1], times, one.residual[here], BLUE, 0.5)
    stack[1].axhline(0.0, color=INK, linewidth=0.5)
    for axes in stack:
        axes.broken_barh(
            _gaps(times, kept), (0.0, 1.0), color=PALE, linewidth=0, zorder=0,
            transform=axes.get_xaxis_transform(), label="left out of the fit",
        )  # fmt: skip
    # The first row's middle lies half a row after the start of the sweep.
    _dress(stack, (times[0] if here.start else 0.0, times[-1]), n_ticks=6)


def _middle(times_ms: FloatArray, longest_ms: float) -> slice:
    """Middle part of a sweep, all of it where it is not much longer than that."""
    n = len(times_ms)
    shown = min(n, int(np.searchsorted(times_ms, longest_ms)))
    return slice(0, n) if n <= 1.3 * shown else slice((n - shown) // 2, (n + shown) // 2)


def _gaps(times_ms: FloatArray, kept: BoolArray) -> list[tuple[float, float]]:
    """Start and length in ms of each run of rows that were left out."""
    edges = np.diff(np.concatenate([[False], ~kept, [False]]).astype(np.int8))
    row_ms = float(times_ms[1] - times_ms[0]) if len(times_ms) > 1 else 1.0
    starts, stops = np.flatnonzero(edges == 1), np.flatnonzero(edges == -1)
    left = times_ms[starts] - row_ms / 2
    return list(zip(left.tolist(), ((stops - starts) * row_ms).tolist(), strict=True))


def _dress(stack: Stack, span_ms: tuple[float, float], n_ticks: int) -> None:
    for axes in stack:
        axes.set_xlim(span_ms)
    hide_x(stack[0])
    stack[1].locator_params(axis="x", nbins=n_ticks)
    stack[0].locator_params(axis="y", nbins=5)
    stack[1].locator_params(axis="y", nbins=3)


def _share_limits(axes: Sequence[Axes], columns: int) -> None:
    """Give all axes the same limits and only the first of each line the numbers."""
    lows, highs = zip(*(one.get_ylim() for one in axes), strict=True)
    right = max(one.get_xlim()[1] for one in axes)
    for place, one in enumerate(axes):
        one.set_ylim(min(lows), max(highs))
        one.set_xlim(0, right)
        one.tick_params(labelleft=place % columns == 0)

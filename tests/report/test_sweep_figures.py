"""The figures of conventional measures, against cells of which the measures are known."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from drawn import x_of, y_of
from made_fit import STEP_MS

from bayesglm.inference.results import CellFit
from bayesglm.recording.recording import Recording, Sweep
from bayesglm.recording.stability import by_sweep
from bayesglm.recording.steps import StepMeasures, measure_steps
from bayesglm.report.sweep_figures import (
    comparable_steps,
    draw_by_sweep,
    draw_voltage_current,
    step_resistance,
)

pytestmark = pytest.mark.usefixtures("styled")


#: The truth of the drifting cell: 100 MΩ and 5 MΩ of electrode, 20 ms.
RESISTANCE, SERIES, TAU_MS = 100.0, 5.0, 20.0


def drifting(n_sweeps: int = 6, start_s: bool = True) -> Recording:
    """Steps of −50 pA in each sweep; the baseline falls by 0.5 mV a sweep, no noise."""
    dt = 0.05
    times = dt * np.arange(round(600 / dt))
    inside = (times >= 100) & (times < 500)
    current = np.where(inside, -0.05, 0.0)
    settled = 1 - np.exp(-(times - 100) / TAU_MS)
    shape = np.where(inside, SERIES + RESISTANCE * settled, 0.0)
    after = times >= 500
    shape[after] = RESISTANCE * np.exp(-(times[after] - 500) / TAU_MS)
    sweeps = tuple(
        Sweep(
            number=k,
            current=current,
            voltage=-60.0 - 0.5 * k - 0.05 * shape,
            keep=np.ones(len(times), dtype=np.bool_),
            spikes=np.empty(0, dtype=np.int64),
            start_s=10.0 * k if start_s else None,
        )
        for k in range(n_sweeps)
    )
    return Recording(name="drift", step_ms=dt, sweeps=sweeps)


def figures_of(fit: CellFit, *recordings: Recording) -> tuple[CellFit, list[StepMeasures]]:
    return replace(fit, recordings=recordings), [measure_steps(one) for one in recordings]


def test_each_quantity_is_drawn_where_it_is(fit: CellFit) -> None:
    drift, measures = figures_of(fit, drifting())
    figure = draw_by_sweep(drift, measures, 180.0)
    assert figure is not None
    titles = [axes.get_title(loc="left").split("\n")[0] for axes in figure.axes]
    assert titles == ["Baseline at holding", "Input resistance, step to −50 pA", "Series jump"]
    found = by_sweep(drift.recordings[0], measures[0])
    expected = (-60.0 - 0.5 * np.arange(6), found.resistance_MOhm, found.series_MOhm)
    for axes, values in zip(figure.axes, expected, strict=True):
        points, _ = axes.get_lines()
        np.testing.assert_allclose(x_of(points), 10.0 * np.arange(6))
        np.testing.assert_allclose(y_of(points), values, atol=1e-9)
        assert axes.get_xlabel() == "Start of the sweep (s)"
    assert [axes.get_ylabel() for axes in figure.axes] == [
        "Voltage (mV)", "Resistance (MΩ)", "Resistance (MΩ)",
    ]  # fmt: skip
    assert np.mean(found.resistance_MOhm) == pytest.approx(RESISTANCE + SERIES, rel=1e-3)


def test_the_line_is_the_drift(fit: CellFit) -> None:
    figure = draw_by_sweep(*figures_of(fit, drifting()), 180.0)
    assert figure is not None
    line = figure.axes[0].get_lines()[1]
    np.testing.assert_allclose(x_of(line), [0.0, 50.0])
    np.testing.assert_allclose(y_of(line), [-60.0, -62.5], atol=1e-9)
    assert figure.axes[0].get_title(loc="left").split("\n")[1] == "line: −2.5 mV (−2.5 to −2.5)"


def test_a_panel_is_no_lower_than_a_drift_that_matters(fit: CellFit) -> None:
    figure = draw_by_sweep(*figures_of(fit, drifting()), 85.0)
    assert figure is not None
    low, high = figure.axes[1].get_ylim()
    assert high - low == pytest.approx(0.15 * (RESISTANCE + SERIES), rel=0.01)


def test_sweeps_without_a_start_stand_at_their_numbers(fit: CellFit) -> None:
    recordings = (drifting(), replace(drifting(start_s=False), name="second"))
    figure = draw_by_sweep(*figures_of(fit, *recordings), 180.0)
    assert figure is not None
    assert {axes.get_xlabel() for axes in figure.axes} == {"Sweep"}
    assert figure.axes[0].get_title(loc="left").split("\n")[1].startswith("drift: −2.5 mV")
    assert figure.axes[0].get_title(loc="left").split("\n")[2].startswith("second: −2.5 mV")
    markers = [line.get_marker() for line in figure.axes[0].get_lines()[::2]]
    assert len(set(markers)) == 2


def test_too_few_sweeps_have_no_figure(fit: CellFit) -> None:
    assert draw_by_sweep(*figures_of(fit, drifting(2)), 180.0) is None


def test_points_are_the_quiet_steps(fit: CellFit) -> None:
    measures = [measure_steps(one) for one in fit.recordings]
    figure = draw_voltage_current(fit, measures, 180.0)
    assert figure is not None
    axes = figure.axes[0]
    steps = [one for one in measures[0].steps if one.quiet and one.from_holding]
    steady, peak = axes.get_lines()[:2]
    np.testing.assert_allclose(x_of(steady), [one.step.change_nA * 1e3 for one in steps])
    np.testing.assert_allclose(y_of(steady), [s.steady_mV - s.baseline_mV for s in steps])
    np.testing.assert_allclose(y_of(peak), [s.peak_mV - s.baseline_mV for s in steps])
    assert steady.get_marker() != peak.get_marker()
    assert axes.get_xlabel() == "Current step (pA)"
    assert axes.get_ylabel() == "Voltage change (mV)"
    assert axes.get_title(loc="left") == "Voltage against current, steps of 800 ms"


def test_the_line_of_a_linear_cell_goes_through_its_points(quiet_fit: CellFit) -> None:
    """The cell has 100 MΩ, and 800 ms are long against 20 ms."""
    steady, peak = step_resistance(quiet_fit, round(800 / STEP_MS), STEP_MS)
    assert np.mean(steady) == pytest.approx(100.0, abs=4 * float(np.std(steady)))
    assert np.std(steady) < 5.0
    assert peak >= np.mean(steady) - 1e-9
    figure = draw_voltage_current(
        quiet_fit, [measure_steps(one) for one in quiet_fit.recordings], 180.0
    )
    assert figure is not None
    lines = {str(line.get_label()): line for line in figure.axes[0].get_lines()}
    line = lines["steady, model"]
    np.testing.assert_allclose(y_of(line), np.mean(steady) * x_of(line) * 1e-3)
    points = lines["steady, measured"]
    expected = np.mean(steady) * x_of(points) * 1e-3
    np.testing.assert_allclose(y_of(points), expected, atol=3.0)


def test_a_short_step_is_predicted_at_its_own_length(quiet_fit: CellFit) -> None:
    """Of 20 ms with a time constant of 20 ms: the mean of 1 − e^(−t/τ) from 16 to 20 ms."""
    steady, peak = step_resistance(quiet_fit, round(20 / STEP_MS), STEP_MS)
    t = np.linspace(16, 20, 1000)
    scale = float(np.mean(step_resistance(quiet_fit, round(800 / STEP_MS), STEP_MS)[0]))
    assert np.mean(steady) == pytest.approx(scale * np.mean(1 - np.exp(-t / 20)), rel=0.1)
    assert peak < 0.8 * scale


def test_the_linear_range_is_marked(quiet_fit: CellFit) -> None:
    measures = [measure_steps(one) for one in quiet_fit.recordings]
    figure = draw_voltage_current(quiet_fit, measures, 85.0)
    assert figure is not None
    (span,) = [patch for patch in figure.axes[0].patches if patch.get_label() == "linear range"]
    box = span.get_extents().transformed(figure.axes[0].transData.inverted())
    low, high = box.x0, box.x1
    assert (low, high) == pytest.approx((-100.0, 300.0))


def test_test_pulses_stay_out_and_one_level_is_no_line(fit: CellFit) -> None:
    long = fit.recordings
    found = comparable_steps(long, [measure_steps(one) for one in long])
    assert {one.step.stop - one.step.start for one in found} == {round(800 / STEP_MS)}
    pulses, measures = figures_of(fit, drifting())
    both = comparable_steps((*long, *pulses.recordings), [measure_steps(long[0]), *measures])
    # Measures hold NaN, which is not equal to itself.
    assert [one.step for one in both] == [one.step for one in found]
    assert draw_voltage_current(pulses, measures, 180.0) is None


def test_a_fluctuating_current_has_neither(noise_fit: CellFit) -> None:
    measures = [measure_steps(one) for one in noise_fit.recordings]
    assert draw_voltage_current(noise_fit, measures, 180.0) is None
    assert draw_by_sweep(noise_fit, measures, 180.0) is None

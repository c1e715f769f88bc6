"""The figure of kernels without each unit, against what a fit without the unit gives."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from drawn import lines, x_of, y_of

from bayesglm.checks.splits import estimate_part
from bayesglm.inference.bands import kernel_rows
from bayesglm.inference.results import CellFit
from bayesglm.report.influence_figures import (
    draw_leave_one_out,
    most_influential,
    unit_changes,
)


@pytest.mark.parametrize("kernel", ["input", "after_spike"])
def test_the_lines_are_the_mean_less_the_damped_change(fit: CellFit, kernel: str) -> None:
    """Slow twin: the posterior mean of each moved estimate, with all matrices inverted."""
    found = unit_changes(fit, kernel)
    sd = np.median(fit.chains.draws["sd"], axis=(0, 1))
    data = fit.calibration.precision
    covariance = np.linalg.inv(fit.prior.precision(sd) + data)
    rows = kernel_rows(fit.design, kernel, fit.kernels[kernel].lags_ms)
    for unit, change in enumerate(fit.calibration.changes):
        moved = covariance @ data @ fit.calibration.fit.basis @ change
        np.testing.assert_allclose(
            found.without[unit], fit.kernels[kernel].mean - rows @ moved, rtol=1e-6, atol=1e-9
        )


@pytest.mark.parametrize("kernel", ["input", "after_spike"])
def test_the_lines_are_where_a_fit_without_the_unit_would_be(fit: CellFit, kernel: str) -> None:
    """A fit of all units but one, the kernels' sds held, moves alike and by as much."""
    sd = np.median(fit.chains.draws["sd"], axis=(0, 1))
    units = np.arange(fit.digest.n_units)
    common = (fit.calibration, fit.calibration.inflation, fit.prior, sd)
    whole = estimate_part(fit.digest, units, *common).mean
    found = unit_changes(fit, kernel)
    rows = kernel_rows(fit.design, kernel, found.lags_ms)[found.judged]
    refitted = np.array(
        [
            rows @ (estimate_part(fit.digest, np.delete(units, unit), *common).mean - whole)
            for unit in units
        ]
    )
    shown = found.in_sds[:, found.judged].ravel()
    expected = (refitted / found.sd[found.judged]).ravel()
    assert np.corrcoef(shown, expected)[0, 1] > 0.8
    assert np.std(shown) == pytest.approx(np.std(expected), rel=0.4)


def test_nothing_is_judged_inside_the_spike_window_or_at_the_pinned_end(fit: CellFit) -> None:
    found = unit_changes(fit, "after_spike")
    assert not found.judged[found.lags_ms <= fit.design.spike_window_ms[1]].any()
    assert not found.judged[-1]
    assert np.isnan(found.in_sds[:, ~found.judged]).all()


def test_a_unit_that_moves_everything_comes_first(fit: CellFit) -> None:
    changes = fit.calibration.changes.copy()
    changes[4] = 30 * changes[4]
    moved = replace(fit, calibration=replace(fit.calibration, changes=changes))
    assert most_influential(moved)[0] == 4
    assert sorted(most_influential(moved)) == list(range(fit.digest.n_units))


def test_what_is_drawn_is_what_was_computed(fit: CellFit) -> None:
    figure = draw_leave_one_out(fit, 180.0)
    order = most_influential(fit)
    found = unit_changes(fit, "input")
    # The first lines of the upper axes are the mean and the axis; of the lower ones the axis.
    upper = [line for line in lines(figure, 0) if 10 < len(x_of(line)) < 100]
    lower = [line for line in lines(figure, 1) if 10 < len(x_of(line)) < 100]
    assert len(upper) == len(lower) == len(order)
    for rank, (curve, change) in enumerate(zip(upper, lower, strict=True)):
        at = np.searchsorted(found.lags_ms, x_of(curve))
        np.testing.assert_allclose(y_of(curve), found.without[order[rank], at])
        np.testing.assert_allclose(y_of(change), found.in_sds[order[rank], at])


def test_named_units_differ_in_colour_and_in_line_style(fit: CellFit) -> None:
    figure = draw_leave_one_out(fit, 85.0)
    named = [line for line in figure.legends[0].get_lines() if "without" in str(line.get_label())]
    labels = [str(line.get_label()) for line in named]
    units = most_influential(fit)
    assert labels[:3] == [f"without {fit.digest.labels[unit]}" for unit in units[:3]]
    assert labels[3] == f"without one of {len(units) - 3} other units"
    assert len({line.get_color() for line in named[:3]}) == 3
    assert len({str(line._dash_pattern) for line in named[:3]}) == 3


def test_a_wild_unit_does_not_flatten_the_kernel(fit: CellFit) -> None:
    changes = fit.calibration.changes.copy()
    changes[2] = 1e3 * changes[2]
    wild = replace(fit, calibration=replace(fit.calibration, changes=changes))
    before, after = (draw_leave_one_out(one, 180.0).axes[0].get_ylim() for one in (fit, wild))
    assert after[1] - after[0] < 2.1 * (before[1] - before[0])
    assert draw_leave_one_out(wild, 180.0).axes[1].get_ylim() == (-3.0, 3.0)

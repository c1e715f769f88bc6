from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from matplotlib.figure import Figure
from matplotlib.lines import Line2D

from bayesglm.inference.results import CellFit
from bayesglm.report import kernel_figures


def lines(figure: Figure, panel: int) -> list[Line2D]:
    return figure.axes[panel].get_lines()


def test_ranges_differ_in_colour_and_in_line_style(fit: CellFit) -> None:
    figure = kernel_figures.draw_kernels(fit, None, 180.0)
    labels = [part.label for part in fit.splits["after_spike"].ranges]
    drawn = [line for line in lines(figure, 1) if line.get_label() in labels]
    assert len(drawn) == 3
    assert len({line.get_color() for line in drawn}) == 3
    assert len({str(line._dash_pattern) for line in drawn}) == 3


def test_nothing_is_drawn_inside_the_spike_window(fit: CellFit) -> None:
    figure = kernel_figures.draw_kernels(fit, None, 180.0)
    for line in lines(figure, 1):
        x, y = np.asarray(line.get_xdata()), np.asarray(line.get_ydata())
        if len(x) > 10:
            assert np.all(np.isnan(y[x <= 5.0]))


def test_a_wild_range_does_not_flatten_the_kernel(fit: CellFit) -> None:
    split = fit.splits["input"]
    wild = replace(
        split.ranges[0], curve=(100 * split.ranges[0].curve[0], split.ranges[0].curve[1])
    )
    tamed = replace(
        fit, splits=fit.splits | {"input": replace(split, ranges=(wild, *split.ranges[1:]))}
    )
    before, after = (
        kernel_figures.draw_kernels(one, None, 180.0).axes[0].get_ylim() for one in (fit, tamed)
    )
    assert after[1] - after[0] < 1.5 * (before[1] - before[0])


def test_a_fit_without_splits_has_no_ranges(fit: CellFit) -> None:
    bare = replace(fit, splits={})
    assert kernel_figures.draw_kernels(bare, None, 85.0).axes[0].get_legend() is None


@pytest.mark.parametrize(
    ("wanted", "shown", "expected"),
    [
        ((-1.0, 3.0), (0.0, 2.0), (-0.4, 2.4)),
        ((0.1, 1.0), (0.0, 2.0), (0.1, 1.0)),
    ],
)
def test_limits_stretch_a_little(
    wanted: tuple[float, float], shown: tuple[float, float], expected: tuple[float, float]
) -> None:
    assert kernel_figures._limited(wanted, shown) == pytest.approx(expected)

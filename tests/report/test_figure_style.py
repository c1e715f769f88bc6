from __future__ import annotations

import numpy as np
import pytest

from bayesglm.report import style


@pytest.mark.parametrize("n", [20_000, 20_001, 19_999])
def test_the_envelope_keeps_a_spike_of_one_sample(n: int) -> None:
    values = np.sin(np.linspace(0, 6, n))
    values[12_345] = 40.0
    values[-1] = -40.0
    at = style.envelope(values, 100)
    assert len(at) <= 200
    assert {12_345, n - 1} <= set(at.tolist())
    assert np.all(np.diff(at) >= 0)


def test_a_current_of_steps_keeps_its_edges() -> None:
    values = np.zeros(10_000)
    values[2000:7000] = 100.0
    np.testing.assert_array_equal(style.envelope(values, 50), [0, 1999, 2000, 6999, 7000, 9999])


def test_short_traces_are_drawn_whole() -> None:
    values = np.random.default_rng(0).normal(size=90)
    np.testing.assert_array_equal(style.envelope(values, 50), np.arange(90))


def test_missing_stretches_stay_missing() -> None:
    values = np.random.default_rng(0).normal(size=10_000)
    values[4000:6000] = np.nan
    at = style.envelope(values, 100)
    gone = at[np.isnan(values[at])]
    assert len(gone)
    assert gone.min() >= 4000
    assert gone.max() < 6000


@pytest.mark.parametrize(("rows", "columns"), [(1, 1), (2, 3)])
def test_panels_fill_the_grid_without_overlap(rows: int, columns: int) -> None:
    figure = style.new_figure(180, 100)
    grid = style.panels(figure, rows, columns, style.Margins(), heights=(2.0, 1.0))
    boxes = [axes.get_position() for line in grid for stack in line for axes in stack]
    assert len(boxes) == rows * columns * 2
    for box in boxes:
        assert 0 < box.x0 < box.x1 < 1
        assert 0 < box.y0 < box.y1 < 1
    for upper, lower in (stack for line in grid for stack in line):
        assert upper.get_position().y0 > lower.get_position().y1


def test_paths_are_shortened_and_texts_are_not() -> None:
    figure = style.new_figure(60, 40)
    with style.styled():
        axes = figure.add_axes((0.2, 0.2, 0.7, 0.7))
        axes.plot([0.0, 1 / 3, 1.0], [0.0, 0.7, 0.1234567])
        axes.set_title("0.1234567 mV")
    text = style.as_svg(figure)
    assert ">0.1234567 mV<" in text
    assert all(len(part.partition(".")[2]) <= 2 for path in _paths(text) for part in path.split())


def _paths(text: str) -> list[str]:
    return style._PATHS.findall(text)

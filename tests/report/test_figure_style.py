from __future__ import annotations

import numpy as np
import pytest

from bayesglm.report import style


def test_the_envelope_keeps_a_spike_of_one_sample() -> None:
    values = np.sin(np.linspace(0, 6, 20_000))
    values[12_345] = 40.0
    times, thin = style.envelope(np.arange(20_000.0), values, 100)
    assert len(thin) <= 200
    assert thin.max() == 40.0
    assert times[np.argmax(thin)] == 12_345
    assert np.all(np.diff(times) >= 0)


def test_a_current_of_steps_keeps_its_edges() -> None:
    values = np.zeros(10_000)
    values[2000:7000] = 100.0
    times, thin = style.envelope(np.arange(10_000.0), values, 50)
    np.testing.assert_array_equal(times, [0, 1999, 2000, 6999, 7000, 9999])
    np.testing.assert_array_equal(thin, [0, 0, 100, 100, 0, 0])


def test_short_traces_are_left_alone() -> None:
    times, values = np.arange(90.0), np.random.default_rng(0).normal(size=90)
    assert style.envelope(times, values, 50)[1] is values


def test_missing_stretches_stay_missing() -> None:
    values = np.random.default_rng(0).normal(size=10_000)
    values[4000:6000] = np.nan
    times, thin = style.envelope(np.arange(10_000.0), values, 100)
    gone = np.isnan(thin)
    assert gone.any()
    assert times[gone].min() >= 4000
    assert times[gone].max() < 6000


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

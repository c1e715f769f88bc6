"""What the page says of other durations and other spike windows: sentences and tables."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from bayesglm.inference.results import CellFit
from bayesglm.inference.sensitivity import DurationGrid, SpikeWindows
from bayesglm.report.wording import decimals, feature_label, rounded, with_unit


@dataclass(frozen=True)
class ChoiceTable:
    """A table of other choices, written out; the first cell of a row is its heading.

    Attributes
    ----------
    title
        What is varied.
    sentences
        What it says in words, and how to read it.
    columns
        Headings.
    rows
        Cells of each row, and whether it is the choice that was fitted.
    """

    title: str
    sentences: tuple[str, ...]
    columns: tuple[str, ...]
    rows: tuple[tuple[tuple[str, ...], bool], ...]


def choice_tables(fit: CellFit) -> tuple[ChoiceTable, ...]:
    """Write out what the fit says under other choices; empty where none was varied."""
    found = fit.sensitivity
    tables = []
    if found.durations is not None:
        tables.append(_durations(found.durations))
    if found.windows is not None:
        tables.append(_windows(found.windows))
    return tuple(tables)


def _durations(grid: DurationGrid) -> ChoiceTable:
    features = list(grid.features)
    rows = []
    for place in np.ndindex(grid.held_out_mV2.shape):
        excess = float(grid.excess_mV2[place])
        se = float(grid.held_out_se_mV2[place])
        compared = "best" if place == grid.best else _plus_minus(excess, se, "mV²")
        cells = (
            grid.named(place),
            compared + (", as good" if grid.as_good[place] and place != grid.best else ""),
            *(_at(grid.features[name], place, _unit(name)) for name in features),
        )
        rows.append((cells, place == grid.chosen))
    own = grid.named(grid.chosen)
    sentences = [
        *(_range_sentence(grid, name) for name in features),
        f"Fitted with {own} (κ first, then η). Held-out error: squared error of the voltage in "
        f"units left out of the fit, in {grid.folds} parts, beyond that of the best, ± standard "
        "error of the difference over independent units. Durations within one standard error are "
        "as good. All come from one digest of the longest kernels, always of B-splines, hardly "
        "smoothed and with the kernels ending smoothly, so that values differ a little from the "
        "fit’s; ± is one calibrated sd.",
    ]
    columns = ("Durations", "Held-out error", *(feature_label(name) for name in features))
    return ChoiceTable("Durations of the kernels", tuple(sentences), columns, tuple(rows))


def _range_sentence(grid: DurationGrid, name: str) -> str:
    """Say how far a feature goes over the grid, and over the durations that are as good."""
    mean, sd = grid.features[name]
    places = decimals(float(sd[grid.chosen]), float(mean[grid.chosen]))

    def ends(inside: np.ndarray) -> str:
        low = np.unravel_index(int(np.argmin(np.where(inside, mean, np.inf))), mean.shape)
        high = np.unravel_index(int(np.argmax(np.where(inside, mean, -np.inf))), mean.shape)
        if low == high:
            return f"{with_unit(float(mean[low]), places, _unit(name))} ({_named(grid, low)})"
        return " to ".join(
            f"{with_unit(float(mean[at]), places, _unit(name))} ({_named(grid, at)})"
            for at in (low, high)
        )

    return (
        f"{feature_label(name)}: {ends(np.ones(mean.shape, dtype=np.bool_))} over all durations; "
        f"{ends(grid.as_good)} over those that predict as well as the best."
    )


def _windows(windows: SpikeWindows) -> ChoiceTable:
    features = list(windows.features)
    rows = tuple(
        (
            (
                f"{end:g} ms",
                *(_at(windows.features[name], (index,), "mV") for name in features),
            ),
            index == windows.chosen,
        )
        for index, end in enumerate(windows.ends_ms)
    )
    told = [
        (float(np.nanmax(distance)), name)
        for name in features
        if np.isfinite(distance := windows.moved(name)).sum() > 1
    ]
    sentences = []
    if told:
        most, name = max(told)
        sentences.append(
            f"What moves most with the end of the spike window is {_lower(feature_label(name))}: "
            f"by {most:.1f} sd."
        )
    sentences.append(
        f"Fitted with the window to {windows.ends_ms[windows.chosen]:g} ms after a spike. ± is one "
        "sd at a given smoothness; the estimates share nearly all rows, so that they differ by "
        "far less than that by chance. A dash: inside the window, or no minimum after it."
    )
    columns = ("End of the window", *(feature_label(name) for name in features))
    return ChoiceTable("End of the spike window", tuple(sentences), columns, rows)


def _at(moments: tuple[np.ndarray, np.ndarray], place: Sequence[int], unit: str) -> str:
    mean, sd = (float(values[tuple(place)]) for values in moments)
    return _plus_minus(mean, sd, unit)


def _plus_minus(value: float, error: float, unit: str) -> str:
    if not np.isfinite(value):
        return "–"
    places = decimals(error, value)
    return f"{rounded(value, places)} ± {rounded(error, places)} {unit}"


def _named(grid: DurationGrid, place: Sequence[np.intp]) -> str:
    return grid.named((int(place[0]), int(place[1])))


def _unit(feature: str) -> str:
    return "MΩ" if feature == "input_resistance" else "mV"


def _lower(text: str) -> str:
    return text[:1].lower() + text[1:]

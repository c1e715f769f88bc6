"""From a file to a `Recording`: columns with units, sweeps, and the regular grid of time.

Nothing is guessed and nothing is mended. What cannot be a recording is refused with the row and
column it stands in; what is a faulty recording (missing values, jumps in time) is read as it is,
so that `check` can show it.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise
from pathlib import Path
from typing import Final

import numpy as np

from bayesglm.errors import InputError
from bayesglm.recording import timegrid
from bayesglm.recording.columns import TEXT, Column, NumberTable, identify, refuse_values
from bayesglm.recording.npz import read_npz
from bayesglm.recording.recording import FloatArray, IntArray, Recording, Sweep, TimeJump
from bayesglm.recording.table import open_table, parse_numbers

SPIKES_FROM_FILE: Final = "spike column of the file"


def recording_name(path: Path) -> str:
    """Return a recording's name: its file's without ``.csv``, ``.csv.gz`` or ``.npz``."""
    if path.suffix == ".npz":
        return path.stem
    return path.name.removesuffix(".gz").removesuffix(".csv")


def read_recording(path: str | Path) -> Recording:
    """Read one recording from a file of text (CSV) or of arrays (NPZ).

    Parameters
    ----------
    path
        A comma-separated file, plain or compressed by gzip, in UTF-8. Its header names
        ``time_ms`` or ``time_s``, ``current_pA`` or ``current_nA``, ``voltage_mV`` or
        ``voltage_V``, and optionally ``spike`` (0 or 1), ``sweep`` (whole numbers; without it
        the file is one sweep, number 0) and ``sweep_start_s`` or ``sweep_start_ms``. Lines above
        the header that start with ``#`` are comments. An empty current or voltage, or ``NaN`` or
        ``NA``, is a missing sample and stays NaN.

        Or an archive of NumPy arrays whose name ends in ``.npz``, with arrays of those names, all
        of one length. A single number ``step_ms`` or ``step_s`` may stand in place of the times.

    Returns
    -------
    Recording
        Current in nA, voltage in mV, step in ms. `start_s` of a sweep comes from the column of
        starts; without one, from a time column that runs on from sweep to sweep. Spikes are
        those of the spike column, or None.

    Raises
    ------
    InputError
        If the file is no such table; the message names the row and column, or the array and the
        sample in it, counted from 0.
    """
    path = Path(path)
    table = read_npz(path) if path.suffix == ".npz" else _text_table(path)
    refuse_values(table)
    grid = _Grid.measure(table, _sweep_starts(table))
    return Recording(
        name=recording_name(path),
        step_ms=grid.step_ms,
        sweeps=_build_sweeps(table, grid),
        path=path,
        sha256=table.sha256,
        spikes_from=SPIKES_FROM_FILE if "spike" in table.columns else "",
    )


def _text_table(path: Path) -> NumberTable:
    """Read the columns of a comma-separated file."""
    table = open_table(path)
    found = identify(table.header, f"{path}, row {table.header_row}", TEXT)
    numbers = parse_numbers(table)
    columns = {
        quantity: Column(header, factor, numbers[header])
        for quantity, (header, factor) in found.items()
    }
    return NumberTable(path, table.sha256, columns, table.first_row, TEXT)


def _sweep_starts(table: NumberTable) -> IntArray:
    """Return the index of the first sample of each sweep, shape (n_sweeps,)."""
    if "sweep" not in table.columns:
        return np.zeros(1, dtype=np.int64)
    numbers = table.columns["sweep"].values
    starts: IntArray = np.concatenate([[0], np.flatnonzero(np.diff(numbers)) + 1]).astype(np.int64)
    seen: set[float] = set()
    for start in starts:
        number = float(numbers[start])
        if number in seen:
            words = table.wording
            raise InputError(
                f"{table.place('sweep', start)}: sweep {number:.10g} comes back after another "
                f"sweep; expected the {words.row}s of a sweep to stand together; sort the "
                f"{words.row}s or give the later part a number of its own"
            )
        seen.add(number)
    return starts


@dataclass(frozen=True, eq=False)
class _Grid:
    """The sweeps' place in the file and their common step.

    `step` and `resolution` are in the unit of the time column, or in ms without one.
    """

    edges: IntArray
    step: float
    step_ms: float
    resolution: float = 0.0

    @classmethod
    def measure(cls, table: NumberTable, starts: IntArray) -> _Grid:
        """Measure the step; refuse a sweep that has none or another than the rest."""
        edges = np.concatenate([starts, [table.n_samples]])
        _refuse_single_samples(table, edges)
        if table.step_ms is not None:
            return cls(edges, table.step_ms, table.step_ms)
        column = table.columns["time"]
        times, row = column.values, table.wording.row
        resolution = max(timegrid.print_resolution(times), _spacing(column))
        estimates = []
        for first, end in pairwise(edges):
            estimate = timegrid.estimate_step(times[first:end], resolution)
            if estimate.step <= 0:
                raise InputError(
                    f"{table.place('time', first)}: time does not advance in "
                    f"{_sweep_name(table, first)} (median step {estimate.step:.10g}); expected "
                    f"times that increase from {row} to {row}; write them with more decimals, or "
                    f"number the sweeps in "
                    f"the {table.wording.column} sweep"
                )
            estimates.append(estimate)
        step, odd = timegrid.common_step(estimates, resolution)
        place = f"{table.path}, {table.column('time')}"
        if odd is not None:
            raise InputError(
                f"{place}: {_sweep_name(table, edges[odd])}, from {table.row(edges[odd])}, has a "
                f"step of {estimates[odd].step:.6g}; expected {step:.6g} as in the longest sweep; "
                "put sweeps of another step in a file of their own"
            )
        if resolution > 2 * step * (1 + 1e-6):
            raise InputError(
                f"{place}: times are printed to {resolution:g} and the step is {step:.6g}; "
                f"expected enough decimals to tell {row}s apart; write the times with more decimals"
            )
        return cls(edges, step, step * column.factor, resolution)


def _refuse_single_samples(table: NumberTable, edges: IntArray) -> None:
    """Raise for the first sweep that has no step because it has one sample."""
    short = np.flatnonzero(np.diff(edges) < 2)
    if len(short):
        first = int(edges[short[0]])
        quantity = "time" if "time" in table.columns else "voltage"
        raise InputError(
            f"{table.place(quantity, first)}: {_sweep_name(table, first)} has one "
            f"{table.wording.row}; expected at least two; delete it or complete it"
        )


def _spacing(column: Column) -> float:
    """Distance of neighbouring numbers where times are stored in a short type, else 0.

    Single precision tells times of 1000 s apart only to 0.06 ms.
    """
    stored = column.stored
    if stored is None or stored.kind != "f" or stored.itemsize >= 8:
        return 0.0
    return float(np.spacing(np.abs(column.values).max().astype(stored)))


def _sweep_name(table: NumberTable, index: int) -> str:
    """Return what a message calls the sweep of a sample."""
    if "sweep" not in table.columns:
        return "the recording"
    return f"sweep {table.columns['sweep'].values[index]:.10g}"


def _build_sweeps(table: NumberTable, grid: _Grid) -> tuple[Sweep, ...]:
    """Cut the columns into sweeps in the package's units."""
    current, voltage = _in_unit(table.columns["current"]), _in_unit(table.columns["voltage"])
    clock = _clock(table, grid)
    sweeps = []
    for index, (first, end) in enumerate(pairwise(grid.edges)):
        part = slice(first, end)
        jumps, jitter_ms = _times(table, grid, part)
        number, spikes = table.columns.get("sweep"), table.columns.get("spike")
        sweeps.append(
            Sweep(
                number=int(number.values[first]) if number is not None else 0,
                current=_locked(current[part]),
                voltage=_locked(voltage[part]),
                keep=np.ones(end - first, dtype=np.bool_),
                spikes=np.flatnonzero(spikes.values[part]) if spikes is not None else None,
                first_row=int(table.first_row + first),
                start_s=None if clock is None else float(clock[index]),
                jumps=jumps,
                jitter_ms=jitter_ms,
            )
        )
    return tuple(sweeps)


def _times(table: NumberTable, grid: _Grid, part: slice) -> tuple[tuple[TimeJump, ...], float]:
    """Find the jumps in the times of a sweep and their jitter in ms; none where no times are."""
    if "time" not in table.columns:
        return (), 0.0
    column = table.columns["time"]
    times, factor = column.values[part], column.factor
    found = timegrid.find_jumps(times, grid.step, grid.resolution)
    jumps = tuple(
        TimeJump(
            row=int(table.first_row + part.start + jump),
            sample=int(jump),
            before_ms=float(times[jump - 1]) * factor,
            after_ms=float(times[jump]) * factor,
        )
        for jump in found
    )
    return jumps, timegrid.jitter(times, grid.step, found) * factor


def _clock(table: NumberTable, grid: _Grid) -> FloatArray | None:
    """Return the start of each sweep in s, shape (n_sweeps,); None where nothing states it."""
    first, end = grid.edges[:-1], grid.edges[1:]
    if "sweep_start" in table.columns:
        starts = table.columns["sweep_start"].values
        # A change of start is only allowed where a new sweep begins.
        changes = np.setdiff1d(np.flatnonzero(np.diff(starts)) + 1, first)
        if len(changes):
            index = int(changes[0])
            raise InputError(
                f"{table.place('sweep_start', index)}: found {starts[index]:.10g} after "
                f"{starts[index - 1]:.10g} in one sweep; expected one start a sweep; number the "
                f"sweeps in the {table.wording.column} sweep"
            )
        return starts[first] * table.columns["sweep_start"].factor
    if "time" not in table.columns:
        return None
    times = table.columns["time"].values
    runs_on = len(first) > 1 and bool(np.all(times[first[1:]] > times[end[:-1] - 1]))
    # Times are in ms after the factor; starts are in s.
    return times[first] * table.columns["time"].factor / 1e3 if runs_on else None


def _in_unit(column: Column) -> FloatArray:
    """Values in the package's unit; what has it already is not copied, so that it stays mapped."""
    return column.values if column.factor == 1 else column.values * column.factor


def _locked(values: FloatArray) -> FloatArray:
    """Return the array closed to writing."""
    values.flags.writeable = False
    return values

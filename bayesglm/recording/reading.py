"""From a file to a `Recording`: columns with units, sweeps, and the regular grid of time.

Nothing is guessed and nothing is mended. What cannot be a recording is refused with the row and
column it stands in; what is a faulty recording (missing values, jumps in time) is read as it is,
so that `check` can show it.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from bayesglm.errors import InputError, nearest
from bayesglm.recording import timegrid
from bayesglm.recording.recording import FloatArray, IntArray, Recording, Sweep, TimeJump
from bayesglm.recording.table import TextTable, open_table, parse_numbers
from bayesglm.units import UNIT_FACTORS, parse_header

#: Largest values a current-clamp recording can hold; more means the header's unit is wrong.
MAX_VOLTAGE_MV = 1000.0
#: No recording of a membrane stays this close to zero throughout, mV: such a file holds volts.
MIN_VOLTAGE_MV = 1.0
MAX_CURRENT_NA = 100.0

SPIKES_FROM_FILE = "spike column of the file"

_KNOWN = (
    *(f"{quantity}_{unit}" for quantity, units in UNIT_FACTORS.items() for unit in units),
    "spike",
    "sweep",
)
_REQUIRED = ("time", "current", "voltage")
#: Quantities in which an empty field is a missing sample; in all others it is an error.
_MAY_BE_MISSING = ("current", "voltage")


@dataclass(frozen=True)
class _Column:
    """Where a quantity stands in the file and the factor to the unit used inside."""

    header: str
    factor: float = 1.0


def recording_name(path: Path) -> str:
    """Return the name of a recording: its file's name without ``.csv`` and ``.gz``."""
    return path.name.removesuffix(".gz").removesuffix(".csv")


def read_recording(path: str | Path) -> Recording:
    """Read one recording from a CSV file.

    Parameters
    ----------
    path
        A comma-separated file, plain or compressed by gzip, in UTF-8. Its header names
        ``time_ms`` or ``time_s``, ``current_pA`` or ``current_nA``, ``voltage_mV`` or
        ``voltage_V``, and optionally ``spike`` (0 or 1), ``sweep`` (whole numbers; without it
        the file is one sweep, number 0) and ``sweep_start_s`` or ``sweep_start_ms``. Lines above
        the header that start with ``#`` are comments. An empty current or voltage, or ``NaN`` or
        ``NA``, is a missing sample and stays NaN.

    Returns
    -------
    Recording
        Current in nA, voltage in mV, step in ms. `start_s` of a sweep comes from the column of
        starts; without one, from a time column that runs on from sweep to sweep. Spikes are
        those of the spike column, or None.

    Raises
    ------
    InputError
        If the file is no such table; the message names the row and column.
    """
    path = Path(path)
    table = open_table(path)
    columns = _columns(table)
    numbers = parse_numbers(table)
    values = {name: numbers[column.header] for name, column in columns.items()}
    for name, column in columns.items():
        _refuse_values(table, name, column, values[name])
    starts = _sweep_starts(table, values.get("sweep"))
    grid = _Grid.measure(table, columns["time"], values, starts)
    sweeps = _build_sweeps(table, columns, values, grid)
    return Recording(
        name=recording_name(path),
        step_ms=grid.step * columns["time"].factor,
        sweeps=sweeps,
        path=path,
        sha256=table.sha256,
        spikes_from=SPIKES_FROM_FILE if "spike" in columns else "",
    )


def _columns(table: TextTable) -> dict[str, _Column]:
    """Tell which quantity each column holds; refuse unknown, repeated and missing ones."""
    place = f"{table.path}, row {table.header_row}"
    columns: dict[str, _Column] = {}
    for header in table.header:
        if header in ("spike", "sweep"):
            quantity, factor = header, 1.0
        else:
            try:
                parsed = parse_header(header)
            except InputError as error:
                raise InputError(f"{place}: {error}; correct the header") from None
            if parsed is None:
                raise InputError(
                    f"{place}: column {header!r} is unknown; expected {', '.join(_KNOWN)}"
                    f"{nearest(header, _KNOWN)} (rename or delete the column)"
                )
            quantity, factor = parsed
        if quantity in columns:
            raise InputError(
                f"{place}: columns {columns[quantity].header!r} and {header!r} both hold the "
                f"{quantity}; keep one of the two"
            )
        columns[quantity] = _Column(header, factor)
    for quantity in _REQUIRED:
        if quantity not in columns:
            wanted = " or ".join(f"{quantity}_{unit}" for unit in UNIT_FACTORS[quantity])
            raise InputError(
                f"{place}: no column holds the {quantity}; found {', '.join(table.header)}; "
                f"expected {wanted}; add the column"
            )
    return columns


def _refuse_values(table: TextTable, quantity: str, column: _Column, values: FloatArray) -> None:
    """Raise for the first value that the quantity cannot have."""

    def refuse(wrong: NDArray[np.bool_], expected: str) -> None:
        if wrong.any():
            index = int(np.argmax(wrong))
            found = "an empty field" if np.isnan(values[index]) else f"{values[index]:.10g}"
            raise InputError(
                f"{table.path}, row {table.first_row + index}, column {column.header}: found "
                f"{found}; expected {expected}"
            )

    if quantity not in _MAY_BE_MISSING:
        refuse(np.isnan(values), "a number; fill it in or delete the row")
    if quantity == "spike":
        refuse((values != 0) & (values != 1), "0 or 1 (1 in the sample of a spike)")
    elif quantity == "sweep":
        refuse(
            (values != np.rint(values)) | (values < 0) | (values > 1e9),
            "a whole number from 0; number the sweeps 0, 1, 2, …",
        )
    elif quantity == "voltage":
        refuse(
            np.abs(values) * column.factor > MAX_VOLTAGE_MV,
            f"at most {MAX_VOLTAGE_MV:g} mV either side of 0; the unit in the header is probably "
            "wrong (voltage_mV or voltage_V)",
        )
        small = np.nanmax(np.abs(values), initial=0.0) * column.factor < MIN_VOLTAGE_MV
        refuse(
            np.isfinite(values) & small,
            f"values beyond {MIN_VOLTAGE_MV:g} mV somewhere in the file; the unit in the header "
            "is probably wrong (voltage_mV or voltage_V)",
        )
    elif quantity == "current":
        refuse(
            np.abs(values) * column.factor > MAX_CURRENT_NA,
            f"at most {MAX_CURRENT_NA:g} nA either side of 0; the unit in the header is probably "
            "wrong (current_pA or current_nA)",
        )


def _sweep_starts(table: TextTable, numbers: FloatArray | None) -> IntArray:
    """Return the index of the first sample of each sweep, shape (n_sweeps,)."""
    if numbers is None:
        return np.zeros(1, dtype=np.int64)
    starts: IntArray = np.concatenate([[0], np.flatnonzero(np.diff(numbers)) + 1]).astype(np.int64)
    seen: set[float] = set()
    for start in starts:
        number = float(numbers[start])
        if number in seen:
            raise InputError(
                f"{table.path}, row {table.first_row + start}, column sweep: sweep {number:.10g} "
                "comes back after another sweep; expected the rows of a sweep to stand together; "
                "sort the rows or give the later part a number of its own"
            )
        seen.add(number)
    return starts


@dataclass(frozen=True, eq=False)
class _Grid:
    """The sweeps' place in the file and their common step, in the unit of the time column."""

    edges: IntArray
    step: float
    resolution: float

    @classmethod
    def measure(
        cls, table: TextTable, column: _Column, values: dict[str, FloatArray], starts: IntArray
    ) -> _Grid:
        """Measure the step; refuse a sweep that has none or another than the rest."""
        times = values["time"]
        edges = np.concatenate([starts, [len(times)]])
        resolution = timegrid.print_resolution(times)
        estimates = []
        for first, end in pairwise(edges):
            place = f"{table.path}, row {table.first_row + first}, column {column.header}"
            name = _sweep_name(values, first)
            if end - first < 2:
                raise InputError(
                    f"{place}: {name} has one row; expected at least two; delete it or complete it"
                )
            estimate = timegrid.estimate_step(times[first:end], resolution)
            if estimate.step <= 0:
                raise InputError(
                    f"{place}: time does not advance in {name} (median step "
                    f"{estimate.step:.10g}); expected times that increase from row to row; print "
                    "them with more decimals, or give each sweep a number in a sweep column"
                )
            estimates.append(estimate)
        step, odd = timegrid.common_step(estimates, resolution)
        place = f"{table.path}, column {column.header}"
        if odd is not None:
            raise InputError(
                f"{place}: {_sweep_name(values, edges[odd])}, from row "
                f"{table.first_row + edges[odd]}, has a step of {estimates[odd].step:.6g}; "
                f"expected {step:.6g} as in the longest sweep; put sweeps of another step in a "
                "file of their own"
            )
        if resolution > 2 * step * (1 + 1e-6):
            raise InputError(
                f"{place}: times are printed to {resolution:g} and the step is {step:.6g}; "
                "expected enough decimals to tell rows apart; write the times with more decimals"
            )
        return cls(edges, step, resolution)


def _sweep_name(values: dict[str, FloatArray], index: int) -> str:
    """Return what a message calls the sweep of a sample."""
    return f"sweep {values['sweep'][index]:.10g}" if "sweep" in values else "the recording"


def _build_sweeps(
    table: TextTable, columns: dict[str, _Column], values: dict[str, FloatArray], grid: _Grid
) -> tuple[Sweep, ...]:
    """Cut the columns into sweeps in the package's units."""
    current = values["current"] * columns["current"].factor
    voltage = values["voltage"] * columns["voltage"].factor
    clock = _clock(table, columns, values, grid)
    factor = columns["time"].factor
    sweeps = []
    for index, (first, end) in enumerate(pairwise(grid.edges)):
        part = slice(first, end)
        times = values["time"][part]
        jumps = timegrid.find_jumps(times, grid.step, grid.resolution)
        first_row = int(table.first_row + first)
        sweeps.append(
            Sweep(
                number=int(values["sweep"][first]) if "sweep" in values else 0,
                current=_locked(current[part]),
                voltage=_locked(voltage[part]),
                keep=np.ones(end - first, dtype=np.bool_),
                spikes=np.flatnonzero(values["spike"][part]) if "spike" in values else None,
                first_row=first_row,
                start_s=None if clock is None else float(clock[index]),
                jumps=tuple(
                    TimeJump(
                        row=first_row + int(jump),
                        sample=int(jump),
                        before_ms=float(times[jump - 1]) * factor,
                        after_ms=float(times[jump]) * factor,
                    )
                    for jump in jumps
                ),
                jitter_ms=timegrid.jitter(times, grid.step, jumps) * factor,
            )
        )
    return tuple(sweeps)


def _clock(
    table: TextTable, columns: dict[str, _Column], values: dict[str, FloatArray], grid: _Grid
) -> FloatArray | None:
    """Return the start of each sweep in s, shape (n_sweeps,); None where nothing states it."""
    first, end = grid.edges[:-1], grid.edges[1:]
    if "sweep_start" in columns:
        column, starts = columns["sweep_start"], values["sweep_start"]
        # A change of start is only allowed where a new sweep begins.
        changes = np.setdiff1d(np.flatnonzero(np.diff(starts)) + 1, first)
        if len(changes):
            index = changes[0]
            raise InputError(
                f"{table.path}, row {table.first_row + index}, column {column.header}: found "
                f"{starts[index]:.10g} after {starts[index - 1]:.10g} in one sweep; expected one "
                "start a sweep; number the sweeps in the sweep column"
            )
        return starts[first] * column.factor
    times = values["time"]
    runs_on = len(first) > 1 and bool(np.all(times[first[1:]] > times[end[:-1] - 1]))
    # Times are in ms after the factor; starts are in s.
    return times[first] * columns["time"].factor / 1e3 if runs_on else None


def _locked(values: FloatArray) -> FloatArray:
    """Return the array closed to writing."""
    values.flags.writeable = False
    return values

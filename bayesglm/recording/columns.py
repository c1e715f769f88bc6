"""What the columns of a recording hold and which values they may hold.

Files of text and files of arrays come here as one kind of table, so that both are refused for the
same reasons and in the same words; only how a place is named differs.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Final

import numpy as np

from bayesglm.errors import InputError, nearest
from bayesglm.recording.recording import BoolArray, FloatArray
from bayesglm.units import UNIT_FACTORS, parse_header

#: Largest values a current-clamp recording can hold; more means the header's unit is wrong.
MAX_VOLTAGE_MV: Final = 1000.0
#: No recording of a membrane stays this close to zero throughout, mV: such a file holds volts.
MIN_VOLTAGE_MV: Final = 1.0
MAX_CURRENT_NA: Final = 100.0

_KNOWN: Final = (
    *(f"{quantity}_{unit}" for quantity, units in UNIT_FACTORS.items() for unit in units),
    "spike",
    "sweep",
)
_REQUIRED: Final = ("time", "current", "voltage")
#: Quantities in which a value may be missing; in all others that is an error.
_MAY_BE_MISSING: Final = ("current", "voltage")
#: Values are looked at in pieces of this length: a mapped array is never held in memory whole.
_PIECE: Final = 2**20


@dataclass(frozen=True)
class Wording:
    """How messages name places and missing values in one kind of file.

    Attributes
    ----------
    row, column
        What a sample and a quantity are called.
    missing
        What is found where a value is missing.
    leave_missing
        How a missing value is written.
    complete
        How a value that must be there is mended.
    correct
        How a wrong name is mended.
    """

    row: str
    column: str
    missing: str
    leave_missing: str
    complete: str
    correct: str


TEXT: Final = Wording(
    row="row",
    column="column",
    missing="an empty field",
    leave_missing="leave the field empty",
    complete="fill it in or delete the row",
    correct="correct the header",
)
ARRAYS: Final = Wording(
    row="sample",
    column="array",
    missing="NaN",
    leave_missing="write NaN",
    complete="fill it in, or leave the sample out of every array",
    correct="rename the array",
)


@dataclass(frozen=True, eq=False)
class Column:
    """The values of one quantity.

    Attributes
    ----------
    header
        Its name in the file.
    factor
        Factor to the unit used inside the package.
    values
        As they stand in the file, float64, shape (n,).
    stored
        Type of number in the file; None for text.
    """

    header: str
    factor: float
    values: FloatArray
    stored: np.dtype[Any] | None = None


@dataclass(frozen=True, eq=False)
class NumberTable:
    """The columns of one file.

    Attributes
    ----------
    path
        The file.
    sha256
        Hash of its bytes.
    columns
        By quantity; ``time`` may lack where `step_ms` is given.
    first_row
        What the first sample is counted as: its line in a text, 0 in arrays.
    wording
        How places are named.
    step_ms
        The sampling step where the file states it, ms.
    """

    path: Path
    sha256: str
    columns: dict[str, Column]
    first_row: int
    wording: Wording
    step_ms: float | None = None

    def row(self, index: int) -> str:
        """Name a sample, such as ``row 12``."""
        return f"{self.wording.row} {self.first_row + index}"

    def column(self, quantity: str) -> str:
        """Name a column, such as ``column time_ms``."""
        return f"{self.wording.column} {self.columns[quantity].header}"

    def place(self, quantity: str, index: int) -> str:
        """Say where a value stands, for the beginning of a message."""
        return f"{self.path}, {self.row(index)}, {self.column(quantity)}"

    @property
    def n_samples(self) -> int:
        """Number of samples."""
        return len(self.columns["voltage"].values)


def identify(
    names: Sequence[str], place: str, wording: Wording, steps: Sequence[str] = ()
) -> dict[str, tuple[str, float]]:
    """Tell which quantity each column holds; refuse unknown, repeated and missing ones.

    Parameters
    ----------
    names
        Names of the columns.
    place
        Where they stand, for the beginning of a message.
    wording
        How the message calls a column.
    steps
        Names under which this kind of file may state its step in place of times.

    Returns
    -------
    dict
        By quantity, the column's name and the factor to the unit used inside the package; a
        step is the quantity ``step``.

    Raises
    ------
    InputError
        For the first column that is wrong or lacks.
    """
    known = (*_KNOWN, *steps)
    found: dict[str, tuple[str, float]] = {}
    for name in names:
        quantity, factor = _quantity(name, place, wording, steps, known)
        if quantity in found:
            raise InputError(
                f"{place}: {wording.column}s {found[quantity][0]!r} and {name!r} both hold the "
                f"{quantity}; keep one of the two"
            )
        found[quantity] = (name, factor)
    if "step" in found and "time" in found:
        raise InputError(
            f"{place}: {wording.column}s {found['time'][0]!r} and {found['step'][0]!r} both say "
            "when samples were taken; keep one of the two"
        )
    for quantity in _REQUIRED:
        if quantity not in found and not (quantity == "time" and "step" in found):
            wanted = [f"{quantity}_{unit}" for unit in UNIT_FACTORS[quantity]]
            wanted += [f"the number {name}" for name in steps if quantity == "time"]
            raise InputError(
                f"{place}: no {wording.column} holds the {quantity}; found {', '.join(names)}; "
                f"expected {' or '.join(wanted)}; add the {wording.column}"
            )
    return found


def _quantity(
    name: str, place: str, wording: Wording, steps: Sequence[str], known: Sequence[str]
) -> tuple[str, float]:
    """Quantity of a column and the factor to the unit used inside the package."""
    if name in ("spike", "sweep"):
        return name, 1.0
    if name in steps:
        return "step", UNIT_FACTORS["time"][name.removeprefix("step_")]
    try:
        parsed = parse_header(name)
    except InputError as error:
        told = str(error).removeprefix("column ")
        raise InputError(f"{place}: {wording.column} {told}; {wording.correct}") from None
    if parsed is None:
        raise InputError(
            f"{place}: {wording.column} {name!r} is unknown; expected {', '.join(known)}"
            f"{nearest(name, known)} (rename or delete the {wording.column})"
        )
    return parsed


def refuse_values(table: NumberTable) -> None:
    """Raise an `InputError` for the first value that its quantity cannot have."""
    for quantity, column in table.columns.items():
        for wrong, expected in _rules(table, quantity, column):
            index = _first(column.values, wrong)
            if index is not None:
                value = column.values[index]
                found = table.wording.missing if np.isnan(value) else f"{value:.10g}"
                raise InputError(
                    f"{table.place(quantity, index)}: found {found}; expected {expected}"
                )


_Rule = tuple[Callable[[FloatArray], BoolArray], str]


def _rules(table: NumberTable, quantity: str, column: Column) -> list[_Rule]:
    """What makes a value of a quantity wrong, and what was expected instead."""
    words, factor = table.wording, column.factor
    rules: list[_Rule] = [
        (np.isinf, f"a finite number ({words.leave_missing} where it is missing)")
    ]
    if quantity not in _MAY_BE_MISSING:
        rules.append((np.isnan, f"a number; {words.complete}"))
    place = "header" if words is TEXT else "array's name"
    unit = f"the unit in the {place} is probably wrong"
    if quantity == "spike":
        rules.append((lambda v: (v != 0) & (v != 1), "0 or 1 (1 in the sample of a spike)"))
    elif quantity == "sweep":
        rules.append(
            (
                lambda v: (v != np.rint(v)) | (v < 0) | (v > 1e9),
                "a whole number from 0; number the sweeps 0, 1, 2, …",
            )
        )
    elif quantity == "voltage":
        rules.append(
            (
                lambda v: np.abs(v) * factor > MAX_VOLTAGE_MV,
                f"at most {MAX_VOLTAGE_MV:g} mV either side of 0; {unit} (voltage_mV or voltage_V)",
            )
        )
        if _first(column.values, lambda v: np.abs(v) * factor >= MIN_VOLTAGE_MV) is None:
            rules.append(
                (
                    np.isfinite,
                    f"values beyond {MIN_VOLTAGE_MV:g} mV somewhere in the file; {unit} "
                    "(voltage_mV or voltage_V)",
                )
            )
    elif quantity == "current":
        rules.append(
            (
                lambda v: np.abs(v) * factor > MAX_CURRENT_NA,
                f"at most {MAX_CURRENT_NA:g} nA either side of 0; {unit} (current_pA or "
                "current_nA)",
            )
        )
    return rules


def _first(values: FloatArray, holds: Callable[[FloatArray], BoolArray]) -> int | None:
    """Index of the first value for which a condition holds; None where there is none."""
    for start in range(0, len(values), _PIECE):
        found = holds(values[start : start + _PIECE])
        if found.any():
            return start + int(np.argmax(found))
    return None

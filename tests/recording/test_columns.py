"""What columns may be called and hold, in the words of text and of arrays."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from numpy.typing import NDArray

from bayesglm.errors import InputError
from bayesglm.recording import columns
from bayesglm.recording.columns import ARRAYS, TEXT, Column, NumberTable, identify, refuse_values

NAMES = ["time_s", "current_pA", "voltage_mV", "sweep_start_ms", "sweep", "spike"]


def table(voltage: NDArray[np.float64], current: NDArray[np.float64] | None = None) -> NumberTable:
    found = {"voltage": Column("voltage_mV", 1.0, voltage)}
    if current is not None:
        found["current"] = Column("current_pA", 1e-3, current)
    return NumberTable(Path("cell.csv"), "", found, first_row=2, wording=TEXT)


def test_names_are_told_apart() -> None:
    assert identify(NAMES, "cell.csv, row 1", TEXT) == {
        "time": ("time_s", 1e3),
        "current": ("current_pA", 1e-3),
        "voltage": ("voltage_mV", 1.0),
        "sweep_start": ("sweep_start_ms", 1e-3),
        "sweep": ("sweep", 1.0),
        "spike": ("spike", 1.0),
    }


def test_a_step_stands_for_times_only_where_the_kind_of_file_has_one() -> None:
    names = ["step_s", "current_nA", "voltage_mV"]
    assert identify(names, "cell.npz", ARRAYS, ["step_s"])["step"] == ("step_s", 1e3)
    with pytest.raises(InputError, match="column 'step_s' is unknown"):
        identify(names, "cell.csv", TEXT)


@pytest.mark.parametrize("wording", [TEXT, ARRAYS])
def test_messages_speak_of_rows_or_of_arrays(wording: columns.Wording) -> None:
    with pytest.raises(
        InputError, match=f"no {wording.column} holds the time; .*add the {wording.column}"
    ):
        identify(NAMES[1:], "cell", wording)
    with pytest.raises(
        InputError, match=f"cell: {wording.column} 'time' has no unit.*{wording.correct}"
    ):
        identify(["time"], "cell", wording)


@pytest.mark.parametrize("place", [0, 7, 8, 20])
def test_a_value_is_found_in_whichever_piece_it_lies(
    place: int, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Values are looked at in pieces; the row is that of the whole."""
    monkeypatch.setattr(columns, "_PIECE", 8)
    voltage = np.full(21, -65.0)
    refuse_values(table(voltage))
    voltage[place:] = 2000
    with pytest.raises(
        InputError, match=rf"cell\.csv, row {2 + place}, column voltage_mV: found 2000"
    ):
        refuse_values(table(voltage))


def test_a_voltage_that_is_small_throughout_is_in_volts(monkeypatch: pytest.MonkeyPatch) -> None:
    """One value beyond 1 mV in any piece, and it may be millivolts; a missing one says nothing."""
    monkeypatch.setattr(columns, "_PIECE", 8)
    voltage = np.full(21, -0.065)
    voltage[:3] = np.nan
    with pytest.raises(InputError, match=r"row 5, column voltage_mV: found -0\.065; expected"):
        refuse_values(table(voltage))
    voltage[19] = -1.5
    refuse_values(table(voltage))
    refuse_values(table(np.full(4, np.nan)))


def test_limits_hold_in_the_packages_unit() -> None:
    """100 nA are 100,000 pA."""
    voltage = np.full(3, -65.0)
    refuse_values(table(voltage, np.array([0.0, np.nan, -1e5])))
    with pytest.raises(InputError, match=r"row 4, column current_pA: found -100001; .*100 nA"):
        refuse_values(table(voltage, np.array([0.0, np.nan, -100_001.0])))

"""Headers of columns and their units."""

import pytest

from bayesglm.errors import InputError
from bayesglm.units import UNIT_FACTORS, parse_header


@pytest.mark.parametrize(
    ("header", "quantity", "factor"),
    [
        ("time_ms", "time", 1.0),
        ("time_s", "time", 1000.0),
        ("current_pA", "current", 0.001),
        ("current_nA", "current", 1.0),
        ("voltage_mV", "voltage", 1.0),
        ("voltage_V", "voltage", 1000.0),
        ("sweep_start_s", "sweep_start", 1.0),
        ("sweep_start_ms", "sweep_start", 0.001),
    ],
)
def test_known_headers(header: str, quantity: str, factor: float) -> None:
    assert parse_header(header) == (quantity, factor)


@pytest.mark.parametrize("header", ["spike", "sweep", "timer_ms", "voltages_mV", ""])
def test_other_headers_are_no_quantity(header: str) -> None:
    assert parse_header(header) is None


@pytest.mark.parametrize("quantity", UNIT_FACTORS)
def test_missing_unit(quantity: str) -> None:
    with pytest.raises(InputError, match=f"'{quantity}' has no unit; expected {quantity}_.* or "):
        parse_header(quantity)


@pytest.mark.parametrize(
    ("header", "message"),
    [
        ("current_uA", r"unknown unit 'uA'; expected current_pA or current_nA; did you mean"),
        ("voltage_mv", r"unknown unit 'mv'; expected voltage_mV or voltage_V; did you mean 'mV'"),
        ("time_us", r"unknown unit 'us'; expected time_ms or time_s"),
    ],
)
def test_unknown_unit(header: str, message: str) -> None:
    with pytest.raises(InputError, match=message):
        parse_header(header)

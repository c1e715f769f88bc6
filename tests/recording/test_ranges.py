"""Ranges and numbers of sweeps, as written and as read."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from bayesglm.errors import InputError
from bayesglm.recording.ranges import format_sweeps, parse_range, parse_sweeps


@pytest.mark.parametrize(
    ("key", "text", "low", "high"),
    [
        ("current", "-100:25pA", -0.1, 0.025),
        ("current", " -0.1 : 0.025 nA ", -0.1, 0.025),
        ("current", ":25pA", -np.inf, 0.025),
        ("rows.current", "-100:pA", -0.1, np.inf),
        ("rows.current", "−100:−50pA", -0.1, -0.05),
        ("rows.voltage", "-90:-40mV", -90, -40),
        ("rows.voltage", "-.09:-4e-2V", -90, -40),
        ("window", "100:2400ms", 100, 2400),
        ("window", "0.1:2.4s", 100, 2400),
        ("rate", "0:5Hz", 0, 5),
    ],
)
def test_ranges(key: str, text: str, low: float, high: float) -> None:
    found = parse_range(key, text)
    assert found.low * found.factor == pytest.approx(low)
    assert found.high * found.factor == pytest.approx(high)


@pytest.mark.parametrize(
    ("key", "text", "message"),
    [
        (
            "current",
            "-100:25",
            r"current=-100:25: found no unit; expected pA or nA, such as current=",
        ),
        ("current", "-100:25mV", r"found unit 'mV'; expected pA or nA"),
        ("rate", "0:5kHz", r"found unit 'kHz'; expected Hz"),
        ("window", "100-2400ms", r"expected a range with its unit, such as window=100:2400ms"),
        ("window", "100ms:2400ms", r"expected a range with its unit"),
        ("window", ":ms", r"expected a range with its unit"),
        ("window", "", r"expected a range with its unit"),
        ("current", "nan:5pA", r"expected a range with its unit"),
        ("rows.voltage", "-40:-90mV", r"runs backwards; .* rows\.voltage=-90:-40mV"),
    ],
)
def test_ranges_refused(key: str, text: str, message: str) -> None:
    with pytest.raises(InputError, match=message):
        parse_range(key, text)


def test_ends_belong_to_the_range_in_spite_of_rounding() -> None:
    current = np.array([-100.0, 25.0, -100.1, 25.1, np.nan]) * 1e-3
    assert parse_range("current", "-100:25pA").holds(current).tolist() == [True, True] + [False] * 3


@pytest.mark.parametrize(
    ("text", "numbers"),
    [
        ("3", (3,)),
        ("0-4,7", (0, 1, 2, 3, 4, 7)),
        (" 7 , 0 - 2 ", (0, 1, 2, 7)),
        ("1,1-2", (1, 2)),
        ("0–2", (0, 1, 2)),
    ],
)
def test_sweeps(text: str, numbers: tuple[int, ...]) -> None:
    assert parse_sweeps(text) == numbers


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("4-0", r"the range 4-0 runs backwards; .*: 0-4"),
        ("", r"expected numbers of sweeps, such as sweeps=0-4,7"),
        ("a", r"expected numbers of sweeps"),
        ("1;2", r"expected numbers of sweeps"),
        ("-1", r"expected numbers of sweeps"),
        ("0-99999999999", r"expected numbers up to 1000000"),
    ],
)
def test_sweeps_refused(text: str, message: str) -> None:
    with pytest.raises(InputError, match=message):
        parse_sweeps(text)


@given(st.sets(st.integers(0, 60), min_size=1))
def test_sweeps_survive_being_written(numbers: set[int]) -> None:
    assert parse_sweeps(format_sweeps(sorted(numbers))) == tuple(sorted(numbers))


@given(low=st.floats(-1e3, 1e3), width=st.floats(0, 1e3))
def test_ranges_survive_being_written(low: float, width: float) -> None:
    written = str(parse_range("current", f"{low!r}:{low + width!r}pA"))
    again = parse_range("current", written)
    assert str(again) == written
    assert again.low == pytest.approx(low, rel=1e-11, abs=1e-300)

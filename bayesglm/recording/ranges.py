"""How ranges of values and numbers of sweeps are written, such as ``-100:25pA`` and ``0-4,7``."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np

from bayesglm.errors import InputError
from bayesglm.recording.recording import BoolArray, FloatArray

#: Units a range may be stated in, with the factor to the unit used inside, and an example.
RANGES: Final[dict[str, tuple[dict[str, float], str]]] = {
    "current": ({"pA": 1e-3, "nA": 1.0}, "-100:25pA"),
    "rows.current": ({"pA": 1e-3, "nA": 1.0}, "-100:25pA"),
    "rows.voltage": ({"mV": 1.0, "V": 1e3}, "-90:-40mV"),
    "window": ({"ms": 1.0, "s": 1e3}, "100:2400ms"),
    "rate": ({"Hz": 1.0}, "0:5Hz"),
}

_NUMBER = r"[+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?"
_RANGE = re.compile(rf"\s*({_NUMBER})?\s*:\s*({_NUMBER})?\s*([A-Za-z]*)\s*")
_SWEEPS = re.compile(r"\d+(-\d+)?(,\d+(-\d+)?)*")
_MAX_SWEEP = 10**6

#: Far below any difference that is meant, far above the rounding of a change of unit.
_TOLERANCE = 1e-9


@dataclass(frozen=True)
class Range:
    """A closed range; an end that is not stated is infinite.

    Attributes
    ----------
    low, high
        Ends as stated, in `unit`.
    unit
        Unit as stated.
    factor
        Factor from `unit` to the unit used inside the package.
    """

    low: float
    high: float
    unit: str
    factor: float

    def holds(self, values: FloatArray) -> BoolArray:
        """Tell which values, in the package's unit, lie inside; NaN does not."""
        low, high = self.low * self.factor, self.high * self.factor
        inside: BoolArray = (values >= low - _TOLERANCE) & (values <= high + _TOLERANCE)
        return inside

    def __str__(self) -> str:
        low = "" if np.isinf(self.low) else f"{self.low:.12g}"
        high = "" if np.isinf(self.high) else f"{self.high:.12g}"
        return f"{low}:{high}{self.unit}"


def parse_range(key: str, text: str) -> Range:
    """Parse a range such as ``-100:25pA``.

    Parameters
    ----------
    key
        What the range is of: ``current``, ``rows.current``, ``rows.voltage``, ``window``, ``rate``.
    text
        Two numbers, a colon between them and a unit after them; either number may be left out.

    Returns
    -------
    Range

    Raises
    ------
    InputError
        If it is no such range, has no or another unit, or runs backwards.
    """
    units, example = RANGES[key]
    # A minus sign copied from a page is the same sign.
    match = _RANGE.fullmatch(text.replace("−", "-"))
    place = f"selection {key}={text}"
    if match is None or (match[1] is None and match[2] is None):
        raise InputError(f"{place}: expected a range with its unit, such as {key}={example}")
    if match[3] not in units:
        found = f"unit {match[3]!r}" if match[3] else "no unit"
        raise InputError(
            f"{place}: found {found}; expected {' or '.join(units)}, such as {key}={example}"
        )
    low = -np.inf if match[1] is None else float(match[1])
    high = np.inf if match[2] is None else float(match[2])
    if low > high:
        raise InputError(
            f"{place}: the range runs backwards; expected the lower end first: "
            f"{key}={high:.12g}:{low:.12g}{match[3]}"
        )
    return Range(low, high, match[3], units[match[3]])


def parse_sweeps(text: str) -> tuple[int, ...]:
    """Parse numbers of sweeps such as ``0-4,7``.

    Parameters
    ----------
    text
        Whole numbers and ranges of them, separated by commas.

    Returns
    -------
    tuple of int
        The numbers, sorted, each once.

    Raises
    ------
    InputError
        If it is no such list or a range runs backwards.
    """
    compact = re.sub(r"\s", "", text).replace("–", "-")
    place = f"selection sweeps={text}"
    if not _SWEEPS.fullmatch(compact):
        raise InputError(f"{place}: expected numbers of sweeps, such as sweeps=0-4,7")
    numbers: set[int] = set()
    for part in compact.split(","):
        first, _, last = part.partition("-")
        low, high = int(first), int(last or first)
        if low > high:
            raise InputError(
                f"{place}: the range {part} runs backwards; expected the lower number first: "
                f"{high}-{low}"
            )
        if high > _MAX_SWEEP:
            raise InputError(f"{place}: found {high}; expected numbers up to {_MAX_SWEEP}")
        numbers.update(range(low, high + 1))
    return tuple(sorted(numbers))


def format_sweeps(numbers: Sequence[int]) -> str:
    """Return numbers of sweeps the way `parse_sweeps` reads them, such as ``0-4,7``."""
    parts: list[str] = []
    ordered = sorted(set(numbers))
    start = 0
    for index in range(1, len(ordered) + 1):
        if index == len(ordered) or ordered[index] != ordered[index - 1] + 1:
            first, last = ordered[start], ordered[index - 1]
            parts.append(f"{first}" if first == last else f"{first}-{last}")
            start = index
    return ",".join(parts)

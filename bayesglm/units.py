"""Units of the columns of a recording, and what they are converted to.

Inside the package current is in nA, voltage in mV and time in ms, so that resistance is in MΩ
and no formula needs a conversion factor. People are shown pA, MΩ, mV, ms and Hz.
"""

from __future__ import annotations

from typing import Final

from bayesglm.errors import InputError, nearest

#: For each quantity, the factor from a unit to the unit used inside the package.
UNIT_FACTORS: Final[dict[str, dict[str, float]]] = {
    "time": {"ms": 1.0, "s": 1e3},
    "current": {"pA": 1e-3, "nA": 1.0},
    "voltage": {"mV": 1.0, "V": 1e3},
    "sweep_start": {"ms": 1e-3, "s": 1.0},
}


def parse_header(name: str) -> tuple[str, float] | None:
    """Split a column's header into its quantity and the factor to the internal unit.

    Parameters
    ----------
    name
        A header such as ``current_pA``.

    Returns
    -------
    (quantity, factor) or None
        None where the header does not start with a quantity of `UNIT_FACTORS`.

    Raises
    ------
    InputError
        If the quantity is known but its unit is missing or unknown.
    """
    for quantity, factors in UNIT_FACTORS.items():
        if name == quantity or name.startswith(quantity + "_"):
            unit = name[len(quantity) + 1 :]
            wanted = " or ".join(f"{quantity}_{known}" for known in factors)
            if not unit:
                raise InputError(f"column {name!r} has no unit; expected {wanted}")
            if unit not in factors:
                hint = nearest(unit, factors)
                raise InputError(
                    f"column {name!r} has unknown unit {unit!r}; expected {wanted}{hint}"
                )
            return quantity, factors[unit]
    return None

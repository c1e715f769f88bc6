"""Lines of a plain recording, as a spreadsheet would save them."""

from __future__ import annotations

import numpy as np

HEADER = "time_ms,current_pA,voltage_mV"


def rows_of(n: int = 3000, step_ms: float = 1.0) -> list[str]:
    """Rows of a plain recording: a fluctuating current into a leaky membrane."""
    rng = np.random.default_rng(3)
    current = np.round(100 + 80 * rng.normal(size=n)).astype(int)
    voltage = np.empty(n)
    v = -65.0
    for i in range(n):
        v += (-(v + 65.0) + 0.08 * current[i]) / 15.0 + 0.1 * rng.normal()
        voltage[i] = v
    return [
        f"{i * step_ms:g},{c},{u:.3f}"
        for i, (c, u) in enumerate(zip(current, voltage, strict=True))
    ]

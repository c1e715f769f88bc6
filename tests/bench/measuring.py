"""What the benches share: a recording of any length, seconds of a call, and a printed table."""

from __future__ import annotations

import argparse
import time
from collections.abc import Callable, Sequence
from typing import Any

import numpy as np

from bayesglm.checks.simulation import Neuron, Noise, exponential_input
from bayesglm.kernels.basis import KernelSpec
from bayesglm.kernels.design import VoltageDesign
from bayesglm.recording.recording import Recording, Sweep
from bayesglm.recording.settings import Settings
from bayesglm.recording.settings_input import override

STEP_MS = 0.1
#: With offset and electrode 30 coefficients.
DESIGN = VoltageDesign(KernelSpec(150.0, 14), KernelSpec(300.0, 14))
#: The same durations by settings; without the other durations and windows that a fit tries too.
SETTINGS = override(
    Settings(),
    [
        "kernels.input.duration_ms=150",
        "kernels.after_spike.duration_ms=300",
        "model.duration_grid=false",
        "model.window_sensitivity=false",
    ],
)
_SWEEP = 100_000


def arguments() -> argparse.Namespace:
    """Options of every bench."""
    parser = argparse.ArgumentParser()
    parser.add_argument("--small", action="store_true", help="tiny sizes, to see that it runs")
    return parser.parse_args()


def recording(n: int, seed: int = 0) -> Recording:
    """`n` samples of 0.1 ms in sweeps of 10 s: noise current, some 3 spikes in 1,000 samples.

    Voltage is a simulated sweep's, repeated: making it anew would take longer than fitting it.
    """
    from bayesglm.checks.simulation import simulate

    rng = np.random.default_rng(seed)
    length = min(n // 4, _SWEEP)
    lags = STEP_MS * np.arange(1, 3001)
    neuron = Neuron(
        input=exponential_input(100.0, 20.0, lags[:1500]),
        after_spike=-6.0 * np.exp(-lags / 50) * (1 - lags / 300),
        noise=Noise((1.0,), (20.0,)),
    )
    count = max(n // length, 1)
    templates = []
    for _ in range(min(count, 10)):
        current = 0.1 + 0.1 * np.repeat(rng.normal(size=length // 50 + 1), 50)[:length]
        templates.append(simulate(neuron, current[None], STEP_MS, rng).sweeps[0])
    sweeps = []
    for number in range(count):
        one = templates[number % len(templates)]
        # Noise of its own, so that no two sweeps have the same current or voltage.
        current = one.current + 1e-4 * rng.normal(size=length)
        voltage = one.voltage + 0.1 * rng.normal(size=length)
        sweeps.append(Sweep(number, current, voltage, one.keep, one.spikes))
    return Recording("bench", STEP_MS, tuple(sweeps), spikes_from="simulation")


def seconds(call: Callable[[], Any], repeats: int = 1) -> tuple[float, Any]:
    """Shortest time of some calls, and what the last returned; arrays are waited for."""
    import jax

    shortest, result = float("inf"), None
    for _ in range(repeats):
        start = time.perf_counter()
        result = jax.block_until_ready(call())
        shortest = min(shortest, time.perf_counter() - start)
    return shortest, result


def table(title: str, heads: Sequence[str], rows: Sequence[Sequence[object]]) -> None:
    """Print a table; numbers to three digits."""
    written = [[f"{c:.3g}" if isinstance(c, float) else str(c) for c in row] for row in rows]
    widths = [max(map(len, column)) for column in zip(heads, *written, strict=True)]
    print(f"\n{title}")
    for row in (heads, *written):
        print("  " + "  ".join(c.ljust(w) for c, w in zip(row, widths, strict=True)).rstrip())

"""Coverage of bands and intervals on simulated recordings with correlated noise.

    python tests/studies/coverage_study.py --recordings 100 > docs/coverage.md

Truth, noise and rates are those of `SCENARIOS`; kernels are made of the fitted splines, so that
the basis can hold the truth. Each recording is fitted as a user would, with default settings but
for the durations. White-noise bands are read off the same fits. The table is committed with its
seed, version and date; CI runs a few recordings with bounds honest for so few.
"""

from __future__ import annotations

import argparse
import datetime
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from importlib.metadata import version

import numpy as np
from scipy.signal import lfilter
from scipy.stats import beta

from bayesglm.checks.simulation import Neuron, Noise, exponential_input, simulate
from bayesglm.fitting.run import fit
from bayesglm.inference.results import Band, CellFit
from bayesglm.kernels.basis import KernelSpec
from bayesglm.recording.recording import FloatArray, Recording
from bayesglm.recording.settings import Settings
from bayesglm.recording.settings_input import override

STEP_MS = 0.5
INPUT = KernelSpec(150.0, 14)
AFTER_SPIKE = KernelSpec(300.0, 14)
SETTINGS = override(
    Settings(), ["kernels.input.duration_ms=150", "kernels.after_spike.duration_ms=300"]
)


@dataclass(frozen=True)
class Scenario:
    """A cell, its noise and its current.

    Attributes
    ----------
    words
        What it is.
    resistance_MOhm, tau_ms
        Of the exponential input kernel.
    after_spike
        Amplitudes in mV, decays in ms of the exponentials of η.
    bump
        Height in mV, lag and width in ms of a bump of η.
    noise
        Noise of the voltage.
    mean_nA, sd_nA, current_ms
        The current: a first-order autoregressive one.
    """

    words: str
    resistance_MOhm: float
    tau_ms: float
    after_spike: tuple[tuple[float, float], ...]
    bump: tuple[float, float, float]
    noise: Noise
    mean_nA: float
    sd_nA: float
    current_ms: float


SCENARIOS = {
    "pyramidal": Scenario(
        "R 100 MΩ, τ 20 ms, η −6 mV (8 ms) −8 mV (60 ms)",
        100.0, 20.0, ((-6.0, 8.0), (-8.0, 60.0)), (0.0, 70.0, 25.0),
        Noise((1.0, 0.5), (20.0, 3.0), sweep_sd_mV=0.3), 0.10, 0.15, 10.0,
    ),
    "interneuron": Scenario(
        "R 160 MΩ, τ 11 ms, η −9 mV (14 ms), then +1.4 mV at 70 ms",
        160.0, 11.0, ((-9.0, 14.0),), (1.4, 70.0, 25.0),
        Noise((1.0, 0.5), (20.0, 3.0), sweep_sd_mV=0.3), 0.06, 0.10, 10.0,
    ),
    "slow noise": Scenario(
        "as pyramidal, noise of 2 mV and 50 ms",
        100.0, 20.0, ((-6.0, 8.0), (-8.0, 60.0)), (0.0, 70.0, 25.0),
        Noise((2.0, 0.5), (50.0, 3.0), sweep_sd_mV=0.3), 0.10, 0.15, 10.0,
    ),
}  # fmt: skip


@dataclass(frozen=True)
class Outcome:
    """What one recording gave: shares of lags covered, and whether features were."""

    spikes: int
    units: int
    input: float
    after_spike: float
    input_simultaneous: bool
    after_spike_simultaneous: bool
    input_white: float
    after_spike_white: float
    resistance: bool
    time_constant: bool
    offset: bool
    at_30ms: bool
    verdict: str


def kernel_in_basis(spec: KernelSpec, values: FloatArray) -> FloatArray:
    """The kernel nearest to `values` that the splines can make, at lags step, 2·step, …"""
    basis = spec.evaluate(spec.lags(STEP_MS))
    return basis @ np.linalg.lstsq(basis, values, rcond=None)[0]


def make_neuron(scenario: Scenario) -> Neuron:
    """The truth of a scenario."""
    lags = AFTER_SPIKE.lags(STEP_MS)
    height, centre, width = scenario.bump
    eta = height * np.exp(-0.5 * ((lags - centre) / width) ** 2)
    for size, decay in scenario.after_spike:
        eta = eta + size * np.exp(-lags / decay) * (1 - lags / AFTER_SPIKE.duration_ms)
    kappa = exponential_input(scenario.resistance_MOhm, scenario.tau_ms, INPUT.lags(STEP_MS))
    return Neuron(
        input=kernel_in_basis(INPUT, kappa),
        after_spike=kernel_in_basis(AFTER_SPIKE, eta),
        offset_mV=-65.0,
        electrode_MOhm=5.0,
        threshold_mV=-48.0,
        softness_mV=1.5,
        noise=scenario.noise,
    )


def make_recording(
    scenario: Scenario, neuron: Neuron, seconds: float, rng: np.random.Generator, sweeps: int = 4
) -> Recording:
    """A recording of a scenario, in sweeps of equal length."""
    n = round(seconds * 1e3 / STEP_MS / sweeps)
    keep = np.exp(-STEP_MS / scenario.current_ms)
    drive = rng.normal(size=(sweeps, n)) * np.sqrt(1 - keep**2)
    currents = scenario.mean_nA + scenario.sd_nA * lfilter([1.0], [1.0, -keep], drive, axis=1)
    return simulate(neuron, currents, STEP_MS, rng)


def _covered(lower: FloatArray, upper: FloatArray, truth: FloatArray) -> FloatArray:
    return (lower <= truth) & (truth <= upper)


def _truth_at(band: Band, spec: KernelSpec, kernel: FloatArray) -> FloatArray:
    return np.interp(band.lags_ms, spec.lags(STEP_MS), kernel)


def judge(one: CellFit, neuron: Neuron, scenario: Scenario) -> Outcome:
    """Hold a fit to its truth."""
    found: dict[str, float] = {}
    for name, spec, kernel in (
        ("input", INPUT, neuron.input),
        ("after_spike", AFTER_SPIKE, neuron.after_spike),
    ):
        band = one.kernel(name)
        truth = _truth_at(band, spec, kernel)
        # The last lag is zero by construction, in the truth and in every draw.
        known = np.isfinite(band.mean) & (band.lags_ms < spec.duration_ms)
        found[name] = float(_covered(band.lower, band.upper, truth)[known].mean())
        found[f"{name}_white"] = float(
            _covered(band.white_lower, band.white_upper, truth)[known].mean()
        )
        judged = known & (band.sd > 0.02 * np.nanmax(band.sd))
        found[f"{name}_simultaneous"] = float(
            _covered(band.lower_simultaneous, band.upper_simultaneous, truth)[judged].all()
        )

    def inside(feature: str, truth: float) -> bool:
        interval = one.feature(feature)
        return interval.lower <= truth <= interval.upper

    at_30 = float(np.interp(30.0, AFTER_SPIKE.lags(STEP_MS), neuron.after_spike))
    return Outcome(
        spikes=one.verdict.spikes,
        units=one.verdict.units,
        input=found["input"],
        after_spike=found["after_spike"],
        input_simultaneous=bool(found["input_simultaneous"]),
        after_spike_simultaneous=bool(found["after_spike_simultaneous"]),
        input_white=found["input_white"],
        after_spike_white=found["after_spike_white"],
        resistance=inside("input_resistance", float(neuron.input.sum() * STEP_MS)),
        time_constant=inside("membrane_time_constant", scenario.tau_ms),
        offset=inside("offset", neuron.offset_mV),
        at_30ms=inside("after_spike_at_30ms", at_30),
        verdict=one.verdict.verdict,
    )


def run(name: str, recordings: int, seconds: float, seed: int) -> Iterator[Outcome]:
    """Simulate and fit the recordings of a scenario."""
    scenario = SCENARIOS[name]
    neuron = make_neuron(scenario)
    for stream in np.random.default_rng([seed, *name.encode()]).spawn(recordings):
        yield judge(
            fit(make_recording(scenario, neuron, seconds, stream), SETTINGS), neuron, scenario
        )


ROWS = {
    "κ, lags covered by the 90 % band": "input",
    "η, lags covered (outside the spike window)": "after_spike",
    "κ, whole curve in the simultaneous band": "input_simultaneous",
    "η, whole curve in the simultaneous band": "after_spike_simultaneous",
    "input resistance": "resistance",
    "membrane time constant": "time_constant",
    "offset": "offset",
    "η at 30 ms": "at_30ms",
    "κ, lags covered by the white-noise band": "input_white",
    "η, lags covered by the white-noise band": "after_spike_white",
}


def with_error(values: Sequence[float]) -> str:
    """Mean with its 95 % Monte Carlo interval over recordings, in per cent.

    Events have a Clopper–Pearson interval; shares of lags, which are correlated inside a
    recording, a normal interval over recordings.
    """
    x = np.array(values, dtype=np.float64)
    n, mean = len(x), float(np.mean(values))
    if set(np.unique(x)) <= {0.0, 1.0}:
        k = int(x.sum())
        low = float(beta.ppf(0.025, k, n - k + 1)) if k else 0.0
        high = float(beta.ppf(0.975, k + 1, n - k)) if k < n else 1.0
    else:
        error = 1.96 * x.std(ddof=1) / np.sqrt(n)
        low, high = mean - error, min(1.0, mean + error)
    return f"{100 * mean:.0f} % ({100 * low:.0f}–{100 * high:.0f})"


def main() -> None:
    """Run the study and print its table."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--recordings", type=int, default=100)
    parser.add_argument("--seconds", type=float, default=40.0)
    parser.add_argument("--seed", type=int, default=2026)
    arguments = parser.parse_args()
    found = {
        name: list(run(name, arguments.recordings, arguments.seconds, arguments.seed))
        for name in SCENARIOS
    }
    print("# Coverage of 90 % bands and intervals on simulated recordings\n")
    print(
        f"{arguments.recordings} recordings of {arguments.seconds:g} s a scenario, seed "
        f"{arguments.seed}, bayesglm {version('bayesglm')}, jax {version('jax')}, "
        f"{datetime.date.today().isoformat()}; "
        "made by `tests/studies/coverage_study.py`. In brackets the 95 % Monte Carlo interval.\n"
    )
    print(
        "| scenario | truth | noise sd (time constant) | sweep sd | current mean, sd | "
        "spikes a recording | units |"
    )
    print("|---|---|---|---|---|---|---|")
    for name, outcomes in found.items():
        s = SCENARIOS[name]
        pairs = zip(s.noise.sd_mV, s.noise.time_constant_ms, strict=True)
        noise = ", ".join(f"{sd:g} mV ({tau:g} ms)" for sd, tau in pairs)
        spikes = np.mean([o.spikes for o in outcomes])
        units = np.mean([o.units for o in outcomes])
        print(
            f"| {name} | {s.words} | {noise} | {s.noise.sweep_sd_mV:g} mV | "
            f"{1e3 * s.mean_nA:g}, {1e3 * s.sd_nA:g} pA | {spikes:.0f} | {units:.0f} |"
        )
    print("\n| covered | " + " | ".join(found) + " |")
    print("|---|" + "---|" * len(found))
    for words, attribute in ROWS.items():
        cells = [
            with_error([float(getattr(o, attribute)) for o in outcomes])
            for outcomes in found.values()
        ]
        print(f"| {words} | " + " | ".join(cells) + " |")
    passed = [f"{sum(o.verdict == 'passed' for o in outcomes)}" for outcomes in found.values()]
    print("| verdicts `passed`, of " + f"{arguments.recordings} | " + " | ".join(passed) + " |")


if __name__ == "__main__":
    main()

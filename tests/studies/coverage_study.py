"""Coverage of bands and intervals on simulated recordings with correlated noise.

    python tests/studies/coverage_study.py --recordings 200 --workers 2

Four cells with 40 s each, the shot noise and those of 12 s with half as many recordings. Each
is fitted as a user would, with default settings but for the durations, and without the checks of
durations and spike window, which change no band. White-noise bands are read off the same fits.
The table is committed with its seed, version and date; CI runs a few recordings with bounds
honest for so few.
"""

from __future__ import annotations

from dataclasses import replace
from functools import partial

import numpy as np
from study_cells import (
    AFTER_SPIKE,
    INPUT,
    PLAIN_SETTINGS,
    SCENARIOS,
    STEP_MS,
    Scenario,
    make_neuron,
    make_recording,
)
from study_runs import (
    Found,
    Plan,
    column,
    plan_from_command_line,
    provenance,
    rows_of,
    run_all,
    stream,
    table,
)

from bayesglm.checks.simulation import Neuron
from bayesglm.fitting.run import fit
from bayesglm.inference.results import Band, CellFit
from bayesglm.kernels.basis import KernelSpec
from bayesglm.recording.recording import BoolArray, FloatArray

#: Lags where the sd is below this share of the largest are pinned by construction.
PINNED = 0.02

#: Scenarios, seconds a recording, and the share of the recordings asked for.
PARTS = (
    ("40 s a recording", ("pyramidal", "interneuron", "slow noise"), 40.0, 1.0),
    ("12 s a recording", ("pyramidal", "interneuron", "slow noise"), 12.0, 0.5),
    ("40 s a recording, skewed noise", ("shot noise",), 40.0, 0.5),
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
    "verdict `passed`": "passed",
}


def covered(lower: FloatArray, upper: FloatArray, truth: FloatArray) -> BoolArray:
    """Where the truth lies between."""
    return np.asarray((lower <= truth) & (truth <= upper), dtype=np.bool_)


def truth_at(band: Band, spec: KernelSpec, kernel: FloatArray) -> FloatArray:
    """A true kernel at the lags of a band; it is given at lags step, 2·step, …"""
    return np.interp(band.lags_ms, spec.lags(STEP_MS), kernel)


def judge(one: CellFit, neuron: Neuron, scenario: Scenario) -> Found:
    """Hold a fit to its truth: shares of lags covered, and whether features were."""
    found: Found = {
        "spikes": one.verdict.spikes,
        "units": one.verdict.units,
        "passed": one.verdict.verdict == "passed",
    }
    for name, spec, kernel in (
        ("input", INPUT, neuron.input),
        ("after_spike", AFTER_SPIKE, neuron.after_spike),
    ):
        band = one.kernel(name)
        truth = truth_at(band, spec, kernel)
        # The last lag is zero by construction, in the truth and in every draw.
        known = np.isfinite(band.mean) & (band.lags_ms < spec.duration_ms)
        found[name] = float(covered(band.lower, band.upper, truth)[known].mean())
        white = covered(band.white_lower, band.white_upper, truth)
        found[f"{name}_white"] = float(white[known].mean())
        judged = known & (band.sd > PINNED * np.nanmax(band.sd))
        whole = covered(band.lower_simultaneous, band.upper_simultaneous, truth)
        found[f"{name}_simultaneous"] = bool(whole[judged].all())
    at_30 = float(np.interp(30.0, AFTER_SPIKE.lags(STEP_MS), neuron.after_spike))
    for key, feature, true in (
        ("resistance", "input_resistance", float(neuron.input.sum() * STEP_MS)),
        ("time_constant", "membrane_time_constant", scenario.tau_ms),
        ("offset", "offset", scenario.offset_mV),
        ("at_30ms", "after_spike_at_30ms", at_30),
    ):
        interval = one.feature(feature)
        found[key] = bool(interval.lower <= true <= interval.upper)
    return found


def cover_one(name: str, seconds: float, seed: int, number: int) -> Found:
    """Simulate and fit one recording of a scenario."""
    scenario = SCENARIOS[name]
    neuron = make_neuron(scenario)
    recording = make_recording(scenario, neuron, seconds, stream(seed, name, number))
    return judge(fit(recording, PLAIN_SETTINGS), neuron, scenario)


def run(name: str, seconds: float, plan: Plan) -> list[Found]:
    """Simulate and fit the recordings of a scenario."""
    work = partial(cover_one, name, seconds, plan.seed)
    return run_all(f"coverage {name} {seconds:g} s", work, plan)


def main() -> None:
    """Run the study and print its tables."""
    plan = plan_from_command_line(__doc__, recordings=200)
    print("# Coverage of 90 % bands and intervals on simulated recordings\n")
    print(provenance(__file__, plan, "Default settings, durations given") + "\n")
    scenarios = {name: SCENARIOS[name] for _, names, _, _ in PARTS for name in names}
    head = ["scenario", "truth", "noise sd (time constant)", "sweep sd", "current mean, sd"]
    rows = [
        [
            name,
            s.words,
            s.noise_words,
            f"{s.noise.sweep_sd_mV:g} mV",
            f"{1e3 * s.mean_nA:g}, {1e3 * s.sd_nA:g} pA",
        ]
        for name, s in scenarios.items()
    ]
    print(table(head, rows))
    for words, names, seconds, share in PARTS:
        part = replace(plan, recordings=max(2, round(share * plan.recordings)))
        found = {name: run(name, seconds, part) for name in names}
        print(f"\n## {words}: {part.recordings} recordings a scenario\n")
        means = [
            [text, *(f"{column(one, key).mean():.0f}" for one in found.values())]
            for text, key in (("spikes a recording", "spikes"), ("units", "units"))
        ]
        print(table(["covered", *found], rows_of(ROWS, found) + means))


if __name__ == "__main__":
    main()

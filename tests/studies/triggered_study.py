"""Noise that triggers spikes: the bias it causes, shown and not mended.

    python tests/studies/triggered_study.py --recordings 40 --workers 2

Spikes come when the noise r is high, so the voltage after a spike is high for a reason that is
not the spike: least squares finds ``η(s) + C_r(s)/Δu`` with C_r the noise's autocovariance, a
first-order result for spikes that are rare, and κ is off too. Every recording is made twice
with one current, with an escape rate on u + r and on u alone.
"""

from __future__ import annotations

from dataclasses import replace
from functools import partial
from typing import Final

import numpy as np
from study_cells import (
    AFTER_SPIKE,
    SCENARIOS,
    SETTINGS,
    STEP_MS,
    make_currents,
    make_neuron,
)
from study_runs import (
    Found,
    Plan,
    column,
    mean_with_error,
    plan_from_command_line,
    provenance,
    run_all,
    stream,
    table,
)

from bayesglm.checks.simulation import simulate
from bayesglm.features import reported_rows, resistance_row
from bayesglm.inference.bands import kernel_rows
from bayesglm.inference.setup import make_digest, resolve_design, settle
from bayesglm.likelihood.calibration import calibrate
from bayesglm.models.priors import weight_prior

SCENARIO: Final = SCENARIOS["triggering noise"]
LAGS_MS: Final = (6.0, 10.0, 20.0, 30.0, 50.0, 100.0)
SECONDS: Final = 40.0


def trigger_one(seed: int, number: int) -> Found:
    """Least squares on one recording of each kind: errors of η and R_in, and their sds."""
    found: Found = {}
    for triggers in (False, True):
        rng = stream(seed, "triggered", number)
        neuron = replace(make_neuron(SCENARIO), noise_triggers=triggers)
        recording = simulate(neuron, make_currents(SCENARIO, SECONDS, rng), STEP_MS, rng)
        design = resolve_design((recording,), SETTINGS)
        settled = settle((recording,), design.input.duration_ms, SETTINGS)
        prior = weight_prior(design, SETTINGS.priors)
        digest, least = make_digest(settled, design, prior, SETTINGS)
        covariance = calibrate(digest, least, reported_rows(design, STEP_MS, LAGS_MS)).covariance
        rows = np.vstack(
            [kernel_rows(design, "after_spike", np.array(LAGS_MS)), resistance_row(design, STEP_MS)]
        )
        eta = np.interp(LAGS_MS, AFTER_SPIKE.lags(STEP_MS), neuron.after_spike)
        truth = np.append(eta, neuron.input.sum() * STEP_MS)
        whitened = rows @ least.basis
        key = "on u + r" if triggers else "on u"
        found[f"{key} error"] = (rows @ least.weights - truth).tolist()
        sd = np.sqrt(np.einsum("nk,kl,nl->n", whitened, covariance, whitened))
        found[f"{key} sd"] = sd.tolist()
        found[f"{key} spikes"] = recording.n_spikes
    return found


def run(plan: Plan) -> list[Found]:
    """All recordings of the study."""
    return run_all("triggered", partial(trigger_one, plan.seed), plan)


def main() -> None:
    """Run the study and print its table."""
    plan = plan_from_command_line(__doc__, recordings=40)
    found = run(plan)
    noise_sd, noise_ms = SCENARIO.noise.sd_mV[0], SCENARIO.noise.time_constant_ms[0]
    softness = make_neuron(SCENARIO).softness_mV
    words = (
        f"{plan.recordings} recordings of {SECONDS:g} s, the pyramidal cell with noise of "
        f"{noise_sd:g} mV and {noise_ms:g} ms, Δu = {softness:g} mV"
    )
    print("\n# Noise that triggers spikes\n")
    print(provenance(__file__, plan, words) + "\n")
    spikes = [column(found, f"{key} spikes").mean() for key in ("on u", "on u + r")]
    print(
        f"Mean error of least squares. {spikes[0]:.0f} spikes a recording with the escape rate on "
        f"u, {spikes[1]:.0f} on u + r.\n"
    )
    expected = [f"{noise_sd**2 / softness * np.exp(-lag / noise_ms):+.2f} mV" for lag in LAGS_MS]
    names = [*(f"η({lag:g} ms), mV" for lag in LAGS_MS), "R_in, MΩ"]
    rows = []
    for k, (name, first_order) in enumerate(zip(names, [*expected, ""], strict=True)):
        row = [name]
        for key in ("on u", "on u + r"):
            error, sd = column(found, f"{key} error")[:, k], column(found, f"{key} sd")[:, k]
            row += [mean_with_error(error), f"{sd.mean():.2f}"]
        rows.append([*row, first_order])
    head = ["", "rate on u: error", "sd said", "rate on u + r: error", "sd said", "C_r(s)/Δu"]
    print(table(head, rows))


if __name__ == "__main__":
    main()

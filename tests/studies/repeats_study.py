"""The same current given eight times to a mildly nonlinear cell: which clusters cover?

    python tests/studies/repeats_study.py --recordings 100 --workers 2

What a linear model misses of the cell comes back whenever the current does: repeats are not
independent. The truth is the least-squares kernel of the same cell under 4000 s of other
currents of the same class, without noise and without a prior; the cell itself has no linear
kernel. Blocks that are taken to be independent, sweeps that are, and the clusters of the
package (by stimulus and by sweep) are read off the same recordings.
"""

from __future__ import annotations

from dataclasses import replace
from functools import cache, partial
from typing import Final

import numpy as np
from scipy.stats import norm
from study_cells import PLAIN_SETTINGS, SCENARIOS, STEP_MS, make_currents, make_neuron
from study_runs import (
    Found,
    Plan,
    column,
    mean_with_error,
    plan_from_command_line,
    provenance,
    rows_of,
    run_all,
    stream,
    table,
)

from bayesglm.checks.simulation import Neuron, Noise, simulate
from bayesglm.features import reported_rows, resistance_row
from bayesglm.fitting.run import fit
from bayesglm.inference.bands import identified, kernel_lags, kernel_rows
from bayesglm.inference.results import CellFit
from bayesglm.inference.setup import resolve_design, settle
from bayesglm.kernels.design import VoltageDesign
from bayesglm.likelihood.calibration import calibrate
from bayesglm.likelihood.digest import VoltageDigest
from bayesglm.likelihood.least_squares import column_scale, least_squares
from bayesglm.likelihood.voltage import voltage_digest
from bayesglm.models.cell import voltage_evidence, weight_moments
from bayesglm.recording.recording import FloatArray, Recording

REPEATS: Final = 8
SWEEP_SECONDS: Final = 10.0
TRUTH_SECONDS: Final = 4000.0
SCENARIO: Final = SCENARIOS["pyramidal"]
RECTIFICATION_MV: Final = 30.0

#: Clusters that are compared: what a row is called, and the key of its shares.
CLUSTERS: Final = {
    "by stimulus and by sweep (as fitted)": "fitted",
    "blocks taken to be independent": "blocks",
    "sweeps taken to be independent": "sweeps",
}


def neuron() -> Neuron:
    """The pyramidal cell with outward rectification; its threshold lies where it still spikes."""
    linear = make_neuron(SCENARIO)
    return replace(linear, rectification_mV=RECTIFICATION_MV, threshold_mV=-52.0)


def repeated(rng: np.random.Generator) -> Recording:
    """One current of ten seconds, eight times."""
    current = make_currents(SCENARIO, SWEEP_SECONDS, rng, sweeps=1)
    return simulate(neuron(), np.repeat(current, REPEATS, axis=0), STEP_MS, rng)


@cache
def true_weights(design: VoltageDesign, seconds: float, seed: int) -> FloatArray:
    """Least-squares weights under many other currents, without noise and prior, shape (P,)."""
    rng = stream(seed, "truth of repeats", 0)
    sweeps = round(seconds / SWEEP_SECONDS)
    currents = make_currents(SCENARIO, seconds, rng, sweeps)
    quiet = replace(neuron(), noise=Noise((), ()))
    recording = settle(
        (simulate(quiet, currents, STEP_MS, rng),), design.input.duration_ms, PLAIN_SETTINGS
    )
    digest = voltage_digest(recording, design, None)
    return least_squares(digest, column_scale(digest)).weights


def gaussian(one: CellFit, digest: VoltageDigest) -> tuple[FloatArray, FloatArray]:
    """Mean and covariance of the weights with other units, at the posterior's kernel sds."""
    rows = reported_rows(one.design, STEP_MS, one.settings.kernels.after_spike.report_at_ms)
    calibration = calibrate(digest, one.calibration.fit, rows)
    evidence = voltage_evidence(
        one.calibration.fit.weights,
        calibration.precision,
        one.calibration.fit.rank,
        calibration.freedom,
        one.prior,
    )
    sd = np.median(one.chains.draws["sd"], axis=(0, 1))
    return weight_moments(evidence, one.prior, sd)


def shares(
    design: VoltageDesign, mean: FloatArray, covariance: FloatArray, truth: FloatArray
) -> dict[str, float | bool]:
    """Shares of lags, and the resistance, covered by normal 90 % intervals."""
    found: dict[str, float | bool] = {}
    reach = float(norm.ppf(0.95))
    for kernel in ("input", "after_spike"):
        lags = kernel_lags(design, kernel)
        known = identified(design, kernel, lags) & (lags < design.kernels[kernel].duration_ms)
        rows = kernel_rows(design, kernel, lags)[known]
        sd = np.sqrt(np.einsum("lp,pq,lq->l", rows, covariance, rows))
        found[kernel] = float(np.mean(np.abs(rows @ (mean - truth)) <= reach * sd))
    row = resistance_row(design, STEP_MS)
    found["resistance"] = bool(abs(row @ (mean - truth)) <= reach * np.sqrt(row @ covariance @ row))
    return found


def fitted_shares(one: CellFit, truth: FloatArray) -> dict[str, float | bool]:
    """The same from the bands of the fit."""
    found: dict[str, float | bool] = {}
    for kernel in ("input", "after_spike"):
        band = one.kernel(kernel)
        true = kernel_rows(one.design, kernel, band.lags_ms) @ truth
        known = np.isfinite(band.mean) & (band.lags_ms < one.design.kernels[kernel].duration_ms)
        found[kernel] = float(np.mean(((band.lower <= true) & (true <= band.upper))[known]))
    resistance = one.feature("input_resistance")
    true_resistance = float(resistance_row(one.design, STEP_MS) @ truth)
    found["resistance"] = bool(resistance.lower <= true_resistance <= resistance.upper)
    return found


def repeat_one(seed: int, truth_seconds: float, number: int) -> Found:
    """Simulate and fit one recording, and hold each kind of cluster to the truth."""
    recording = repeated(stream(seed, "repeats", number))
    one = fit(recording, PLAIN_SETTINGS)
    truth = true_weights(one.design, truth_seconds, seed)
    digest = one.digest
    # A stimulus of its own for every unit: what the package does where no current is repeated.
    blocks = replace(digest, stimulus=np.arange(digest.n_units))
    sweeps = blocks.merge(digest.n_units)
    ways = {
        "fitted": fitted_shares(one, truth),
        "blocks": shares(one.design, *gaussian(one, blocks), truth),
        "sweeps": shares(one.design, *gaussian(one, sweeps), truth),
    }
    found: Found = {f"{way} {key}": x for way, row in ways.items() for key, x in row.items()}
    residual = float(np.sqrt(one.calibration.fit.residual_variance))
    return found | {"spikes": recording.n_spikes, "units": digest.n_units, "residual": residual}


def missed_mV(seed: int, seconds: float) -> float:
    """Sd of what the best linear model misses of the noise-free cell, mV."""
    design = resolve_design((repeated(stream(seed, "repeats", 0)),), PLAIN_SETTINGS)
    weights = true_weights(design, seconds, seed)
    rng = stream(seed, "missed", 0)
    quiet = replace(neuron(), noise=Noise((), ()))
    currents = make_currents(SCENARIO, 100.0, rng, sweeps=10)
    recording = settle(
        (simulate(quiet, currents, STEP_MS, rng),), design.input.duration_ms, PLAIN_SETTINGS
    )
    gram = voltage_digest(recording, design, None).gram.sum(axis=0)
    miss = np.append(-weights, 1.0)
    return float(np.sqrt(miss @ gram @ miss / gram[0, 0]))


def run(plan: Plan, truth_seconds: float = TRUTH_SECONDS) -> list[Found]:
    """All recordings of the study."""
    work = partial(repeat_one, plan.seed, truth_seconds)
    return run_all(f"repeats truth {truth_seconds:g} s", work, plan)


def main() -> None:
    """Run the study and print its table."""
    plan = plan_from_command_line(__doc__, recordings=100)
    found = run(plan)
    words = (
        f"{plan.recordings} recordings of {REPEATS} × {SWEEP_SECONDS:g} s, the pyramidal cell "
        f"with outward rectification of {RECTIFICATION_MV:g} mV"
    )
    print("\n# The same current eight times\n")
    print(provenance(__file__, plan, words) + "\n")
    print(
        f"The truth is the least-squares kernel under {TRUTH_SECONDS:g} s of other currents. "
        f"Without noise it misses the cell by {missed_mV(plan.seed, TRUTH_SECONDS):.2f} mV (sd); "
        f"the residual of a recording has {mean_with_error(column(found, 'residual'))} mV, and "
        f"there are {column(found, 'spikes').mean():.0f} spikes and "
        f"{column(found, 'units').mean():.0f} units.\n"
    )
    keys = {"κ, lags covered": "input", "η, lags covered": "after_spike", "R_in": "resistance"}
    rows = [
        [text, *(rows_of({text: f"{way} {key}"}, {"": found})[0][1] for key in keys.values())]
        for text, way in CLUSTERS.items()
    ]
    print(table(["clusters", *keys], rows))


if __name__ == "__main__":
    main()

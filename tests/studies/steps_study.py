"""A step protocol on a nonlinear cell: does the protocol's hull hold each range's own kernel?

    python tests/studies/steps_study.py --recordings 60 --workers 2

Seventeen sweeps with steps from −100 to 300 pA, as in the real recording of `tests/data`, on a
cell that rectifies. A linear kernel belongs to cell and protocol, so each third of the sweeps,
cut by drive as the split cuts them, has a kernel of its own. The truth of a third is the
least-squares kernel of a hundred noise-free repeats of its sweeps, without a prior, and with the
variance of sweeps' offsets that the recording's own fit has. Judged is whether
`protocol_lower/upper` hold it; beside them stand the main band and the third's own.
"""

from __future__ import annotations

from dataclasses import replace
from functools import cache, partial
from typing import Final

import numpy as np
from study_cells import (
    PLAIN_SETTINGS,
    SCENARIOS,
    STEP_LEVELS_NA,
    STEP_MS,
    make_neuron,
    step_currents,
)
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
from bayesglm.fitting.run import fit
from bayesglm.inference.bands import kernel_rows
from bayesglm.inference.results import CellFit
from bayesglm.kernels.design import VoltageDesign
from bayesglm.likelihood.digest import VoltageDigest
from bayesglm.likelihood.least_squares import column_scale, least_squares
from bayesglm.likelihood.voltage import voltage_digest
from bayesglm.recording.recording import FloatArray, IntArray, Recording

RECTIFICATION_MV: Final = 40.0
TRUTH_REPEATS: Final = 100
#: Half-width of a normal 90 % interval in sds.
REACH: Final = 1.645
THIRDS: Final = ("low", "middle", "high")
KERNELS: Final = {"input": "κ", "after_spike": "η"}
#: Lags at which kernels are printed, ms.
SHOWN_MS: Final = {"input": (5.0, 20.0, 50.0), "after_spike": (10.0, 30.0, 100.0)}


def neuron() -> Neuron:
    """The pyramidal cell with outward rectification, spiking from about 100 pA on."""
    return replace(
        make_neuron(SCENARIOS["pyramidal"]), rectification_mV=RECTIFICATION_MV, threshold_mV=-55.0
    )


def protocol(rng: np.random.Generator) -> Recording:
    """One recording of the protocol."""
    return simulate(neuron(), step_currents(STEP_LEVELS_NA), STEP_MS, rng)


@cache
def long_digest(design: VoltageDesign, repeats: int, seed: int) -> VoltageDigest:
    """Noise-free repeats of every sweep, a unit each; sweep k of each repeat has level k."""
    rng = stream(seed, "truth of steps", 0)
    currents = np.tile(step_currents(STEP_LEVELS_NA), (repeats, 1))
    quiet = replace(neuron(), noise=Noise((), ()))
    return voltage_digest((simulate(quiet, currents, STEP_MS, rng),), design, None)


def true_kernel(one: CellFit, kernel: str, sweeps: IntArray, repeats: int, seed: int) -> FloatArray:
    """Least-squares kernel of some of the protocol's sweeps at the lags of the band."""
    whole = long_digest(one.design, repeats, seed)
    level = np.arange(whole.n_units) % len(STEP_LEVELS_NA)
    part = whole.take(np.flatnonzero(np.isin(level, sweeps)))
    weights = least_squares(part, column_scale(part), one.calibration.fit.sweep_ratios).weights
    return kernel_rows(one.design, kernel, one.kernel(kernel).lags_ms) @ weights


def step_one(seed: int, repeats: int, number: int) -> Found:
    """Simulate and fit one recording, and hold hull, band and ranges to each third's kernel."""
    one = fit(protocol(stream(seed, "steps", number)), PLAIN_SETTINGS)
    found: Found = {"spikes": one.verdict.spikes}
    reasons = {reason.check: reason.verdict for reason in one.verdict.reasons}
    for kernel in KERNELS:
        found[f"{kernel} told"] = reasons.get(f"drive_split_{kernel}") == "caution"
        band = one.kernel(kernel)
        known = np.isfinite(band.mean) & (band.lags_ms < one.design.kernels[kernel].duration_ms)
        ranges = one.splits[kernel].ranges
        found[f"{kernel} ranges"] = len(ranges)
        if not ranges:
            continue
        for third, part in zip(THIRDS, ranges, strict=False):
            truth = true_kernel(one, kernel, part.units, repeats, seed)
            key = f"{kernel} {third}"
            hull = (band.protocol_lower <= truth) & (truth <= band.protocol_upper)
            main = (band.lower <= truth) & (truth <= band.upper)
            mean, sd = part.curve
            found[f"{key} hull"] = float(hull[known].mean())
            found[f"{key} band"] = float(main[known].mean())
            found[f"{key} own"] = float(np.mean((np.abs(mean - truth) <= REACH * sd)[known]))
            at = SHOWN_MS[kernel]
            found[f"{key} truth"] = np.interp(at, band.lags_ms, truth).tolist()
            found[f"{key} mean"] = np.interp(at, band.lags_ms, mean).tolist()
    return found


def run(plan: Plan, repeats: int = TRUTH_REPEATS) -> list[Found]:
    """All recordings of the study."""
    work = partial(step_one, plan.seed, repeats)
    return run_all(f"steps truth {repeats} repeats", work, plan)


def kernels_table(found: list[Found]) -> str:
    """Truth and estimates of the thirds at a few lags."""
    rows = []
    for kernel, sign in KERNELS.items():
        for k, lag in enumerate(SHOWN_MS[kernel]):
            row = [f"{sign}({lag:g} ms)"]
            for third in THIRDS:
                key = f"{kernel} {third}"
                split = [one for one in found if f"{key} truth" in one]
                truth = column(split, f"{key} truth")[:, k].mean()
                row.append(f"{truth:.2f}; {mean_with_error(column(split, f'{key} mean')[:, k])}")
            rows.append(row)
    return table(["kernel (MΩ/ms, mV)", *(f"{third}: truth; found" for third in THIRDS)], rows)


def main() -> None:
    """Run the study and print its tables."""
    plan = plan_from_command_line(__doc__, recordings=60)
    found = run(plan)
    words = (
        f"{plan.recordings} recordings of 17 × 2.5 s, the pyramidal cell with outward "
        f"rectification of {RECTIFICATION_MV:g} mV"
    )
    print("\n# A step protocol on a nonlinear cell\n")
    print(provenance(__file__, plan, words) + "\n")
    print(f"There are {column(found, 'spikes').mean():.0f} spikes a recording.\n")
    rows = []
    for kernel, sign in KERNELS.items():
        split = [one for one in found if one[f"{kernel} ranges"] == len(THIRDS)]
        for third in THIRDS:
            keys = [f"{kernel} {third} {way}" for way in ("hull", "band", "own")]
            shares = [rows_of({"": key}, {"": split})[0][1] for key in keys]
            rows.append([f"{sign} of the {third} third", *shares])
    head = [
        "lags covered",
        "protocol's hull",
        "main band alone",
        "the third's own band",
    ]
    print(table(head, rows) + "\n")
    print(kernels_table(found) + "\n")
    told = {f"{sign} is told to depend on the drive": f"{k} told" for k, sign in KERNELS.items()}
    print(table(["verdict `caution`", "share"], rows_of(told, {"": found})))


if __name__ == "__main__":
    main()

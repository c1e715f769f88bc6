"""White residuals: is the calibrated posterior as wide as the exact conjugate one?

    python tests/studies/white_study.py --recordings 50 --workers 2

Where residuals are white, nothing needs calibration, and the posterior of the weights given the
kernels' sds σ_k and the noise variance σ² is known: covariance ``(H/σ² + Q(σ_k))⁻¹``. It is
computed here with NumPy from the digest's Gram matrix, with the true σ² and the posterior medians
of the σ_k. Two sds are held to it at every lag: that of `Band`, which also holds the uncertainty of
φ and of the σ_k, and that of the weights given the same σ_k and φ = 1, which isolates V. Sweeps
have no offsets, in the truth and in the fit.
"""

from __future__ import annotations

from functools import partial
from typing import Final

import numpy as np
from study_cells import PLAIN_SETTINGS, SCENARIOS, STEP_MS, make_neuron, make_recording
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

from bayesglm.fitting.run import fit
from bayesglm.inference.bands import kernel_rows
from bayesglm.inference.results import CellFit
from bayesglm.models.cell import voltage_evidence, weight_moments
from bayesglm.recording.recording import FloatArray
from bayesglm.recording.settings_input import override

UNITS: Final = 60
WITHOUT_OFFSETS: Final = override(
    PLAIN_SETTINGS, ["model.sweep_offsets=false", "model.units=block", "model.block_ms=1000"]
)
SCENARIO: Final = SCENARIOS["white noise"]
KERNELS: Final = {"input": "κ", "after_spike": "η"}
#: Lags that are printed, ms; the smallest and largest ratio are taken over all lags.
SHOWN_MS: Final = {
    "input": (0.5, 1.0, 2.0, 5.0, 10.0, 20.0, 50.0, 100.0, 140.0),
    "after_spike": (5.5, 10.0, 20.0, 30.0, 50.0, 100.0, 200.0, 280.0),
}
WAYS: Final = {"Band.sd": "band", "weights given σ_k, φ = 1": "given"}


def exact_covariance(one: CellFit, sd: FloatArray) -> FloatArray:
    """Conjugate covariance of the weights with the true noise variance, shape (P, P)."""
    gram = one.digest.gram.sum(axis=0)[:-1, :-1]
    # A row is one sample here, so that its noise has the variance of the samples.
    assert one.design.samples_per_row(STEP_MS) == 1
    variance = SCENARIO.noise.sd_mV[0] ** 2
    covariance: FloatArray = np.linalg.inv(gram / variance + one.prior.precision(sd))
    return covariance


def along(covariance: FloatArray, rows: FloatArray) -> FloatArray:
    """Sds of a kernel whose lags are rows, shape (lags,)."""
    return np.sqrt(np.einsum("lp,pq,lq->l", rows, covariance, rows))


def calibrated_covariance(one: CellFit, sd: FloatArray) -> FloatArray:
    """Covariance of the weights under the calibrated V, at φ = 1, shape (P, P)."""
    calibration = one.calibration
    least = calibration.fit
    evidence = voltage_evidence(
        least.weights, calibration.precision, least.rank, calibration.freedom, one.prior
    )
    return weight_moments(evidence, one.prior, sd)[1]


def white_one(seed: int, number: int) -> Found:
    """Ratio of calibrated to exact sd at every lag of both kernels, of one recording."""
    rng = stream(seed, "white", number)
    recording = make_recording(SCENARIO, make_neuron(SCENARIO), UNITS, rng)
    one = fit(recording, WITHOUT_OFFSETS)
    sd = np.median(one.chains.draws["sd"], axis=(0, 1))
    exact, given = exact_covariance(one, sd), calibrated_covariance(one, sd)
    found: Found = {"units": one.verdict.units}
    for kernel in KERNELS:
        band = one.kernel(kernel)
        rows = kernel_rows(one.design, kernel, band.lags_ms)

        known = np.isfinite(band.sd) & (band.lags_ms < one.design.kernels[kernel].duration_ms)
        found[f"{kernel} lags"] = band.lags_ms[known].tolist()
        wanted = along(exact, rows[known])
        found[f"{kernel} band"] = (band.sd[known] / wanted).tolist()
        found[f"{kernel} given"] = (along(given, rows[known]) / wanted).tolist()
        found[f"{kernel} D"] = one.calibration.inflation[kernel]
    return found


def run(plan: Plan) -> list[Found]:
    """All recordings of the study."""
    return run_all("white", partial(white_one, plan.seed), plan)


def ratios(found: list[Found], kernel: str, way: str) -> FloatArray:
    """Ratios of sds, shape (recordings, lags)."""
    return column(found, f"{kernel} {way}")


def main() -> None:
    """Run the study and print its table."""
    plan = plan_from_command_line(__doc__, recordings=50)
    found = run(plan)
    words = f"{plan.recordings} recordings of {UNITS} units of 1 s, the pyramidal cell"
    print("\n# White residuals: calibrated over exact conjugate sd\n")
    print(provenance(__file__, plan, words) + "\n")
    print(
        "The exact sd is that of (H/σ² + Q)⁻¹ with the true noise variance σ² = 1 mV² and the "
        "prior precision Q at the posterior medians of the kernels' sds.\n"
    )
    rows = []
    for kernel, sign in KERNELS.items():
        lags = column(found, f"{kernel} lags")[0]
        for lag in SHOWN_MS[kernel]:
            at = int(np.argmin(np.abs(lags - lag)))
            cells = [mean_with_error(ratios(found, kernel, way)[:, at], 3) for way in WAYS.values()]
            rows.append([f"{sign}({lags[at]:g} ms)", *cells])
        means = [ratios(found, kernel, way).mean(axis=0) for way in WAYS.values()]
        rows.append([f"{sign}, all lags", *(f"{m.min():.3f} to {m.max():.3f}" for m in means)])
        inflation = mean_with_error(column(found, f"{kernel} D"), 3)
        rows.append([f"D of {sign}", inflation, inflation])
    print(table(["mean ratio over recordings", *WAYS], rows))


if __name__ == "__main__":
    main()

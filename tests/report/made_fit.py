"""Fits of small simulated recordings, made step by step, for the tests of the report."""

from __future__ import annotations

from dataclasses import replace

import jax
import numpy as np
from numpy.typing import NDArray

from bayesglm.checks.simulation import Neuron, Noise, exponential_input, simulate
from bayesglm.checks.splits import estimate_part, range_label
from bayesglm.features import feature_draws, reported_rows
from bayesglm.inference.bands import WeightSummary, kernel_rows, make_band
from bayesglm.inference.results import Band, CellFit, DriveRange, Feature, Split, Verdict
from bayesglm.inference.sample import nuts
from bayesglm.kernels.basis import KernelSpec
from bayesglm.kernels.design import VoltageDesign, default_row_ms
from bayesglm.likelihood.calibration import Calibration, calibrate, least_squares
from bayesglm.likelihood.digest import VoltageDigest
from bayesglm.likelihood.voltage import voltage_digest
from bayesglm.models.cell import draw_weights, voltage_evidence, voltage_model
from bayesglm.models.priors import WeightPrior, weight_prior
from bayesglm.recording.recording import Recording
from bayesglm.recording.settings import SamplingSection, Settings
from bayesglm.verdict import Reason

FloatArray = NDArray[np.float64]

STEP_MS = 0.5
SAMPLING = SamplingSection(chains=2, warmup=50, draws=100)
OPEN_REASON = Reason(
    "drive_split",
    "ranges of drive differ 3.1 times their error",
    "at most 2 times",
    "caution",
    "the after-spike kernel depends on the drive: report it by range",
    "bayesglm fit cell.csv --select 'current=-100:125pA' --out cell_low",
)


def made_neuron(spikes: bool = True) -> Neuron:
    """Return the truth: 100 MΩ, 20 ms, η(30 ms) about −4 mV."""
    lags = STEP_MS * np.arange(1, round(300 / STEP_MS) + 1)
    return Neuron(
        input=exponential_input(100.0, 20.0, lags[lags <= 150]),
        after_spike=-7.0 * np.exp(-lags / 60.0) * (1 - lags / 300.0),
        threshold_mV=-50.0 if spikes else 100.0,
        noise=Noise((1.0, 0.4), (20.0, 3.0), sweep_sd_mV=0.2),
    )


def step_recording(spikes: bool = True, seed: int = 1, name: str = "steps") -> Recording:
    """Simulate a family of current steps, 2 s a sweep, from −100 to 300 pA."""
    levels = np.arange(-100, 301, 50) * 1e-3
    currents = np.zeros((len(levels), round(2000 / STEP_MS)))
    currents[:, round(200 / STEP_MS) : round(1200 / STEP_MS)] = levels[:, None]
    return simulate(made_neuron(spikes), currents, STEP_MS, np.random.default_rng(seed), name)


def make_fit(
    recording: Recording | None = None,
    cell: str = "cell-1",
    cell_class: str = "",
    spikes: bool = True,
    design: VoltageDesign | None = None,
) -> CellFit:
    """Fit a recording, by default simulated steps, one unit a sweep.

    Parameters
    ----------
    recording
        The recording, its spikes found.
    cell, cell_class
        Names.
    spikes
        Whether there is an after-spike kernel.
    design
        The linear model; by default 150 ms of κ and 300 ms of η.
    """
    recording = recording or step_recording(spikes)
    settings = Settings(sampling=SAMPLING)
    design = design or VoltageDesign(
        KernelSpec(150.0),
        KernelSpec(300.0) if spikes else None,
        row_ms=default_row_ms(recording.step_ms),
    )
    digest = voltage_digest([recording], design, None)
    prior = weight_prior(design, settings.priors)
    estimate = least_squares(digest, prior.root, None)
    rows = reported_rows(design, recording.step_ms, (30.0,))
    calibration = calibrate(digest, estimate, rows)
    evidence = voltage_evidence(
        estimate.weights, calibration.precision, estimate.rank, calibration.freedom, prior
    )
    chains = nuts(voltage_model, evidence, SAMPLING, jax.random.key(0))
    sd = chains.draws["sd"].reshape(-1, len(prior.names))
    x = draw_weights(evidence, sd, chains.draws["phi"].reshape(-1), jax.random.key(1))
    draws = prior.mean + x @ prior.root.T
    bands = {
        name: make_band(
            name,
            design,
            draws,
            WeightSummary(estimate.weights, estimate.white_covariance),
            prior.root @ prior.root.T,
            0.9,
        )
        for name in (*design.kernels, "electrode")
    }
    splits = {
        name: _split(name, digest, calibration, prior, sd.mean(axis=0), bands[name], recording)
        for name in design.kernels
    }
    bands = {name: _with_protocol(band, splits.get(name)) for name, band in bands.items()}
    return CellFit(
        cell=cell,
        condition="",
        cell_class=cell_class,
        animal="",
        settings=settings,
        design=design,
        recordings=(replace(recording, sha256="0123456789abcdef" * 4),),
        digest=digest,
        calibration=calibration,
        prior=prior,
        chains=chains,
        weights=draws.reshape(SAMPLING.chains, SAMPLING.draws, -1),
        kernels=bands,
        features=_features(draws, design, recording.step_ms, splits),
        splits=splits,
        verdict=_verdict(digest, calibration, recording),
        warnings=() if spikes else ("no spikes: the after-spike kernel is left out",),
    )


def with_reasons(fit: CellFit, *reasons: Reason) -> CellFit:
    """Return the fit with other reasons for its verdict."""
    order = {"passed": 0, "caution": 1, "failed": 2}
    worst = max((reason.verdict for reason in reasons), key=order.__getitem__)
    return replace(fit, verdict=replace(fit.verdict, verdict=worst, reasons=reasons))


def _split(
    name: str,
    digest: VoltageDigest,
    calibration: Calibration,
    prior: WeightPrior,
    sd: FloatArray,
    band: Band,
    recording: Recording,
) -> Split:
    excited = np.flatnonzero(digest.spikes > 0) if name == "after_spike" else np.arange(9)
    rows = kernel_rows(digest.design, name, band.lags_ms)
    blank = np.where(np.isfinite(band.mean), 0.0, np.nan)
    ranges = []
    for units in np.array_split(excited[np.argsort(digest.drive_nA[excited])], 3):
        part = estimate_part(digest, units, calibration, prior, sd)
        draws = part.sample(100, np.random.default_rng(0))
        found = feature_draws(draws, digest.design, recording.step_ms, (30.0,))
        curves = draws @ rows.T + blank
        ranges.append(
            DriveRange(
                range_label(digest, units),
                units,
                curves.mean(axis=0),
                curves.std(axis=0),
                {k: (float(v.draws.mean()), float(v.draws.std())) for k, v in found.items()},
            )
        )
    return Split(name, tuple(ranges), 3.1)


def _with_protocol(band: Band, split: Split | None) -> Band:
    if split is None:
        return band
    curves = np.array([part.curve[0] for part in split.ranges])
    return replace(
        band,
        between_range_sd=curves.std(axis=0, ddof=1),
        protocol_lower=np.minimum(band.lower, curves.min(axis=0)),
        protocol_upper=np.maximum(band.upper, curves.max(axis=0)),
    )


def _features(
    draws: FloatArray, design: VoltageDesign, step_ms: float, splits: dict[str, Split]
) -> tuple[Feature, ...]:
    features = []
    for name, found in feature_draws(draws, design, step_ms, (30.0,)).items():
        lower, upper = np.quantile(found.draws, (0.05, 0.95))
        parts = [r.features[name][0] for r in splits[found.kernel].ranges] if found.kernel else []
        blank = found.is_probability or not parts
        features.append(
            Feature(
                name=name,
                unit=found.unit,
                mean=float(found.draws.mean()),
                sd=np.nan if found.is_probability else float(found.draws.std()),
                lower=np.nan if found.is_probability else float(lower),
                upper=np.nan if found.is_probability else float(upper),
                protocol_lower=np.nan if blank else min(lower, *parts),
                protocol_upper=np.nan if blank else max(upper, *parts),
                between_range_sd=np.nan if blank else float(np.std(parts, ddof=1)),
                level=0.9,
                ess_bulk=np.nan if found.is_probability else 900.0,
                mcse_mean=0.01,
            )
        )
    return tuple(features)


def _verdict(digest: VoltageDigest, calibration: Calibration, recording: Recording) -> Verdict:
    return Verdict(
        verdict="caution",
        reasons=(
            Reason("rhat", "1.003", "below 1.01"),
            Reason("effective_draws", "812", "above 400"),
            OPEN_REASON,
        ),
        observe="voltage",
        units=digest.n_units,
        calibration_ratio=dict.fromkeys(calibration.inflation, 1.4),
        route="exact",
        rhat_max=1.003,
        ess_min=812.0,
        divergences=0,
        spikes=recording.n_spikes,
        bins=sum(sweep.n_samples for sweep in recording.sweeps),
        seconds={"digest": 0.31, "sample": 2.4},
    )

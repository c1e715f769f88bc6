"""The verdict on a fit: every check, gathered."""

from __future__ import annotations

import shlex
from collections.abc import Sequence

import numpy as np

from bayesglm.checks.residuals import linearity
from bayesglm.fitting.posterior import Posterior
from bayesglm.fitting.summary import Summary
from bayesglm.inference import diagnose
from bayesglm.inference.results import Split, Verdict
from bayesglm.likelihood.calibration import Calibration, correlation_time_ms
from bayesglm.likelihood.digest import VoltageDigest
from bayesglm.recording.linearity import linear_range
from bayesglm.recording.recording import Recording
from bayesglm.recording.settings import Settings
from bayesglm.recording.steps import measure_steps
from bayesglm.recording.wording import fit_command, fixed
from bayesglm.verdict import Reason, worst


def judge(
    posterior: Posterior,
    digest: VoltageDigest,
    calibration: Calibration,
    summary: Summary,
    recordings: Sequence[Recording],
    settings: Settings,
) -> Verdict:
    """Gather every check of a fit into its verdict.

    Returns
    -------
    Verdict
        Without the seconds, which are not over yet.
    """
    commands = _commands(recordings, settings)
    sampler = diagnose.summarise_sampler(posterior.chains, posterior.weights)
    correlation_ms = correlation_time_ms(digest, calibration.fit)
    bent = linearity(recordings, posterior.design, posterior.flat.mean(axis=0), correlation_ms)
    known = {name: np.isfinite(summary.kernels[name].mean) for name in posterior.design.kernels}
    reasons = [
        *diagnose.sampler_reasons(sampler, commands),
        *diagnose.unit_reasons(
            digest.n_units, calibration.freedom, calibration.leverage, digest.labels, commands
        ),
        *diagnose.ratio_reasons(calibration.ratio, commands),
        *diagnose.half_reasons(summary.halves, commands),
        *(_drive_reason(split, commands) for split in summary.splits.values()),
        diagnose.linearity_reason(bent.share, commands),
        *diagnose.prior_reasons(
            {name: summary.kernels[name].prior_share[at] for name, at in known.items()}, commands
        ),
    ]
    if settings.model.noise == "white":
        reasons.append(_white_reason(commands))
    return Verdict(
        verdict=worst(reason.verdict for reason in reasons),
        reasons=tuple(reasons),
        observe=settings.model.observe,
        units=digest.n_units,
        calibration_ratio=calibration.ratio,
        route="least squares, calibrated" if settings.model.noise == "calibrated" else "white",
        rhat_max=sampler.rhat_max,
        ess_min=sampler.ess_min,
        divergences=sampler.divergences,
        spikes=int(digest.spikes.sum()),
        bins=sum(sweep.n_samples for recording in recordings for sweep in recording.sweeps),
    )


def _drive_reason(split: Split, commands: diagnose.Commands) -> Reason:
    if not split.ranges:
        return diagnose.drive_reason(split.kernel, None, "", commands)
    shown = "input_resistance" if split.kernel == "input" else _shown_after_spike(split)
    unit = "MΩ" if split.kernel == "input" else "mV"
    digits = 0 if split.kernel == "input" else 1
    told = ", ".join(
        f"{fixed(one.features[shown][0], digits)} {unit} at {one.label}" for one in split.ranges
    )
    named = shown.replace("_", " ")
    return diagnose.drive_reason(split.kernel, split.disagreement, f"{named} {told}", commands)


def _shown_after_spike(split: Split) -> str:
    names = [name for name in split.ranges[0].features if name.startswith("after_spike_at_")]
    return names[0] if names else "after_spike_minimum"


def _white_reason(commands: diagnose.Commands) -> Reason:
    return Reason(
        "white_noise",
        "model.noise = white",
        "calibrated",
        "caution",
        "residuals of cells are correlated: these intervals are several times too narrow",
        commands.narrower.split(" --set")[0],
    )


def _commands(recordings: Sequence[Recording], settings: Settings) -> diagnose.Commands:
    files = " ".join(shlex.quote(recording.source) for recording in recordings)
    first = recordings[0]
    found = linear_range(measure_steps(first)) if len(recordings) == 1 else None
    narrower = f"bayesglm check {files}"
    if found is not None and not found.complete:
        narrower = fit_command(first, found.selection)
    longer = f"--set sampling.draws={4 * settings.sampling.draws}"
    return diagnose.Commands(
        check=f"bayesglm check {files}",
        narrower=narrower,
        more_draws=f"bayesglm fit {files} {longer} --out {shlex.quote(first.name)}_longer",
    )

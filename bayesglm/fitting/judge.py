"""The verdict on a fit: every check, gathered."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from bayesglm.checks.residuals import linearity
from bayesglm.checks.shape import shape_misfit
from bayesglm.checks.splits import FEWEST_UNITS, exciting_units
from bayesglm.fitting.posterior import Posterior
from bayesglm.fitting.summary import Summary
from bayesglm.inference import diagnose
from bayesglm.inference.results import Split, Verdict
from bayesglm.likelihood.calibration import Calibration
from bayesglm.likelihood.digest import VoltageDigest
from bayesglm.likelihood.least_squares import correlation_time_ms
from bayesglm.recording.gaps import overlap_reason, overlaps
from bayesglm.recording.linearity import linear_range
from bayesglm.recording.ranges import format_sweeps
from bayesglm.recording.recording import Recording
from bayesglm.recording.settings import SamplingSection, Settings
from bayesglm.recording.steps import measure_steps
from bayesglm.recording.wording import check_command, fit_command, fixed
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
    commands = _commands(recordings, digest, summary, settings)
    sampler = diagnose.summarise_sampler(posterior.chains, posterior.weights)
    correlation_ms = correlation_time_ms(digest, calibration.fit)
    mean = posterior.flat.mean(axis=0)
    bent = linearity(recordings, posterior.design, mean, correlation_ms, calibration.fit.drifts)
    known = {name: np.isfinite(summary.kernels[name].mean) for name in posterior.design.kernels}
    reasons = [
        *diagnose.sampler_reasons(sampler, commands),
        *diagnose.unit_reasons(
            calibration.units, calibration.freedom, calibration.leverage, digest.labels, commands
        ),
        *diagnose.ratio_reasons(calibration.ratio, commands),
        *diagnose.half_reasons(summary.halves, commands),
        *(_drive_reason(split, digest, commands) for split in summary.splits.values()),
        diagnose.linearity_reason(bent.share, commands),
        *diagnose.prior_reasons(
            {name: summary.kernels[name].prior_share[at] for name, at in known.items()}, commands
        ),
    ]
    reasons += [
        diagnose.shape_reason(kernel, misfit, _with_splines(kernel, recordings, settings))
        for kernel, misfit in shape_misfit(posterior.design, calibration, mean).items()
    ]
    reasons += [overlap_reason(one) for one in recordings if overlaps(one)]
    if settings.model.noise == "white":
        reasons.append(_white_reason(commands))
    return Verdict(
        verdict=worst(reason.verdict for reason in reasons),
        reasons=tuple(reasons),
        observe=settings.model.observe,
        units=calibration.units.clusters,
        effective_units=calibration.units.effective,
        calibration_ratio=calibration.ratio,
        route=_route(settings, posterior.chains.sampler),
        rhat_max=sampler.rhat_max,
        ess_min=sampler.ess_min,
        divergences=sampler.divergences,
        spikes=int(digest.spikes.sum()),
        bins=sum(sweep.n_samples for recording in recordings for sweep in recording.sweeps),
    )


def _drive_reason(split: Split, digest: VoltageDigest, commands: diagnose.Commands) -> Reason:
    if not split.ranges:
        exciting = len(exciting_units(digest, split.kernel))
        return diagnose.unsplit_reason(split.kernel, exciting, FEWEST_UNITS, commands)
    feature, words, unit, digits = _shown(split)
    told = ", ".join(
        f"{fixed(one.features[feature][0], digits)} {unit} at {one.label}" for one in split.ranges
    )
    return diagnose.drive_reason(split.kernel, split.disagreement, f"{words} {told}", commands)


def _shown(split: Split) -> tuple[str, str, str, int]:
    """The feature that tells a kernel's ranges apart: name, words, unit, decimals."""
    if split.kernel == "input":
        return "input_resistance", "input resistance", "MΩ", 0
    prefix = "after_spike_at_"
    for name in split.ranges[0].features:
        if name.startswith(prefix):
            lag = name.removeprefix(prefix).removesuffix("ms")
            return name, f"η({lag} ms)", "mV", 1
    return "after_spike_minimum", "minimum of η", "mV", 1


def _with_splines(kernel: str, recordings: Sequence[Recording], settings: Settings) -> str:
    """The fit with a kernel of splines."""
    section = getattr(settings.kernels, kernel).model_copy(update={"basis": "splines"})
    kernels = settings.kernels.model_copy(update={kernel: section})
    return fit_command(recordings, "", settings.model_copy(update={"kernels": kernels}), "splines")


def _route(settings: Settings, sampler: str) -> str:
    """How the posterior came about, in words."""
    noise = "least squares, calibrated" if settings.model.noise == "calibrated" else "white"
    return f"{noise}; {sampler}"


def _white_reason(commands: diagnose.Commands) -> Reason:
    return Reason(
        "white_noise",
        "model.noise = white",
        "calibrated",
        "caution",
        "residuals of cells are correlated: these intervals are several times too narrow",
        commands.calibrated,
    )


def _commands(
    recordings: Sequence[Recording], digest: VoltageDigest, summary: Summary, settings: Settings
) -> diagnose.Commands:
    check = check_command(recordings)
    longer = SamplingSection(draws=4 * settings.sampling.draws, seed=settings.sampling.seed)
    calibrated = settings.model.model_copy(update={"noise": "calibrated"})
    return diagnose.Commands(
        check=check,
        narrower=_narrower(recordings, settings) or check,
        one_drive=_one_drive(recordings, digest, summary, settings) or check,
        calibrated=fit_command(
            recordings, "", settings.model_copy(update={"model": calibrated}), "calibrated"
        ),
        more_draws=fit_command(
            recordings, "", settings.model_copy(update={"sampling": longer}), "longer"
        ),
    )


def _narrower(recordings: Sequence[Recording], settings: Settings) -> str:
    """The fit of the widest linear range of current; empty where steps do not tell it."""
    if len(recordings) > 1:
        return ""
    found = linear_range(measure_steps(recordings[0]))
    if found is None or found.complete:
        return ""
    return fit_command(recordings, found.selection, settings)


def _one_drive(
    recordings: Sequence[Recording], digest: VoltageDigest, summary: Summary, settings: Settings
) -> str:
    """The fit of the strongest range of drive of η; empty where sweeps do not tell it apart."""
    split = summary.splits.get("after_spike")
    if split is None or not split.ranges or len(recordings) > 1:
        return ""
    if digest.n_units != len(recordings[0].sweeps):
        return ""
    sweeps = [recordings[0].sweeps[digest.sweep[unit]] for unit in split.ranges[-1].units]
    numbers = [number for sweep in sweeps for number in sweep.numbers]
    return fit_command(recordings, f"sweeps={format_sweeps(numbers)}", settings)

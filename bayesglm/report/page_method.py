"""What was fitted and how, as tables of the page: recordings, model, blanks, diagnostics."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from bayesglm.inference.results import CellFit
from bayesglm.kernels.basis import KernelSpec
from bayesglm.kernels.design import VoltageDesign
from bayesglm.recording.recording import Recording
from bayesglm.recording.settings import RecordingSection
from bayesglm.recording.wording import minus
from bayesglm.report.wording import true_minus

_SHORT_HASH = 12
_SIGNS = {"input": "κ", "after_spike": "η"}


@dataclass(frozen=True)
class Fact:
    """A row of a table: what, how much, and where it is set or what it means."""

    what: str
    value: str
    remark: str = ""


@dataclass(frozen=True)
class FittedRecording:
    """A recording that was fitted, written out."""

    name: str
    sha256: str
    sweeps: str
    duration: str
    step: str
    spikes: str
    left_out: tuple[str, ...]


@dataclass(frozen=True)
class Fitted:
    """What was fitted: recordings, the model, and what the author states of the recording."""

    recordings: tuple[FittedRecording, ...]
    model: tuple[Fact, ...]
    stated: tuple[Fact, ...]
    blanks: tuple[Fact, ...]


def fitted(fit: CellFit) -> Fitted:
    """Write out what was fitted."""
    stated, blanks = _stated(fit.settings.recording)
    return Fitted(
        tuple(_recording(recording) for recording in fit.recordings), _model(fit), stated, blanks
    )


def diagnostics(fit: CellFit) -> tuple[Fact, ...]:
    """Write out how the sampler and the calibration fared."""
    verdict, sampling = fit.verdict, fit.settings.sampling
    ratios = ", ".join(
        f"{_SIGNS.get(name, name)} {value:.2f}" for name, value in verdict.calibration_ratio.items()
    )
    return (
        Fact("Largest R̂", f"{verdict.rhat_max:.3f}", "below 1.01: the chains agree"),
        Fact("Smallest effective draws", f"{verdict.ess_min:.0f}", "above 400"),
        _sampler(fit),
        Fact(
            "Chains and draws",
            f"{sampling.chains} × {sampling.draws} after {sampling.warmup} of warm-up",
            f"seed {sampling.seed}: the same input gives the same draws",
        ),
        Fact("Route", verdict.route),
        Fact("Calibration ratio", ratios or "–", "spread between units over what noise explains"),
        Fact("Independent units", str(verdict.units), _units(fit)),
        Fact(
            "Degrees of freedom ν",
            f"{fit.calibration.freedom:.1f}",
            "how well the spread between units is known",
        ),
        Fact("Rows fitted", f"{fit.digest.n_rows:.0f}", f"of {fit.design.row_ms:g} ms"),
        Fact(
            "Computing time",
            f"{sum(verdict.seconds.values()):.1f} s",
            ", ".join(f"{stage} {s:.1f} s" for stage, s in verdict.seconds.items()),
        ),
    )


def _sampler(fit: CellFit) -> Fact:
    if fit.chains.sampler != "NUTS":
        return Fact("Sampler", "slice by slice", "as time constants are fitted; cannot diverge")
    return Fact("Divergences of NUTS", str(fit.verdict.divergences), "should be none")


def _recording(recording: Recording) -> FittedRecording:
    how = f" ({true_minus(recording.spikes_from)})" if recording.spikes_from else ""
    return FittedRecording(
        name=recording.path.name if recording.path is not None else recording.name,
        sha256=recording.sha256[:_SHORT_HASH] or "–",
        sweeps=_sweeps(recording),
        duration=f"{recording.seconds:.1f} s",
        step=f"{recording.step_ms:g} ms",
        spikes=f"{recording.n_spikes}{how}",
        left_out=tuple(true_minus(sentence) for sentence in recording.left_out),
    )


def _sweeps(recording: Recording) -> str:
    """Number of sweeps, and which of the file's were joined to one."""
    joined = [sweep.label.partition(" ")[2] for sweep in recording.sweeps if sweep.joined]
    n = len(recording.sweeps)
    return f"{n} (joined: {', '.join(joined)})" if joined else str(n)


def _model(fit: CellFit) -> tuple[Fact, ...]:
    design, settings = fit.design, fit.settings
    facts = [
        Fact(
            f"Kernel {_SIGNS[name]}",
            f"{spec.duration_ms:g} ms, {_size(spec)}",
            _basis(spec),
        )
        for name, spec in design.kernels.items()
    ]
    before, after = design.spike_window_ms
    electrode = "fitted" if design.electrode else "not fitted"
    facts += [
        Fact("Electrode term", electrode, "takes up an unbalanced bridge; no part of κ"),
        *_electrode_kernel(design),
        Fact("Rows", f"{design.row_ms:g} ms", "voltage is averaged over rows"),
        Fact("Spike window", minus(f"{before:g} to {after:g} ms"), "left out around each spike"),
        Fact("Sweep offsets and drifts", _sweep_effects(fit), "each sweep has its own"),
        Fact("Noise", settings.model.noise),
    ]
    return tuple(facts)


def _size(spec: KernelSpec) -> str:
    """Number of what a kernel is made of."""
    if spec.basis == "exponentials":
        return f"{spec.terms} exponential{'s' if spec.terms > 1 else ''}"
    return f"{spec.weights} weights"


def _basis(spec: KernelSpec) -> str:
    """What a kernel is made of, in words."""
    axis = f"log(1 + lag/{spec.warp_ms:g} ms)"
    if spec.basis == "lags":
        if spec.weights == spec.finest_lags:
            return f"one coefficient for each {spec.finest_ms:g} ms of lag"
        return f"lags at least {spec.finest_ms:g} ms apart, even in {axis}"
    return {
        "splines": f"B-splines, knots even in {axis}",
        "cosines": f"raised cosines, even in {axis}",
        "exponentials": f"time constants fitted; carried by {spec.weights} B-splines",
    }[spec.basis]


def _electrode_kernel(design: VoltageDesign) -> list[Fact]:
    bins = design.electrode_kernel
    if bins is None:
        return []
    value = f"{bins.duration_ms:g} ms, {bins.weights} bin{'s' if bins.weights > 1 else ''} of lags"
    return [Fact("Electrode kernel", value, "an electrode that charges; part of the term")]


def _sweep_effects(fit: CellFit) -> str:
    """Sds of what each sweep has of its own; a drift's is over the sweep."""
    if not fit.settings.model.sweep_offsets:
        return "not fitted"
    named = zip(("offset", "drift"), fit.calibration.fit.sweep_variances, strict=False)
    return ", ".join(f"{name} of sd {np.sqrt(variance):.2f} mV" for name, variance in named)


def _units(fit: CellFit) -> str:
    """Say what a unit is."""
    if all("ms" not in label for label in fit.digest.labels):
        return "whole sweeps"
    return f"blocks of about {np.median(fit.digest.seconds):.2g} s"


def _stated(section: RecordingSection) -> tuple[tuple[Fact, ...], tuple[Fact, ...]]:
    """What the author states of the recording, and what is left blank."""
    stated: list[Fact] = []
    blanks: list[Fact] = []
    for key, field in RecordingSection.model_fields.items():
        # How spikes are found is told beside the recordings.
        if key == "select" or key.startswith("spike_"):
            continue
        if key == "contiguous" and not section.contiguous:
            continue
        value = getattr(section, key)
        what = (field.description or key).split("; ")[0]
        fact = Fact(what[:1].upper() + what[1:], _written(value), f"recording.{key}")
        (blanks if value is None else stated).append(fact)
    for key, value in section.select.model_dump(exclude={"rows"}).items():
        if value is not None:
            stated.append(Fact(f"Selection by {key}", str(value), f"recording.select.{key}"))
    for key, value in section.select.rows.model_dump().items():
        if value is not None:
            stated.append(Fact(f"Rows by {key}", str(value), f"recording.select.rows.{key}"))
    return tuple(stated), tuple(blanks)


def _written(value: object) -> str:
    if value is None:
        return "not stated"
    if isinstance(value, bool):
        return "yes" if value else "no"
    if isinstance(value, float) and math.isfinite(value):
        return minus(f"{value:g}")
    if isinstance(value, tuple):
        return ", ".join(map(str, value))
    return str(value)

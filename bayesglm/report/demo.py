"""The demo: an invented study from its recordings to its page, beside the known truth."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Final

import numpy as np

from bayesglm.checks.scenario import AFTER_SPIKE_MS, INPUT_MS, STEP_MS, DemoCell, write_study
from bayesglm.inference.results import CellFit, Feature
from bayesglm.recording.loading import load_recording
from bayesglm.recording.quality import check_recording
from bayesglm.recording.settings import Settings
from bayesglm.recording.study import CellEntry, read_study
from bayesglm.report.folder import StudyResult, fit_to_folder
from bayesglm.report.truth import Truth
from bayesglm.report.wording import (
    decimals,
    feature_label,
    interval,
    percent,
    rounded,
    with_unit,
)
from bayesglm.verdict import Severity, worst

_REPORTED_MS: Final = 30.0
_SHOWN: Final = ("input_resistance", "after_spike_at_30ms")

#: Calls of `progress` that the demo makes itself, beside those of the fit.
STAGES: Final = 2


@dataclass(frozen=True, eq=False)
class DemoResult:
    """What the demo made.

    Attributes
    ----------
    study
        The fits and where their page is.
    checks
        For each recording the worst verdict of its check.
    lines
        Lines that hold the result to the truth.
    """

    study: StudyResult
    checks: tuple[tuple[str, Severity], ...]
    lines: tuple[str, ...]


def run_demo(out: Path, seed: int, progress: Callable[[str], None]) -> DemoResult:
    """Make the invented study, fit it, and hold the result to the truth.

    Parameters
    ----------
    out
        Folder for the study (``study/``) and its results (``results/``).
    seed
        Seed of the simulation and of the fits.
    progress
        Called at the start of each stage.

    Returns
    -------
    DemoResult
    """
    progress("simulate")
    cells = write_study(out / "study", seed)
    progress("check")
    study = read_study(out / "study")
    checks = tuple((entry.name, _check(entry, study.settings)) for entry in study.cells)
    truths = {cell.name: truth_of(cell) for cell in cells}
    result = fit_to_folder(study, out / "results", progress, truths)
    return DemoResult(result, checks, _lines(result.fits, truths))


def _check(entry: CellEntry, settings: Settings) -> Severity:
    recording = load_recording(entry.recordings[0], settings)
    return worst(row.verdict for row in check_recording(recording, settings))


def truth_of(cell: DemoCell) -> Truth:
    """The known features and kernels of an invented cell."""
    lags = STEP_MS * np.arange(1, round(AFTER_SPIKE_MS / STEP_MS) + 1)
    neuron = cell.neuron
    return Truth(
        features={
            "input_resistance": float(neuron.input.sum() * STEP_MS),
            "membrane_time_constant": cell.tau_ms,
            "offset": neuron.offset_mV,
            "electrode_resistance": neuron.electrode_MOhm,
            "after_spike_at_30ms": float(np.interp(_REPORTED_MS, lags, neuron.after_spike)),
        },
        curves={
            "input": (lags[: round(INPUT_MS / STEP_MS)], neuron.input),
            "after_spike": (lags, neuron.after_spike),
        },
    )


def _lines(fits: Sequence[CellFit], truths: dict[str, Truth]) -> tuple[str, ...]:
    """Three lines of result against the known truth."""
    first = fits[0]
    lines = [
        _line(first.name, first.feature(name), truths[first.name].features[name]) for name in _SHOWN
    ]
    judged = [
        feature.lower <= truths[fit.name].features[feature.name] <= feature.upper
        for fit in fits
        for feature in fit.features
        if feature.name in truths[fit.name].features
    ]
    lines.append(
        f"all cells: {sum(judged)} of {len(judged)} features have the truth inside their "
        f"{percent(first.settings.sampling.level)} interval"
    )
    return tuple(lines)


def _line(cell: str, feature: Feature, truth: float) -> str:
    places = decimals(feature.sd, feature.mean)
    return (
        f"{cell}, {feature_label(feature.name)}: "
        f"{with_unit(feature.mean, places, feature.unit)} ("
        f"{interval(feature.lower, feature.upper, places)}; truth {rounded(truth, places)})"
    )

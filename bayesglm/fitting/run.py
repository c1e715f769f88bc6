"""Fit one cell, or the cells of a study."""

from __future__ import annotations

import time
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import replace

from threadpoolctl import threadpool_limits

from bayesglm.features import reported_rows
from bayesglm.fitting.judge import judge
from bayesglm.fitting.posterior import sample_posterior
from bayesglm.fitting.sensitivity import find_sensitivity, sensitivity_reasons
from bayesglm.fitting.summary import summarise
from bayesglm.inference.results import CellFit
from bayesglm.inference.setup import make_digest, resolve_design, settle
from bayesglm.kernels.design import VoltageDesign
from bayesglm.likelihood.calibration import calibrate
from bayesglm.models.priors import weight_prior
from bayesglm.recording.loading import join, load_cell
from bayesglm.recording.recording import Recording
from bayesglm.recording.selection import refuse_defects
from bayesglm.recording.settings import Settings
from bayesglm.recording.study import CellEntry, Study

Progress = Callable[[str], None]


def fit_study(study: Study, progress: Progress | None = None) -> Iterator[CellFit]:
    """Fit the cells of a study one by one.

    Parameters
    ----------
    study
        From `read_study` or `study_from_recordings`.
    progress
        Called with the name of each stage as it begins.

    Yields
    ------
    CellFit
        In the order of the study; cells without a recording to fit are passed over.

    Raises
    ------
    InputError
        If a recording cannot be used.
    """
    for entry in study.cells:
        recordings = load_cell(entry, study.settings)
        if recordings:
            yield fit(recordings, study.settings, entry, progress)


def fit(
    recordings: Recording | Sequence[Recording],
    settings: Settings | None = None,
    entry: CellEntry | None = None,
    progress: Progress | None = None,
) -> CellFit:
    """Fit one cell.

    Parameters
    ----------
    recordings
        One or several recordings of the cell, with spikes found and selection applied.
    settings
        Settings; defaults where not given.
    entry
        Name, class and animal of the cell; the first recording's name where not given.
    progress
        Called with the name of each stage as it begins.

    Returns
    -------
    CellFit
        The same recordings, settings and seed give the same numbers to the bit.

    Raises
    ------
    InputError
        If the recordings cannot be fitted: missing values or jumps in time in what is used,
        kernels longer than the sweeps, nothing left.
    """
    settings = settings or Settings()
    recordings = (recordings,) if isinstance(recordings, Recording) else tuple(recordings)
    for recording in recordings:
        refuse_defects(recording)
    recordings = tuple(join(recording, settings.recording) for recording in recordings)
    entry = entry or CellEntry(name=recordings[0].name, recordings=())
    clock = _Clock(progress or (lambda _: None))
    # With two BLAS threads and a busy neighbour small products were seen to take seconds.
    with threadpool_limits(1, user_api="blas"):
        with clock.stage("digest"):
            design = resolve_design(recordings, settings)
            recordings = settle(recordings, design.input.duration_ms, settings)
            prior = weight_prior(design, settings.priors)
            digest, least = make_digest(recordings, design, prior, settings)
        with clock.stage("calibrate"):
            step_ms = min(recording.step_ms for recording in recordings)
            rows = reported_rows(design, step_ms, settings.kernels.after_spike.report_at_ms)
            calibration = calibrate(digest, least, rows)
        with clock.stage("sample"):
            posterior = sample_posterior(calibration, design, prior, step_ms, settings)
        with clock.stage("summarise"):
            summary = summarise(posterior, digest, calibration, settings)
            verdict = judge(posterior, digest, calibration, summary, recordings, settings)
        with clock.stage("sensitivity"):
            sensitivity = find_sensitivity(recordings, posterior, calibration, settings)
            reasons = sensitivity_reasons(sensitivity, recordings, settings)
    return CellFit(
        cell=entry.name,
        condition=entry.condition,
        cell_class=entry.cell_class,
        animal=entry.animal,
        settings=settings,
        design=design,
        recordings=recordings,
        digest=digest,
        calibration=calibration,
        prior=prior,
        chains=posterior.chains,
        weights=posterior.weights,
        kernels=summary.kernels,
        features=summary.features,
        splits=summary.splits,
        verdict=replace(verdict.with_reasons(reasons), seconds=clock.seconds),
        warnings=_warnings(design, settings),
        sensitivity=sensitivity,
    )


class _Clock:
    """Seconds of each stage, and the call that tells of it."""

    def __init__(self, progress: Progress) -> None:
        self.seconds: dict[str, float] = {}
        self._progress = progress

    @contextmanager
    def stage(self, name: str) -> Iterator[None]:
        """Time what happens inside."""
        self._progress(name)
        start = time.perf_counter()
        yield
        self.seconds[name] = round(time.perf_counter() - start, 3)


def _warnings(design: VoltageDesign, settings: Settings) -> tuple[str, ...]:
    notes = []
    if design.after_spike is None:
        notes.append("no spikes in what is fitted: the after-spike kernel is left out")
    if settings.model.noise == "white":
        notes.append(
            "model.noise is white: the residual is taken to be uncorrelated, which no cell's is; "
            "the intervals are several times too narrow and not for use"
        )
    return tuple(notes)

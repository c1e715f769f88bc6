"""From a study to its results folder: fit, write, draw, one cell after the other."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Final

from bayesglm.errors import InputError
from bayesglm.fitting.run import fit
from bayesglm.inference.results import CellFit
from bayesglm.inference.setup import refuse_unusable
from bayesglm.recording.loading import load_cell
from bayesglm.recording.study import Study
from bayesglm.report.figures import save_figures
from bayesglm.report.page import write_page
from bayesglm.report.tables import feature_dict, verdict_dict, write_cell, write_study
from bayesglm.report.truth import Truth
from bayesglm.verdict import worst

#: Calls of `progress` for each cell: the five stages of a fit, and writing.
STAGES: Final = 6


@dataclass(frozen=True, eq=False)
class StudyResult:
    """What was fitted and where its page is."""

    fits: tuple[CellFit, ...]
    folder: Path
    page: Path

    def as_dict(self) -> dict[str, Any]:
        """The result for JSON output."""
        return {
            "folder": str(self.folder),
            "report": str(self.page),
            "verdict": worst(fit.verdict.verdict for fit in self.fits),
            "cells": [
                {
                    "cell": fit.cell,
                    "condition": fit.condition,
                    "class": fit.cell_class,
                    "animal": fit.animal,
                    "features": [feature_dict(feature) for feature in fit.features],
                    **verdict_dict(fit),
                }
                for fit in self.fits
            ],
        }


def fit_to_folder(
    study: Study,
    out: Path,
    progress: Callable[[str], None],
    truths: dict[str, Truth] | None = None,
) -> StudyResult:
    """Fit every cell of a study and write everything.

    Parameters
    ----------
    study
        The study; all its recordings are read and checked before anything is written.
    out
        Results folder; made if it does not exist.
    progress
        Called at the start of each stage, `STAGES` times a cell.
    truths
        The known truth of simulated cells by name, drawn beside the result.

    Returns
    -------
    StudyResult

    Raises
    ------
    InputError
        If any recording cannot be used; nothing is written then.
    """
    entries = [entry for entry in study.cells if refuse_unusable(entry, study.settings)]
    if not entries:
        raise InputError("no recording to fit: all are excluded or held out; see recordings.csv")
    out.mkdir(parents=True, exist_ok=True)
    truths = truths or {}
    fits, figures = [], {}
    for entry in entries:
        name = f"{entry.name}@{entry.condition}" if entry.condition else entry.name
        recordings = load_cell(entry, study.settings)
        one = fit(recordings, study.settings, entry, _prefixed(progress, name))
        progress(f"{name}: write")
        folder = write_cell(one, out)
        figures[one.name] = save_figures(one, folder / "figures", truths.get(one.name))
        fits.append(one)
    write_study(fits, out)
    page = out / "report" / "index.html"
    page.parent.mkdir(exist_ok=True)
    told = study.settings.study
    title = told.name or ", ".join(dict.fromkeys(one.cell for one in fits))
    write_page(fits, page, title, told.notes, truths, figures)
    return StudyResult(tuple(fits), out, page)


def _prefixed(progress: Callable[[str], None], name: str) -> Callable[[str], None]:
    def tell(stage: str) -> None:
        progress(f"{name}: {stage}")

    return tell

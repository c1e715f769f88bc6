"""The figures of one cell, drawn and saved."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path

from matplotlib.figure import Figure

from bayesglm.checks.residuals import SweepRows
from bayesglm.inference.results import CellFit
from bayesglm.recording.steps import measure_steps
from bayesglm.report import style
from bayesglm.report.influence_figures import draw_leave_one_out
from bayesglm.report.kernel_figures import draw_kernels
from bayesglm.report.kernel_figures import draw_overview as _overview
from bayesglm.report.predicted import Place, predict_sweeps
from bayesglm.report.residual_figures import draw_residual_distribution, draw_residuals
from bayesglm.report.sampler_figures import draw_prior_posterior, draw_trace_rank
from bayesglm.report.sweep_figures import draw_by_sweep, draw_voltage_current
from bayesglm.report.trace_figures import draw_prediction, draw_traces, representative_sweeps
from bayesglm.report.truth import Truth

#: The figures in the order of the page; those that do not apply to a cell are left out.
FIGURES = (
    "kernels",
    "prediction",
    "traces",
    "residuals",
    "voltage_current",
    "by_sweep",
    "leave_one_out",
    "residual_distribution",
    "prior_posterior",
    "trace_rank",
)


def draw_figures(
    fit: CellFit, truth: Truth | None = None, width_mm: float = style.DOUBLE_COLUMN_MM
) -> dict[str, Figure]:
    """Draw the figures of one cell.

    Parameters
    ----------
    fit
        The fit.
    truth
        What a simulated cell was made from; drawn into the kernels.
    width_mm
        Width of each figure, mm: panels stand side by side above 120 mm.

    Returns
    -------
    dict
        By name, in the order of `FIGURES`; ``voltage_current`` and ``by_sweep`` only where the
        recordings have steps, or sweeps, to show.
    """
    chosen = representative_sweeps(fit)
    predicted = predict_sweeps(fit, also=list(chosen))
    rows = list(predicted.values())
    measures = [measure_steps(recording) for recording in fit.recordings]
    with style.styled():
        drawn = {
            "kernels": draw_kernels(fit, truth, width_mm),
            "prediction": draw_prediction(_with_own_lines(fit, predicted), chosen, width_mm),
            "traces": draw_traces(fit, width_mm),
            "residuals": draw_residuals(fit, rows, width_mm),
            "voltage_current": draw_voltage_current(fit, measures, width_mm),
            "by_sweep": draw_by_sweep(fit, measures, width_mm),
            "leave_one_out": draw_leave_one_out(fit, width_mm),
            "residual_distribution": draw_residual_distribution(fit, rows, width_mm),
            "prior_posterior": draw_prior_posterior(fit, width_mm),
            "trace_rank": draw_trace_rank(fit, width_mm),
        }
    return {name: figure for name, figure in drawn.items() if figure is not None}


def _with_own_lines(fit: CellFit, predicted: Mapping[Place, SweepRows]) -> dict[Place, SweepRows]:
    """Predictions with each sweep's own offset, and drift where sweeps drift."""
    if not fit.settings.model.sweep_offsets:
        return dict(predicted)
    drifts = fit.calibration.fit.drifts
    return {place: rows.with_own_line(drifts) for place, rows in predicted.items()}


def save_figures(
    fit: CellFit,
    folder: Path,
    truth: Truth | None = None,
    width_mm: float = style.DOUBLE_COLUMN_MM,
) -> dict[str, Path]:
    """Save the figures of one cell as SVG and PNG.

    Parameters
    ----------
    fit
        The fit.
    folder
        Where to; made if it is not there.
    truth
        What a simulated cell was made from; drawn into the kernels.
    width_mm
        Width of each figure, mm.

    Returns
    -------
    dict
        Path by file name, such as ``kernels.svg`` and ``kernels.png``.
    """
    folder.mkdir(parents=True, exist_ok=True)
    saved: dict[str, Path] = {}
    for name, figure in draw_figures(fit, truth, width_mm).items():
        vector, pixels = folder / f"{name}.svg", folder / f"{name}.png"
        vector.write_text(style.as_svg(figure), encoding="utf-8")
        pixels.write_bytes(style.as_png(figure))
        saved |= {vector.name: vector, pixels.name: pixels}
    return saved


def draw_overview(fits: Sequence[CellFit], width_mm: float = style.DOUBLE_COLUMN_MM) -> Figure:
    """Draw the kernels of all cells together, a line style for each class."""
    with style.styled():
        return _overview(fits, width_mm)

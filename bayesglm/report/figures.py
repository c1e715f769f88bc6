"""The figures of one cell, drawn and saved."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

from matplotlib.figure import Figure

from bayesglm.inference.results import CellFit
from bayesglm.report import style
from bayesglm.report.kernel_figures import draw_kernels
from bayesglm.report.kernel_figures import draw_overview as _overview
from bayesglm.report.predicted import predict_sweeps
from bayesglm.report.residual_figures import draw_residuals
from bayesglm.report.trace_figures import draw_prediction, draw_traces, representative_sweeps
from bayesglm.report.truth import Truth

#: The figures in the order of the page.
FIGURES = ("kernels", "prediction", "traces", "residuals")


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
        By name, as in `FIGURES`.
    """
    chosen = representative_sweeps(fit)
    predicted = predict_sweeps(fit, also=list(chosen))
    with style.styled():
        return {
            "kernels": draw_kernels(fit, truth, width_mm),
            "prediction": draw_prediction(predicted, chosen, width_mm),
            "traces": draw_traces(fit, width_mm),
            "residuals": draw_residuals(fit, list(predicted.values()), width_mm),
        }


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

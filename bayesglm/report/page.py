"""One page for a study: it opens from disk, needs nothing else, and runs nothing."""

from __future__ import annotations

import base64
import hashlib
import importlib.metadata
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Final

from jinja2 import Environment, PackageLoader, StrictUndefined
from markupsafe import Markup

from bayesglm.inference.results import CellFit
from bayesglm.report import figures as drawing
from bayesglm.report.page_cell import CellPart, cell_part, summary_table
from bayesglm.report.page_figures import PageFigure
from bayesglm.report.style import as_svg
from bayesglm.report.truth import Truth
from bayesglm.report.wording import CAUTION, VERDICTS, percent, study_sentence, true_minus
from bayesglm.verdict import worst

_TEMPLATES: Final = Environment(
    loader=PackageLoader("bayesglm.report"),
    autoescape=True,
    undefined=StrictUndefined,
    trim_blocks=True,
    lstrip_blocks=True,
)
_TEMPLATES.filters["true_minus"] = true_minus


def write_page(
    fits: Sequence[CellFit],
    path: Path,
    title: str,
    notes: str = "",
    truth: Mapping[str, Truth] | None = None,
    figures: Mapping[str, Mapping[str, Path]] | None = None,
) -> None:
    """Write the report of a study as one self-contained page of HTML.

    Parameters
    ----------
    fits
        The fits, at least one, in the order of the page.
    path
        The page; written beside its place and renamed into it.
    title
        Name of the study.
    notes
        Free text shown under the title.
    truth
        What simulated cells were made from, by the fit's `name`.
    figures
        Files of figures that `save_figures` wrote already, by the fit's `name`; figures of
        other fits are drawn anew.
    """
    truth, figures = truth or {}, figures or {}
    parts = [
        cell_part(
            f"cell-{index}",
            fit,
            truth.get(fit.name),
            _figures(fit, truth.get(fit.name), figures.get(fit.name)),
        )
        for index, fit in enumerate(fits, start=1)
    ]
    text = _render(fits, parts, title, notes)
    path.parent.mkdir(parents=True, exist_ok=True)
    temporary = path.with_name(f".{path.name}.part")
    temporary.write_text(text, encoding="utf-8")
    temporary.replace(path)


def _render(fits: Sequence[CellFit], parts: Sequence[CellPart], title: str, notes: str) -> str:
    # The style sheet is the package's own file; its hash is all that the page allows.
    style = _TEMPLATES.get_template("page.css").render()
    digest = base64.b64encode(hashlib.sha256(style.encode()).digest()).decode()
    several = len(fits) > 1
    severity = worst(fit.verdict.verdict for fit in fits)
    return _TEMPLATES.get_template("page.html.j2").render(
        style=Markup(style),
        style_hash=digest,
        title=title,
        notes=notes,
        caution=CAUTION,
        severity=severity,
        symbol=VERDICTS[severity][0],
        word=VERDICTS[severity][1],
        sentence=study_sentence(fits) if several else parts[0].verdict_sentence,
        summary=summary_table(fits, parts) if several else None,
        overview=_overview(fits) if several else None,
        parts=parts,
        level=percent(fits[0].settings.sampling.level),
        version=importlib.metadata.version("bayesglm"),
    )


def _figures(fit: CellFit, truth: Truth | None, files: Mapping[str, Path] | None) -> dict[str, str]:
    """Addresses of a cell's figures, each holding the whole figure."""
    if files is not None:
        texts = {
            name: files[f"{name}.svg"].read_text(encoding="utf-8")
            for name in drawing.FIGURES
            if f"{name}.svg" in files
        }
    else:
        drawn = drawing.draw_figures(fit, truth)
        texts = {name: as_svg(figure) for name, figure in drawn.items()}
    return {name: _data_address(text) for name, text in texts.items()}


def _overview(fits: Sequence[CellFit]) -> PageFigure:
    classes = list(dict.fromkeys(fit.cell_class for fit in fits if fit.cell_class))
    told = f", line styles by class ({', '.join(classes)})" if len(classes) > 1 else ""
    level = percent(fits[0].settings.sampling.level)
    return PageFigure(
        "Kernels of all cells",
        _data_address(as_svg(drawing.draw_overview(fits))),
        f"Input and after-spike kernels of {len(fits)} cells against the lag in ms{told}.",
        f"Posterior means with {level} bands, lag by lag{told}.",
    )


def _data_address(svg: str) -> str:
    return "data:image/svg+xml;base64," + base64.b64encode(svg.encode()).decode()

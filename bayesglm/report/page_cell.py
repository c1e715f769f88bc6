"""What the page says of one cell, as plain text ready for the template."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

from bayesglm.inference.results import CellFit, Feature
from bayesglm.models.priors import PriorRow, prior_table
from bayesglm.report.page_figures import PageFigure, page_figures
from bayesglm.report.page_method import Fact, Fitted, diagnostics, fitted
from bayesglm.report.page_sensitivity import ChoiceTable, choice_tables
from bayesglm.report.truth import Truth
from bayesglm.report.wording import (
    VERDICTS,
    check_label,
    decimals,
    feature_label,
    interval,
    percent,
    probability,
    result_sentences,
    rounded,
    true_minus,
    verdict_sentence,
    with_unit,
)
from bayesglm.verdict import Reason, Severity

#: Features of the summary, those of an after-spike kernel at a lag besides.
_SUMMARY = ("input_resistance", "membrane_time_constant")


@dataclass(frozen=True)
class FeatureRow:
    """A row of the table of features, written out."""

    label: str
    name: str
    mean: str
    sd: str
    interval: str
    protocol: str
    between: str
    truth: str = ""
    monte_carlo: str = "–"
    effective_draws: str = "–"


@dataclass(frozen=True)
class ReasonRow:
    """A row of the verdict, written out."""

    check: str
    severity: Severity
    symbol: str
    word: str
    value: str
    limit: str
    advice: str
    command: str


@dataclass(frozen=True)
class CellPart:
    """The part of the page that belongs to one cell."""

    anchor: str
    name: str
    about: str
    severity: Severity
    symbol: str
    word: str
    verdict_sentence: str
    sentences: tuple[str, ...]
    warnings: tuple[str, ...]
    open_reasons: tuple[ReasonRow, ...]
    commands: tuple[str, ...]
    reasons: tuple[ReasonRow, ...]
    features: tuple[FeatureRow, ...]
    has_protocol: bool
    truth_sentence: str
    level: str
    figures: tuple[PageFigure, ...]
    priors: tuple[PriorRow, ...]
    fitted: Fitted
    diagnostics: tuple[Fact, ...]
    choices: tuple[ChoiceTable, ...]


@dataclass(frozen=True)
class SummaryTable:
    """One row a cell: where it stands, and its main features with their intervals."""

    columns: tuple[str, ...]
    rows: tuple[tuple[CellPart, str, tuple[str, ...]], ...]


def cell_part(
    anchor: str, fit: CellFit, truth: Truth | None, images: Mapping[str, str]
) -> CellPart:
    """Write out what the page says of one cell.

    Parameters
    ----------
    anchor
        Where links to the cell lead.
    fit
        The fit.
    truth
        What a simulated cell was made from.
    images
        Addresses of the figures by name.
    """
    symbol, word = VERDICTS[fit.verdict.verdict]
    values = truth.features if truth is not None else {}
    about = [f"class {fit.cell_class}"] if fit.cell_class else []
    about += [f"animal {fit.animal}"] if fit.animal else []
    return CellPart(
        anchor=anchor,
        name=f"{fit.cell}, {fit.condition}" if fit.condition else fit.cell,
        about=", ".join(about),
        severity=fit.verdict.verdict,
        symbol=symbol,
        word=word,
        verdict_sentence=verdict_sentence(fit),
        sentences=tuple(_capital(sentence) for sentence in result_sentences(fit)),
        warnings=tuple(_capital(warning) for warning in fit.warnings),
        open_reasons=tuple(_reason(reason) for reason in fit.verdict.open_reasons),
        commands=tuple(
            dict.fromkeys(reason.command for reason in fit.verdict.open_reasons if reason.command)
        ),
        reasons=tuple(_reason(reason) for reason in fit.verdict.reasons),
        features=tuple(_feature(feature, values.get(feature.name)) for feature in fit.features),
        has_protocol=any(math.isfinite(feature.protocol_lower) for feature in fit.features),
        truth_sentence=_truth_sentence(fit, values),
        level=percent(fit.settings.sampling.level),
        figures=page_figures(fit, images),
        priors=prior_table(fit.design, fit.settings.priors),
        fitted=fitted(fit),
        diagnostics=diagnostics(fit),
        choices=choice_tables(fit),
    )


def summary_table(fits: Sequence[CellFit], parts: Sequence[CellPart]) -> SummaryTable:
    """Write the main features of all cells side by side."""
    names = list(dict.fromkeys(feature.name for fit in fits for feature in fit.features))
    shown = [name for name in names if name in _SUMMARY or name.startswith("after_spike_at_")]
    rows = []
    for fit, part in zip(fits, parts, strict=True):
        found = {feature.name: feature for feature in fit.features}
        cells = tuple(_short(found[name]) if name in found else "–" for name in shown)
        rows.append((part, fit.cell_class or "–", cells))
    return SummaryTable(tuple(feature_label(name) for name in shown), tuple(rows))


def _short(feature: Feature) -> str:
    places = decimals(feature.sd, feature.mean)
    ends = interval(feature.lower, feature.upper, places)
    return f"{with_unit(feature.mean, places, feature.unit)} ({ends})"


def _capital(text: str) -> str:
    return text[:1].upper() + text[1:]


def _reason(reason: Reason) -> ReasonRow:
    symbol, word = VERDICTS[reason.verdict]
    return ReasonRow(
        check=check_label(reason.check),
        severity=reason.verdict,
        symbol=symbol,
        word=word,
        value=true_minus(reason.value),
        limit=reason.limit,
        advice=_capital(reason.advice),
        command=reason.command,
    )


def _feature(feature: Feature, truth: float | None) -> FeatureRow:
    places = decimals(feature.sd, feature.mean)
    has_interval = math.isfinite(feature.lower)
    protocol = interval(feature.protocol_lower, feature.protocol_upper, places)
    shown = with_unit(feature.mean, places, feature.unit)
    return FeatureRow(
        label=feature_label(feature.name),
        name=feature.name,
        mean=shown if has_interval else probability(feature.mean),
        sd=rounded(feature.sd, places),
        interval=interval(feature.lower, feature.upper, places),
        protocol=protocol if has_interval else "–",
        between=rounded(feature.between_range_sd, places) if has_interval else "–",
        truth=_held_against(feature, truth, places) if truth is not None and has_interval else "",
        monte_carlo=rounded(feature.mcse_mean, places + 1),
        effective_draws=rounded(feature.ess_bulk, 0),
    )


def _held_against(feature: Feature, truth: float, places: int) -> str:
    inside = feature.lower <= truth <= feature.upper
    return f"{rounded(truth, places)} ({'inside' if inside else 'outside'})"


def _truth_sentence(fit: CellFit, values: Mapping[str, float]) -> str:
    """Say how many intervals hold the truth; empty where no truth is known."""
    held = [
        feature.lower <= values[feature.name] <= feature.upper
        for feature in fit.features
        if feature.name in values and math.isfinite(feature.lower)
    ]
    if not held:
        return ""
    level = percent(fit.settings.sampling.level)
    return (
        f"The cell is simulated, so the truth is known: {sum(held)} of {len(held)} intervals hold "
        f"it. Over many cells about {level} should."
    )

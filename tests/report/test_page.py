from __future__ import annotations

import re
from collections.abc import Callable
from dataclasses import replace
from html.parser import HTMLParser
from pathlib import Path

import pytest
from made_fit import CAUTION, FAILED, PASSED, made_neuron, made_truth, renamed, with_reasons

from bayesglm.checks.residuals import residual_moments
from bayesglm.inference.results import CellFit
from bayesglm.recording.settings import RecordingSection
from bayesglm.report.figures import FIGURES
from bayesglm.report.influence_figures import most_influential
from bayesglm.report.page import write_page
from bayesglm.report.predicted import centred_residuals, predict_sweeps
from bayesglm.report.residual_figures import moments_in_words
from bayesglm.report.trace_figures import representative_sweeps

VOID = {"meta", "img", "br", "link", "input", "hr"}


class Page(HTMLParser):
    """A page taken apart; unbalanced elements raise."""

    def __init__(self, text: str) -> None:
        super().__init__(convert_charrefs=True)
        self.open: list[str] = []
        self.elements: list[tuple[str, dict[str, str | None]]] = []
        self.words: list[str] = []
        self.feed(text)
        self.close()
        assert self.open == []

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.elements.append((tag, dict(attrs)))
        if tag not in VOID:
            self.open.append(tag)

    def handle_endtag(self, tag: str) -> None:
        assert self.open.pop() == tag
        if tag in {"td", "th", "li", "p", "dt", "dd"}:
            self.words.append(" ")

    def handle_data(self, data: str) -> None:
        if self.open and self.open[-1] != "style":
            self.words.append(data)

    @property
    def text(self) -> str:
        return re.sub(r"\s+", " ", "".join(self.words))

    def all(self, tag: str) -> list[dict[str, str | None]]:
        return [attrs for name, attrs in self.elements if name == tag]


Write = Callable[..., Page]


@pytest.fixture
def page_of(saved: dict[str, Path], tmp_path: Path) -> Write:
    """Return a function that writes the page of fits and takes it apart."""

    def write(*fits: CellFit, title: str = "study", notes: str = "") -> Page:
        path = tmp_path / "page.html"
        truth = {"cell-1": made_truth(made_neuron())}
        # The figures of one fit stand for those of all: drawing them is tested elsewhere.
        write_page(fits, path, title, notes, truth, {fit.name: saved for fit in fits})
        assert list(tmp_path.iterdir()) == [path]
        return Page(path.read_text(encoding="utf-8"))

    return write


def test_the_page_stands_alone(fit: CellFit, page_of: Write) -> None:
    page = page_of(fit)
    for _, attrs in page.elements:
        for name in ("src", "href"):
            assert re.match(r"data:image/svg\+xml;base64,|#", attrs.get(name) or "#")
        assert "style" not in attrs
        assert not any(name.startswith("on") for name in attrs)
    assert not page.all("script")
    policy = next(meta for meta in page.all("meta") if "http-equiv" in meta)
    assert str(policy["content"]).startswith(
        "default-src 'none'; img-src data:; style-src 'sha256-"
    )
    assert "unsafe" not in str(policy["content"])


def test_what_users_name_is_escaped(fit: CellFit, page_of: Write) -> None:
    evil = "<script>alert(1)</script>"
    named = renamed(fit, evil, cell_class=evil, condition=evil)
    page = page_of(named, fit, title=evil, notes=evil)
    assert not page.all("script")
    assert evil in page.text


def test_the_page_says_what_it_must(fit: CellFit, page_of: Write) -> None:
    judged = with_reasons(fit, PASSED, CAUTION)
    page = page_of(judged)
    for words in (
        "no basis for clinical decisions",
        "local rules and licensed practice",
        "Usable with 1 reservation",
        "▲ Caution",
        "✓ Passed",
        "30 ms after a spike the membrane is pulled down by",
        "Next to try: bayesglm fit steps.csv --select 'current=-100:125pA'",
        "Ranges of drive, η",
        "half-normal(20)",
        "normal(−65, 20)",
        "0123456789ab",
        "sweep 9: rate above 5 Hz",
        "whole sweeps",
        "Degrees of freedom ν",
        "It is no test",
        "intervals hold it. Over many cells about 90 % should.",
    ):
        assert words in page.text
    assert "signific" not in page.text


def test_the_verdict_comes_before_any_number(fit: CellFit, page_of: Write) -> None:
    text = page_of(with_reasons(fit, FAILED)).text
    assert text.index("✕ Failed") < text.index("Results") < text.index("Features")
    assert "Do not use these numbers" in text
    assert "These sentences hold only once the failed checks are solved." in text


def test_figures_have_their_words(fit: CellFit, page_of: Write) -> None:
    images = page_of(fit).all("img")
    assert len(images) == len(FIGURES)
    for image in images:
        assert len(str(image["alt"])) > 60
    assert "MΩ/ms" in str(images[0]["alt"])
    assert "mV" in str(images[0]["alt"])


def test_figures_that_check_the_fit_are_folded_away(fit: CellFit, page_of: Write) -> None:
    page = page_of(fit)
    text = page.text
    folded = text.index("Checks of this fit")
    for title in ("Kernels without each unit", "Prior and posterior", "Chains of the sampler"):
        assert text.rindex(title) > folded
    assert text.index("Voltage against current") < folded
    first, *_ = (one for one in page.all("details") if one.get("class") == "more")
    assert "open" not in first
    assert not page.all("script")


def test_captions_tell_numbers_and_how_to_judge(fit: CellFit, page_of: Write) -> None:
    text = page_of(fit).text
    rows = list(predict_sweeps(fit, also=list(representative_sweeps(fit))).values())
    residuals = centred_residuals(rows, fit)
    for words in (
        *moments_in_words(residual_moments(residuals, fit.design.row_ms)),
        "goes beyond 4 robust sd",
        "Where it is above 0.8 the data say next to nothing",
        "A slope means a chain that lies higher or lower",
    ):
        assert words in text
    named = [fit.digest.labels[unit] for unit in most_influential(fit)[:3]]
    alt = next(str(one["alt"]) for one in page_of(fit).all("img") if "without" in str(one["alt"]))
    assert alt.endswith(f"Most counts {', '.join(named)}.")


def test_figures_that_do_not_apply_are_left_out(
    noise_fit: CellFit, saved: dict[str, Path], tmp_path: Path
) -> None:
    path = tmp_path / "page.html"
    steps = {f"{name}.svg" for name in ("voltage_current", "by_sweep")}
    kept = {name: file for name, file in saved.items() if name not in steps}
    write_page([noise_fit], path, "study", figures={noise_fit.name: kept})
    page = Page(path.read_text(encoding="utf-8"))
    assert len(page.all("img")) == len(FIGURES) - 2
    assert "Voltage against current" not in page.text
    assert "Drift over the recording" not in page.text


def test_tables_have_scopes_and_scroll_by_keyboard(fit: CellFit, page_of: Write) -> None:
    page = page_of(fit, renamed(fit, "b"))
    assert all(head.get("scope") in ("col", "row") for head in page.all("th"))
    scrolling = [div for div in page.all("div") if div.get("class") == "scroll"]
    assert len(scrolling) == len(page.all("table")) + len(page.all("img"))
    assert all(div.get("tabindex") == "0" and div.get("aria-label") for div in scrolling)


def test_blanks_are_shown_and_statements_kept(fit: CellFit, page_of: Write) -> None:
    section = RecordingSection.model_validate(
        {"holding_pA": -25, "bridge_compensated": True, "select": {"current": "-100:25pA"}}
    )
    stated = replace(fit, settings=fit.settings.model_copy(update={"recording": section}))
    text = page_of(stated).text
    assert "Holding current, pA −25 recording.holding_pA" in text
    assert "Whether the bridge was balanced yes" in text
    assert "Liquid junction potential, mV not stated" in text
    assert "Selection by current -100:25pA" in text


def test_several_cells_begin_with_a_summary(
    fit: CellFit, quiet_fit: CellFit, page_of: Write
) -> None:
    cells = (
        with_reasons(renamed(fit, "first", "regular"), PASSED),
        with_reasons(renamed(quiet_fit, "second", "fast"), CAUTION),
        with_reasons(renamed(fit, "second", "fast", condition="drug"), FAILED),
    )
    page = page_of(*cells)
    assert "Of 3 cells 1 passed, 1 with caution and 1 failed." in page.text
    assert "second, drug" in page.text
    assert [bool("open" in one) for one in page.all("details") if one.get("class") != "more"] == [
        True,
        False,
        False,
    ]
    targets = {str(attrs["id"]) for _, attrs in page.elements if "id" in attrs}
    links = {str(link["href"]).removeprefix("#") for link in page.all("a")}
    assert links <= targets
    assert len(page.all("img")) == 3 * len(FIGURES) + 1


def test_a_cell_without_spikes_says_so(quiet_fit: CellFit, page_of: Write) -> None:
    text = page_of(quiet_fit).text
    assert "the after-spike kernel is left out" in text
    assert "Kernel η" not in text


def test_saved_figures_are_taken_as_they_are(
    fit: CellFit, saved: dict[str, Path], tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    drawn, read = tmp_path / "drawn.html", tmp_path / "read.html"
    write_page([fit], drawn, "study")
    monkeypatch.delattr("bayesglm.report.figures.draw_figures")
    write_page([fit], read, "study", figures={fit.name: saved})
    assert drawn.read_bytes() == read.read_bytes()


def test_joined_sweeps_are_told(fit: CellFit, page_of: Write) -> None:
    (one,) = fit.recordings
    first, *others = one.sweeps
    joined = replace(first, joined=((0, 0), (1, 100)))
    section = fit.settings.recording.model_copy(update={"contiguous": ("0-1",)})
    told = replace(
        fit,
        recordings=(replace(one, sweeps=(joined, *others)),),
        settings=fit.settings.model_copy(update={"recording": section}),
    )
    text = page_of(told).text
    assert f"{len(one.sweeps)} (joined: 0–1)" in text
    assert "recording.contiguous" in text
    assert "joined:" not in page_of(fit).text
    assert "recording.contiguous" not in page_of(fit).text

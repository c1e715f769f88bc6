"""What README and guide tell a newcomer to type is real: it exists, it runs, it says so."""

from __future__ import annotations

import csv
import json
import re
import shlex
from pathlib import Path
from typing import Any

import pytest
import typer
from typer.testing import CliRunner

from bayesglm.checks.identification import design_rows
from bayesglm.cli.main import app
from bayesglm.errors import InputError
from bayesglm.recording.quality import check_recording
from bayesglm.recording.reading import read_recording
from bayesglm.recording.settings import Settings
from bayesglm.recording.settings_input import read_settings
from bayesglm.recording.spikes import detect_spikes
from bayesglm.recording.study import load, read_study
from bayesglm.report.figures import FIGURES
from bayesglm.report.tables import FEATURE_COLUMNS, KERNEL_COLUMNS, SUMMARY_COLUMNS

ROOT = Path(__file__).resolve().parents[2]
README, GUIDE = ROOT / "README.md", ROOT / "docs" / "guide.md"
PAGES = (README, GUIDE, ROOT / "DEVELOPERS.md", ROOT / "examples" / "README.md")

COMMANDS = typer.main.get_command(app).commands  # type: ignore[attr-defined]


def code_lines(page: Path) -> list[str]:
    """Lines of fenced and of indented code."""
    fenced = re.findall(r"^```\w*\n(.*?)^```", page.read_text(encoding="utf-8"), re.M | re.S)
    indented = re.findall(r"^ {4,}(.*)$", page.read_text(encoding="utf-8"), re.M)
    return [line for block in fenced for line in block.splitlines()] + indented


def commands(page: Path) -> list[list[str]]:
    """Every command of this program in the code of a page, in words, without its name."""
    found = []
    for line in code_lines(page):
        for part in line.split("&&"):
            words = shlex.split(part) if part.strip().startswith("bayesglm ") else []
            if words:
                found.append(words[1:])
    return found


def block(page: Path, kind: str, index: int = 0) -> str:
    """A fenced block of one kind."""
    text = page.read_text(encoding="utf-8")
    return re.findall(rf"^```{kind}\n(.*?)^```", text, re.M | re.S)[index]


def table_names(page: Path, head: str) -> list[str]:
    """Names in backquotes in the first column of the table whose head begins with `head`."""
    text = page.read_text(encoding="utf-8").partition(f"\n{head}")[2]
    assert text, f"{page.name} has no table that begins with {head!r}"
    rows = text.partition("\n\n")[0].splitlines()[2:]
    return [name for row in rows for name in re.findall(r"`([^`]+)`", row.split("|")[1])]


@pytest.fixture
def project(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """A folder from which examples and data are reached as from the project's own."""
    for name in ("examples", "tests"):
        (tmp_path / name).symlink_to(ROOT / name)
    monkeypatch.chdir(tmp_path)
    return tmp_path


@pytest.fixture(scope="module")
def results(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The results folder of the README's fit, with fewer draws."""
    words = next(words for words in commands(README) if words[0] == "fit")
    folder = tmp_path_factory.mktemp("readme")
    (folder / "examples").symlink_to(ROOT / "examples")
    with pytest.MonkeyPatch.context() as patch:
        patch.chdir(folder)
        short = ["--set", "sampling.draws=150", "--set", "sampling.warmup=100"]
        outcome = CliRunner().invoke(app, [*words, *short, "--quiet"])
    assert outcome.exit_code == 0, outcome.output
    return folder / words[words.index("--out") + 1]


def test_the_two_commands_to_set_up_stand_there_as_they_are() -> None:
    lines = [line.strip() for line in code_lines(README)]
    assert "python -m pip install . && bayesglm demo" in lines
    assert "python -m pip install '.[test]' && python -m pytest" in lines


@pytest.mark.parametrize("page", PAGES, ids=lambda page: page.name)
def test_every_command_and_option_exists(page: Path) -> None:
    for name, *words in commands(page):
        assert name in COMMANDS, f"{page.name}: bayesglm {name}"
        known = {option for one in COMMANDS[name].params for option in one.opts}
        used = {word.partition("=")[0] for word in words if word.startswith("-")}
        assert used <= known, f"{page.name}: bayesglm {name} has no {used - known}"


@pytest.mark.usefixtures("project")
@pytest.mark.parametrize("page", PAGES, ids=lambda page: page.name)
def test_every_input_selection_and_setting_of_a_command_is_valid(page: Path) -> None:
    for _, *words in commands(page):
        given: dict[str, list[str]] = {"--set": [], "--select": [], "--out": []}
        paths, rest = [], iter(words)
        for word in rest:
            if word in given:
                given[word].append(next(rest))
            elif not word.startswith("-"):
                paths.append(word)
        if paths:
            load(paths, given["--set"], given["--select"])


@pytest.mark.usefixtures("project")
@pytest.mark.parametrize("page", PAGES, ids=lambda page: page.name)
def test_every_check_runs(page: Path) -> None:
    for words in commands(page):
        if words[0] == "check":
            outcome = CliRunner().invoke(app, words)
            assert outcome.exit_code == 0, outcome.output
            if "--json" in words:
                assert json.loads(outcome.stdout)


def test_the_fit_writes_what_the_readme_lists(results: Path) -> None:
    listing = block(README, "text").splitlines()
    assert listing[0] == f"{results.name}/"
    folder = results
    for line in listing[1:]:
        name = line.split()[0]
        if line.startswith("  cells/"):
            folder = results / name
        assert (folder if line.startswith("    ") else results).joinpath(name).exists(), name
    cell = results / "cells" / "spreadsheet"
    # Its current fluctuates: there are no steps of which voltage against current could be drawn.
    assert {path.name for path in (cell / "figures").iterdir()} == {
        f"{name}.{kind}" for name in FIGURES if name != "voltage_current" for kind in ("svg", "png")
    }
    told = block(README, "text")
    assert {path.name for path in cell.iterdir()} == set(re.findall(r"^ {4}([\w.]+)", told, re.M))


#: Rows of fits of other settings, and of recordings whose stated starts are wrong.
ONLY_SOMETIMES = ("white_noise", "shape_input", "shape_after_spike", "gaps")


def test_the_guide_explains_every_column_feature_and_check(results: Path) -> None:
    assert tuple(table_names(GUIDE, "| column | holds")) == KERNEL_COLUMNS
    text = GUIDE.read_text(encoding="utf-8")
    for column in (*FEATURE_COLUMNS, *SUMMARY_COLUMNS):
        assert f"`{column}`" in text, column
    cell = results / "cells" / "spreadsheet"
    with (cell / "features.csv").open(encoding="utf-8") as file:
        assert table_names(GUIDE, "| feature |") == [row["feature"] for row in csv.DictReader(file)]
    verdict: dict[str, Any] = json.loads((cell / "verdict.json").read_text(encoding="utf-8"))
    for key in verdict:
        assert f"`{key}`" in text, key
    checks = [row["check"] for row in verdict["reasons"]]
    told = sorted(table_names(GUIDE, "| check | asks"))
    assert told == sorted([*checks, *ONLY_SOMETIMES])


def test_the_guide_explains_every_row_of_a_check() -> None:
    settings = Settings()
    recording = read_recording(ROOT / "examples" / "spreadsheet.csv")
    recording = detect_spikes(recording, settings.recording)
    rows = [*check_recording(recording, settings), *design_rows([recording], settings)]
    assert table_names(GUIDE, "| row |") == [row.check for row in rows]


def test_the_pages_recording_can_be_read(tmp_path: Path) -> None:
    path = tmp_path / "cell.csv"
    path.write_text(block(README, "csv"), encoding="utf-8")
    recording = read_recording(path)
    assert [sweep.n_samples for sweep in recording.sweeps] == [3, 3]
    assert recording.step_ms == pytest.approx(0.1)


@pytest.mark.parametrize(
    ("content", "message"),
    [
        ("time_ms;current_pA;voltage_mV\n0,0;0;-65,1\n", "expected commas"),
        ("time_ms,current_pA,voltage_mV\n0,0,0,-65,1\n", "decimal commas as decimal points"),
        ("PK\x03\x04", "workbook"),
    ],
)
def test_what_the_readme_says_is_refused_is_refused_in_words(
    tmp_path: Path, content: str, message: str
) -> None:
    path = tmp_path / "cell.csv"
    path.write_text(content, encoding="utf-8")
    with pytest.raises(InputError, match=message):
        read_recording(path)


def test_the_error_in_the_guide_is_the_error(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)
    Path("cell.csv").write_text("time_ms,current,voltage_mV\n0,0,-65\n", encoding="utf-8")
    with pytest.raises(InputError, match="has no unit") as caught:
        read_recording("cell.csv")
    assert f"bayesglm: {caught.value}" == block(GUIDE, "text").strip()


def test_the_study_in_the_guide_is_a_study(tmp_path: Path) -> None:
    (tmp_path / "study.toml").write_text(block(GUIDE, "toml"), encoding="utf-8")
    assert read_settings(tmp_path / "study.toml").recording.temperature_C == 33.0
    for name, index in (("cells.csv", 0), ("recordings.csv", 1)):
        (tmp_path / name).write_text(block(GUIDE, "csv", index), encoding="utf-8")
    for name in ("a1_steps.csv", "a1_drug.csv", "a2_noise.csv.gz", "a2_noise2.csv.gz"):
        (tmp_path / name).touch()
    cells = read_study(tmp_path).cells
    assert [(cell.name, cell.condition) for cell in cells] == [
        ("a1", "control"),
        ("a1", "drug"),
        ("a2", ""),
    ]


@pytest.mark.usefixtures("project")
def test_the_python_in_the_guide_runs(capsys: pytest.CaptureFixture[str]) -> None:
    exec(block(GUIDE, "python"), {})
    printed = capsys.readouterr().out
    assert "MΩ" in printed
    assert "passed []" in printed


@pytest.mark.parametrize("page", PAGES[:2], ids=lambda page: page.name)
def test_research_use_is_said(page: Path) -> None:
    text = " ".join(page.read_text(encoding="utf-8").split())
    assert "no basis for clinical decisions" in text
    assert "local rules and licensed practice" in text

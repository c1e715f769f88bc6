"""Study files and assignments: what is understood, and what the message says otherwise."""

from pathlib import Path

import pytest

from bayesglm.errors import InputError
from bayesglm.recording.settings import Settings
from bayesglm.recording.settings_input import add_selection, known_keys, override, read_settings


def read(folder: Path, content: str) -> Settings:
    path = folder / "study.toml"
    path.write_bytes(content.encode())
    return read_settings(path)


def test_every_section(tmp_path: Path) -> None:
    settings = read(
        tmp_path,
        """
        [study]
        name = "Pyramidal cells"
        [recording]
        holding_pA = -20
        holding_included = true
        [recording.select]
        sweeps = "0-4"
        rows.current = "-100:25pA"
        [kernels.input]
        duration_ms = 400
        [kernels.after_spike]
        report_at_ms = [10, 30.5]
        [model]
        spike_window_ms = [-2, 6]
        [sampling]
        seed = 7
        """,
    )
    assert settings.study.name == "Pyramidal cells"
    assert settings.recording.holding_pA == -20
    assert settings.recording.select.rows.current == "-100:25pA"
    assert settings.kernels.after_spike.report_at_ms == (10, 30.5)
    assert settings.model.spike_window_ms == (-2, 6)
    assert settings.priors == Settings().priors


def test_empty_file_and_byte_order_mark(tmp_path: Path) -> None:
    assert read(tmp_path, "") == Settings()
    assert read(tmp_path, "\ufeff[sampling]\nseed = 1\n").sampling.seed == 1


@pytest.mark.parametrize(
    ("content", "message"),
    [
        ("[sampling]\nsead = 1", r"unknown key 'sampling.sead'; did you mean 'sampling.seed'"),
        ("[samplin]\nseed = 1", r"unknown key 'samplin'; did you mean 'sampling'"),
        ("[model]\nseed = 1", r"unknown key 'model.seed'; did you mean 'sampling.seed'"),
        (
            "[kernels.input]\nduration = 1",
            r"'kernels.input.duration'; did you mean 'kernels.input.dur",
        ),
        ("[study]\nnaem = 1", r"unknown key 'study.naem'; did you mean 'study.name'"),
        ("qqq = 1", r"unknown key 'qqq'; the keys are listed"),
        ("[recording.select]\nrows.curent = 'x'", r"did you mean 'recording.select.rows.current'"),
        (
            "[sampling]\nchains = 1",
            r"sampling.chains: found 1; expected greater than or equal to 2",
        ),
        (
            "[sampling]\nchains = '4'",
            r"sampling.chains: found '4'; expected a valid integer \(number",
        ),
        ("[sampling]\nlevel = true", r"sampling.level: found True; expected a valid number"),
        ("[study]\nname = 3", r"study.name: found 3; expected a valid string"),
        ("[recording]\nholding_included = 'yes'", r"found 'yes'; expected a valid boolean"),
        ("[recording]\nspike_moment = 'top'", r"found 'top'; expected 'crossing' or 'peak'"),
        ("[recording]\nholding_pA = nan", r"recording.holding_pA: found nan; expected a finite"),
        (
            "[recording]\nholding_pA = 2020-01-01",
            r"holding_pA: found '2020-01-01'; expected a valid",
        ),
        (
            "[model]\nspike_window_ms = [1, 5]",
            r"model: spike_window_ms is \[1, 5\]; expected \[≤ 0",
        ),
        (
            "[model]\nspike_window_ms = [1]",
            r"model.spike_window_ms: found .*another number of values",
        ),
        (
            "[model]\nspike_window_ms = [1, 2, 3]",
            r"model.spike_window_ms: .*another number of values",
        ),
        ("sampling = 3", r"sampling: found 3; expected a section, written \[sampling\]"),
        (
            "[recording.select]\ncurrent = '1:2'",
            r"recording.select: selection current=1:2: found no un",
        ),
        (
            "[recording.select]\nsweeps = 3",
            r"recording.select.sweeps: found 3; expected a valid string",
        ),
        ("[sampling\nseed = 1", r"this is no TOML: .*line 1"),
        ("seed = 1\nseed = 2", r"this is no TOML"),
    ],
)
def test_refused(tmp_path: Path, content: str, message: str) -> None:
    with pytest.raises(InputError, match=message) as caught:
        read(tmp_path, content)
    assert str(caught.value).startswith(str(tmp_path / "study.toml"))
    assert "\n" not in str(caught.value)


def test_no_text(tmp_path: Path) -> None:
    path = tmp_path / "study.toml"
    path.write_bytes(b"# 20 \xb0C\n")
    with pytest.raises(InputError, match="save it as UTF-8"):
        read_settings(path)


def test_missing(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="cannot be read"):
        read_settings(tmp_path / "study.toml")


def test_override() -> None:
    settings = override(
        Settings(),
        [
            "sampling.seed=3",
            "kernels.input.duration_ms = 400",
            "model.units=sweep",
            "study.name=two words",
            "study.notes='quoted'",
            "recording.holding_included=true",
            "kernels.after_spike.report_at_ms=[10, 20]",
            "recording.select.rows.current=0:5pA",
            "sampling.seed=4",
        ],
    )
    assert settings.sampling.seed == 4
    assert settings.kernels.input.duration_ms == 400
    assert settings.model.units == "sweep"
    assert (settings.study.name, settings.study.notes) == ("two words", "quoted")
    assert settings.recording.holding_included is True
    assert settings.kernels.after_spike.report_at_ms == (10, 20)
    assert settings.recording.select.rows.current == "0:5pA"


@pytest.mark.parametrize(
    ("assignment", "message"),
    [
        ("sampling.seed", r"--set sampling.seed: expected KEY=VALUE"),
        ("sampling.seed=", r"expected KEY=VALUE"),
        ("=3", r"expected KEY=VALUE"),
        ("sampling.sed=3", r"unknown key 'sampling.sed'; did you mean 'sampling.seed'"),
        ("seed=3", r"unknown key 'seed'; did you mean 'sampling.seed'"),
        ("sampling=3", r"sampling is a section; set one of the keys in it"),
        ("sampling.seed=-1", r"--set sampling.seed=-1: sampling.seed: found -1; expected greater"),
        ("sampling.seed=x", r"found 'x'; expected a valid integer"),
        ("sampling.seed=1\nchains=2", r"found '1\\nchains=2'; expected a valid integer"),
        ("recording.select.rate=5", r"recording.select.rate: found 5; expected a valid string"),
        ("recording.select.rate=0:5", r"selection rate=0:5: found no unit"),
    ],
)
def test_override_refused(assignment: str, message: str) -> None:
    with pytest.raises(InputError, match=message):
        override(Settings(), [assignment])


def test_add_selection_keeps_what_is_selected() -> None:
    settings = override(Settings(), ["recording.select.current=-100:50pA"])
    assert add_selection(settings, []) is settings
    selection = add_selection(settings, ["current=0:pA", "sweeps=1"]).recording.select
    assert (selection.current, selection.sweeps) == ("0:50pA", "1")


def test_known_keys_name_sections_and_keys() -> None:
    names = [name for name, _ in known_keys()]
    assert len(names) == len(set(names))
    assert {"model", "model.row_ms", "recording.select.rows.voltage"} <= set(names)

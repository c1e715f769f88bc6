"""``bayesglm fit``: bad input is one line and nothing written; good input fills the folder."""

from __future__ import annotations

import csv
import json
import re
from collections.abc import Callable
from pathlib import Path

import arviz_base
import arviz_stats
import numpy as np
import pytest
import xarray as xr
from csv_rows import HEADER, rows_of

from bayesglm.report.tables import FEATURE_COLUMNS, KERNEL_COLUMNS

FAST = ("--set", "sampling.draws=100", "--set", "sampling.warmup=100")


def lines_with(row: int, text: str) -> list[str]:
    """A plain recording with one row replaced; the header is row 1."""
    lines = [HEADER, *rows_of()]
    lines[row - 1] = text
    return lines


BAD_FILES: dict[str, tuple[list[str], str]] = {
    "empty file": ([], "empty"),
    "header only": ([HEADER], "no rows|no data|header"),
    "no unit": (["time,current_pA,voltage_mV", *rows_of()], "'time' has no unit; expected time_ms"),
    "unknown unit": (["time_ms,current_uA,voltage_mV", *rows_of()], "unknown unit 'uA'"),
    "duplicate column": (["time_ms,current_pA,current_pA", *rows_of()], "current_pA"),
    "no current": (
        ["time_ms,voltage_mV", *(",".join(r.split(",")[::2]) for r in rows_of())],
        "current",
    ),
    "ragged row": (lines_with(10, "8,100"), "row 10"),
    "non-numeric value": (lines_with(12, "10,fast,-65"), "row 12.*current_pA.*'fast'"),
    "NaN run": (
        [HEADER, *(r if not 20 <= i < 30 else f"{i},100," for i, r in enumerate(rows_of()))],
        "row 22",
    ),
    "jump in time": (
        [HEADER, *(r for i, r in enumerate(rows_of()) if not 50 <= i < 60)],
        "row 52",
    ),
    "constant current": (
        [HEADER, *(f"{i},100,{-65 + 0.1 * (i % 7):.2f}" for i in range(3000))],
        "current never varies",
    ),
    "spike column": (
        [HEADER + ",spike", *(f"{r},{2 if i == 5 else 0}" for i, r in enumerate(rows_of()))],
        "row 7.*spike.*0 or 1",
    ),
}


@pytest.mark.parametrize("case", BAD_FILES)
def test_bad_file_is_one_line_and_nothing_written(
    case: str, program: Callable, write: Callable, tmp_path: Path
) -> None:
    lines, message = BAD_FILES[case]
    path = write(lines) if lines else tmp_path / "cell.csv"
    if not lines:
        path.write_bytes(b"")
    ran = program("fit", path, "--out", tmp_path / "out")
    assert ran.code == 2
    assert ran.err.count("\n") == 1, ran.err
    assert str(path) in ran.err
    assert re.search(message, ran.err), ran.err
    assert not (tmp_path / "out").exists()


def test_missing_file_directory_and_junk(program: Callable, tmp_path: Path) -> None:
    junk = tmp_path / "junk.csv"
    junk.write_bytes(bytes(range(256)) * 40)
    folder = tmp_path / "folder"
    folder.mkdir()
    for path in (tmp_path / "missing.csv", junk, folder):
        ran = program("fit", path, "--out", tmp_path / "out")
        assert ran.code == 2
        assert ran.err.count("\n") == 1, ran.err
        assert path.name in ran.err
        assert "Traceback" not in ran.err
    assert not (tmp_path / "out").exists()


def test_kernel_longer_than_the_recording(
    program: Callable, write: Callable, tmp_path: Path
) -> None:
    path = write([HEADER, *rows_of()])
    for key in ("input", "after_spike"):
        setting = f"kernels.{key}.duration_ms=5000"
        ran = program("fit", path, "--set", setting, "--out", tmp_path / "out")
        assert ran.code == 2
        assert f"kernels.{key}.duration_ms is 5000 ms" in ran.err
        assert "3000 ms" in ran.err
    assert not (tmp_path / "out").exists()


def test_two_cells_of_one_name_and_unknown_key(
    program: Callable, write: Callable, tmp_path: Path
) -> None:
    (tmp_path / "a").mkdir()
    first, second = write([HEADER, *rows_of()]), tmp_path / "a" / "cell.csv"
    second.write_text(first.read_text())
    ran = program("fit", first, second, "--out", tmp_path / "out")
    assert ran.code == 2
    assert "cell" in ran.err
    assert ran.err.count("\n") == 1
    ran = program("fit", first, "--set", "kernels.input.duratoin_ms=50", "--out", tmp_path / "out")
    assert ran.code == 2
    assert "kernels.input.duration_ms" in ran.err
    study = tmp_path / "study.toml"
    study.write_text("[kernels.input]\nduratoin_ms = 50\n")
    (tmp_path / "cells.csv").write_text("cell,class,animal\nx,a,b\n")
    (tmp_path / "recordings.csv").write_text("cell,file\nx,cell.csv\n")
    ran = program("fit", study, "--out", tmp_path / "out")
    assert ran.code == 2
    assert "study.toml" in ran.err
    assert "duration_ms" in ran.err
    assert not (tmp_path / "out").exists()


def test_full_folder_is_refused_and_kept(
    program: Callable, write: Callable, tmp_path: Path
) -> None:
    out = tmp_path / "out"
    out.mkdir()
    (out / "mine.txt").write_text("mine")
    ran = program("fit", write([HEADER, *rows_of()]), "--out", out)
    assert ran.code == 2
    assert "is not empty" in ran.err
    assert [p.name for p in out.iterdir()] == ["mine.txt"]


@pytest.fixture(scope="module")
def fitted(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The results folder of a recording without spikes, fitted by the program."""
    import sys

    from bayesglm.cli.main import run

    folder = tmp_path_factory.mktemp("fitted")
    path = folder / "cell.csv"
    path.write_text("\n".join([HEADER, *rows_of(12_000)]) + "\n")
    arguments = ["bayesglm", "fit", str(path), "--out", str(folder / "out"), "--quiet", *FAST]
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(sys, "argv", arguments)
        with pytest.raises(SystemExit) as stop:
            run()
    assert stop.value.code == 0
    return folder / "out"


def test_folder_has_the_agreed_files_and_columns(fitted: Path) -> None:
    cell = fitted / "cells" / "cell"
    names = {p.name for p in cell.iterdir()}
    assert names == {
        "posterior.nc", "kernels.csv", "features.csv", "verdict.json", "digest.npz", "figures",
        "durations.csv",
    }  # fmt: skip
    with (cell / "kernels.csv").open(encoding="utf-8") as file:
        kernels = list(csv.DictReader(file))
    assert tuple(kernels[0]) == KERNEL_COLUMNS
    assert {row["kernel"] for row in kernels} == {"input", "electrode"}
    with (cell / "features.csv").open(encoding="utf-8") as file:
        features = {row["feature"]: row for row in csv.DictReader(file)}
    assert tuple(features["offset"]) == FEATURE_COLUMNS
    # The membrane of `rows_of` has 80 MΩ and 15 ms, and answers in the same sample with a
    # fifteenth of that, which is the electrode term; κ is the rest.
    for name, truth in (("input_resistance", 80 * 14 / 15), ("electrode_resistance", 80 / 15)):
        sd = float(features[name]["sd"])
        assert abs(float(features[name]["mean"]) - truth) < 3 * sd, name
    verdict = json.loads((cell / "verdict.json").read_text(encoding="utf-8"))
    assert verdict["spikes"] == 0
    assert any("after-spike kernel is left out" in note for note in verdict["warnings"])
    assert all(r["command"] for r in verdict["reasons"] if r["verdict"] != "passed")
    with (fitted / "summary.csv").open(encoding="utf-8") as file:
        summary = next(csv.DictReader(file))
    assert summary["cell"] == "cell"
    assert summary["verdict"] == verdict["verdict"]
    assert float(summary["offset_mean"]) == float(features["offset"]["mean"])
    lock = json.loads((fitted / "study.lock.json").read_text(encoding="utf-8"))
    assert lock["settings"]["sampling"]["draws"] == 100


def test_posterior_opens_in_xarray_and_arviz(fitted: Path) -> None:
    path = fitted / "cells" / "cell" / "posterior.nc"
    with xr.open_datatree(path) as tree:
        posterior = tree["posterior"].to_dataset()
        assert posterior["offset"].shape == (4, 100)
        splines = tree["constant_data"]["input_splines"]
        curve = (posterior["input_weights"] @ splines).mean(("chain", "draw"))
        with (fitted / "cells" / "cell" / "kernels.csv").open(encoding="utf-8") as file:
            table = [float(r["mean"]) for r in csv.DictReader(file) if r["kernel"] == "input"]
        np.testing.assert_allclose(curve, table, rtol=1e-6, atol=1e-8)
        summary = arviz_stats.summary(arviz_base.convert_to_datatree(tree), var_names=["offset"])
    assert float(summary["mean"].iloc[0]) == pytest.approx(
        float(posterior["offset"].mean()), abs=0.1
    )


def test_same_seed_same_bits_other_seed_other_draws(
    program: Callable, write: Callable, tmp_path: Path
) -> None:
    path = write([HEADER, *rows_of(6000)])
    for name, seed in (("a", 1), ("b", 1), ("c", 2)):
        ran = program("fit", path, "--out", tmp_path / name, "-q", "--seed", seed, *FAST)
        assert ran.code in (0, 3)
    read = {n: (tmp_path / n / "cells/cell/kernels.csv").read_bytes() for n in "abc"}
    assert read["a"] == read["b"]
    assert read["a"] != read["c"]


def test_json_holds_the_verdict_and_exit_3_where_it_failed(
    program: Callable, write: Callable, tmp_path: Path
) -> None:
    # 3 s cut into blocks of 1 s: three units are too few to tell their own spread.
    ran = program("fit", write([HEADER, *rows_of()]), "--out", tmp_path / "out", "--json", *FAST)
    content = json.loads(ran.out)
    assert content["verdict"] == "failed"
    assert ran.code == 3
    units = next(r for r in content["cells"][0]["reasons"] if r["check"] == "units")
    assert units["verdict"] == "failed"

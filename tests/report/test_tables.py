"""Tables: numbers survive, blanks stay blank, nothing half-written is left behind."""

from __future__ import annotations

import csv
import json
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from bayesglm.inference.results import CellFit
from bayesglm.inference.sensitivity import Sensitivity
from bayesglm.likelihood.digest import VoltageDigest
from bayesglm.report import tables


def test_kernels_and_features_hold_the_fit(linear_fit: CellFit, tmp_path: Path) -> None:
    folder = tables.write_cell(linear_fit, tmp_path)
    with (folder / "kernels.csv").open(encoding="utf-8") as file:
        rows = [row for row in csv.DictReader(file) if row["kernel"] == "after_spike"]
    band = linear_fit.kernel("after_spike")
    written = np.array([float(row["mean"]) if row["mean"] else np.nan for row in rows])
    np.testing.assert_allclose(written, band.mean, rtol=1e-8)
    # Inside the spike window nothing is known: the fields are empty, not zero.
    assert all(row["mean"] == "" for row in rows if float(row["lag_ms"]) <= 5.0)
    with (folder / "features.csv").open(encoding="utf-8") as file:
        features = {row["feature"]: row for row in csv.DictReader(file)}
    resistance = linear_fit.feature("input_resistance")
    assert float(features["input_resistance"]["lower"]) == pytest.approx(resistance.lower)
    assert list(features) == [feature.name for feature in linear_fit.features]


def test_digest_is_read_back(linear_fit: CellFit, tmp_path: Path) -> None:
    folder = tables.write_cell(linear_fit, tmp_path)
    read = VoltageDigest.load(folder / "digest.npz")
    np.testing.assert_array_equal(read.gram, linear_fit.digest.gram)
    assert read.design == linear_fit.design


def test_summary_and_lock_name_every_cell(linear_fit: CellFit, tmp_path: Path) -> None:
    tables.write_study([linear_fit], tmp_path)
    assert sorted(path.name for path in tmp_path.iterdir()) == ["study.lock.json", "summary.csv"]
    with (tmp_path / "summary.csv").open(encoding="utf-8") as file:
        (row,) = csv.DictReader(file)
    assert row["verdict"] == linear_fit.verdict.verdict
    assert float(row["offset_mean"]) == pytest.approx(linear_fit.feature("offset").mean)
    lock = json.loads((tmp_path / "study.lock.json").read_text(encoding="utf-8"))
    assert set(lock["cells"]) == {linear_fit.name}
    assert lock["versions"]["jax"]


def test_a_failed_write_leaves_nothing(
    linear_fit: CellFit, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    def full_disk(*_: object) -> None:
        raise OSError("no space left on device")

    monkeypatch.setattr(VoltageDigest, "save", full_disk)
    with pytest.raises(OSError, match="no space"):
        tables.write_cell(linear_fit, tmp_path)
    assert list((tmp_path / "cells").iterdir()) == []


def test_other_choices_are_written_in_full(linear_fit: CellFit, tmp_path: Path) -> None:
    folder = tables.write_cell(linear_fit, tmp_path)
    grid, windows = linear_fit.sensitivity.durations, linear_fit.sensitivity.windows
    assert grid is not None
    assert windows is not None
    with (folder / "durations.csv").open(encoding="utf-8") as file:
        rows = list(csv.DictReader(file))
    assert len(rows) == grid.held_out_mV2.size
    (chosen,) = (row for row in rows if row["chosen"] == "1")
    assert float(chosen["input_ms"]) == pytest.approx(grid.input_ms[grid.chosen[0]])
    assert float(chosen["after_spike_ms"]) == pytest.approx(grid.after_spike_ms[grid.chosen[1]])
    np.testing.assert_allclose(
        [float(row["held_out_mV2"]) for row in rows], grid.held_out_mV2.ravel(), rtol=1e-8
    )
    np.testing.assert_allclose(
        [float(row["after_spike_at_30ms_sd"]) for row in rows],
        grid.features["after_spike_at_30ms"][1].ravel(),
        rtol=1e-8,
    )
    with (folder / "spike_window.csv").open(encoding="utf-8") as file:
        ends = {float(row["window_end_ms"]): row for row in csv.DictReader(file)}
    assert list(ends) == windows.ends_ms.tolist()
    assert ends[5.0]["chosen"] == "1"
    # Inside the window nothing is known: empty, not zero.
    assert ends[10.0]["after_spike_at_10ms_mean"] == ""
    at_20ms = windows.features["after_spike_at_20ms"][0][0]
    assert float(ends[3.0]["after_spike_at_20ms_mean"]) == pytest.approx(at_20ms)


def test_choices_that_were_not_varied_are_not_written(linear_fit: CellFit, tmp_path: Path) -> None:
    folder = tables.write_cell(replace(linear_fit, sensitivity=Sensitivity()), tmp_path)
    assert not (folder / "durations.csv").exists()
    assert not (folder / "spike_window.csv").exists()

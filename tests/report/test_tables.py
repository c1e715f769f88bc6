"""Tables: numbers survive, blanks stay blank, nothing half-written is left behind."""

from __future__ import annotations

import csv
import json
from pathlib import Path

import numpy as np
import pytest

from bayesglm.inference.results import CellFit
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

"""``bayesglm demo``: from nothing to a report beside the known truth."""

from __future__ import annotations

import json
from collections.abc import Callable
from pathlib import Path

import pytest


@pytest.mark.slow
def test_demo_finds_what_it_was_made_from(program: Callable, tmp_path: Path) -> None:
    ran = program("demo", "--out", tmp_path / "demo", "--json")
    assert ran.code == 0
    content = json.loads(ran.out)
    assert Path(content["report"]).is_file()
    cells = {cell["cell"]: cell for cell in content["cells"]}
    assert len(cells) == 6
    for cell in cells.values():
        features = {one["name"]: one["mean"] for one in cell["features"]}
        bump = features["after_spike_peak_probability"]
        assert bump > 0.9 if cell["class"] == "interneuron" else bump < 0.15
    # "all cells: 25 of 30 features …": binomial with 0.9 gives fewer than 20 once in 10⁴.
    inside = int(content["lines"][-1].split()[2])
    assert inside >= 20


def test_demo_refuses_a_full_folder(program: Callable, tmp_path: Path) -> None:
    (tmp_path / "mine.txt").write_text("mine")
    ran = program("demo", "--out", tmp_path)
    assert ran.code == 2
    assert "is not empty" in ran.err

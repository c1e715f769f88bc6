"""The studies' machinery: same results whatever the workers, results kept, tables with errors."""

from __future__ import annotations

from dataclasses import replace
from functools import partial
from pathlib import Path

import numpy as np
import pytest
import study_runs
from study_runs import (
    Found,
    Plan,
    column,
    mean_with_error,
    provenance,
    rows_of,
    run_all,
    stream,
    table,
    with_error,
)


def draw(seed: int, number: int) -> Found:
    """A stand-in for a fit."""
    return {"x": stream(seed, "draw", number).normal(), "number": number}


def fail(number: int) -> Found:
    """A recording that must not be made again."""
    raise AssertionError(f"recording {number} was made again")


def test_results_do_not_depend_on_the_workers() -> None:
    plan = Plan(recordings=5, seed=3)
    work = partial(draw, plan.seed)
    assert run_all("draw", work, plan) == run_all("draw", work, replace(plan, workers=2))


def test_streams_are_those_of_a_spawned_generator() -> None:
    """Recording k is the same whether five or five hundred are made."""
    spawned = np.random.default_rng([7, *b"name"]).spawn(5)
    for k, one in enumerate(spawned):
        assert stream(7, "name", k).normal() == one.normal()
    assert stream(7, "name", 0).normal() != stream(7, "other", 0).normal()
    assert stream(7, "name", 0).normal() != stream(8, "name", 0).normal()


def test_an_interrupted_study_goes_on(tmp_path: Path) -> None:
    plan = Plan(recordings=3, store=tmp_path)
    first = run_all("draw", partial(draw, 3), plan)
    assert run_all("draw", fail, plan) == first
    # Cut off in the middle of a line: that recording is made again, the others are not.
    (path,) = tmp_path.iterdir()
    path.write_text(path.read_text(encoding="utf-8")[:-9], encoding="utf-8")
    made: list[int] = []

    def watched(number: int) -> Found:
        made.append(number)
        return draw(3, number)

    assert run_all("draw", watched, plan) == first
    assert made == [2]
    assert run_all("draw", fail, plan) == first


def test_nothing_is_taken_over_from_other_code(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    plan = Plan(recordings=2, store=tmp_path)
    run_all("draw", partial(draw, 3), plan)
    for change in (replace(plan, seed=9), plan):
        if change is plan:
            monkeypatch.setattr(study_runs, "code_hash", lambda: "00000000")
        with pytest.raises(AssertionError, match="was made again"):
            run_all("draw", fail, change)


def test_shares_have_their_monte_carlo_error() -> None:
    """18 of 20: 68.30–98.77 %, Clopper & Pearson (1934), from the beta distribution's quantiles.

    Shares of lags have the normal interval: mean 0.9, sd 0.1, n = 4.
    """
    assert with_error([1.0] * 18 + [0.0] * 2) == "90 % (68–99)"
    assert with_error([1.0] * 10) == "100 % (69–100)"
    assert with_error([0.8, 0.8, 1.0, 1.0 - 1e-9]) == "90 % (79–100)"
    assert with_error([0.5, np.nan, 0.7]) == "60 % (40–80)"
    assert with_error([0.5]) == "–"
    assert mean_with_error(np.array([1.0, 2.0, 3.0])) == "2.00 ± 0.58"


def test_tables_are_markdown() -> None:
    found = [{"a": 1.0, "b": [1.0, 2.0]}, {"a": 0.0, "b": [3.0, 4.0]}]
    assert column(found, "b").shape == (2, 2)
    text = table(["", "cells"], rows_of({"share": "a"}, {"cells": found}))
    assert text.splitlines()[1:] == ["| --- | --- |", "| share | 50 % (1–99) |"]


def test_provenance_names_seed_versions_and_date() -> None:
    told = provenance("/somewhere/coverage_study.py", Plan(3, seed=11), "Three")
    assert "seed 11" in told
    assert "`tests/studies/coverage_study.py`" in told
    assert "/somewhere" not in told
    for name in ("bayesglm", "jax", "numpy", study_runs.code_hash()):
        assert name in told

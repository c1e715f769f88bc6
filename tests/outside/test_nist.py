"""Certified regression results of the NIST Statistical Reference Datasets.

Data and certified values: `tests/data`, from NIST/ITL. The digest forms Gram matrices and so
works with the square of the condition number; the slow twin factorises the rows.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from bayesglm.kernels.basis import KernelSpec
from bayesglm.kernels.design import VoltageDesign
from bayesglm.likelihood import reference
from bayesglm.likelihood.least_squares import LeastSquares, column_scale, least_squares
from bayesglm.likelihood.voltage import row_digest

DATA = Path(__file__).resolve().parents[1] / "data"
DEGREES = {"Norris": 1, "Pontius": 2, "Filip": 10} | {f"Wampler{k}": 5 for k in range(1, 6)}


def load(name: str) -> tuple[np.ndarray, np.ndarray]:
    """Columns, the first of them one, and values of a set."""
    if name == "Longley":
        table = pd.read_csv(DATA / "longley.csv", comment="#").astype(float)
        return np.column_stack([np.ones(len(table)), table.iloc[:, 1:]]), table["y"].to_numpy()
    table = pd.read_csv(DATA / "nist_strd_data.csv", comment="#")
    table = table[table["dataset"] == name]
    x = np.vander(table["x"].to_numpy(float), DEGREES[name] + 1, increasing=True)
    return x, table["y"].to_numpy(float)


def certified(name: str) -> tuple[np.ndarray, np.ndarray, float]:
    """Coefficients, their sds and the residual sd."""
    table = pd.read_csv(DATA / "nist_strd_certified.csv", comment="#")
    table = table[table["dataset"] == name].set_index("param")
    names = [param for param in table.index if param.startswith("b")]
    rows = table.loc[names]
    rsd = float(table.loc["rsd", "estimate"])  # type: ignore[arg-type]
    return rows["estimate"].to_numpy(float), rows["sd"].to_numpy(float), rsd


def from_digest(name: str) -> LeastSquares:
    """Flat prior, scaled columns, units of five rows."""
    x, y = load(name)
    design = VoltageDesign(KernelSpec(100.0), None)
    digest = row_digest(x, y, np.arange(len(y)) // 5, np.zeros(len(y), dtype=np.int64), design)
    return least_squares(digest, column_scale(digest))


def worst(found: np.ndarray, expected: np.ndarray) -> float:
    """Largest relative error."""
    return float(np.max(np.abs(found / expected - 1)))


@pytest.mark.parametrize(
    ("name", "tolerance"),
    [
        ("Norris", 1e-9),
        ("Pontius", 1e-9),
        ("Wampler2", 1e-8),
        ("Longley", 1e-5),
        ("Wampler1", 1e-5),
        ("Wampler3", 1e-5),
        ("Wampler4", 1e-5),
        ("Wampler5", 1e-5),
    ],
)
def test_coefficients_of_the_digest(name: str, tolerance: float) -> None:
    fit = from_digest(name)
    expected, sd, rsd = certified(name)
    assert fit.lost.shape[1] == 0
    assert worst(fit.weights, expected) < tolerance
    if rsd > 0:
        assert np.sqrt(fit.residual_variance) == pytest.approx(rsd, rel=1e-6)
        assert worst(np.sqrt(np.diagonal(fit.white_covariance)), sd) < 1e-6


def test_what_the_digest_cannot_tell_is_told() -> None:
    """Filip: a scaled condition number of 5·10⁹ squares to beyond double precision."""
    fit = from_digest("Filip")
    assert (fit.rank, fit.lost.shape) == (7, (11, 4))
    # The lost directions are those the columns hardly tell apart, and nothing else is lost.
    x, _ = load("Filip")
    norms = np.linalg.norm(x, axis=0)
    values = np.linalg.svd(x / norms, compute_uv=False)
    assert np.count_nonzero(values**2 > 1e-10 * values[0] ** 2) == fit.rank
    lost = fit.lost * norms[:, None]
    seen = np.linalg.norm((x / norms) @ lost, axis=0) / np.linalg.norm(lost, axis=0)
    assert seen.max() < 1.1e-5 * values[0]


@pytest.mark.parametrize(
    ("name", "coefficients", "sds"),
    [
        ("Norris", 1e-10, 1e-10),
        ("Pontius", 1e-9, 1e-8),
        ("Longley", 1e-8, 1e-8),
        ("Wampler1", 1e-8, None),
        ("Wampler2", 1e-8, None),
        ("Wampler3", 1e-7, 1e-10),
        ("Wampler4", 1e-6, 1e-10),
        ("Wampler5", 1e-5, 1e-10),
        ("Filip", 1e-5, 1e-5),
    ],
)
def test_coefficients_and_sds_of_the_slow_twin(
    name: str, coefficients: float, sds: float | None
) -> None:
    x, y = load(name)
    one = np.zeros(len(y), dtype=np.int64)
    rows = reference.Rows(x, y, np.ones((len(y), 1)), one, one)
    expected, sd, rsd = certified(name)
    weights, _, variance = reference.estimate(rows)
    assert worst(weights, expected) < coefficients
    if sds is None:
        assert np.sqrt(variance) < 1e-8
    else:
        assert np.sqrt(variance) == pytest.approx(rsd, rel=max(sds, 1e-9))
        assert worst(np.sqrt(np.diagonal(reference.white_covariance(rows))), sd) < sds

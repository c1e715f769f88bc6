"""Fits that the tests of the report share."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path

import pytest
from made_fit import make_fit

from bayesglm.inference.results import CellFit
from bayesglm.report import style
from bayesglm.report.figures import save_figures


@pytest.fixture(scope="session")
def fit() -> CellFit:
    """Return the fit of simulated current steps with spikes."""
    return make_fit()


@pytest.fixture(scope="session")
def quiet_fit() -> CellFit:
    """Return the fit of simulated current steps without spikes."""
    return make_fit(spikes=False)


@pytest.fixture(scope="session")
def noise_fit() -> CellFit:
    """Return the fit of a fluctuating current."""
    return make_fit(protocol="noise")


@pytest.fixture
def styled() -> Iterator[None]:
    """Draw as reports do: titles stand left only in this style."""
    with style.styled():
        yield


@pytest.fixture(scope="session")
def saved(fit: CellFit, tmp_path_factory: pytest.TempPathFactory) -> dict[str, Path]:
    """Return the saved figures of `fit`."""
    return save_figures(fit, tmp_path_factory.mktemp("figures"))

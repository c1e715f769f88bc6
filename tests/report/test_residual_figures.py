from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from bayesglm.inference.results import CellFit
from bayesglm.report.residual_figures import residual_spectrum


def test_white_noise_lies_on_its_level(fit: CellFit) -> None:
    least = replace(fit.calibration.fit, residual_variance=4.0)
    flat = replace(fit.calibration, spectrum=np.full_like(fit.calibration.spectrum, 4.0), fit=least)
    edges, density, white = residual_spectrum(replace(fit, calibration=flat))
    np.testing.assert_allclose(density, white)
    # One-sided: the density times the width of the spectrum is the variance.
    assert white * edges[-1] == pytest.approx(4.0)


def test_the_power_is_the_residual_variance(noise_fit: CellFit) -> None:
    edges, density, _ = residual_spectrum(noise_fit)
    power = np.sum(density * np.diff(edges)) + density[0] * edges[0]
    assert power == pytest.approx(noise_fit.calibration.fit.residual_variance, rel=0.2)


def test_an_empty_band_joins_the_next(fit: CellFit) -> None:
    spectrum = fit.calibration.spectrum.copy()
    spectrum[3] = 0.0
    holed = replace(fit, calibration=replace(fit.calibration, spectrum=spectrum))
    edges, density, _ = residual_spectrum(holed)
    assert len(edges) == len(density) + 1
    assert np.all(density > 0)
    assert np.all(np.diff(edges) > 0)

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from drawn import histogram_of, x_of, y_of

from bayesglm.checks.residuals import ResidualMoments, residual_moments
from bayesglm.inference.results import CellFit
from bayesglm.report.predicted import centred_residuals, predict_sweeps
from bayesglm.report.residual_figures import (
    draw_residual_distribution,
    moments_in_words,
    residual_spectrum,
)


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


def test_the_histogram_is_that_of_the_residual(fit: CellFit) -> None:
    rows = list(predict_sweeps(fit).values())
    residuals = centred_residuals(rows, fit)
    pooled = np.concatenate(residuals)
    pooled = pooled[np.isfinite(pooled)]
    axes = draw_residual_distribution(fit, rows, 180.0).axes[0]
    values, edges = histogram_of(axes)
    assert np.sum(values * np.diff(edges)) == pytest.approx(1.0, abs=1e-3)
    assert (edges[0], edges[-1]) == pytest.approx((pooled.min(), pooled.max()))
    normal = next(line for line in axes.get_lines() if "normal" in str(line.get_label()))
    # The greatest density of a normal is 1/(sd·√2π).
    highest = 1 / (pooled.std() * np.sqrt(2 * np.pi))
    assert max(y_of(normal)) == pytest.approx(highest, rel=0.01)
    assert axes.get_yscale() == "log"
    assert axes.get_xlabel() == "Residual (mV)"
    assert axes.get_ylabel() == "Density (1/mV)"


@pytest.mark.parametrize("width_mm", [85.0, 180.0])
def test_moments_and_events_are_told_in_the_panel(fit: CellFit, width_mm: float) -> None:
    rows = list(predict_sweeps(fit).values())
    found = residual_moments(centred_residuals(rows, fit), fit.design.row_ms)
    axes = draw_residual_distribution(fit, rows, width_mm).axes[0]
    (text,) = [text.get_text() for text in axes.texts]
    assert text == "\n".join(moments_in_words(found))
    limits = [x_of(line)[0] for line in axes.get_lines()[1:3]]
    assert limits == pytest.approx(found.limits)


def test_moments_in_words() -> None:
    found = ResidualMoments(2.068, 1.45, -0.2, 1.213, 4.87, 31, 1, 20.0)
    assert moments_in_words(found) == (
        "sd 2.07 mV, robust sd 1.45 mV",
        "skewness 1.21, excess kurtosis 4.9",
        "above 5.6 mV: 31 events (1.6/s)",
        "below −6.0 mV: 1 event (0.05/s)",
    )

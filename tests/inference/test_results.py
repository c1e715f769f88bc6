"""What a fit returns: look-ups that help, immutability, and the order of reasons."""

from __future__ import annotations

from dataclasses import FrozenInstanceError, fields, replace

import numpy as np
import pytest

from bayesglm.inference.results import Band, CellFit, Verdict, finite_or_none
from bayesglm.verdict import Reason


def test_names_of_cell_and_condition(linear_fit: CellFit) -> None:
    assert linear_fit.name == "simulated"
    assert replace(linear_fit, condition="drug").name == "simulated@drug"


def test_unknown_names_are_answered_with_those_there_are(linear_fit: CellFit) -> None:
    assert linear_fit.kernel("input").kernel == "input"
    assert linear_fit.feature("offset").unit == "mV"
    with pytest.raises(KeyError, match="no kernel 'threshold' in this fit; it has input, after_sp"):
        linear_fit.kernel("threshold")
    with pytest.raises(KeyError, match=r"no feature 'tau' in this fit; it has input_resistance, "):
        linear_fit.feature("tau")


def test_results_are_immutable(linear_fit: CellFit) -> None:
    with pytest.raises(FrozenInstanceError):
        linear_fit.cell = "other"  # type: ignore[misc]
    with pytest.raises(FrozenInstanceError):
        linear_fit.features[0].mean = 0.0  # type: ignore[misc]


def test_mean_weights_are_the_mean_over_all_draws(linear_fit: CellFit) -> None:
    flat = linear_fit.weights.reshape(-1, linear_fit.design.n_weights)
    np.testing.assert_allclose(linear_fit.mean_weights, flat.mean(axis=0))
    offset = linear_fit.feature("offset")
    assert linear_fit.mean_weights[0] == pytest.approx(offset.mean)


def test_every_array_of_a_band_has_the_shape_of_its_lags(linear_fit: CellFit) -> None:
    for band in linear_fit.kernels.values():
        for one in fields(Band):
            value = getattr(band, one.name)
            if isinstance(value, np.ndarray):
                assert value.shape == band.lags_ms.shape, (band.kernel, one.name)


def test_no_estimate_travels_without_its_interval_and_monte_carlo_error(
    linear_fit: CellFit,
) -> None:
    for feature in linear_fit.features:
        if feature.name == "after_spike_peak_probability":
            assert 0 <= feature.mean <= 1
            assert np.isnan([feature.sd, feature.lower, feature.upper]).all()
            continue
        if np.isnan(feature.mean):
            # A peak that does not exist has no interval either.
            assert feature.name.startswith(("after_spike_peak", "after_spike_minimum_time"))
            assert np.isnan([feature.sd, feature.lower, feature.upper, feature.mcse_mean]).all()
            continue
        assert feature.lower <= feature.mean <= feature.upper
        if feature.sd > 0:
            assert feature.ess_bulk > 100
            assert feature.mcse_mean < 0.2 * feature.sd


def test_open_reasons_stand_worst_first() -> None:
    reasons = tuple(
        Reason(name, "", verdict=verdict)
        for name, verdict in [("a", "caution"), ("b", "passed"), ("c", "failed"), ("d", "caution")]
    )
    verdict = Verdict("failed", reasons, "voltage", 5, 5.0, {}, "", 1.0, 1.0, 0, 0, 0)
    assert [reason.check for reason in verdict.open_reasons] == ["c", "a", "d"]


@pytest.mark.parametrize("value", [float("nan"), float("inf"), np.float64("-inf")])
def test_json_has_no_nan(value: float) -> None:
    assert finite_or_none(value) is None
    assert finite_or_none(np.float64(1.5)) == 1.5


def test_the_simultaneous_band_says_over_which_lags_it_holds(linear_fit: CellFit) -> None:
    """From the window's end; lags pinned to zero by construction are left out."""
    for name in ("input", "after_spike"):
        band = linear_fit.kernel(name)
        first, last = band.simultaneous_range_ms
        held = (band.lags_ms >= first) & (band.lags_ms <= last)
        assert np.nanmin(band.sd[held]) > 0
        assert band.sd[np.flatnonzero(held)[-1]] > 0.02 * np.nanmax(band.sd)
        assert np.all(~(band.sd[band.lags_ms > last] > 0.02 * np.nanmax(band.sd)))
    assert linear_fit.kernel("after_spike").simultaneous_range_ms[0] == 5.5
    blank = np.full_like(band.sd, np.nan)
    assert np.isnan(replace(band, sd=blank).simultaneous_range_ms).all()

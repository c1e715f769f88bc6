"""Bands and features of a fit, and what the ranges of drive add to them."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.stats import norm

from bayesglm.checks.splits import between_sd
from bayesglm.features import feature_draws
from bayesglm.fitting.posterior import Posterior
from bayesglm.fitting.summary import Summary, summarise
from bayesglm.inference.results import CellFit
from bayesglm.recording.settings import Settings


@pytest.fixture(scope="module")
def posterior(linear_fit: CellFit) -> Posterior:
    fit = linear_fit
    return Posterior(fit.design, fit.prior, 0.5, fit.chains, fit.weights)


@pytest.fixture(scope="module")
def summary(posterior: Posterior, linear_fit: CellFit) -> Summary:
    return summarise(posterior, linear_fit.digest, linear_fit.calibration, Settings())


def test_features_are_means_and_quantiles_of_their_draws(
    summary: Summary, posterior: Posterior
) -> None:
    drawn = feature_draws(posterior.flat, posterior.design, 0.5, (30.0,))
    assert [one.name for one in summary.features] == [*drawn, "noise_sd"]
    for feature in summary.features:
        if feature.name in drawn and np.isfinite(feature.sd):
            draws = drawn[feature.name].draws
            assert feature.mean == draws.mean()
            assert feature.sd == draws.std(ddof=1)
            np.testing.assert_allclose(
                [feature.lower, feature.upper], np.quantile(draws, [0.05, 0.95])
            )
            assert feature.mcse_mean == pytest.approx(
                feature.sd / np.sqrt(feature.ess_bulk), rel=0.3
            ) or (feature.sd == 0)


def test_noise_sd_has_an_interval_around_the_truth(summary: Summary) -> None:
    noise = next(one for one in summary.features if one.name == "noise_sd")
    assert abs(noise.mean - 0.7) < 4 * noise.sd
    assert 0.002 < noise.sd < 0.05


def test_every_kernel_is_split_into_three_ranges(summary: Summary, linear_fit: CellFit) -> None:
    """Forty blocks of a stationary current: thirteen or fourteen a range, told by rate."""
    for kernel in ("input", "after_spike"):
        ranges = summary.splits[kernel].ranges
        units = np.concatenate([one.units for one in ranges])
        assert [len(one.units) for one in ranges] == [14, 13, 13]
        assert len(set(units.tolist())) == 40
        assert all(one.label.endswith(" Hz") for one in ranges)
        assert summary.splits[kernel].disagreement < 3
    rates = linear_fit.digest.spikes / linear_fit.digest.seconds
    by_range = [rates[one.units] for one in summary.splits["input"].ranges]
    assert by_range[0].max() <= by_range[1].min() <= by_range[1].max() <= by_range[2].min()


def test_protocol_columns_are_the_hull_of_interval_and_ranges(summary: Summary) -> None:
    reach = norm.ppf(0.95)
    for kernel in ("input", "after_spike"):
        band, ranges = summary.kernels[kernel], summary.splits[kernel].ranges
        means = np.array([one.curve[0] for one in ranges])
        sds = np.array([one.curve[1] for one in ranges])
        known = np.isfinite(band.mean)
        lower = np.minimum(band.lower, (means - reach * sds).min(axis=0))
        upper = np.maximum(band.upper, (means + reach * sds).max(axis=0))
        np.testing.assert_array_equal(band.protocol_lower[known], lower[known])
        np.testing.assert_array_equal(band.protocol_upper[known], upper[known])
        np.testing.assert_array_equal(band.between_range_sd[known], between_sd(means, sds)[known])
        for name in ("protocol_lower", "protocol_upper", "between_range_sd"):
            assert np.isnan(getattr(band, name)[~known]).all()
    resistance = next(one for one in summary.features if one.name == "input_resistance")
    values = [one.features["input_resistance"] for one in summary.splits["input"].ranges]
    lowest = min(resistance.lower, *(mean - reach * sd for mean, sd in values))
    highest = max(resistance.upper, *(mean + reach * sd for mean, sd in values))
    assert resistance.protocol_lower == pytest.approx(lowest)
    assert resistance.protocol_upper == pytest.approx(highest)


def test_each_range_knows_less_than_the_whole(summary: Summary) -> None:
    """A third of the units: sds larger by about √3."""
    band = summary.kernels["input"]
    early = band.lags_ms < 50
    for one in summary.splits["input"].ranges:
        ratio = one.curve[1][early] / band.sd[early]
        assert 1.1 < np.median(ratio) < 2.5


def test_features_of_no_kernel_have_no_ranges(summary: Summary) -> None:
    for feature in summary.features:
        blank = [feature.protocol_lower, feature.protocol_upper, feature.between_range_sd]
        if feature.name in ("offset", "electrode_resistance", "noise_sd"):
            assert np.isnan(blank).all()
    assert np.isnan(summary.kernels["electrode"].between_range_sd).all()


def test_odd_and_even_units_of_a_steady_cell_agree(summary: Summary) -> None:
    assert set(summary.halves) == {"input", "after_spike"}
    assert all(0 <= value < 3 for value in summary.halves.values())

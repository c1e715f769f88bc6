"""The figures of the prior and of the chains."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from drawn import histogram_of, x_of, y_of
from scipy import integrate, stats

from bayesglm.inference.bands import kernel_rows
from bayesglm.inference.results import CellFit
from bayesglm.report import sampler_figures
from bayesglm.report.sampler_figures import (
    Scalar,
    draw_prior_posterior,
    draw_trace_rank,
    hyperparameters,
    prior_sd,
    rank_counts,
    resistance_draws,
)

pytestmark = pytest.mark.usefixtures("styled")


def test_hyperparameters_have_their_draws_and_priors(fit: CellFit) -> None:
    found = {one.label: one for one in hyperparameters(fit)}
    assert list(found) == ["Sd of κ (MΩ/ms)", "Sd of η (mV)", "φ (no unit)"]
    sd = found["Sd of η (mV)"]
    np.testing.assert_array_equal(sd.draws, fit.chains.draws["sd"][..., 1])
    # Half-normal: mean scale·√(2/π). Gamma(ν/2, ν/2): mean 1, variance 2/ν.
    scale = fit.settings.priors.after_spike_sd
    assert sd.prior.mean() == pytest.approx(scale * np.sqrt(2 / np.pi))
    phi = found["φ (no unit)"].prior
    assert phi.mean() == pytest.approx(1.0)
    assert phi.var() == pytest.approx(2 / fit.calibration.freedom)


def test_white_residuals_have_no_phi(fit: CellFit) -> None:
    model = fit.settings.model.model_copy(update={"noise": "white"})
    white = replace(fit, settings=fit.settings.model_copy(update={"model": model}))
    assert "φ (no unit)" not in [one.label for one in hyperparameters(white)]


def test_time_constants_are_shown_without_a_prior(fit: CellFit) -> None:
    tau = np.random.default_rng(0).gamma(5.0, 4.0, (2, 100, 2))
    draws = fit.chains.draws | {"tau_input": tau, "places_input": tau / 100}
    with_tau = replace(fit, chains=replace(fit.chains, draws=draws))
    shown = hyperparameters(with_tau)[3:]
    assert [one.label for one in shown] == ["τ1 of κ (ms)", "τ2 of κ (ms)"]
    np.testing.assert_array_equal(shown[1].draws, tau[..., 1])
    assert shown[0].prior is None
    texts = [axes.get_xlabel() for axes in draw_prior_posterior(with_tau, 180.0).axes]
    assert texts[-2:] == ["τ1 of κ (ms)", "τ2 of κ (ms)"]
    assert len(draw_trace_rank(with_tau, 180.0).axes) == 2 * 6


def test_the_input_resistance_is_that_of_the_table(fit: CellFit) -> None:
    draws = resistance_draws(fit).draws
    feature = fit.feature("input_resistance")
    assert draws.shape == fit.weights.shape[:2]
    assert draws.mean() == pytest.approx(feature.mean)
    assert draws.std(ddof=1) == pytest.approx(feature.sd)


def test_the_prior_band_is_that_of_the_prior(fit: CellFit) -> None:
    """Drawn at the prior's scales: rows of the kernel times draws of the weights."""
    band = fit.kernels["after_spike"]
    rows = kernel_rows(fit.design, "after_spike", band.lags_ms)
    covariance = np.linalg.inv(fit.prior.precision(fit.prior.sd_scale))
    expected = np.sqrt(np.diag(rows @ covariance @ rows.T))
    known = np.isfinite(band.prior_share)
    np.testing.assert_allclose(prior_sd(band)[known], expected[known], rtol=1e-6)
    assert np.isnan(prior_sd(band)[~known]).all()
    curve = draw_prior_posterior(fit, 180.0).axes[2]
    edges = [line for line in curve.get_lines() if len(x_of(line)) == len(band.lags_ms)]
    # At the level of 90 % a band reaches 1.645 sds.
    np.testing.assert_allclose(y_of(edges[1]), 1.6449 * prior_sd(band), rtol=1e-4)
    np.testing.assert_allclose(y_of(edges[0]), -1.6449 * prior_sd(band), rtol=1e-4)


def test_the_prior_share_stands_below_with_its_limit(fit: CellFit) -> None:
    share = draw_prior_posterior(fit, 180.0).axes[1]
    curve, limit = share.get_lines()[:2]
    np.testing.assert_array_equal(y_of(curve), fit.kernels["input"].prior_share)
    assert list(y_of(limit)) == [0.8, 0.8]
    assert "above: set by the prior" in [text.get_text() for text in share.texts]
    assert share.get_ylim()[0] < np.nanmin(fit.kernels["input"].prior_share)


def test_a_kernel_that_the_prior_does_not_exceed_keeps_a_linear_axis(fit: CellFit) -> None:
    band = fit.kernels["input"]
    wide = replace(fit, kernels=fit.kernels | {"input": replace(band, lower=band.lower - 1e5)})
    assert draw_prior_posterior(fit, 180.0).axes[0].get_yscale() == "symlog"
    assert draw_prior_posterior(wide, 180.0).axes[0].get_yscale() == "linear"


def test_densities_have_an_area_of_one(fit: CellFit) -> None:
    axes = draw_prior_posterior(fit, 180.0).axes[4:]
    assert [one.get_xlabel() for one in axes] == [s.label for s in hyperparameters(fit)]
    for one in axes:
        values, edges = histogram_of(one)
        area = np.sum(values * np.diff(edges))
        assert area == pytest.approx(1.0)
        density = one.get_lines()[0]
        assert integrate.trapezoid(y_of(density), x_of(density)) == pytest.approx(1.0, abs=0.03)


def test_chains_that_agree_have_flat_ranks() -> None:
    draws = np.random.default_rng(0).normal(size=(4, 5000))
    counts = rank_counts(draws)
    assert counts.shape == (4, 20)
    np.testing.assert_allclose(counts.sum(axis=0), 0.0, atol=1e-12)
    # Binomial: 250 are expected in each of 80 bins, with an sd of 6 %.
    assert np.abs(counts).max() < 0.25


def test_a_chain_that_lies_higher_has_a_slope() -> None:
    """Negative control: of a chain moved by one sd few draws have low ranks."""
    draws = np.random.default_rng(0).normal(size=(4, 5000))
    draws[2] += 1.0
    counts = rank_counts(draws)
    assert counts[2, 0] < -0.7
    assert counts[2, -1] > 0.7
    assert np.all(counts[[0, 1, 3], 0] > 0.1)


def test_ranks_know_nothing_of_the_scale() -> None:
    draws = np.random.default_rng(0).normal(size=(2, 300))
    np.testing.assert_array_equal(rank_counts(draws), rank_counts(np.exp(3 * draws)))


@pytest.mark.parametrize("width_mm", [85.0, 180.0])
def test_every_scalar_has_its_trace_and_ranks(fit: CellFit, width_mm: float) -> None:
    scalars = [*hyperparameters(fit), resistance_draws(fit)]
    axes = draw_trace_rank(fit, width_mm).axes
    assert [one.get_title(loc="left") for one in axes[::2]] == [one.label for one in scalars]
    for one in axes[1::2]:
        assert one.get_title(loc="left").startswith("R̂ ")
        assert one.get_ylabel() == "Chain"
    assert [text.get_text() for text in axes[0].texts] == ["chain 1", "chain 2"]


def test_a_trace_keeps_the_extremes_of_each_chain(fit: CellFit) -> None:
    draws = np.random.default_rng(0).normal(size=(3, 5000))
    draws[1, 777] = 40.0
    axes = draw_trace_rank(fit, 180.0).axes[0]
    axes.clear()
    sampler_figures._trace(axes, Scalar("x (no unit)", draws))
    chains = [line for line in axes.get_lines() if len(x_of(line)) > 2]
    assert len(chains) == 3
    assert x_of(chains[1])[np.argmax(y_of(chains[1]))] == 5777
    for k, line in enumerate(chains):
        assert k * 5000 <= min(x_of(line))
        assert max(x_of(line)) < (k + 1) * 5000
        assert np.ptp(y_of(line)) == np.ptp(draws[k])


def test_rhat_tells_chains_apart(fit: CellFit) -> None:
    draws = np.random.default_rng(0).normal(size=(4, 500)) + np.arange(4)[:, None]
    axes = draw_trace_rank(fit, 180.0).axes[1]
    axes.clear()
    sampler_figures._ranks(axes, Scalar("x (no unit)", draws))
    rhat = float(axes.get_title(loc="left").split()[1].rstrip(","))
    assert rhat > 1.3
    assert stats.kstest(draws[0], draws[3]).pvalue < 1e-6

"""The prior of the weights and the table that the report prints come from one place."""

from __future__ import annotations

import numpy as np
import pytest

from bayesglm.inference.bands import kernel_rows
from bayesglm.kernels.basis import KernelSpec
from bayesglm.kernels.design import VoltageDesign, electrode_spec
from bayesglm.kernels.smoothness import smoothness_prior
from bayesglm.models.priors import kernel_scales, prior_table, weight_prior
from bayesglm.recording.settings import PriorsSection

DESIGN = VoltageDesign(KernelSpec(100.0, 10), KernelSpec(300.0, 12))


def test_root_is_a_square_root_of_the_covariance_at_the_scales() -> None:
    prior = weight_prior(DESIGN, PriorsSection())
    covariance = prior.root @ prior.root.T
    np.testing.assert_allclose(prior.covariance(prior.sd_scale), covariance, atol=1e-12)
    product = covariance @ prior.precision(prior.sd_scale)
    np.testing.assert_allclose(product, np.eye(DESIGN.n_weights), atol=1e-6)


def test_settings_are_the_sds_in_their_units() -> None:
    settings = PriorsSection(offset_mean=-70, offset_sd=5, electrode_sd=11)
    prior = weight_prior(DESIGN, settings)
    sd = np.sqrt(np.diagonal(prior.root @ prior.root.T))
    assert (prior.mean[0], np.count_nonzero(prior.mean)) == (-70, 1)
    assert sd[:2] == pytest.approx([5, 11])


@pytest.mark.parametrize(("kernel", "at_ms"), [("input", 5.0), ("after_spike", 10.0)])
def test_kernels_drawn_from_the_prior_have_the_stated_size(kernel: str, at_ms: float) -> None:
    """Bends of σ and a straight part of 2σ make √5 σ where both are typical, as a geometric mean
    over the axis somewhat more: they are large at different lags. κ has an exponential besides.
    """
    settings = PriorsSection(input_sd=3.0, after_spike_sd=7.0)
    prior = weight_prior(DESIGN, settings)
    scale = kernel_scales(settings)[kernel]
    spec = DESIGN.kernels[kernel]
    x = (np.arange(500) + 0.5) / 500
    lags = spec.warp_ms * np.expm1(x * np.log1p(spec.duration_ms / spec.warp_ms))
    rows = kernel_rows(DESIGN, kernel, lags)
    sd = np.sqrt(np.einsum("lp,pq,lq->l", rows, prior.root @ prior.root.T, rows))
    most = {"input": 1.35, "after_spike": 1.15}[kernel]
    assert np.sqrt(5) < np.exp(np.log(sd / scale).mean()) < most * np.sqrt(5)
    near = rows[np.argmin(np.abs(lags - at_ms))]
    draws = np.random.default_rng(0).normal(size=(4000, DESIGN.n_weights)) @ prior.root.T @ near
    assert draws.std() == pytest.approx(sd[np.argmin(np.abs(lags - at_ms))], rel=0.05)


def test_covariance_grows_with_the_square_of_the_sds() -> None:
    prior = weight_prior(DESIGN, PriorsSection())
    sds = np.array([2.0, 5.0])
    place = DESIGN.columns["after_spike"]
    own = smoothness_prior(KernelSpec(300.0, 12)).covariance(5.0, 10.0)
    np.testing.assert_allclose(prior.covariance(sds)[place, place], own, atol=1e-12)
    product = prior.covariance(sds) @ prior.precision(sds)
    np.testing.assert_allclose(product, np.eye(DESIGN.n_weights), atol=1e-6)
    assert not prior.precision(sds)[DESIGN.columns["input"], place].any()


def summed(terms: int) -> KernelSpec:
    return KernelSpec(100.0, 10, 2.0, "exponentials", 0.5, terms)


def test_prior_of_exponentials_is_that_of_drawn_sums() -> None:
    """Source: kernels drawn from the prior, amplitude by amplitude: sd by lag within 3 %."""
    design = VoltageDesign(KernelSpec(100.0, 10), summed(2))
    prior = weight_prior(design, PriorsSection(after_spike_sd=7.0))
    assert (prior.names, prior.keep.shape) == (("input",), (22, 14))
    lags = np.array([1.0, 10.0, 50.0])
    rows = kernel_rows(design, "after_spike", lags)
    sd = np.sqrt(np.einsum("lp,pq,lq->l", rows, prior.covariance(prior.sd_scale), rows))
    rng = np.random.default_rng(1)
    tau = prior.exponentials["after_spike"].draw(40_000, rng)
    amplitudes = rng.normal(0.0, 14.0, tau.shape)
    curves = np.einsum("dt,dtl->dl", amplitudes, np.exp(-lags / tau[..., None]))
    np.testing.assert_allclose(sd, curves.std(axis=0), rtol=0.03)
    assert not prior.covariance(prior.sd_scale)[design.columns["input"], 12:].any()


def test_precision_takes_weights_of_exponentials_as_free() -> None:
    design = VoltageDesign(summed(3), None)
    precision = weight_prior(design, PriorsSection(input_sd=5.0)).precision(np.zeros(0))
    np.testing.assert_allclose(precision[2:, 2:], np.eye(10) / 100, atol=1e-15)


def test_table_of_exponentials_and_of_an_electrode_kernel() -> None:
    design = VoltageDesign(KernelSpec(100.0), summed(2), electrode_kernel=electrode_spec(0.9, 0.05))
    rows = {row.parameter: row for row in prior_table(design, PriorsSection())}
    assert rows["amplitudes of η"].prior == "normal(0, 20)"
    assert rows["2 time constants of η"].prior.endswith("from 0.5 to 100")
    assert "sd of η" not in rows
    assert "√(1 + s/s0)" not in rows["bends of κ"].prior
    assert rows["electrode, each of 5 lags"].prior == "normal(0, 50/√5)"
    prior = weight_prior(design, PriorsSection())
    total = np.zeros(design.n_weights)
    total[design.columns["electrode"]] = 1.0
    assert np.sqrt(total @ prior.covariance(prior.sd_scale) @ total) == pytest.approx(50.0)


@pytest.mark.parametrize("electrode", [True, False])
@pytest.mark.parametrize("after_spike", [KernelSpec(300.0, 12), None])
def test_table_has_a_row_with_unit_and_reason_for_everything_fitted(
    electrode: bool, after_spike: KernelSpec | None
) -> None:
    design = VoltageDesign(KernelSpec(100.0), after_spike, electrode)
    rows = prior_table(design, PriorsSection(input_sd=17.5, after_spike_sd=8.25))
    parameters = [row.parameter for row in rows]
    assert ("electrode term" in parameters) == electrode
    assert ("sd of η" in parameters) == (after_spike is not None)
    assert {"offset E", "sd of κ", "bends of κ", "straight part of κ", "φ"} <= set(parameters)
    assert all(row.prior and row.unit and row.reason for row in rows)
    assert next(r for r in rows if r.parameter == "sd of κ").prior == "half-normal(17.5)"
    assert next(r for r in rows if r.parameter == "straight part of κ").prior == "normal(0, 35)"


def test_prior_without_spikes_has_no_after_spike_part() -> None:
    prior = weight_prior(VoltageDesign(KernelSpec(100.0), None), PriorsSection())
    assert prior.names == ("input",)
    assert prior.bend.shape == (1, 16)

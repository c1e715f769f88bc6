"""Sums of exponentials on splines: how exact, and the prior of their time constants."""

from __future__ import annotations

import jax.numpy as jnp
import numpy as np
import pytest
from scipy.stats import dirichlet, kstest

from bayesglm.kernels.basis import DEFAULT_WEIGHTS, KernelSpec
from bayesglm.kernels.exponentials import (
    GAP_CONCENTRATION,
    exponentials,
    log_gap_density,
    time_constants,
    worst_error,
)


def spec_of(duration: float, weights: int = DEFAULT_WEIGHTS["exponentials"]) -> KernelSpec:
    return KernelSpec(duration, weights, 2.0, "exponentials", 0.5)


@pytest.mark.parametrize("duration", [50.0, 100.0, 200.0, 300.0, 400.0])
def test_the_default_number_of_splines_holds_every_exponential(duration: float) -> None:
    """Within 0.5 % of the height for the prior's whole range, 0.05 % from 3 ms to a third of it."""
    whole = np.geomspace(0.5, duration, 60)
    assert worst_error(spec_of(duration), whole).max() < 0.005
    usual = np.geomspace(3.0, duration / 3, 40)
    assert worst_error(spec_of(duration), usual).max() < 0.0005
    assert worst_error(spec_of(duration, 6), whole).max() > 0.01


def test_weights_are_the_least_squares_fit() -> None:
    """Source: numpy.linalg.lstsq, one exponential at a time."""
    spec, tau = spec_of(100.0), np.array([2.0, 17.0, 55.0])
    found = exponentials(spec)
    rows = spec.evaluate(found.lags_ms)
    for i in range(3):
        expected = np.linalg.lstsq(rows, np.exp(-found.lags_ms / tau[i]), rcond=None)[0]
        np.testing.assert_allclose(found.weights(tau)[:, i], expected, atol=1e-9)
    stacked = found.weights(np.array([tau, tau[::-1]]))
    np.testing.assert_allclose(stacked[1], stacked[0][:, ::-1], atol=1e-12)


def test_time_constants_are_sorted_and_span_the_range() -> None:
    found = time_constants(jnp.array([1.0, 0.0, 0.5]), jnp.log(jnp.array([0.5, 200.0])))
    np.testing.assert_allclose(found, [0.5, 10.0, 200.0])


@pytest.mark.parametrize("terms", [1, 3])
def test_drawn_time_constants_have_dirichlet_gaps(terms: int) -> None:
    """Source: scipy.stats.dirichlet; its marginals are beta."""
    one = exponentials(KernelSpec(200.0, 14, 2.0, "exponentials", 0.5, terms))
    tau = one.draw(4000, np.random.default_rng(0))
    places = np.log(tau / 0.5) / np.log(400.0)
    assert np.all(np.diff(tau, axis=1) > 0)
    for i in range(terms):
        a, b = GAP_CONCENTRATION * (i + 1), GAP_CONCENTRATION * (terms - i)
        assert kstest(places[:, i], "beta", (a, b)).pvalue > 1e-3
    np.testing.assert_allclose(
        np.log(one.typical_ms / 0.5) / np.log(400.0), np.arange(1, terms + 1) / (terms + 1)
    )


def test_the_density_of_places_is_that_of_their_gaps() -> None:
    """Source: scipy.stats.dirichlet; the order of places does not matter."""
    concentration = np.full(4, GAP_CONCENTRATION)
    found, expected = [], []
    for places in ([0.1, 0.5, 0.8], [0.7, 0.2, 0.3], [0.4, 0.41, 0.9]):
        gaps = np.diff(np.sort(places), prepend=0.0, append=1.0)
        found.append(float(log_gap_density(jnp.array(places))))
        expected.append(dirichlet.logpdf(gaps, concentration))
    np.testing.assert_allclose(np.diff(found), np.diff(expected), rtol=1e-9)

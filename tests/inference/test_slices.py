"""Slices along coordinates, against distributions whose moments are known."""

from __future__ import annotations

import jax
import jax.numpy as jnp
import numpy as np
import numpyro
import numpyro.distributions as dist
from arviz_stats.base import array_stats
from scipy.stats import kstest

from bayesglm.inference.slices import coordinate_slices
from bayesglm.recording.settings import SamplingSection

SETTINGS = SamplingSection(warmup=100, draws=1000)


def two_sites(scale: jax.Array) -> None:
    """A half-normal and a gamma variate, independent."""
    numpyro.sample("sd", dist.HalfNormal(scale).expand((1,)).to_event(1))
    numpyro.sample("phi", dist.Gamma(2.0, 0.5))


def cross(width: jax.Array) -> None:
    """Two places, of which one, whichever, is known to within `width` about 0.6."""
    places = numpyro.sample("places", dist.Uniform(0.0, 1.0).expand((2,)).to_event(1))
    off = (places[0] - 0.6) * (places[1] - 0.6) / width
    numpyro.factor("cross", -0.5 * off**2)


def thinned(values: np.ndarray) -> np.ndarray:
    """Draws far enough apart to be independent."""
    return np.asarray(values[:, ::5]).ravel()


def test_draws_follow_the_distributions() -> None:
    """Source: scipy.stats; the chains mix."""
    chains = coordinate_slices(two_sites, jnp.array(3.0), SETTINGS, jax.random.key(0))
    assert chains.draws["sd"].shape == (4, 1000, 1)
    assert kstest(thinned(chains.draws["sd"][..., 0]), "halfnorm", (0, 3)).pvalue > 1e-3
    assert kstest(thinned(chains.draws["phi"]), "gamma", (2, 0, 2)).pvalue > 1e-3
    assert float(array_stats.rhat(chains.draws["phi"], chain_axis=0, draw_axis=1)) < 1.01
    assert not chains.diverging.any()
    assert chains.n_steps.min() >= 3


def test_a_narrow_cross_is_crossed_by_every_chain() -> None:
    """Arms of 0.002 by 1: by symmetry each place is the known one half of the time.

    A numerical integral on a fine grid gives how often the known one is the first.
    """
    chains = coordinate_slices(cross, jnp.array(0.0005), SETTINGS, jax.random.key(1))
    near = np.abs(chains.draws["places"] - 0.6)
    first = (near[..., 0] < near[..., 1]).mean(axis=1)
    assert np.abs(first - 0.5).max() < 0.1
    grid = (np.arange(4000) + 0.5) / 4000
    off = (grid[:, None] - 0.6) * (grid - 0.6) / 0.0005
    density = np.exp(-0.5 * off**2)
    expected = (density * (grid[:, None] < 0.3)).sum() / density.sum()
    assert abs((chains.draws["places"][..., 0] < 0.3).mean() - expected) < 0.03
    assert float(array_stats.rhat(chains.draws["places"], chain_axis=0, draw_axis=1).max()) < 1.02


def test_energy_is_the_negative_log_density_and_draws_follow_the_key() -> None:
    """The density of log φ is that of φ times φ."""
    settings = SamplingSection(warmup=50, draws=50, chains=2)
    one, again, other = (
        coordinate_slices(two_sites, jnp.array(3.0), settings, jax.random.key(k)) for k in (0, 0, 1)
    )
    np.testing.assert_array_equal(one.draws["phi"], again.draws["phi"])
    assert np.all(one.draws["phi"] != other.draws["phi"])
    phi, sd = one.draws["phi"], one.draws["sd"][..., 0]
    expected = -(2 * np.log(phi) - phi / 2 + np.log(sd) - sd**2 / 18)
    np.testing.assert_allclose(np.ptp(one.energy - expected), 0.0, atol=1e-9)

"""Slice sampling, one coordinate after the other, for kernels of exponentials.

A superfluous exponential has a time constant that the recording does not tell: the posterior is a
cross, one narrow arm for each time constant that does the work while the others roam. No step
size and mass matrix suits all arms: NUTS was seen to diverge and to stay in one. A slice along one
coordinate needs no tuning, and crosses the whole range of a time constant in one step (Neal 2003,
Annals of Statistics 31:705–767). With the weights integrated out there are few coordinates.
"""

from __future__ import annotations

from collections.abc import Callable
from functools import partial
from typing import Any

import jax
import jax.numpy as jnp
import numpy as np
from jax.flatten_util import ravel_pytree

from bayesglm import backend as backend
from bayesglm.inference.sample import Chains, prepared
from bayesglm.recording.settings import SamplingSection

#: Width of the first bracket, in unconstrained coordinates: logarithms of sds, logits of time
#: constants in their range. A bracket of fixed width at a random offset keeps the posterior
#: invariant; one too wide costs a few evaluations, since each miss shrinks it.
_WIDTH = 12.0

#: Rounds over all coordinates for each draw: two time constants near each other move slowly.
_ROUNDS = 4


def coordinate_slices(
    model: Callable[..., None], data: Any, settings: SamplingSection, key: jax.Array
) -> Chains:
    """Sample a NumPyro model of few parameters.

    Parameters
    ----------
    model
        NumPyro model of one argument.
    data
        Its argument: a tree of arrays.
    settings
        Chains, warm-up and draws, each a few rounds over all coordinates.
    key
        Random key; the same key gives the same draws to the bit.

    Returns
    -------
    Chains
        Nothing diverges; the energy is the negative log density.
    """
    keys = jax.random.split(key, settings.chains)
    collected = _compiled_run(model, settings.warmup, settings.draws, data, keys)
    draws, energy, steps = jax.device_get(collected)
    return Chains(
        draws={name: np.asarray(value) for name, value in draws.items()},
        diverging=np.zeros(energy.shape, dtype=np.bool_),
        energy=np.asarray(energy),
        accept_prob=np.ones(energy.shape),
        n_steps=np.asarray(steps),
        sampler="slices",
    )


@partial(jax.jit, static_argnums=(0, 1, 2))
def _compiled_run(
    model: Callable[..., None], warmup: int, n_draws: int, data: Any, keys: jax.Array
) -> tuple[Any, ...]:
    def run_chain(key: jax.Array) -> tuple[Any, ...]:
        start_key, run_key = jax.random.split(key)
        info = prepared(model, data, start_key)
        potential = info.potential_fn(data)
        flat, unravel = ravel_pytree(info.param_info.z)
        # Chains start dispersed around the prior median, so that R̂ means something.
        start = flat + jax.random.uniform(start_key, flat.shape, minval=-1.0, maxval=1.0)

        def log_density(z: jax.Array) -> jax.Array:
            value = -potential(unravel(z))
            return jnp.where(jnp.isnan(value), -jnp.inf, value)

        def advance(state: jax.Array, key: jax.Array) -> tuple[jax.Array, Any]:
            def one_round(z: jax.Array, round_key: jax.Array) -> tuple[jax.Array, Any]:
                z, height, steps = _round(log_density, z, round_key)
                return z, (height, steps)

            keys = jax.random.split(key, _ROUNDS)
            state, (height, steps) = jax.lax.scan(one_round, state, keys)
            return state, (unravel(state), -height[-1], steps.sum())

        warm_keys, kept_keys = jnp.split(
            jax.random.split(run_key, warmup + n_draws), [warmup], axis=0
        )
        state, _ = jax.lax.scan(lambda z, k: (advance(z, k)[0], None), start, warm_keys)
        _, (z, energy, steps) = jax.lax.scan(advance, state, kept_keys)
        return jax.vmap(info.postprocess_fn(data))(z), energy, steps

    return jax.lax.map(run_chain, keys)


def _round(
    log_density: Callable[[jax.Array], jax.Array], z: jax.Array, key: jax.Array
) -> tuple[jax.Array, jax.Array, jax.Array]:
    """Move every coordinate once; returns the place, its log density and the evaluations."""

    def move(carry: tuple[jax.Array, ...], place: tuple[jax.Array, jax.Array]) -> Any:
        z, height, steps = carry
        index, key = place
        level_key, offset_key, loop_key = jax.random.split(key, 3)
        level = height - jax.random.exponential(level_key)
        lower = z[index] - _WIDTH * jax.random.uniform(offset_key)

        def try_one(loop: tuple[jax.Array, ...]) -> tuple[jax.Array, ...]:
            lower, upper, key, *_, tried = loop
            key, draw_key = jax.random.split(key)
            proposal = jax.random.uniform(draw_key, minval=lower, maxval=upper)
            found = log_density(z.at[index].set(proposal))
            # A miss becomes an end of the bracket.
            below = proposal < z[index]
            lower = jnp.where(below, proposal, lower)
            upper = jnp.where(below, upper, proposal)
            return lower, upper, key, proposal, found, tried + 1

        unseen = jnp.asarray(-jnp.inf)
        first: tuple[jax.Array, ...] = (
            lower,
            lower + _WIDTH,
            loop_key,
            z[index],
            unseen,
            jnp.asarray(0),
        )
        *_, moved, height, tried = jax.lax.while_loop(lambda s: s[4] < level, try_one, first)
        return (z.at[index].set(moved), height, steps + tried), None

    n = z.shape[0]
    first = (z, log_density(z), jnp.asarray(1))
    (z, height, steps), _ = jax.lax.scan(move, first, (jnp.arange(n), jax.random.split(key, n)))
    return z, height, steps

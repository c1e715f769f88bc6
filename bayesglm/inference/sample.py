"""NUTS, seeded and compiled once.

The whole run of all chains is one compiled program that takes the data as arguments, so that a
second cell of the same shape, or a second process, does not compile again.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import partial
from typing import Any, Literal

import jax
import jax.numpy as jnp
import numpy as np
from numpyro.infer.hmc import hmc
from numpyro.infer.initialization import init_to_median
from numpyro.infer.util import initialize_model

from bayesglm import backend as backend
from bayesglm.models.cell import TAU_SITE
from bayesglm.recording.recording import BoolArray, FloatArray, IntArray
from bayesglm.recording.settings import SamplingSection


@dataclass(frozen=True, eq=False)
class Chains:
    """Draws of a run.

    Attributes
    ----------
    draws
        For each site an array of shape (chains, draws, …).
    diverging
        Shape (chains, draws).
    energy
        Hamiltonian at each draw, shape (chains, draws).
    accept_prob
        Mean acceptance probability of each step, shape (chains, draws).
    n_steps
        Leapfrog steps, or evaluations of the density, shape (chains, draws).
    sampler
        How they were drawn; only NUTS can diverge.
    """

    draws: dict[str, FloatArray]
    diverging: BoolArray
    energy: FloatArray
    accept_prob: FloatArray
    n_steps: IntArray
    sampler: Literal["NUTS", "slices"] = "NUTS"

    def median(self, site: str) -> FloatArray:
        """Median over all draws of a site, in the shape of one draw; also of none."""
        draws = self.draws[site]
        flat = draws.reshape(draws.shape[0] * draws.shape[1], *draws.shape[2:])
        median: FloatArray = np.median(flat, axis=0)
        return median

    @property
    def time_constants(self) -> dict[str, FloatArray]:
        """Draws of time constants by kernel of exponentials, ms, shape (chains, draws, terms)."""
        return {
            name.removeprefix(TAU_SITE): draws
            for name, draws in self.draws.items()
            if name.startswith(TAU_SITE)
        }


def nuts(
    model: Callable[..., None], data: Any, settings: SamplingSection, key: jax.Array
) -> Chains:
    """Sample a NumPyro model with NUTS.

    Parameters
    ----------
    model
        NumPyro model of one argument.
    data
        Its argument: a tree of arrays.
    settings
        Chains, warm-up, draws and target acceptance.
    key
        Random key; the same key gives the same draws to the bit.

    Returns
    -------
    Chains
        After one retry at a higher target acceptance if transitions diverged.
    """
    chains = _run_chains(model, data, settings, key, settings.target_accept)
    if np.any(chains.diverging):
        closer = 1 - (1 - settings.target_accept) / 4
        return _run_chains(model, data, settings, jax.random.fold_in(key, 1), closer)
    return chains


def prepared(model: Callable[..., None], data: Any, key: jax.Array) -> Any:
    """NumPyro's potential, transforms and place at the prior median of a model; for `jit`."""
    return initialize_model(
        key,
        model,
        model_args=(data,),
        dynamic_args=True,
        init_strategy=init_to_median,
        validate_grad=False,
    )


def _run_chains(
    model: Callable[..., None],
    data: Any,
    settings: SamplingSection,
    key: jax.Array,
    target_accept: float,
) -> Chains:
    keys = jax.random.split(key, settings.chains)
    collected = _compiled_run(
        model, settings.warmup, settings.draws, data, keys, jnp.asarray(target_accept)
    )
    draws, diverging, energy, accept_prob, n_steps = jax.device_get(collected)
    return Chains(
        draws={name: np.asarray(value) for name, value in draws.items()},
        diverging=np.asarray(diverging),
        energy=np.asarray(energy),
        accept_prob=np.asarray(accept_prob),
        n_steps=np.asarray(n_steps),
    )


@partial(jax.jit, static_argnums=(0, 1, 2))
def _compiled_run(
    model: Callable[..., None],
    warmup: int,
    n_draws: int,
    data: Any,
    keys: jax.Array,
    target_accept: jax.Array,
) -> tuple[Any, ...]:
    def run_chain(key: jax.Array) -> tuple[Any, ...]:
        start_key, run_key = jax.random.split(key)
        info = prepared(model, data, start_key)
        init, step = hmc(potential_fn_gen=info.potential_fn, algo="NUTS")
        # Chains start dispersed around the prior median, so that R̂ means something.
        start = jax.tree.map(
            lambda x: x + jax.random.uniform(start_key, jnp.shape(x), minval=-1.0, maxval=1.0),
            info.param_info.z,
        )
        state = init(
            info.param_info._replace(z=start),
            warmup,
            target_accept_prob=target_accept,
            model_args=(data,),
            rng_key=run_key,
        )

        def advance(state: Any, _: None) -> tuple[Any, Any]:
            state = step(state, (data,), {})
            kept = (state.z, state.diverging, state.energy, state.accept_prob, state.num_steps)
            return state, kept

        state, _ = jax.lax.scan(lambda s, _: (step(s, (data,), {}), None), state, None, warmup)
        _, (z, *statistics) = jax.lax.scan(advance, state, None, n_draws)
        constrained = jax.vmap(info.postprocess_fn(data))(z)
        return (constrained, *statistics)

    return jax.lax.map(run_chain, keys)

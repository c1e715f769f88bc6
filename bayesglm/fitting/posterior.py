"""The draws of one cell's posterior with what is needed to read them."""

from __future__ import annotations

from dataclasses import dataclass

import jax
import numpy as np

from bayesglm.inference.sample import Chains, nuts
from bayesglm.inference.slices import coordinate_slices
from bayesglm.kernels.design import VoltageDesign
from bayesglm.likelihood.calibration import Calibration
from bayesglm.models.cell import (
    VoltageEvidence,
    draw_weights,
    voltage_evidence,
    voltage_model,
    weight_moments,
)
from bayesglm.models.priors import WeightPrior
from bayesglm.recording.recording import FloatArray
from bayesglm.recording.settings import Settings

#: Degrees of freedom that make φ one, for white residuals.
_KNOWN = 1e6


@dataclass(frozen=True, eq=False)
class Posterior:
    """Draws of one cell.

    Attributes
    ----------
    design, prior
        The linear model and the prior of its weights, at the posterior medians of time constants.
    step_ms
        Recorded step, ms; the finest where recordings differ.
    chains
        Draws of the kernels' sds, φ and time constants.
    weights
        Exact draws of the weights, shape (chains, draws, P).
    """

    design: VoltageDesign
    prior: WeightPrior
    step_ms: float
    chains: Chains
    weights: FloatArray

    @property
    def flat(self) -> FloatArray:
        """Draws of the weights of all chains, shape (D, P)."""
        return self.weights.reshape(-1, self.weights.shape[-1])

    @property
    def kernel_sd(self) -> FloatArray:
        """Posterior median of each kernel's sd, shape (n_kernels,)."""
        return self.chains.median("sd")


def sample_posterior(
    calibration: Calibration,
    design: VoltageDesign,
    prior: WeightPrior,
    step_ms: float,
    settings: Settings,
) -> Posterior:
    """Sample the kernels' sds, φ and time constants, then draw the weights exactly.

    With NUTS, or slice by slice where there are time constants.
    """
    evidence = _evidence(calibration, prior, white=settings.model.noise == "white")
    sample_key, draw_key = jax.random.split(jax.random.key(settings.sampling.seed))
    sampler = coordinate_slices if prior.exponentials else nuts
    chains = sampler(voltage_model, evidence, settings.sampling, sample_key)
    sd, phi = chains.draws["sd"], chains.draws["phi"]
    tau = {
        name: draws.reshape(-1, draws.shape[-1]) for name, draws in chains.time_constants.items()
    }
    x = draw_weights(evidence, sd.reshape(phi.size, -1), phi.reshape(-1), draw_key, tau)
    weights = prior.mean + x @ prior.root.T
    typical = prior.at({name: np.median(draws, axis=0) for name, draws in tau.items()})
    return Posterior(design, typical, step_ms, chains, weights.reshape(*phi.shape, -1))


def white_weights(
    calibration: Calibration, prior: WeightPrior, kernel_sd: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Mean, (P,), and covariance, (P, P), of the weights if residuals were white."""
    return weight_moments(_evidence(calibration, prior, white=True), prior, kernel_sd)


def _evidence(calibration: Calibration, prior: WeightPrior, white: bool) -> VoltageEvidence:
    least = calibration.fit
    precision = calibration.white_precision if white else calibration.precision
    freedom = _KNOWN if white else calibration.freedom
    return voltage_evidence(least.weights, precision, least.rank, freedom, prior)

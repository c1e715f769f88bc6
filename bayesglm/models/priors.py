"""Priors of one cell's model, each a row of a table with its unit and its reason.

The weights have a Gaussian prior given the sds of the kernels; the sds are sampled. The prior
that the sampler uses and the table that the report prints are made from the same settings.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from bayesglm.kernels.design import VoltageDesign
from bayesglm.kernels.smoothness import RIDGE_FACTOR, smoothness_prior
from bayesglm.recording.recording import FloatArray
from bayesglm.recording.settings import PriorsSection

#: Kernels whose prior sd falls with the lag. κ is tens of MΩ/ms at first, where electrode and
#: dendrites charge, and hundredths after a few membrane time constants; η has no such range.
_FALLING = ("input",)


@dataclass(frozen=True)
class PriorRow:
    """A row of the table of priors."""

    parameter: str
    prior: str
    unit: str
    reason: str


@dataclass(frozen=True, eq=False)
class WeightPrior:
    """Gaussian prior of the weights given the kernels' sds.

    The precision is ``fixed + Σ_k bend_k/σ_k²``, over kernels k.

    Attributes
    ----------
    mean
        Shape (P,).
    fixed
        Precision of what does not depend on a sampled sd: offset, electrode, ridges; (P, P).
    bend
        Precision of each kernel's bends for a unit sd, shape (n_kernels, P, P).
    sd_scale
        Scale of the half-normal prior of each σ_k, in the kernel's unit, shape (n_kernels,).
    names
        The kernels' names.
    """

    mean: FloatArray
    fixed: FloatArray
    bend: FloatArray
    sd_scale: FloatArray
    names: tuple[str, ...]

    def precision(self, sds: FloatArray) -> FloatArray:
        """Prior precision of the weights for given kernel sds, shape (P, P)."""
        total: FloatArray = self.fixed + np.einsum(
            "k,kpq->pq", 1.0 / np.asarray(sds) ** 2, self.bend
        )
        return total

    @property
    def root(self) -> FloatArray:
        """Square root S of the prior covariance at the scales: ``w = mean + S x``, (P, P)."""
        covariance = np.linalg.inv(self.precision(self.sd_scale))
        return np.linalg.cholesky((covariance + covariance.T) / 2)


def weight_prior(design: VoltageDesign, priors: PriorsSection) -> WeightPrior:
    """Build the prior of the weights.

    Parameters
    ----------
    design
        The linear model.
    priors
        Scales in the units of what they describe.

    Returns
    -------
    WeightPrior
    """
    n = design.n_weights
    columns = design.columns
    mean = np.zeros(n)
    mean[columns["offset"]] = priors.offset_mean
    fixed = np.zeros((n, n))
    fixed[columns["offset"], columns["offset"]] = 1.0 / priors.offset_sd**2
    if "electrode" in columns:
        fixed[columns["electrode"], columns["electrode"]] = 1.0 / priors.electrode_sd**2
    bend = np.zeros((len(design.kernels), n, n))
    scales = kernel_scales(priors)
    for k, (name, spec) in enumerate(design.kernels.items()):
        place, smooth = columns[name], smoothness_prior(spec, falls=name in _FALLING)
        bend[k, place, place] = smooth.bend
        fixed[place, place] = smooth.ridge / (RIDGE_FACTOR * scales[name]) ** 2
    return WeightPrior(
        mean=mean,
        fixed=fixed,
        bend=bend,
        sd_scale=np.array([scales[name] for name in design.kernels]),
        names=tuple(design.kernels),
    )


def kernel_scales(priors: PriorsSection) -> dict[str, float]:
    """Scale of the half-normal prior of each kernel's sd, in the kernel's unit."""
    return {"input": priors.input_sd, "after_spike": priors.after_spike_sd}


def prior_table(design: VoltageDesign, priors: PriorsSection) -> tuple[PriorRow, ...]:
    """The priors in words, as the report prints them."""
    rows = [
        PriorRow(
            "offset E",
            f"normal({priors.offset_mean:g}, {priors.offset_sd:g})",
            "mV",
            "covers the resting and holding potentials of nearly all neurons",
        )
    ]
    if design.electrode:
        rows.append(
            PriorRow(
                "electrode term",
                f"normal(0, {priors.electrode_sd:g})",
                "MΩ",
                "an unbalanced bridge of up to about 100 MΩ in either direction",
            )
        )
    units = {"input": "MΩ/ms", "after_spike": "mV"}
    signs = {"input": "κ", "after_spike": "η"}
    reasons = {
        "input": "a cell of 400 MΩ and 20 ms starts at 20 MΩ/ms",
        "after_spike": "after-potentials reach from 1 to 20 mV",
    }
    for name, scale in kernel_scales(priors).items():
        if name not in design.kernels:
            continue
        sign, unit = signs[name], units[name]
        falling = " of κ(s)·(1 + s/s0)" if name in _FALLING else ""
        rows += [
            PriorRow(f"sd of {sign}", f"half-normal({scale:g})", unit, reasons[name]),
            PriorRow(
                f"bends of {sign}",
                f"second-order random walk{falling}, scaled to the sd of {sign}",
                unit,
                "kernels are smooth on a logarithmic axis of lags, whatever the number of knots",
            ),
            PriorRow(
                f"straight part of {sign}",
                f"normal(0, {RIDGE_FACTOR * scale:g})",
                unit,
                "weak: it only makes the prior proper where bends say nothing",
            ),
        ]
    rows.append(
        PriorRow(
            "φ",
            "gamma(ν/2, ν/2), ν from the units",
            "1",
            "the calibrated covariance is itself an estimate, from few units",
        )
    )
    return tuple(rows)

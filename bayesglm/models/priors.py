"""Priors of one cell's model, each a row of a table with its unit and its reason.

The weights have a Gaussian prior given the sds of the kernels and the time constants of
exponentials; these are sampled. The prior that the sampler uses and the table that the report
prints are made from the same settings.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np

from bayesglm.kernels.basis import KernelSpec
from bayesglm.kernels.design import VoltageDesign
from bayesglm.kernels.exponentials import GAP_CONCENTRATION, Exponentials, exponentials
from bayesglm.kernels.smoothness import RIDGE_FACTOR, smoothness_prior
from bayesglm.recording.recording import FloatArray
from bayesglm.recording.settings import PriorsSection

#: Draws over which the prior of time constants is averaged.
_TAU_DRAWS = 4000


@dataclass(frozen=True)
class PriorRow:
    """A row of the table of priors."""

    parameter: str
    prior: str
    unit: str
    reason: str


@dataclass(frozen=True, eq=False)
class WeightPrior:
    """Gaussian prior of the weights given the kernels' sds and time constants.

    ``w = mean + root x`` and ``x = G(τ) y`` with y independent normal. G is the identity but for
    kernels of exponentials, for which y holds amplitudes and ``x = A(τ) y``.

    Attributes
    ----------
    mean
        Shape (P,).
    root
        Scale of the weights, shape (P, P).
    keep
        G where it does not depend on time constants, zeros elsewhere, shape (P, Q).
    fixed
        Precision of y that does not depend on a sampled sd, shape (Q,).
    bend
        Precision of y, times σ_k², that does, shape (n_sd, Q): the precision is
        ``fixed + Σ_k bend_k/σ_k²``.
    sd_scale
        Scale of the half-normal prior of each σ_k, in the kernel's unit, shape (n_sd,).
    names
        The kernels that have a σ_k: all but those of exponentials.
    exponentials
        Kernels of exponentials, by name.
    places
        Of each of these, where its weights stand in x and its amplitudes in y.
    tau_ms
        Of each of these, the time constants at which a Gaussian is given where one is needed,
        shape (terms,): the prior's means of log τ, or what `at` was given.
    """

    mean: FloatArray
    root: FloatArray
    keep: FloatArray
    fixed: FloatArray
    bend: FloatArray
    sd_scale: FloatArray
    names: tuple[str, ...]
    exponentials: Mapping[str, Exponentials]
    places: Mapping[str, tuple[slice, slice]]
    tau_ms: Mapping[str, FloatArray]

    def at(self, tau_ms: Mapping[str, FloatArray]) -> WeightPrior:
        """The same prior, with the time constants at which a Gaussian is given."""
        return replace(self, tau_ms=dict(tau_ms))

    def covariance(self, sds: FloatArray) -> FloatArray:
        """Prior covariance of the weights for given kernel sds, time constants averaged, (P, P).

        The second moment of a half-normal is its scale squared: at `sd_scale` the kernels' sds are
        integrated out.
        """
        variance = 1.0 / (self.fixed + np.asarray(sds) ** -2.0 @ self.bend)
        inner = (self.keep * variance) @ self.keep.T
        for name, one in self.exponentials.items():
            weights, amplitudes = self.places[name]
            drawn = one.weights(one.draw(_TAU_DRAWS, np.random.default_rng(0)))
            inner[weights, weights] = np.einsum(
                "dwt,t,dvt->wv", drawn, variance[amplitudes], drawn, optimize=True
            ) / len(drawn)
        total: FloatArray = self.root @ inner @ self.root.T
        return total

    def precision(self, sds: FloatArray) -> FloatArray:
        """Prior precision of the weights for given kernel sds, shape (P, P).

        Weights of exponentials are taken as free, without what the sum of exponentials demands.
        """
        own = self.keep @ (self.fixed + np.asarray(sds) ** -2.0 @ self.bend)
        for weights, _ in self.places.values():
            own[weights] = 1.0
        back = np.linalg.inv(self.root)
        total: FloatArray = (back.T * own) @ back
        return total


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
    n, columns, scales = design.n_weights, design.columns, kernel_scales(priors)
    mean, root = np.zeros(n), np.eye(n)
    mean[columns["offset"]] = priors.offset_mean
    for name, sd in _term_sds(design, priors).items():
        root[columns[name], columns[name]] *= sd
    smooth = {name: spec for name, spec in design.kernels.items() if _is_smooth(spec)}
    bend = np.zeros((len(smooth), n))
    for k, (name, spec) in enumerate(smooth.items()):
        place, scale = columns[name], scales[name]
        shape = smoothness_prior(spec, falls=_falls(name, design))
        root[place, place] = scale * np.column_stack([shape.bends, RIDGE_FACTOR * shape.free])
        bend[k, place.start : place.start + shape.bends.shape[1]] = scale**2
    summed = {
        name: exponentials(spec) for name, spec in design.kernels.items() if name not in smooth
    }
    # The amplitudes of exponentials stand at the first of their weights; the others are dropped.
    kept = np.ones(n, dtype=np.bool_)
    for name, one in summed.items():
        place = columns[name]
        root[place, place] *= RIDGE_FACTOR * scales[name]
        kept[place.start + one.terms : place.stop] = False
    keep, places = np.eye(n)[:, kept], {}
    for name, one in summed.items():
        start = int(kept[: columns[name].start].sum())
        places[name] = (columns[name], slice(start, start + one.terms))
        keep[columns[name]] = 0.0
    return WeightPrior(
        mean=mean,
        root=root,
        keep=keep,
        fixed=(bend.sum(axis=0) == 0)[kept].astype(np.float64),
        bend=bend[:, kept],
        sd_scale=np.array([scales[name] for name in smooth]),
        names=tuple(smooth),
        exponentials=summed,
        places=places,
        tau_ms={name: one.typical_ms for name, one in summed.items()},
    )


def _falls(name: str, design: VoltageDesign) -> bool:
    """Whether a kernel's prior sd falls with the lag.

    κ is tens of MΩ/ms at first, where electrode and dendrites charge, and hundredths after a few
    membrane time constants; η has no such range. Where the electrode has a kernel of its own, κ
    must not bend early, or it would take part of the electrode for the cell.
    """
    return name == "input" and design.electrode_kernel is None


def _is_smooth(spec: KernelSpec) -> bool:
    """Whether a kernel has a random-walk prior: all but sums of exponentials."""
    return spec.basis != "exponentials"


def _term_sds(design: VoltageDesign, priors: PriorsSection) -> dict[str, float]:
    """Prior sd of each weight that belongs to no kernel."""
    sds = {"offset": priors.offset_sd}
    if design.electrode:
        # Together they have the stated sd, into however many lags the electrode is cut.
        place = design.columns["electrode"]
        sds["electrode"] = priors.electrode_sd / float(np.sqrt(place.stop - place.start))
    return sds


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
        rows.append(_electrode_row(design, priors))
    for name, scale in kernel_scales(priors).items():
        if name in design.kernels:
            rows += _kernel_rows(name, scale, design.kernels[name], _falls(name, design))
    rows.append(
        PriorRow(
            "φ",
            "gamma(ν/2, ν/2), ν from the units",
            "1",
            "the calibrated covariance is itself an estimate, from few units",
        )
    )
    return tuple(rows)


def _electrode_row(design: VoltageDesign, priors: PriorsSection) -> PriorRow:
    reason = "an unbalanced bridge of up to about 100 MΩ in either direction"
    if design.electrode_kernel is None:
        return PriorRow("electrode term", f"normal(0, {priors.electrode_sd:g})", "MΩ", reason)
    terms = 1 + design.electrode_kernel.weights
    return PriorRow(
        f"electrode, each of {terms} lags",
        f"normal(0, {priors.electrode_sd:g}/√{terms})",
        "MΩ",
        f"in sum {reason}",
    )


def _kernel_rows(name: str, scale: float, spec: KernelSpec, falls: bool) -> list[PriorRow]:
    """The rows of one kernel."""
    unit = {"input": "MΩ/ms", "after_spike": "mV"}[name]
    sign = {"input": "κ", "after_spike": "η"}[name]
    reason = {
        "input": "a cell of 400 MΩ and 20 ms starts at 20 MΩ/ms",
        "after_spike": "after-potentials reach from 1 to 20 mV",
    }[name]
    if not _is_smooth(spec):
        return [
            PriorRow(
                f"{spec.terms} time constants of {sign}",
                f"gaps of log τ Dirichlet({GAP_CONCENTRATION:g}, …) from {spec.finest_ms:g} to "
                f"{spec.duration_ms:g}",
                "ms",
                "log-spaced in the mean, from what a row resolves to what the kernel holds",
            ),
            PriorRow(f"amplitudes of {sign}", f"normal(0, {RIDGE_FACTOR * scale:g})", unit, reason),
        ]
    falling = f" of {sign}(s)·√(1 + s/s0)" if falls else ""
    rows = [
        PriorRow(f"sd of {sign}", f"half-normal({scale:g})", unit, reason),
        PriorRow(
            f"bends of {sign}",
            f"second-order random walk{falling}, scaled to the sd of {sign}",
            unit,
            "kernels are smooth on a logarithmic axis of lags, whatever the number of weights",
        ),
        PriorRow(
            f"straight part of {sign}",
            f"normal(0, {RIDGE_FACTOR * scale:g})",
            unit,
            "weak: it only makes the prior proper where bends say nothing",
        ),
    ]
    if falls:
        rows.append(
            PriorRow(
                f"exponential part of {sign}, of a fifth of its duration",
                f"normal(0, {RIDGE_FACTOR * scale:g})",
                unit,
                "weak: κ is close to one exponential, and only departures from it are smoothed",
            )
        )
    return rows

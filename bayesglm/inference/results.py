"""What a fit returns: bands, features, splits by drive and the verdict, immutable.

No estimate travels without its interval, and no interval without the verdict on it.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING, Any

import numpy as np

from bayesglm.inference.sample import Chains
from bayesglm.inference.sensitivity import Sensitivity
from bayesglm.kernels.design import VoltageDesign
from bayesglm.likelihood.calibration import Calibration
from bayesglm.likelihood.digest import VoltageDigest
from bayesglm.models.priors import WeightPrior
from bayesglm.recording.recording import FloatArray, IntArray, Recording
from bayesglm.recording.settings import Settings
from bayesglm.verdict import Reason, Severity, worst

if TYPE_CHECKING:
    import xarray

#: A simultaneous band leaves out lags where the sd is below this share of its maximum: there
#: the kernel is pinned to zero by construction.
SIMULTANEOUS_SD_SHARE = 0.02


@dataclass(frozen=True, eq=False)
class Band:
    """A kernel with its uncertainty; all arrays have the shape of `lags_ms`.

    Attributes
    ----------
    kernel
        ``input`` (κ), ``after_spike`` (η) or ``electrode``.
    unit
        MΩ/ms, mV or MΩ.
    level
        Level of the bands.
    lags_ms
        Lags, ms.
    mean, sd
        Of the posterior; NaN where nothing is known, as inside the spike window.
    lower, upper
        Pointwise band: it covers `level` of the truth on average over lags.
    lower_simultaneous, upper_simultaneous
        Band that holds the whole curve with probability `level`, over the lags where the sd
        exceeds 2 % of its maximum.
    white_lower, white_upper
        Pointwise band if residuals were white: shown dotted, not to be believed.
    between_range_sd
        How much the kernel differs between ranges of drive beyond error; NaN where it cannot be
        told.
    protocol_lower, protocol_upper
        Hull of the pointwise band and the bands of the three ranges of drive.
    prior_share
        Posterior sd over prior sd.
    """

    kernel: str
    unit: str
    level: float
    lags_ms: FloatArray
    mean: FloatArray
    sd: FloatArray
    lower: FloatArray
    upper: FloatArray
    lower_simultaneous: FloatArray
    upper_simultaneous: FloatArray
    white_lower: FloatArray
    white_upper: FloatArray
    between_range_sd: FloatArray
    protocol_lower: FloatArray
    protocol_upper: FloatArray
    prior_share: FloatArray

    @property
    def simultaneous_range_ms(self) -> tuple[float, float]:
        """First and last lag over which the simultaneous band holds the whole curve, ms.

        Lags where the sd is too small beside its maximum are pinned to zero by construction.
        NaN where nothing is known.
        """
        known = np.flatnonzero(self.sd > SIMULTANEOUS_SD_SHARE * np.nanmax(self.sd, initial=0.0))
        if not len(known):
            return float("nan"), float("nan")
        return float(self.lags_ms[known[0]]), float(self.lags_ms[known[-1]])


@dataclass(frozen=True)
class Feature:
    """A number read off the kernels, draw by draw.

    Attributes
    ----------
    name, unit
        As in ``features.csv``.
    mean, sd, lower, upper
        Of the posterior, at `level`; NaN where the feature does not exist.
    protocol_lower, protocol_upper, between_range_sd
        As for `Band`; NaN where the drive split does not apply.
    level
        Level of the interval.
    ess_bulk, mcse_mean
        Effective draws and Monte Carlo error of the mean; NaN for a probability.
    """

    name: str
    unit: str
    mean: float
    sd: float
    lower: float
    upper: float
    protocol_lower: float
    protocol_upper: float
    between_range_sd: float
    level: float
    ess_bulk: float
    mcse_mean: float


@dataclass(frozen=True, eq=False)
class DriveRange:
    """The units of one range of drive and what they alone say of one kernel.

    Attributes
    ----------
    label
        The range in words, such as ``50–125 pA`` or ``2–5 Hz``.
    units
        Indices of its units in the digest.
    curve
        Mean and sd of the kernel from these units alone, at the lags of the kernel's `Band`.
    features
        Mean and sd of each feature of this kernel from these units alone.
    """

    label: str
    units: IntArray
    curve: tuple[FloatArray, FloatArray]
    features: dict[str, tuple[float, float]]


@dataclass(frozen=True, eq=False)
class Split:
    """A kernel fitted from parts of the recording.

    Attributes
    ----------
    kernel
        Name of the kernel.
    ranges
        Three ranges of drive, from the lowest; empty where fewer than six units excite it.
    disagreement
        How far the ranges are apart at the worst lag, in sds; NaN without ranges.
    """

    kernel: str
    ranges: tuple[DriveRange, ...]
    disagreement: float


@dataclass(frozen=True)
class Verdict:
    """Whether to believe the fit, why, and what to do next; ``verdict.json``.

    Attributes
    ----------
    verdict
        The worst of the reasons.
    reasons
        Every check, also those passed.
    units, effective_units
        Independent units (different currents, where a current is repeated), and how many equal
        ones they are worth.
    """

    verdict: Severity
    reasons: tuple[Reason, ...]
    observe: str
    units: int
    effective_units: float
    calibration_ratio: dict[str, float]
    route: str
    rhat_max: float
    ess_min: float
    divergences: int
    spikes: int
    bins: int
    seconds: dict[str, float] = field(default_factory=dict)
    khat: float | None = None
    effective_draws: float | None = None

    def with_reasons(self, reasons: Sequence[Reason]) -> Verdict:
        """The verdict with further reasons."""
        every = (*self.reasons, *reasons)
        return replace(self, reasons=every, verdict=worst(reason.verdict for reason in every))

    @property
    def open_reasons(self) -> tuple[Reason, ...]:
        """The reasons that are not ``passed``, worst first."""
        order = {"failed": 0, "caution": 1}
        return tuple(
            sorted((r for r in self.reasons if r.verdict in order), key=lambda r: order[r.verdict])
        )


@dataclass(frozen=True, eq=False)
class CellFit:
    """The posterior of one cell.

    Attributes
    ----------
    cell, condition, cell_class, animal
        What was fitted.
    settings
        All settings in force, defaults filled in.
    design
        The linear model, durations filled in.
    recordings
        What was fitted, after selection and spike detection.
    digest, calibration, prior
        What the posterior rests on.
    chains
        Draws of the kernels' sds and φ.
    weights
        Exact draws of the weights, shape (chains, draws, P).
    kernels, features
        Bands and numbers.
    splits
        The drive split of each kernel.
    verdict
        Whether to believe it.
    warnings
        Notes for the user in words, such as "no spikes: the after-spike kernel is left out".
    sensitivity
        The same cell with other durations, and with other ends of the spike window.
    """

    cell: str
    condition: str
    cell_class: str
    animal: str
    settings: Settings
    design: VoltageDesign
    recordings: tuple[Recording, ...]
    digest: VoltageDigest
    calibration: Calibration
    prior: WeightPrior
    chains: Chains
    weights: FloatArray
    kernels: dict[str, Band]
    features: tuple[Feature, ...]
    splits: dict[str, Split]
    verdict: Verdict
    warnings: tuple[str, ...] = ()
    sensitivity: Sensitivity = field(default_factory=Sensitivity)

    @property
    def name(self) -> str:
        """``CELL`` or ``CELL@CONDITION``: the name of the results' folder."""
        return f"{self.cell}@{self.condition}" if self.condition else self.cell

    @property
    def mean_weights(self) -> FloatArray:
        """Posterior mean of the weights, shape (P,)."""
        mean: FloatArray = self.weights.mean(axis=(0, 1))
        return mean

    def kernel(self, name: str) -> Band:
        """The band of a kernel.

        Raises
        ------
        KeyError
            If the kernel was not fitted; the message lists those that were.
        """
        if name not in self.kernels:
            raise KeyError(f"no kernel {name!r} in this fit; it has {', '.join(self.kernels)}")
        return self.kernels[name]

    def feature(self, name: str) -> Feature:
        """The feature of a name.

        Raises
        ------
        KeyError
            If there is no such feature; the message lists those there are.
        """
        found = {feature.name: feature for feature in self.features}
        if name not in found:
            raise KeyError(f"no feature {name!r} in this fit; it has {', '.join(found)}")
        return found[name]

    @property
    def posterior(self) -> xarray.DataTree:
        """The posterior as a DataTree that ArviZ reads; see `inference.datatree`."""
        from bayesglm.inference.datatree import to_datatree

        return to_datatree(self)


def finite_or_none(value: float) -> Any:
    """A float for JSON, where NaN has no place: None stands for it."""
    return float(value) if np.isfinite(value) else None

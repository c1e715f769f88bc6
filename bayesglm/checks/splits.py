"""The same model fitted to parts of a recording: by range of drive, and odd against even.

A linear kernel of a nonlinear cell belongs to cell and protocol. Fitting the units with little
and with much drive apart shows how far; fitting odd and even units apart shows whether the
recording agrees with itself. Digests add, so each part costs a small linear solve.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.stats import chi2, norm

from bayesglm.likelihood.calibration import Calibration, calibrate
from bayesglm.likelihood.digest import VoltageDigest
from bayesglm.likelihood.least_squares import least_squares
from bayesglm.models.cell import voltage_evidence, weight_moments
from bayesglm.models.priors import WeightPrior
from bayesglm.recording.recording import FloatArray, IntArray
from bayesglm.recording.wording import fixed

#: Fewer exciting units than this cannot be cut into three ranges.
FEWEST_UNITS = 6
_RANGES = 3

#: Lags where a part's sd is below this share of the largest are pinned by construction.
_SMALLEST_SD_SHARE = 0.02


@dataclass(frozen=True, eq=False)
class PartEstimate:
    """What a part of the recording says of the weights.

    Attributes
    ----------
    units
        Indices of its units in the digest.
    mean, covariance
        Of the weights, shapes (P,) and (P, P).
    """

    units: IntArray
    mean: FloatArray
    covariance: FloatArray

    def sample(self, n: int, rng: np.random.Generator) -> FloatArray:
        """Draw weights, shape (n, P)."""
        values, vectors = np.linalg.eigh(self.covariance)
        root = vectors * np.sqrt(np.clip(values, 0.0, None))
        draws: FloatArray = self.mean + rng.normal(size=(n, len(values))) @ root.T
        return draws


def exciting_units(digest: VoltageDigest, kernel: str) -> IntArray:
    """Units that say something of a kernel: the current varies, or there is a spike."""
    if kernel == "after_spike":
        return np.flatnonzero(digest.spikes > 0)
    return np.flatnonzero(digest.current_sd_nA > 1e-3 * digest.current_sd_nA.max(initial=0.0))


def drive(digest: VoltageDigest) -> tuple[FloatArray, str]:
    """Drive of each unit and its unit of measure: mean current in pA, else firing rate in Hz.

    Mean current tells units apart where it differs between them by more than chance. Under a
    stationary fluctuating current it does not, and the firing rate is taken if there is one.
    """
    spread = float(digest.drive_nA.std())
    within = float(np.sqrt(np.mean(digest.current_sd_nA**2)))
    if spread > 0.25 * within or not digest.spikes.any():
        return digest.drive_nA * 1e3, "pA"
    return digest.spikes / digest.seconds, "Hz"


def drive_ranges(digest: VoltageDigest, kernel: str) -> tuple[IntArray, ...]:
    """Cut the units that excite a kernel into three ranges of drive, extras to the lower.

    Returns
    -------
    tuple of arrays of unit indices
        Empty where fewer than six units excite the kernel, or the lowest range and the highest
        would have the same name.
    """
    units = exciting_units(digest, kernel)
    if len(units) < FEWEST_UNITS:
        return ()
    ordered = units[np.argsort(drive(digest)[0][units], kind="stable")]
    # array_split gives the extras to the first parts.
    ranges = tuple(np.asarray(part) for part in np.array_split(ordered, _RANGES))
    if range_label(digest, ranges[0]) == range_label(digest, ranges[-1]):
        return ()
    return ranges


def range_label(digest: VoltageDigest, units: IntArray) -> str:
    """Name a range of drive: ``50–125 pA``."""
    values, unit = drive(digest)
    low, high = float(values[units].min()), float(values[units].max())
    digits = 0 if max(abs(low), abs(high)) >= 10 else 1
    ends = [fixed(low, digits), fixed(high, digits)]
    # A dash between numbers of which one is negative would be read as a minus.
    dash = "–" if low >= 0 else " to "
    return f"{dash.join(dict.fromkeys(ends))} {unit}"


def estimate_part(
    digest: VoltageDigest,
    units: IntArray,
    whole: Calibration,
    inflation: dict[str, float],
    prior: WeightPrior,
    sd: FloatArray,
) -> PartEstimate:
    """Fit a part of the units, with what the whole recording says of offsets and drifts.

    Parameters
    ----------
    digest
        The whole digest.
    units
        Indices of the units of the part.
    whole
        Calibration of the whole digest; its sweeps' effects are taken over.
    inflation
        D of each kernel, from the spread of units inside the parts.
    prior
        Prior of the weights.
    sd
        Sd of each kernel, shape (n_kernels,).

    Returns
    -------
    PartEstimate
    """
    part = digest.take(units)
    fit = least_squares(part, prior.root, whole.fit.sweep_ratios, whole.fit.sweep_variances)
    calibration = calibrate(part, fit, np.empty((0, digest.design.n_weights)), inflation)
    evidence = voltage_evidence(fit.weights, calibration.precision, fit.rank, whole.freedom, prior)
    return PartEstimate(units, *weight_moments(evidence, prior, sd))


def disagreement(means: FloatArray, sds: FloatArray) -> float:
    """How far estimates of one curve from several parts are apart, in units of their error.

    Parameters
    ----------
    means, sds
        Shape (parts, n_lags).

    Returns
    -------
    The largest over lags of how surprising ``Σ_g (x_g − x̄)²/sd_g²`` is, told as the number of
    standard deviations of a normal variate that would surprise as much; x̄ is the
    precision-weighted mean. Zero where no lag has an error.
    """
    usable = np.all(sds > _SMALLEST_SD_SHARE * np.nanmax(sds, initial=0.0), axis=0)
    if not usable.any():
        return 0.0
    x, precision = means[:, usable], 1.0 / sds[:, usable] ** 2
    centre = (precision * x).sum(axis=0) / precision.sum(axis=0)
    chi_square = (precision * (x - centre) ** 2).sum(axis=0)
    return as_sds(float(chi2.logsf(chi_square.max(), df=len(x) - 1)))


def as_sds(log_p: float) -> float:
    """The sds of a normal variate that would surprise as much as a log of a probability."""
    # Beyond 37 sds the tail of the normal is zero in float64.
    return float(min(norm.isf(np.exp(log_p) / 2), 37.0))


def between_sd(means: FloatArray, sds: FloatArray) -> FloatArray:
    """``√max(0, variance of the estimates − mean of their variances)`` over parts, axis 0."""
    excess = means.var(axis=0, ddof=1) - (sds**2).mean(axis=0)
    return np.sqrt(np.maximum(excess, 0.0))

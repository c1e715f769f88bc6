"""From draws to bands and features, with what the ranges of drive say beside each."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from arviz_stats.base import array_stats
from scipy.stats import norm

from bayesglm.checks.splits import (
    PartEstimate,
    between_sd,
    disagreement,
    drive_ranges,
    estimate_part,
    range_label,
)
from bayesglm.features import FeatureDraws, feature_draws
from bayesglm.fitting.posterior import Posterior, white_weights
from bayesglm.inference.bands import WeightSummary, identified, kernel_rows, make_band
from bayesglm.inference.results import Band, DriveRange, Feature, Split
from bayesglm.likelihood.calibration import Calibration, inflation_within
from bayesglm.likelihood.digest import VoltageDigest
from bayesglm.likelihood.least_squares import noise_log_sd
from bayesglm.recording.recording import FloatArray, IntArray
from bayesglm.recording.settings import Settings

#: Draws of a part's Gaussian estimate, from which its features' mean and sd are taken.
_PART_DRAWS = 400


@dataclass(frozen=True, eq=False)
class Summary:
    """Bands, features and splits of one cell; `halves` is odd against even by kernel, in sds."""

    kernels: dict[str, Band]
    features: tuple[Feature, ...]
    splits: dict[str, Split]
    halves: dict[str, float]


def summarise(
    posterior: Posterior, digest: VoltageDigest, calibration: Calibration, settings: Settings
) -> Summary:
    """Summarise a posterior.

    Parameters
    ----------
    posterior
        The draws.
    digest
        What they rest on; its units are split by drive and into odd and even.
    calibration
        Of the whole digest.
    settings
        Level of the intervals, reported lags, seed.

    Returns
    -------
    Summary
    """
    rng = np.random.default_rng(settings.sampling.seed)
    report_at_ms = settings.kernels.after_spike.report_at_ms
    bands = _bands(posterior, calibration, settings.sampling.level)

    def parts_of(groups: tuple[IntArray, ...]) -> list[PartEstimate]:
        inflation = inflation_within(digest, calibration, groups)
        # At the prior's own scales: the whole recording's sds, which are smaller, pulled parts
        # towards smoother kernels than they have.
        prior, sd = posterior.prior, posterior.prior.sd_scale
        return [estimate_part(digest, units, calibration, inflation, prior, sd) for units in groups]

    def read_features(part: PartEstimate) -> dict[str, FeatureDraws]:
        draws = part.sample(_PART_DRAWS, rng)
        return feature_draws(draws, posterior.design, posterior.step_ms, report_at_ms)

    splits: dict[str, Split] = {}
    for kernel in posterior.design.kernels:
        ranges = [
            _drive_range(digest, part, bands[kernel], posterior, read_features(part))
            for part in parts_of(drive_ranges(digest, kernel))
        ]
        splits[kernel] = Split(kernel, tuple(ranges), _apart([r.curve for r in ranges]))
        bands[kernel] = _with_ranges(bands[kernel], ranges)
    every = np.arange(digest.n_units)
    halves = parts_of((every[::2], every[1::2])) if digest.n_units >= 2 else []
    apart = {
        kernel: _apart([_curve(part, bands[kernel], posterior) for part in halves])
        for kernel in posterior.design.kernels
        if halves
    }
    drawn = feature_draws(posterior.flat, posterior.design, posterior.step_ms, report_at_ms)
    for kernel, tau_ms in posterior.chains.time_constants.items():
        for k in range(tau_ms.shape[-1]):
            # Of no part: parts hold them at the median of the whole.
            one = FeatureDraws("", "ms", tau_ms[..., k].reshape(-1))
            drawn[f"{kernel}_time_constant_{k + 1}"] = one
    drawn["noise_sd"] = _noise_draws(digest, calibration, len(posterior.flat), rng)
    features = tuple(
        _feature(name, draws, splits, posterior, settings.sampling.level)
        for name, draws in drawn.items()
    )
    return Summary(bands, features, splits, apart)


def _bands(posterior: Posterior, calibration: Calibration, level: float) -> dict[str, Band]:
    white = WeightSummary(*white_weights(calibration, posterior.prior, posterior.kernel_sd))
    prior_covariance = posterior.prior.covariance(posterior.prior.sd_scale)
    names = list(posterior.design.kernels)
    if "electrode" in posterior.design.columns:
        names.append("electrode")
    return {
        name: make_band(name, posterior.design, posterior.flat, white, prior_covariance, level)
        for name in names
    }


def _curve(part: PartEstimate, band: Band, posterior: Posterior) -> tuple[FloatArray, FloatArray]:
    """Mean and sd of a kernel from a part of the units; NaN where nothing is known."""
    rows = kernel_rows(posterior.design, band.kernel, band.lags_ms)
    variance = np.einsum("lp,pq,lq->l", rows, part.covariance, rows)
    known = identified(posterior.design, band.kernel, band.lags_ms)
    sd = np.sqrt(np.maximum(variance, 0.0))
    return np.where(known, rows @ part.mean, np.nan), np.where(known, sd, np.nan)


def _drive_range(
    digest: VoltageDigest,
    part: PartEstimate,
    band: Band,
    posterior: Posterior,
    features: dict[str, FeatureDraws],
) -> DriveRange:
    return DriveRange(
        label=range_label(digest, part.units),
        units=part.units,
        curve=_curve(part, band, posterior),
        features={
            name: (float(one.draws.mean()), float(one.draws.std()))
            for name, one in features.items()
            if one.kernel == band.kernel
        },
    )


def _apart(curves: list[tuple[FloatArray, FloatArray]]) -> float:
    """How far curves are apart in sds; NaN where there are none."""
    if not curves:
        return float("nan")
    means, sds = (np.array(values) for values in zip(*curves, strict=True))
    return disagreement(means, sds)


def _with_ranges(band: Band, ranges: list[DriveRange]) -> Band:
    if not ranges:
        return band
    means, sds = (np.array(values) for values in zip(*(r.curve for r in ranges), strict=True))
    reach = float(norm.ppf((1 + band.level) / 2))
    return replace(
        band,
        between_range_sd=between_sd(means, sds),
        protocol_lower=np.minimum(band.lower, (means - reach * sds).min(axis=0)),
        protocol_upper=np.maximum(band.upper, (means + reach * sds).max(axis=0)),
    )


def _noise_draws(
    digest: VoltageDigest, calibration: Calibration, n: int, rng: np.random.Generator
) -> FeatureDraws:
    log_sd, error = noise_log_sd(digest, calibration.fit)
    return FeatureDraws("", "mV", np.exp(log_sd + error * rng.normal(size=n)))


def _feature(
    name: str, drawn: FeatureDraws, splits: dict[str, Split], posterior: Posterior, level: float
) -> Feature:
    draws, nan = drawn.draws, float("nan")
    mean, sd = float(draws.mean()), float(draws.std(ddof=1))
    lower, upper = (float(q) for q in np.quantile(draws, [(1 - level) / 2, (1 + level) / 2]))
    chained = draws.reshape(posterior.chains.diverging.shape)
    axes = {"chain_axis": 0, "draw_axis": 1}
    varies = sd > 0
    ess = float(array_stats.ess(chained, **axes)) if varies else nan
    mcse = float(array_stats.mcse(chained, **axes, method="mean")) if varies else nan
    if drawn.is_probability:
        # The event has a probability; a probability has no interval here.
        sd = lower = upper = nan
    ranges = splits[drawn.kernel].ranges if drawn.kernel else ()
    low, high, between = nan, nan, nan
    if ranges and np.isfinite(mean):
        means = np.array([r.features[name][0] for r in ranges])
        sds = np.array([r.features[name][1] for r in ranges])
        between = float(between_sd(means, sds))
        reach = float(norm.ppf((1 + level) / 2))
        low = float(np.fmin(lower, (means - reach * sds).min()))
        high = float(np.fmax(upper, (means + reach * sds).max()))
    return Feature(
        name=name,
        unit=drawn.unit,
        mean=mean,
        sd=sd,
        lower=lower,
        upper=upper,
        protocol_lower=low,
        protocol_upper=high,
        between_range_sd=between,
        level=level,
        ess_bulk=ess,
        mcse_mean=mcse,
    )

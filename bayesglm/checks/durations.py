"""How much a fit rests on the durations of its kernels: a grid of durations from one digest.

Knots are even on the warped axis of lags, so that leaving out the splines whose support reaches
beyond knot t_m leaves exactly the kernels that end, smoothly, at t_m: a subset of the columns, and
hence of the digest of the longest kernels. The prior given that the other weights are zero has the
same block of the precision. Every pair of durations thus costs a small linear solve.

At each pair two things are asked: how well what was left out of the fit is predicted, and what
the reported features are. The grid always uses splines, whatever the kernels of the fit are made
of: durations belong to the cell. It smooths hardly at all, with the kernels' sds at the scales of
their priors: an sd that was fitted to one duration would be wrong for the others.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace

import numpy as np
from scipy.optimize import brentq

from bayesglm.inference.sensitivity import DurationGrid
from bayesglm.inference.setup import INPUT_BOUNDS_MS
from bayesglm.kernels.basis import KernelSpec
from bayesglm.kernels.design import VoltageDesign
from bayesglm.likelihood.calibration import Calibration
from bayesglm.likelihood.clusters import stimulus_clusters
from bayesglm.likelihood.digest import VoltageDigest
from bayesglm.likelihood.least_squares import RANK_TOLERANCE, correlation_time_ms, rows_apart
from bayesglm.likelihood.offsets import marginalise, sweep_sums
from bayesglm.models.priors import WeightPrior
from bayesglm.recording.recording import BoolArray, FloatArray, IntArray

#: Intervals between knots from lag 0 to the longest duration: durations 15–35 % apart.
_INTERVALS = 20
#: Durations of a kernel at most.
_MOST = 6

_MOST_FOLDS = 20
_BLOCK_FOLDS = 10
#: Sweeps are held out whole where there are this many with different currents, else blocks.
_FEWEST_SWEEPS = 4


def longest_design(design: VoltageDesign, room_ms: float) -> VoltageDesign:
    """The same model with splines as long as the grid goes, a knot at each chosen duration.

    Parameters
    ----------
    design
        The model that was fitted.
    room_ms
        No kernel is made longer than this, ms, unless it is already.
    """

    def longest(spec: KernelSpec) -> KernelSpec:
        chosen = spec.duration_ms
        duration = max(chosen, min(INPUT_BOUNDS_MS[1], room_ms))
        warp = _warp_with_knot(chosen, duration, spec.warp_ms)
        return KernelSpec(duration, _INTERVALS + 2, warp)

    after = design.after_spike
    return replace(
        design,
        input=longest(design.input),
        after_spike=longest(after) if after is not None else None,
    )


def _warp_with_knot(chosen_ms: float, longest_ms: float, warp_ms: float) -> float:
    """The warp near `warp_ms` that puts a knot on the chosen duration."""

    def place(warp: float) -> float:
        return float(np.log1p(chosen_ms / warp) / np.log1p(longest_ms / warp))

    nearest = round(place(warp_ms) * _INTERVALS) / _INTERVALS
    low, high = warp_ms / 20, warp_ms * 20
    # A wider warp lowers the place. Where no warp near reaches a knot, the nearest knot will do.
    if nearest >= 1.0 or not place(high) < nearest < place(low):
        return warp_ms
    return float(brentq(lambda warp: place(warp) - nearest, low, high))


def knots_ms(spec: KernelSpec) -> FloatArray:
    """Knots of a kernel of splines from lag 0 to its duration, ms, shape (weights − 1,).

    The first i splines end at knot i with value, slope and curvature zero.
    """
    place = np.linspace(0.0, 1.0, spec.weights - 1)
    knots: FloatArray = spec.warp_ms * np.expm1(place * np.log1p(spec.duration_ms / spec.warp_ms))
    return knots


def duration_grid(
    digest: VoltageDigest,
    calibration: Calibration,
    prior: WeightPrior,
    chosen: VoltageDesign,
    features: Mapping[str, FloatArray],
) -> DurationGrid | None:
    """Hold every pair of durations against what was left out, and read the features at each.

    Parameters
    ----------
    digest
        Of `longest_design`.
    calibration, prior
        Of that digest.
    chosen
        The model that was fitted, with its durations.
    features
        By name, combinations of the weights of the longest design, shape (P,).

    Returns
    -------
    DurationGrid
        None where nothing can be held out or there is no choice of durations.
    """
    specs = list(digest.design.kernels.values())
    durations = [spec.duration_ms for spec in chosen.kernels.values()]
    axes = [_places(spec, ms) for spec, ms in zip(specs, durations, strict=True)]
    groups, folds = hold_out_groups(digest)
    left = min(len(_to_fit(digest.sweep, folds == fold)) for fold in np.unique(folds))
    if max(len(axis) for axis in axes) < 2 or left == 0:
        return None
    shape = tuple(len(axis) for axis in axes)
    kept = [
        kept_columns(digest.design, [int(axis[i]) for axis, i in zip(axes, place, strict=True)])
        for place in np.ndindex(shape)
    ]
    precision = prior.precision(prior.sd_scale)
    errors = _held_out_errors(digest, calibration, prior.mean, precision, kept, (groups, folds))
    held_out, se = _against_best(errors, digest.n_rows)
    read = _read(digest, calibration, prior.mean, precision, kept, np.array([*features.values()]))
    knots = [knots_ms(spec)[axis] for spec, axis in zip(specs, axes, strict=True)]
    own = [int(np.argmin(np.abs(np.log(k / ms)))) for k, ms in zip(knots, durations, strict=True)]
    if len(axes) == 1:
        # One column of the tables where there is no after-spike kernel.
        knots, own, shape = [*knots, np.zeros(0)], [*own, 0], (*shape, 1)
    return DurationGrid(
        input_ms=knots[0],
        after_spike_ms=knots[1],
        chosen=(own[0], own[1]),
        held_out_mV2=held_out.reshape(shape),
        held_out_se_mV2=se.reshape(shape),
        folds=len(np.unique(folds)),
        features={
            name: (mean.reshape(shape), sd.reshape(shape))
            for name, (mean, sd) in zip(features, read, strict=True)
        },
    )


def hold_out_groups(digest: VoltageDigest) -> tuple[IntArray, IntArray]:
    """Independent group of each unit, and the fold in which each unit is held out, (B,) each.

    Sweeps are whole, those of the same current together. With too few of them, blocks are held
    out, those of the same stimulus together and in runs, so that few neighbours are lost.
    """
    stimulus = stimulus_clusters(digest)
    # A sweep is known by the stimuli of its blocks.
    currents = [tuple(digest.stimulus[digest.sweep == s].tolist()) for s in digest.sweep]
    known = {current: k for k, current in enumerate(dict.fromkeys(currents))}
    if len(known) >= _FEWEST_SWEEPS:
        groups = np.array([known[current] for current in currents])
        return groups, groups % _MOST_FOLDS
    first_seen = np.unique(stimulus, return_index=True)[1]
    order = np.argsort(np.argsort(first_seen))
    n = len(order)
    return stimulus, (order * min(n, _BLOCK_FOLDS) // n)[stimulus]


def _places(spec: KernelSpec, chosen_ms: float) -> IntArray:
    """Indices of the knots that are the grid's durations, the chosen one and the last within."""
    distance = np.abs(np.log(knots_ms(spec)[1:] / np.array([[INPUT_BOUNDS_MS[0]], [chosen_ms]])))
    first, own = (distance.argmin(axis=1) + 1).tolist()
    last = spec.weights - 2
    places = np.unique(np.linspace(min(first, own), last, _MOST).round().astype(np.int64))
    if own not in places:
        places[1 + np.argmin(np.abs(places[1:-1] - own))] = own
    return np.sort(places)


def kept_columns(design: VoltageDesign, splines: Sequence[int]) -> IntArray:
    """Columns that stay where each kernel keeps its first splines."""
    stays = np.ones(design.n_weights, dtype=np.bool_)
    for name, n in zip(design.kernels, splines, strict=True):
        place = design.columns[name]
        stays[place.start + n : place.stop] = False
    return np.flatnonzero(stays)


def _held_out_errors(
    digest: VoltageDigest,
    calibration: Calibration,
    mean: FloatArray,
    precision: FloatArray,
    kept: Sequence[IntArray],
    split: tuple[IntArray, IntArray],
) -> FloatArray:
    """Squared error of each group by a fit without its fold, (points, G), mV².

    The offset of what was held out is integrated out. Weights are posterior means as if rows a
    correlation time apart were independent.
    """
    fit, (groups, folds) = calibration.fit, split
    apart = rows_apart(correlation_time_ms(digest, fit), digest.design.row_ms)
    tempered = max(fit.residual_variance * apart, 1e-12)

    def total(units: IntArray) -> FloatArray:
        sums = sweep_sums(digest.sums[units], digest.sweep[units])
        return np.asarray(marginalise(sums, fit.sweep_ratios).sum(axis=0))

    names = np.unique(folds)
    training = np.array([total(_to_fit(digest.sweep, folds == fold)) for fold in names]) / tempered
    pulled = training[:, :-1, -1] + precision @ mean
    curvature = training[:, :-1, :-1] + precision
    residual = np.zeros((len(kept), len(names), len(mean) + 1))
    residual[:, :, -1] = 1.0
    for point, columns in enumerate(kept):
        inside = curvature[:, columns[:, None], columns]
        residual[point][:, columns] = -np.linalg.solve(inside, pulled[:, columns, None])[..., 0]
    errors = np.empty((len(kept), int(groups.max()) + 1))
    for group in range(errors.shape[1]):
        units = np.flatnonzero(groups == group)
        a = residual[:, np.searchsorted(names, folds[units[0]])]
        errors[:, group] = np.sum((a @ total(units)) * a, axis=1)
    return errors


def _to_fit(sweep: IntArray, held: BoolArray) -> IntArray:
    """Units that are neither held out nor beside one of the same sweep that is."""
    joined = sweep[:-1] == sweep[1:]
    out = held.copy()
    out[1:] |= held[:-1] & joined
    out[:-1] |= held[1:] & joined
    return np.flatnonzero(~out)


def _against_best(errors: FloatArray, n_rows: float) -> tuple[FloatArray, FloatArray]:
    """Held-out error a row, and se of its difference from the best, paired over groups."""
    total, n = errors.sum(axis=1), errors.shape[1]
    difference = errors - errors[np.argmin(total)]
    return total / n_rows, np.sqrt(n * difference.var(axis=1, ddof=1)) / n_rows


def _read(
    digest: VoltageDigest,
    calibration: Calibration,
    mean: FloatArray,
    precision: FloatArray,
    kept: Sequence[IntArray],
    rows: FloatArray,
) -> FloatArray:
    """Mean and calibrated sd of each feature at each point, shape (features, 2, points)."""
    fit = calibration.fit
    total = marginalise(sweep_sums(digest.sums, digest.sweep), fit.sweep_ratios).sum(axis=0)
    pulled = total[:-1, -1] - total[:-1, :-1] @ mean
    # The scores keep the covariance that they have with the longest kernels.
    scores: FloatArray = fit.back.T @ calibration.covariance @ fit.back
    found = np.empty((len(rows), 2, len(kept)))
    for point, columns in enumerate(kept):
        inside = np.ix_(columns, columns)
        weights, covariance = _conditional(
            pulled[columns], total[inside], scores[inside], precision[inside]
        )
        part = rows[:, columns]
        found[:, 0, point] = rows @ mean + part @ weights
        found[:, 1, point] = np.sqrt(np.sum((part @ covariance) * part, axis=1))
    return found


def _conditional(
    pulled: FloatArray, information: FloatArray, scores: FloatArray, precision: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Posterior mean, (k,), and covariance, (k, k), of weights that have prior mean zero.

    Parameters
    ----------
    pulled, information
        ``Xᵀv``, (k,), and ``XᵀX``, (k, k).
    scores
        Covariance of the least-squares scores, (k, k).
    precision
        Of the prior, (k, k).
    """
    covariance = np.linalg.inv(precision)
    root = np.linalg.cholesky((covariance + covariance.T) / 2)
    values, vectors = np.linalg.eigh(root.T @ information @ root)
    excited = values > RANK_TOLERANCE * values[-1]
    size, directions = np.sqrt(values[excited]), vectors[:, excited]
    # As in `least_squares`: z = Mᵀ Xᵀv with covariance Mᵀ scores M, weights w = root x.
    to_z = root @ directions / size
    half = size[:, None] * directions.T
    weight = half.T @ np.linalg.inv(to_z.T @ scores @ to_z)
    spread = np.linalg.inv(np.eye(len(values)) + weight @ half)
    return root @ (spread @ (weight @ (to_z.T @ pulled))), root @ spread @ root.T

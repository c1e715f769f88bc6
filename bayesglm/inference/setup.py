"""From settings and recordings to the design and the digest: what the user left open is filled
from the data.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from bayesglm.kernels.basis import DEFAULT_WEIGHTS, KernelSpec
from bayesglm.kernels.design import (
    VoltageDesign,
    default_row_ms,
    electrode_spec,
    samples_per_row,
)
from bayesglm.likelihood.digest import VoltageDigest
from bayesglm.likelihood.jackknife import INDEPENDENT_TIMES
from bayesglm.likelihood.least_squares import (
    LeastSquares,
    correlation_time_ms,
    least_squares,
    rows_apart,
    with_sweep_effects,
)
from bayesglm.likelihood.voltage import refuse_long_kernels, voltage_digest
from bayesglm.models.cell import voltage_evidence, weight_moments
from bayesglm.models.priors import WeightPrior, weight_prior
from bayesglm.recording.loading import load_cell
from bayesglm.recording.recording import FloatArray, Recording
from bayesglm.recording.selection import leave_out_unsettled
from bayesglm.recording.settings import KernelSection, Settings
from bayesglm.recording.steps import membrane_time_constant
from bayesglm.recording.study import CellEntry

#: Input kernel: this many membrane time constants, within these bounds, ms.
_TIME_CONSTANTS = 5.0
INPUT_BOUNDS_MS = (50.0, 400.0)
_AFTER_SPIKE_MS = 300.0
#: Of what a sweep has, a kernel may take this share by default.
_SWEEP_SHARE = 0.5

#: Blocks are at least this long, ms, this many correlation times, and at most this many.
_BLOCK_MS = 1000.0
_MOST_BLOCKS = 200
#: Rather than fewer blocks than this, blocks as short as so many correlation times are taken,
#: whose neighbours the calibration then joins.
_FEWEST_BLOCKS = 12
_FEWEST_TIMES = 5.0

#: Current stands still where its sd over this many ms is below this share of its spread.
_STILL_MS = 20.0
_STILL_SHARE = 0.05


def common_row_ms(recordings: Sequence[Recording], settings: Settings) -> float:
    """Length of a row, ms: as set, else the smallest one that suits the coarsest recording."""
    if settings.model.row_ms is not None:
        return settings.model.row_ms
    return default_row_ms(max(recording.step_ms for recording in recordings))


def refuse_unusable(entry: CellEntry, settings: Settings) -> bool:
    """Read a cell and refuse what a fit would refuse, before anything is written.

    Returns
    -------
    bool
        Whether the cell has a recording to fit.

    Raises
    ------
    InputError
        If a recording cannot be read or used, a row is not a whole number of steps, or a kernel
        whose duration is stated is longer than the longest sweep.
    """
    recordings = load_cell(entry, settings)
    if not recordings:
        return False
    stated = {"input": settings.kernels.input, "after_spike": settings.kernels.after_spike}
    durations = {name: one.duration_ms for name, one in stated.items() if one.duration_ms}
    row_ms = common_row_ms(recordings, settings)
    for recording in recordings:
        samples_per_row(row_ms, recording.step_ms, recording.source)
        refuse_long_kernels(recording, durations)
    return True


def room_ms(recordings: Sequence[Recording]) -> float:
    """How long a kernel may be by default, ms: half the longest sweep."""
    return _SWEEP_SHARE * max(
        sweep.n_samples * recording.step_ms
        for recording in recordings
        for sweep in recording.sweeps
    )


def resolve_design(recordings: Sequence[Recording], settings: Settings) -> VoltageDesign:
    """Fill in row length and durations.

    Parameters
    ----------
    recordings
        Recordings of one cell with spikes found and selection applied.
    settings
        Durations that are None are filled: the input kernel lasts five membrane time constants
        within 50–400 ms, the after-spike kernel 300 ms, both at most half the longest sweep.

    Returns
    -------
    VoltageDesign

    """
    room = room_ms(recordings)
    sections = settings.kernels
    after_ms = sections.after_spike.duration_ms or min(_AFTER_SPIKE_MS, room)
    spikes = sum(recording.n_spikes for recording in recordings)
    longest_input = min(INPUT_BOUNDS_MS[1], room)

    row_ms = common_row_ms(recordings, settings)
    electrode_ms = sections.electrode.duration_ms
    step_ms = max(recording.step_ms for recording in recordings)

    def design(input_ms: float) -> VoltageDesign:
        return VoltageDesign(
            input=_spec(sections.input, input_ms, row_ms),
            after_spike=_spec(sections.after_spike, after_ms, row_ms) if spikes else None,
            electrode=sections.electrode.include,
            electrode_kernel=electrode_spec(electrode_ms, step_ms) if electrode_ms else None,
            row_ms=row_ms,
            spike_window_ms=settings.model.spike_window_ms,
            drift=settings.model.sweep_offsets and settings.model.sweep_drift,
        )

    if sections.input.duration_ms is not None:
        return design(sections.input.duration_ms)
    tau = _time_constant_from_steps(recordings)
    if tau is None:
        settled = settle(recordings, longest_input, settings)
        tau = _time_constant_from_fit(settled, _of_splines(design(longest_input)), settings)
    lower = min(INPUT_BOUNDS_MS[0], room)
    return design(float(np.round(np.clip(_TIME_CONSTANTS * tau, lower, longest_input))))


def settle(
    recordings: Sequence[Recording], duration_ms: float, settings: Settings
) -> tuple[Recording, ...]:
    """Leave out the unsettled beginnings of sweeps, where the settings want it."""
    if not settings.model.leave_out_unsettled:
        return tuple(recordings)
    return tuple(leave_out_unsettled(recording, duration_ms) for recording in recordings)


def nominal_unit_ms(recordings: Sequence[Recording], settings: Settings) -> float | None:
    """Length of a unit before the residual's correlation is known, ms; None for whole sweeps."""
    units, asked_ms = settings.model.units, settings.model.block_ms
    if units == "auto":
        stepped = all(_mostly_constant(recording) for recording in recordings)
        units = "sweep" if stepped and asked_ms is None else "block"
    if units == "sweep":
        return None
    total_ms = sum(recording.seconds for recording in recordings) * 1e3
    return asked_ms or max(_BLOCK_MS, total_ms / _MOST_BLOCKS)


def make_digest(
    recordings: Sequence[Recording], design: VoltageDesign, prior: WeightPrior, settings: Settings
) -> tuple[VoltageDigest, LeastSquares]:
    """Reduce the recordings to units that are independent, and fit them.

    Sweeps are the units of step protocols, since a step takes up a sweep. Otherwise sweeps are
    cut into blocks of at least 1 s and 20 correlation times of the residual; of 5 where there
    would be fewer than 12 blocks.

    Parameters
    ----------
    recordings
        Recordings of one cell.
    design
        The linear model.
    prior
        Prior of the weights; it scales them.
    settings
        ``model.units``, ``model.block_ms`` and ``model.sweep_offsets``.

    Returns
    -------
    (digest, fit)
    """
    block_ms = nominal_unit_ms(recordings, settings)
    digest = voltage_digest(recordings, design, block_ms)
    fit = fit_digest(digest, prior.root, settings)
    if block_ms is not None and settings.model.block_ms is None:
        tau_ms = correlation_time_ms(digest, fit)
        factor = max(1, int(np.ceil(INDEPENDENT_TIMES * tau_ms / block_ms)))
        if digest.n_units / factor < _FEWEST_BLOCKS:
            shortest = int(np.ceil(_FEWEST_TIMES * tau_ms / block_ms))
            factor = min(factor, max(shortest, digest.n_units // _FEWEST_BLOCKS, 1))
        if factor > 1:
            digest = digest.merge(factor)
            fit = fit_digest(digest, prior.root, settings)
    return digest, fit


def fit_digest(digest: VoltageDigest, scale: FloatArray, settings: Settings) -> LeastSquares:
    """Least squares, with offsets (and drifts) of sweeps where the settings want them."""
    if settings.model.sweep_offsets:
        return with_sweep_effects(digest, scale)
    return least_squares(digest, scale)


def _mostly_constant(recording: Recording) -> bool:
    """Whether the current stands still for most of the time, as in a protocol of steps."""
    samples = max(2, round(_STILL_MS / recording.step_ms))
    pieces = []
    for sweep in recording.sweeps:
        whole = sweep.n_samples // samples * samples
        pieces.append(sweep.current[:whole].reshape(-1, samples).std(axis=1))
    spread = np.std(np.concatenate([sweep.current for sweep in recording.sweeps]))
    return bool(np.mean(np.concatenate(pieces) < _STILL_SHARE * spread) > 0.5)


def _spec(section: KernelSection, duration_ms: float, row_ms: float) -> KernelSpec:
    weights = section.weights or DEFAULT_WEIGHTS[section.basis]
    if section.basis == "lags":
        # No more lags than rows.
        weights = min(weights, max(1, int(duration_ms / row_ms + 1e-9)))
    return KernelSpec(duration_ms, weights, section.warp_ms, section.basis, row_ms, section.terms)


def _of_splines(design: VoltageDesign) -> VoltageDesign:
    """The design of a first fit: splines where time constants would have to be sampled."""

    def plain(spec: KernelSpec) -> KernelSpec:
        return replace(spec, basis="splines") if spec.basis == "exponentials" else spec

    after_spike = None if design.after_spike is None else plain(design.after_spike)
    return replace(design, input=plain(design.input), after_spike=after_spike)


def _time_constant_from_steps(recordings: Sequence[Recording]) -> float | None:
    found = [tau for r in recordings if (tau := membrane_time_constant(r)) is not None]
    return float(np.median(found)) if found else None


def _time_constant_from_fit(
    recordings: Sequence[Recording], design: VoltageDesign, settings: Settings
) -> float:
    """Membrane time constant from a first fit with the longest input kernel, ms."""
    # Features are read further down the house; the area over the height of κ is enough here.
    prior = weight_prior(design, settings.priors)
    digest = voltage_digest(recordings, design, None)
    fit = fit_digest(digest, prior.root, settings)
    evidence = voltage_evidence(fit.weights, _tempered(digest, fit), fit.rank, 1.0, prior)
    weights = weight_moments(evidence, prior, prior.sd_scale / 4)[0][design.columns["input"]]
    lags = np.arange(1, int(design.input.duration_ms) + 1, dtype=np.float64)
    kernel = np.maximum(design.input.evaluate(lags) @ weights, 0.0)
    if kernel.sum() <= 0:
        return design.input.duration_ms / _TIME_CONSTANTS
    # The mean lag of an exponential is its time constant, and noise at long lags pulls it up
    # rather than down: too long a kernel costs precision, too short a one biases.
    return float(kernel @ lags / kernel.sum())


def _tempered(digest: VoltageDigest, fit: LeastSquares) -> FloatArray:
    """Precision of the weights as if rows a correlation time apart were independent."""
    apart = rows_apart(correlation_time_ms(digest, fit), digest.design.row_ms)
    precision: FloatArray = fit.back.T @ fit.back / max(fit.residual_variance * apart, 1e-12)
    return precision

"""From recordings to the voltage digest, streamed: no array here has a recording's length
times the number of weights.

A unit is walked in chunks of a fixed number of rows, so that one compiled program serves every
recording. In each chunk the columns are made from current and spikes by `kernels.design`, rows
that touch a masked sample are set to zero, and the Gram matrices of the chunk are added to the
unit's.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from itertools import pairwise

import jax
import jax.numpy as jnp
import numpy as np

from bayesglm import backend as backend
from bayesglm.errors import InputError
from bayesglm.kernels.design import RowFilter, VoltageDesign, filter_rows, row_filter, row_means
from bayesglm.likelihood.chunks import (
    N_FFT,
    band_slices,
    chunk_sums,
    pad_to,
    padded,
    white_share,
    zero_sums,
)
from bayesglm.likelihood.digest import VoltageDigest, add, hash_of
from bayesglm.recording.recording import BoolArray, FloatArray, IntArray, Recording, Sweep


@dataclass(frozen=True, eq=False)
class _SweepRows:
    """What the rows of one sweep are made from; (n_rows, …) arrays are small."""

    current: FloatArray
    spikes: FloatArray | None
    electrode: FloatArray
    voltage: FloatArray
    keep: BoolArray


def voltage_digest(
    recordings: Sequence[Recording], design: VoltageDesign, block_ms: float | None
) -> VoltageDigest:
    """Reduce the recordings of one cell.

    Parameters
    ----------
    recordings
        Recordings with spikes found and selection applied, without NaN where samples are kept.
    design
        The linear model.
    block_ms
        Length of a unit in ms; sweeps are cut evenly into blocks of about this length. None
        makes each sweep of the file one unit.

    Returns
    -------
    VoltageDigest

    Raises
    ------
    InputError
        If a kernel is longer than the longest sweep, or no row is left.
    """
    digest = add([_recording_digest(recording, design, block_ms) for recording in recordings])
    used = np.flatnonzero(digest.sums[:, 0, 0] > 0)
    if len(used) == 0:
        raise InputError(
            f"{recordings[0].source}: every row is masked; widen the selection or shorten "
            "model.spike_window_ms"
        )
    return digest.take(used)


def _recording_digest(
    recording: Recording, design: VoltageDesign, block_ms: float | None
) -> VoltageDigest:
    m = design.samples_per_row(recording.step_ms)
    refuse_long_kernels(recording, {n: k.duration_ms for n, k in design.kernels.items()})
    filters = _filters(design, recording.step_ms, m)
    common = common_current(recording)
    units: list[dict[str, object]] = []
    for index, sweep in enumerate(recording.sweeps):
        rows = _sweep_rows(sweep, design, recording.step_ms, m, filters)
        n_rows = len(rows.voltage)
        for start, stop in _unit_edges(sweep, n_rows, m, block_ms, design.row_ms):
            gram, bands, share = _unit_sums(rows, start, stop, filters, design)
            samples = slice(start * m, stop * m)
            current = sweep.current[samples]
            own = current[~common[samples]] if not common[samples].all() else current
            whole = start == 0 and stop == n_rows
            span = f", {start * design.row_ms:.0f}–{stop * design.row_ms:.0f} ms"
            units.append(
                {
                    "sums": gram,
                    "band_sums": bands,
                    "band_share": share,
                    "sweep": index,
                    "drive_nA": float(own.mean()),
                    "current_sd_nA": float(current.std()) if np.ptp(current) > 0 else 0.0,
                    "spikes": _spikes_between(sweep, samples.start, samples.stop),
                    "seconds": (stop - start) * design.row_ms / 1e3,
                    # Minus zero is zero.
                    "stimulus": hash_of((current + 0.0).tobytes()),
                    "part": _part(sweep, start * m),
                    "labels": sweep.label + ("" if whole else span),
                }
            )
    columns = {name: [unit[name] for unit in units] for name in units[0]}
    labels = tuple(str(label) for label in columns.pop("labels"))
    return VoltageDigest(
        design=design,
        labels=labels,
        sources=((recording.name, recording.sha256),),
        **{name: np.array(values) for name, values in columns.items()},
    )


def row_digest(
    rows: FloatArray,
    voltage: FloatArray,
    units: IntArray,
    sweeps: IntArray,
    design: VoltageDesign,
    stimuli: IntArray | None = None,
) -> VoltageDigest:
    """Digest of rows given as a matrix: for designs made elsewhere, and for tests.

    Parameters
    ----------
    rows
        Columns x, shape (n, P); the first is the constant one. With a drift t is the last of
        them, shape (n, P + 1).
    voltage
        Shape (n,).
    units, sweeps
        Index of the unit and of the sweep of each row, shape (n,); rows of a unit are neighbours.
    design
        What the columns are called.
    stimuli
        Stimulus of each row, shape (n,); each unit's own where not given.

    Returns
    -------
    VoltageDigest
    """
    stimuli = units if stimuli is None else stimuli
    labels = np.unique(units)
    grams, bands, shares = [], [], []
    z = np.column_stack([rows, voltage])
    for unit in labels:
        gram, band, _ = zero_sums(z.shape[1])
        members = z[units == unit]
        for start in range(0, len(members), N_FFT):
            chunk = padded(members[start : start + N_FFT], N_FFT)
            g, b = chunk_sums(jnp.asarray(chunk), band_slices(design.row_ms))
            gram, band = gram + np.asarray(g), band + np.asarray(b)
        grams.append(gram)
        bands.append(band)
        shares.append(white_share(design.row_ms))
    n = len(labels)
    return VoltageDigest(
        design=design,
        sums=np.array(grams),
        band_sums=np.array(bands),
        band_share=np.array(shares),
        sweep=np.array([sweeps[units == unit][0] for unit in labels]),
        drive_nA=np.zeros(n),
        current_sd_nA=np.ones(n),
        spikes=np.zeros(n, dtype=np.int64),
        seconds=np.array([(units == unit).sum() * design.row_ms / 1e3 for unit in labels]),
        stimulus=np.array([stimuli[units == unit][0] for unit in labels]),
        part=np.zeros(n, dtype=np.int64),
        labels=tuple(f"unit {unit}" for unit in labels),
    )


def common_current(recording: Recording) -> BoolArray:
    """Samples at which all sweeps have the same current, shape (longest sweep,).

    A test pulse repeated in every sweep does not tell sweeps apart; what is left does. Where
    there is one sweep, or all are alike, nothing is common.
    """
    longest = max(sweep.n_samples for sweep in recording.sweeps)
    if len(recording.sweeps) == 1:
        return np.zeros(longest, dtype=np.bool_)
    same: BoolArray = np.ones(longest, dtype=np.bool_)
    first = max(recording.sweeps, key=lambda sweep: sweep.n_samples).current
    for sweep in recording.sweeps:
        same[: sweep.n_samples] &= np.equal(sweep.current, first[: sweep.n_samples])
    return same if not same.all() else np.zeros(longest, dtype=np.bool_)


def kept_rows(sweep: Sweep, design: VoltageDesign, step_ms: float, m: int) -> BoolArray:
    """Rows whose samples are all kept and outside every spike window, shape (n_samples // m,)."""
    keep = sweep.keep.copy()
    before, after = design.spike_window_ms
    reach = (round(-before / step_ms), round(after / step_ms))
    for spike in sweep.spikes if sweep.spikes is not None else ():
        keep[max(0, spike - reach[0]) : spike + reach[1] + 1] = False
    rows = len(keep) // m
    return np.asarray(keep[: rows * m].reshape(rows, m).all(axis=1), dtype=np.bool_)


def drift_column(n_rows: int) -> FloatArray:
    """A straight line over a sweep with mean zero and variance one, shape (n_rows,)."""
    line: FloatArray = np.sqrt(3.0) * np.linspace(-1.0, 1.0, n_rows)
    return line


def predict_rows(
    sweep: Sweep, design: VoltageDesign, step_ms: float, weights: FloatArray
) -> FloatArray:
    """Predict a sweep's rows: ``x @ weights`` for many weight vectors at once.

    Parameters
    ----------
    sweep
        The sweep.
    design
        The linear model.
    step_ms
        Recorded step, ms.
    weights
        Shape (P, D).

    Returns
    -------
    Array of shape (n_rows, D).
    """
    m = design.samples_per_row(step_ms)
    filters = _filters(design, step_ms, m)
    rows = _sweep_rows(sweep, design, step_ms, m, filters)
    n_rows = len(rows.voltage)
    out = np.empty((n_rows, weights.shape[1]))
    chunk = _chunk(filters)
    for start in range(0, n_rows, chunk):
        stop = min(start + chunk, n_rows)
        z = np.asarray(_design_rows(rows, start, stop, filters, design, masked=False))
        out[start:stop] = z[: stop - start, : design.n_weights] @ weights
    return out


def refuse_long_kernels(recording: Recording, durations_ms: Mapping[str, float]) -> None:
    """Refuse kernels that are longer than the longest sweep.

    Raises
    ------
    InputError
        Naming the recording, the key and the longest sweep.
    """
    longest = max(sweep.n_samples for sweep in recording.sweeps) * recording.step_ms
    for name, duration in durations_ms.items():
        if duration > longest:
            raise InputError(
                f"{recording.source}: kernels.{name}.duration_ms is {duration:g} ms, but the "
                f"longest sweep lasts {longest:g} ms; set it to at most {longest / 2:g}"
            )


def _filters(design: VoltageDesign, step_ms: float, m: int) -> dict[str, RowFilter]:
    return {
        name: row_filter(spec, step_ms, m, _transform_rows(design))
        for name, spec in design.kernels.items()
    }


def _transform_rows(design: VoltageDesign) -> int:
    longest = max(spec.duration_ms for spec in design.kernels.values()) / design.row_ms
    n_fft = N_FFT
    while n_fft < 4 * longest:
        n_fft *= 2
    return n_fft


def _chunk(filters: dict[str, RowFilter]) -> int:
    return min(f.chunk for f in filters.values())


def _sweep_rows(
    sweep: Sweep, design: VoltageDesign, step_ms: float, m: int, filters: dict[str, RowFilter]
) -> _SweepRows:
    spikes = None
    if design.after_spike is not None:
        train = np.zeros(sweep.n_samples)
        if sweep.spikes is not None:
            train[sweep.spikes] = 1.0
        spikes = filters["after_spike"].phases(train, before=0.0)
    keep = kept_rows(sweep, design, step_ms, m)
    voltage = row_means(np.where(sweep.keep, sweep.voltage, 0.0), m)
    # Before a sweep the current is taken to have been its first value.
    current = filters["input"].phases(sweep.current * step_ms, before=sweep.current[0] * step_ms)
    electrode = _electrode_columns(sweep.current, design, step_ms, m)
    return _SweepRows(current, spikes, electrode, voltage, keep)


def _electrode_columns(
    current: FloatArray, design: VoltageDesign, step_ms: float, m: int
) -> FloatArray:
    """Current of the same bin, and its mean over each bin of the electrode's lags, (n_rows, …)."""
    same = row_means(current, m)[:, None]
    if design.electrode_kernel is None:
        return same
    bins = design.electrode_kernel.bins(design.electrode_kernel.lags(step_ms))
    past = np.concatenate([np.full(len(bins), current[0]), current])
    delayed = np.zeros((len(same), bins.shape[1]))
    for k, share in enumerate(bins / bins.sum(axis=0), start=1):
        first = len(bins) - k
        delayed += row_means(past[first : first + len(current)], m)[:, None] * share
    return np.concatenate([same, delayed], axis=1)


def _unit_edges(
    sweep: Sweep, n_rows: int, m: int, block_ms: float | None, row_ms: float
) -> list[tuple[int, int]]:
    """First row and the one past the end of each unit: the file's sweeps, or blocks of them."""
    seams = [0, *(round(first / m) for _, first in sweep.joined[1:]), n_rows]
    if block_ms is None:
        return list(pairwise(seams))
    # A current that is repeated from sweep to sweep is then cut at the same places.
    if min(np.diff(seams)) * row_ms < block_ms:
        seams = [0, n_rows]
    edges = [0]
    for start, stop in pairwise(seams):
        n_blocks = max(1, int((stop - start) * row_ms / block_ms + 1e-9))
        edges += np.linspace(start, stop, n_blocks + 1).round().astype(int).tolist()[1:]
    return list(pairwise(edges))


def _spikes_between(sweep: Sweep, start: int, stop: int) -> int:
    if sweep.spikes is None:
        return 0
    return int(np.count_nonzero((sweep.spikes >= start) & (sweep.spikes < stop)))


def _part(sweep: Sweep, sample: int) -> int:
    """Which of the file's sweeps, of those joined to this one, a sample lies in."""
    return int(np.searchsorted([first for _, first in sweep.joined[1:]], sample, side="right"))


def _unit_sums(
    rows: _SweepRows, start: int, stop: int, filters: dict[str, RowFilter], design: VoltageDesign
) -> tuple[FloatArray, FloatArray, FloatArray]:
    gram, bands, share = zero_sums(design.n_weights + design.n_sweep_effects)
    chunk = _chunk(filters)
    slices = band_slices(design.row_ms, _transform_rows(design))
    for a in range(start, stop, chunk):
        z = _design_rows(rows, a, min(a + chunk, stop), filters, design, masked=True)
        g, b = chunk_sums(pad_to(z, _transform_rows(design)), slices)
        gram, bands = gram + np.asarray(g), bands + np.asarray(b)
    return gram, bands, share + white_share(design.row_ms, _transform_rows(design))


def _design_rows(
    rows: _SweepRows,
    start: int,
    stop: int,
    filters: dict[str, RowFilter],
    design: VoltageDesign,
    masked: bool,
) -> jax.Array:
    """Rows ``(x, v)`` of a chunk, ``(x, t, v)`` with a drift, shape (chunk, P + 1 or P + 2).

    Zero after `stop` and where masked.
    """
    chunk = _chunk(filters)
    here = slice(start, stop)
    inside = rows.keep[here] if masked else np.ones(stop - start, dtype=np.bool_)
    columns = [padded(np.ones((stop - start, 1)), chunk)]
    if design.electrode:
        columns.append(padded(rows.electrode[here], chunk))
    for name, signal in (("input", rows.current), ("after_spike", rows.spikes)):
        if signal is not None:
            f = filters[name]
            piece = padded(signal[start : stop + f.history], f.n_fft)
            columns.append(filter_rows(jnp.asarray(piece), f.response, f.history)[:chunk])
    if design.drift:
        columns.append(padded(drift_column(len(rows.voltage))[here, None], chunk))
    columns.append(padded(rows.voltage[here, None], chunk))
    return _join_columns(columns, jnp.asarray(padded(inside[:, None].astype(float), chunk)))


@jax.jit
def _join_columns(columns: list[jax.Array], mask: jax.Array) -> jax.Array:
    # Selecting, not multiplying: past the end of a sweep the filters ring with what follows.
    return jnp.where(mask > 0, jnp.concatenate(columns, axis=1), 0.0)

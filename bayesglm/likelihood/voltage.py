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
from functools import partial

import jax
import jax.numpy as jnp
import numpy as np

from bayesglm import backend as backend
from bayesglm.errors import InputError
from bayesglm.kernels.design import RowFilter, VoltageDesign, filter_rows, row_filter, row_means
from bayesglm.likelihood.digest import BAND_EDGES_HZ, VoltageDigest, add
from bayesglm.recording.recording import BoolArray, FloatArray, IntArray, Recording, Sweep

_N_FFT = 8192


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
        makes each sweep one unit.

    Returns
    -------
    VoltageDigest

    Raises
    ------
    InputError
        If a kernel is longer than the longest sweep, or no row is left.
    """
    digest = add([_recording_digest(recording, design, block_ms) for recording in recordings])
    used = np.flatnonzero(digest.gram[:, 0, 0] > 0)
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
        for start, stop in _unit_edges(n_rows, design.row_ms, block_ms):
            gram, bands, share = _unit_sums(rows, start, stop, filters, design)
            samples = slice(start * m, stop * m)
            current = sweep.current[samples]
            own = current[~common[samples]] if not common[samples].all() else current
            whole = start == 0 and stop == n_rows
            span = f", {start * design.row_ms:.0f}–{stop * design.row_ms:.0f} ms"
            units.append(
                {
                    "gram": gram,
                    "bands": bands,
                    "band_share": share,
                    "sweep": index,
                    "drive_nA": float(own.mean()),
                    "current_sd_nA": float(current.std()),
                    "spikes": _spikes_between(sweep, samples.start, samples.stop),
                    "seconds": (stop - start) * design.row_ms / 1e3,
                    "labels": f"sweep {sweep.number}" + ("" if whole else span),
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
    rows: FloatArray, voltage: FloatArray, units: IntArray, sweeps: IntArray, design: VoltageDesign
) -> VoltageDigest:
    """Digest of rows given as a matrix: for designs made elsewhere, and for tests.

    Parameters
    ----------
    rows
        Columns x, shape (n, P); the first is the constant one.
    voltage
        Shape (n,).
    units, sweeps
        Index of the unit and of the sweep of each row, shape (n,); rows of a unit are neighbours.
    design
        What the columns are called.

    Returns
    -------
    VoltageDigest
    """
    labels = np.unique(units)
    grams, bands, shares = [], [], []
    z = np.column_stack([rows, voltage])
    for unit in labels:
        gram, band, _ = _zero_sums(z.shape[1])
        members = z[units == unit]
        for start in range(0, len(members), _N_FFT):
            chunk = _padded(members[start : start + _N_FFT], _N_FFT)
            g, b = _chunk_sums(jnp.asarray(chunk), _band_slices(design.row_ms))
            gram, band = gram + np.asarray(g), band + np.asarray(b)
        grams.append(gram)
        bands.append(band)
        shares.append(_white_share(design.row_ms))
    n = len(labels)
    return VoltageDigest(
        design=design,
        gram=np.array(grams),
        bands=np.array(bands),
        band_share=np.array(shares),
        sweep=np.array([sweeps[units == unit][0] for unit in labels]),
        drive_nA=np.zeros(n),
        current_sd_nA=np.ones(n),
        spikes=np.zeros(n, dtype=np.int64),
        seconds=np.array([(units == unit).sum() * design.row_ms / 1e3 for unit in labels]),
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
        out[start:stop] = z[: stop - start, :-1] @ weights
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
    n_fft = _N_FFT
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
    return _SweepRows(current, spikes, row_means(sweep.current, m), voltage, keep)


def _unit_edges(n_rows: int, row_ms: float, block_ms: float | None) -> list[tuple[int, int]]:
    n_blocks = 1 if block_ms is None else max(1, int(n_rows * row_ms / block_ms + 1e-9))
    edges = np.linspace(0, n_rows, n_blocks + 1).round().astype(int)
    return list(zip(edges[:-1].tolist(), edges[1:].tolist(), strict=True))


def _spikes_between(sweep: Sweep, start: int, stop: int) -> int:
    if sweep.spikes is None:
        return 0
    return int(np.count_nonzero((sweep.spikes >= start) & (sweep.spikes < stop)))


def _unit_sums(
    rows: _SweepRows, start: int, stop: int, filters: dict[str, RowFilter], design: VoltageDesign
) -> tuple[FloatArray, FloatArray, FloatArray]:
    gram, bands, share = _zero_sums(design.n_weights + 1)
    chunk = _chunk(filters)
    slices = _band_slices(design.row_ms, _transform_rows(design))
    for a in range(start, stop, chunk):
        z = _design_rows(rows, a, min(a + chunk, stop), filters, design, masked=True)
        g, b = _chunk_sums(_pad_to(z, _transform_rows(design)), slices)
        gram, bands = gram + np.asarray(g), bands + np.asarray(b)
    return gram, bands, share + _white_share(design.row_ms, _transform_rows(design))


def _design_rows(
    rows: _SweepRows,
    start: int,
    stop: int,
    filters: dict[str, RowFilter],
    design: VoltageDesign,
    masked: bool,
) -> jax.Array:
    """Rows ``(x, v)`` of a chunk, shape (chunk, P + 1); zero after `stop` and where masked."""
    chunk = _chunk(filters)
    here = slice(start, stop)
    inside = rows.keep[here] if masked else np.ones(stop - start, dtype=np.bool_)
    columns = [_padded(np.ones((stop - start, 1)), chunk)]
    if design.electrode:
        columns.append(_padded(rows.electrode[here, None], chunk))
    for name, signal in (("input", rows.current), ("after_spike", rows.spikes)):
        if signal is not None:
            f = filters[name]
            piece = _padded(signal[start : stop + f.history], f.n_fft)
            columns.append(filter_rows(jnp.asarray(piece), f.response, f.history)[:chunk])
    columns.append(_padded(rows.voltage[here, None], chunk))
    return _join_columns(columns, jnp.asarray(_padded(inside[:, None].astype(float), chunk)))


@jax.jit
def _join_columns(columns: list[jax.Array], mask: jax.Array) -> jax.Array:
    # Selecting, not multiplying: past the end of a sweep the filters ring with what follows.
    return jnp.where(mask > 0, jnp.concatenate(columns, axis=1), 0.0)


@partial(jax.jit, static_argnames=("slices",))
def _chunk_sums(z: jax.Array, slices: tuple[tuple[int, int], ...]) -> tuple[jax.Array, jax.Array]:
    """Gram matrix of a chunk, whole and by frequency band.

    The transform of a real signal holds each frequency once but for the first and the last, so
    the others count twice.
    """
    n = z.shape[0]
    spectrum = jnp.fft.rfft(z, axis=0)
    counts = jnp.full(spectrum.shape[0], 2.0).at[0].set(1.0).at[-1].set(1.0) / n
    weighted = jnp.sqrt(counts)[:, None] * spectrum
    bands = []
    for start, stop in slices:
        part = weighted[start:stop]
        bands.append(part.real.T @ part.real + part.imag.T @ part.imag)
    return z.T @ z, jnp.stack(bands)


def _band_slices(row_ms: float, n_fft: int = _N_FFT) -> tuple[tuple[int, int], ...]:
    """Index range of each frequency band in a real transform of `n_fft` rows (n_fft even)."""
    frequency_Hz = np.fft.rfftfreq(n_fft, d=row_ms / 1e3)
    edges = np.searchsorted(frequency_Hz, BAND_EDGES_HZ)
    stops = np.append(edges, len(frequency_Hz))
    starts = np.insert(stops[:-1], 0, 0)
    return tuple(zip(starts.tolist(), stops.tolist(), strict=True))


def _white_share(row_ms: float, n_fft: int = _N_FFT) -> FloatArray:
    counts = np.full(n_fft // 2 + 1, 2.0)
    counts[[0, -1]] = 1.0
    slices = _band_slices(row_ms, n_fft)
    return np.array([counts[start:stop].sum() / n_fft for start, stop in slices])


def _zero_sums(width: int) -> tuple[FloatArray, FloatArray, FloatArray]:
    n_bands = len(BAND_EDGES_HZ) + 1
    return np.zeros((width, width)), np.zeros((n_bands, width, width)), np.zeros(n_bands)


def _padded(array: FloatArray, rows: int) -> FloatArray:
    """Zeros after the last row, so that every chunk has one shape and nothing recompiles."""
    if len(array) == rows:
        return array
    out = np.zeros((rows, *array.shape[1:]))
    out[: len(array)] = array
    return out


def _pad_to(z: jax.Array, rows: int) -> jax.Array:
    return jnp.pad(z, ((0, rows - z.shape[0]), (0, 0)))

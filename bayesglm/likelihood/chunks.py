"""Gram matrices of a chunk of rows, whole and by frequency band.

The bands let the covariance of the estimate be read for a residual of any spectrum. Chunks are
padded to one length, so that one compiled program serves every recording.
"""

from __future__ import annotations

from functools import partial

import jax
import jax.numpy as jnp
import numpy as np

from bayesglm import backend as backend
from bayesglm.likelihood.digest import BAND_EDGES_HZ
from bayesglm.recording.recording import FloatArray

#: Rows of a chunk with the past it needs, unless a kernel is longer.
N_FFT = 8192


@partial(jax.jit, static_argnames=("slices",))
def chunk_sums(z: jax.Array, slices: tuple[tuple[int, int], ...]) -> tuple[jax.Array, jax.Array]:
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


def band_slices(row_ms: float, n_fft: int = N_FFT) -> tuple[tuple[int, int], ...]:
    """Index range of each frequency band in a real transform of `n_fft` rows (n_fft even)."""
    frequency_Hz = np.fft.rfftfreq(n_fft, d=row_ms / 1e3)
    edges = np.searchsorted(frequency_Hz, BAND_EDGES_HZ)
    stops = np.append(edges, len(frequency_Hz))
    starts = np.insert(stops[:-1], 0, 0)
    return tuple(zip(starts.tolist(), stops.tolist(), strict=True))


def white_share(row_ms: float, n_fft: int = N_FFT) -> FloatArray:
    counts = np.full(n_fft // 2 + 1, 2.0)
    counts[[0, -1]] = 1.0
    slices = band_slices(row_ms, n_fft)
    return np.array([counts[start:stop].sum() / n_fft for start, stop in slices])


def zero_sums(width: int) -> tuple[FloatArray, FloatArray, FloatArray]:
    n_bands = len(BAND_EDGES_HZ) + 1
    return np.zeros((width, width)), np.zeros((n_bands, width, width)), np.zeros(n_bands)


def padded(array: FloatArray, rows: int) -> FloatArray:
    """Zeros after the last row, so that every chunk has one shape and nothing recompiles."""
    if len(array) == rows:
        return array
    out = np.zeros((rows, *array.shape[1:]))
    out[: len(array)] = array
    return out


def pad_to(z: jax.Array, rows: int) -> jax.Array:
    return jnp.pad(z, ((0, rows - z.shape[0]), (0, 0)))

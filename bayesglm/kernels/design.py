"""Columns of the linear model, averaged over rows, streamed.

A kernel's column is the recorded signal (current or spikes) convolved with one spline at the
recorded step. Only its average over rows of `m` samples is needed, and both sides of a linear
equation may be averaged without bias. Splitting the lags by phase turns "convolve, then
average" into `m` short convolutions at the rate of the rows, done with one FFT a phase
(overlap-save), so that the full-rate column never exists.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache, partial

import jax
import jax.numpy as jnp
import numpy as np

from bayesglm import backend as backend
from bayesglm.errors import InputError
from bayesglm.kernels.basis import KernelSpec
from bayesglm.recording.recording import FloatArray

_MOST_ELECTRODE_BINS = 4


@dataclass(frozen=True, eq=False)
class RowFilter:
    """Convolution of a signal with a kernel's splines, straight to row averages.

    Attributes
    ----------
    response
        Fourier transform of the taps by phase, shape (n_fft/2 + 1, m, weights).
    n_fft
        Length of the transform in rows.
    history
        Rows of the past that a row depends on.
    samples_per_row
        Samples averaged into a row, m.
    """

    response: jax.Array
    n_fft: int
    history: int
    samples_per_row: int

    @property
    def chunk(self) -> int:
        """Rows that one transform yields."""
        return self.n_fft - self.history

    def phases(self, signal: FloatArray, before: float) -> FloatArray:
        """Arrange a sweep's signal by row and phase.

        Parameters
        ----------
        signal
            Shape (n,), at the recorded step.
        before
            Value of the signal before the sweep began.

        Returns
        -------
        Array of shape (history + n // m, m): entry (history + r, p) is the signal p samples
        before the first sample of row r + 1.
        """
        m = self.samples_per_row
        rows = len(signal) // m
        padded = np.full((self.history + rows) * m, before, dtype=np.float64)
        # The last sample of the sweep's last row has no successor; its place has weight zero.
        inside = signal[1 : rows * m + 1]
        start = self.history * m - 1
        padded[start] = signal[0]
        padded[start + 1 : start + 1 + len(inside)] = inside
        return padded.reshape(-1, m)[:, ::-1]


@lru_cache(maxsize=32)
def row_filter(spec: KernelSpec, step_ms: float, samples_per_row: int, n_fft: int) -> RowFilter:
    """Build the filter of one kernel for one sampling step.

    Parameters
    ----------
    spec
        The kernel's shape.
    step_ms
        Recorded step, ms.
    samples_per_row
        Samples averaged into a row, m.
    n_fft
        Length of the transform in rows; must exceed the kernel's history.

    Returns
    -------
    RowFilter
        With taps ``C[d] = (1/m) Σ_{i<m} B((d − m + i)·step)`` for d = 1 … K + m − 1 (zero at
        d = 0), so that ``y[r] = Σ_d C[d] x[m(r + 1) − d]`` is the average over row r of
        ``Σ_k B(k·step) x[n − k]``.
    """
    m = samples_per_row
    values = spec.evaluate(spec.lags(step_ms))
    n_lags, weights = values.shape
    history = -(-(n_lags + m) // m)
    if n_fft <= history:
        raise ValueError(f"n_fft is {n_fft} rows; expected more than the history of {history}")
    # Sum over i of B at lag index d − m + i, i = 0 … m − 1, as a difference of running sums.
    running = np.concatenate([np.zeros((1, weights)), np.cumsum(values, axis=0)])
    d = np.arange((history + 1) * m)
    upper = np.clip(d - 1, 0, n_lags)
    lower = np.clip(d - m - 1, 0, n_lags)
    taps = ((running[upper] - running[lower]) / m).reshape(history + 1, m, weights)
    response = np.fft.rfft(taps, n=n_fft, axis=0)
    return RowFilter(jnp.asarray(response), n_fft, history, m)


@partial(jax.jit, static_argnames=("history",))
def filter_rows(phases: jax.Array, response: jax.Array, history: int) -> jax.Array:
    """Filter one chunk.

    Parameters
    ----------
    phases
        Shape (n_fft, m): `history` rows of the past, then the rows of the chunk.
    response
        Shape (n_fft/2 + 1, m, weights).
    history
        Rows of the past.

    Returns
    -------
    Row averages of the columns, shape (n_fft − history, weights).
    """
    spectrum = jnp.einsum("fp,fpj->fj", jnp.fft.rfft(phases, axis=0), response)
    return jnp.fft.irfft(spectrum, n=phases.shape[0], axis=0)[history:]


def row_means(signal: FloatArray, samples_per_row: int) -> FloatArray:
    """Average a sweep's signal over rows; a remainder shorter than a row is dropped.

    Parameters
    ----------
    signal
        Shape (n,).
    samples_per_row
        Samples averaged into a row, m.

    Returns
    -------
    Array of shape (n // m,).
    """
    rows = len(signal) // samples_per_row
    means: FloatArray = signal[: rows * samples_per_row].reshape(rows, samples_per_row).mean(axis=1)
    return means


@dataclass(frozen=True)
class VoltageDesign:
    """The linear model of the voltage: its columns, rows and what is left out.

    Attributes
    ----------
    input
        Shape of the input kernel κ.
    after_spike
        Shape of the after-spike kernel η; None where there are no spikes.
    electrode
        Whether a term in the current of the same bin is fitted.
    row_ms
        Length of a row, ms.
    spike_window_ms
        Rows that touch this window around a spike are left out, ms.
    drift
        Whether each sweep drifts linearly on top of its offset.
    electrode_kernel
        Further terms of the electrode: the mean current over bins of lags, see `electrode_spec`.
        None for the current of the same bin alone.
    """

    input: KernelSpec
    after_spike: KernelSpec | None
    electrode: bool = True
    row_ms: float = 0.5
    spike_window_ms: tuple[float, float] = (-1.0, 5.0)
    drift: bool = False
    electrode_kernel: KernelSpec | None = None

    @property
    def n_sweep_effects(self) -> int:
        """Number of effects that each sweep has of its own: its offset, and its drift."""
        return 2 if self.drift else 1

    @property
    def columns(self) -> dict[str, slice]:
        """Where each term stands among the weights, in order."""
        widths = {"offset": 1}
        if self.electrode:
            widths["electrode"] = 1
            if self.electrode_kernel is not None:
                widths["electrode"] += self.electrode_kernel.weights
        widths["input"] = self.input.weights
        if self.after_spike is not None:
            widths["after_spike"] = self.after_spike.weights
        stops = np.cumsum(list(widths.values()))
        return {
            name: slice(int(stop) - width, int(stop))
            for (name, width), stop in zip(widths.items(), stops, strict=True)
        }

    @property
    def n_weights(self) -> int:
        """Number of weights, P."""
        return max(place.stop for place in self.columns.values())

    @property
    def kernels(self) -> dict[str, KernelSpec]:
        """The kernels that are fitted, by name."""
        kernels = {"input": self.input}
        if self.after_spike is not None:
            kernels["after_spike"] = self.after_spike
        return kernels

    def samples_per_row(self, step_ms: float) -> int:
        """Samples averaged into a row; see `samples_per_row`."""
        return samples_per_row(self.row_ms, step_ms)


def electrode_spec(duration_ms: float, step_ms: float) -> KernelSpec:
    """Bins of lags of an electrode that charges: up to four, as equal as whole steps allow.

    Parameters
    ----------
    duration_ms
        Last lag, ms.
    step_ms
        Recorded step, ms; the coarsest where recordings differ.

    Raises
    ------
    InputError
        If the duration is shorter than a step.
    """
    steps = int(duration_ms / step_ms + 1e-9)
    if steps < 1:
        raise InputError(
            f"kernels.electrode.duration_ms is {duration_ms:g} ms, but the recorded step is "
            f"{step_ms:g} ms; set it to at least {step_ms:g}, or to 0 for no electrode kernel"
        )
    bins = min(_MOST_ELECTRODE_BINS, steps)
    # Warped so weakly that bins are equal; `finest_ms` is their width.
    return KernelSpec(duration_ms, bins, 1e3, "lags", duration_ms / bins)


def samples_per_row(row_ms: float, step_ms: float, source: str = "recording") -> int:
    """Samples averaged into a row.

    Raises
    ------
    InputError
        If a row is not a whole number of steps; the message names `source`.
    """
    ratio = row_ms / step_ms
    m = round(ratio)
    if m < 1 or abs(ratio - m) > 1e-6 * ratio:
        raise InputError(
            f"{source}: a row of {row_ms:g} ms is not a whole number of steps of {step_ms:g} ms; "
            "set model.row_ms to a multiple of every recording's step"
        )
    return m


def default_row_ms(step_ms: float, at_least: float = 0.5) -> float:
    """Smallest whole multiple of the step that is at least `at_least` ms."""
    return float(step_ms * np.ceil(at_least / step_ms - 1e-9))

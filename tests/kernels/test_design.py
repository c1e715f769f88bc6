"""Columns averaged over rows, against plain convolution; layout and row lengths."""

from __future__ import annotations

from dataclasses import dataclass

import jax.numpy as jnp
import numpy as np
import pytest

from bayesglm.errors import InputError
from bayesglm.kernels.basis import DEFAULT_WEIGHTS, KernelSpec
from bayesglm.kernels.design import (
    RowFilter,
    VoltageDesign,
    default_row_ms,
    electrode_spec,
    filter_rows,
    row_filter,
    row_means,
    samples_per_row,
)
from bayesglm.recording.settings import Basis


def filtered(f: RowFilter, signal: np.ndarray, before: float) -> np.ndarray:
    """All rows of a signal, chunk by chunk."""
    phases = f.phases(signal, before)
    n_rows = len(phases) - f.history
    rows = []
    for start in range(0, n_rows, f.chunk):
        piece = phases[start : start + f.n_fft]
        padded = np.zeros((f.n_fft, f.samples_per_row))
        padded[: len(piece)] = piece
        rows.append(np.asarray(filter_rows(jnp.asarray(padded), f.response, f.history)))
    return np.concatenate(rows)[:n_rows]


def convolved(kernel: np.ndarray, signal: np.ndarray, before: float, m: int) -> np.ndarray:
    """``mean over rows of Σ_k kernel[k − 1] x[n − k]``, lag by lag."""
    n = len(signal)
    padded = np.concatenate([np.full(len(kernel), before), signal])
    full = np.zeros((n, kernel.shape[1]))
    for k in range(1, len(kernel) + 1):
        past = padded[len(kernel) - k : len(kernel) - k + n]
        full += past[:, None] * kernel[k - 1]
    return full[: n // m * m].reshape(n // m, m, -1).mean(axis=1)


@pytest.mark.parametrize("basis", list(DEFAULT_WEIGHTS))
def test_rows_equal_convolution_in_every_basis(basis: Basis) -> None:
    """Source: the definition, lag by lag."""
    spec = KernelSpec(20.0, 9, 2.0, basis, 1.0)
    signal = np.random.default_rng(0).normal(size=403)
    f = row_filter(spec, 0.2, 5, n_fft=128)
    expected = convolved(spec.evaluate(spec.lags(0.2)), signal, 0.7, 5)
    assert np.linalg.matrix_rank(expected) == 9
    np.testing.assert_allclose(filtered(f, signal, 0.7), expected, atol=1e-12)


@pytest.mark.parametrize("basis", list(DEFAULT_WEIGHTS))
def test_no_basis_looks_ahead(basis: Basis) -> None:
    f = row_filter(KernelSpec(20.0, 9, 2.0, basis, 1.0), 0.2, 5, n_fft=128)
    signal = np.zeros(200)
    signal[104] = 1.0
    rows = filtered(f, signal, 0.0)
    assert np.abs(rows[:21]).max() < 1e-14
    assert np.abs(rows[21]).max() > 0.1


@pytest.mark.parametrize("m", [1, 2, 5, 25])
@pytest.mark.parametrize("n_samples", [37, 400, 1003])
def test_rows_equal_convolution_then_averaging(m: int, n_samples: int) -> None:
    """Source: the definition, lag by lag; several chunks, a remainder, and a held past."""
    rng = np.random.default_rng(m)
    spec, signal = KernelSpec(20.0, 6), rng.normal(size=n_samples)
    f = row_filter(spec, 0.2, m, n_fft=128)
    expected = convolved(spec.evaluate(spec.lags(0.2)), signal, 0.7, m)
    np.testing.assert_allclose(filtered(f, signal, 0.7), expected, atol=1e-12)


def test_a_sample_acts_only_on_later_ones() -> None:
    """Strict causality: an impulse in the last sample of a row moves no row up to its own."""
    f = row_filter(KernelSpec(10.0, 5), 0.1, 5, n_fft=64)
    signal = np.zeros(200)
    signal[104] = 1.0
    rows = filtered(f, signal, 0.0)
    assert np.abs(rows[:21]).max() < 1e-14
    assert np.abs(rows[21]).max() > 0.1


def test_an_impulse_in_the_last_sample_leaves_no_trace_in_its_sweep() -> None:
    f = row_filter(KernelSpec(10.0, 5), 0.1, 5, n_fft=64)
    signal = np.zeros(203)
    signal[-1] = 1.0
    assert np.abs(filtered(f, signal, 0.0)).max() < 1e-14


@dataclass(frozen=True)
class Exponential:
    """An exponential in place of splines: ``A exp(−(s − step)/τ)``, the same in each column."""

    duration_ms: float
    step_ms: float = 1.0

    def lags(self, step_ms: float) -> np.ndarray:
        return step_ms * np.arange(1, round(self.duration_ms / step_ms) + 1)

    def evaluate(self, lags_ms: np.ndarray) -> np.ndarray:
        return -5.0 * np.exp(-(lags_ms[:, None] - self.step_ms) / 50.0)


@pytest.mark.parametrize(("duration", "leaves"), [(2000.0, 0.0), (100.0, np.exp(-100 / 50))])
def test_after_spike_kernels_of_a_regular_train_add_up(duration: float, leaves: float) -> None:
    """Geometric series: A = −5 mV, τ = 50 ms, a spike each 20 ms; a window W leaves e^(−W/τ)."""
    f = row_filter(Exponential(duration), 1.0, 1, n_fft=4096)  # type: ignore[arg-type]
    train = np.zeros(3000)
    train[::20] = 1.0
    rows = filtered(f, train, 0.0)[:, 0]
    assert rows[2981] == pytest.approx(-15.166224 * (1 - leaves), abs=1e-6)
    # The same moment without the newest spike, which has just added A.
    assert rows[2981] + 5.0 == pytest.approx(-10.166224 - leaves * -15.166224, abs=1e-6)
    assert rows[2980] == pytest.approx(np.exp(-19 / 50) * rows[2981], abs=1e-12)


def test_refuses_a_transform_shorter_than_the_history() -> None:
    with pytest.raises(ValueError, match="n_fft is 16 rows; expected more than the history"):
        row_filter(KernelSpec(20.0), 0.2, 1, n_fft=16)


def test_row_means_drop_a_remainder() -> None:
    np.testing.assert_array_equal(row_means(np.arange(11.0), 3), [1.0, 4.0, 7.0])


def test_columns_stand_in_order_without_gaps() -> None:
    design = VoltageDesign(KernelSpec(100.0, 14), KernelSpec(300.0, 10))
    expected = {
        "offset": slice(0, 1),
        "electrode": slice(1, 2),
        "input": slice(2, 16),
        "after_spike": slice(16, 26),
    }
    assert design.columns == expected
    assert design.n_weights == 26
    assert list(design.kernels) == ["input", "after_spike"]


def test_an_electrode_kernel_widens_the_electrode_term() -> None:
    design = VoltageDesign(KernelSpec(100.0, 14), None, electrode_kernel=electrode_spec(0.9, 0.05))
    assert design.columns["electrode"] == slice(1, 6)
    assert design.columns["input"] == slice(6, 20)


@pytest.mark.parametrize(
    ("duration", "step", "counts"),
    [
        (0.9, 0.05, [4, 5, 4, 5]),
        (0.8, 0.05, [4] * 4),
        (0.3, 0.1, [1] * 3),
        (0.5, 0.5, [1]),
        (0.35, 0.05, [1, 2, 2, 2]),
    ],
)
def test_bins_of_the_electrode_are_equal_to_a_step(
    duration: float, step: float, counts: list[int]
) -> None:
    spec = electrode_spec(duration, step)
    assert spec.bins(spec.lags(step)).sum(axis=0).tolist() == counts


def test_refuses_an_electrode_kernel_shorter_than_a_step() -> None:
    with pytest.raises(InputError, match=r"duration_ms is 0.3 ms, .* step is 0.5 ms; set it to at"):
        electrode_spec(0.3, 0.5)


def test_columns_without_electrode_and_spikes() -> None:
    design = VoltageDesign(KernelSpec(100.0, 14), None, electrode=False)
    assert design.columns == {"offset": slice(0, 1), "input": slice(1, 15)}
    assert list(design.kernels) == ["input"]


@pytest.mark.parametrize(
    ("row", "step", "m"), [(0.5, 0.05, 10), (0.5, 0.1, 5), (0.5, 0.5, 1), (0.6, 0.2, 3)]
)
def test_samples_per_row(row: float, step: float, m: int) -> None:
    assert samples_per_row(row, step) == m


@pytest.mark.parametrize(("row", "step"), [(0.5, 0.2), (0.5, 1.0), (0.5, 0.3)])
def test_refuses_rows_that_are_not_whole_steps(row: float, step: float) -> None:
    with pytest.raises(InputError, match=r"cell\.csv: a row of 0.5 ms is not a whole number"):
        samples_per_row(row, step, "cell.csv")


@pytest.mark.parametrize(
    ("step", "row"), [(0.05, 0.5), (0.1, 0.5), (0.2, 0.6), (0.3, 0.6), (0.5, 0.5), (1.0, 1.0)]
)
def test_default_row_is_the_smallest_multiple_of_at_least_half_a_ms(
    step: float, row: float
) -> None:
    assert default_row_ms(step) == pytest.approx(row, rel=1e-12)

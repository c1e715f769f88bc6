"""The slow truth beside the digest: plain loops over samples, QR, refits. Only tests use it.

Everything here is short enough to check by eye and shares no code with the fast path but the
splines themselves. Rows are weighted by an explicit symmetric square root, coefficients come
from a QR factorisation of the rows, and leaving a unit out means fitting again without it.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.linalg import qr, solve_triangular

from bayesglm.kernels.design import VoltageDesign
from bayesglm.recording.recording import BoolArray, FloatArray, IntArray, Recording, Sweep


@dataclass(frozen=True, eq=False)
class Rows:
    """The kept rows of a recording.

    Attributes
    ----------
    x
        Columns of the linear model, shape (n, P).
    v
        Voltage, mV, shape (n,).
    sweep, unit
        Index of the sweep and of the unit of each row, shape (n,).
    """

    x: FloatArray
    v: FloatArray
    sweep: IntArray
    unit: IntArray

    def where(self, chosen: BoolArray) -> Rows:
        """Only the chosen rows."""
        return Rows(self.x[chosen], self.v[chosen], self.sweep[chosen], self.unit[chosen])


def sample_columns(sweep: Sweep, design: VoltageDesign, step_ms: float) -> FloatArray:
    """Columns at every sample of a sweep, one sample and one lag after the other, (n, P)."""
    columns, n = design.columns, sweep.n_samples
    x = np.zeros((n, design.n_weights))
    x[:, columns["offset"]] = 1.0
    if design.electrode:
        x[:, columns["electrode"]] = sweep.current[:, None]
    kernel = design.input.evaluate(design.input.lags(step_ms))
    for i in range(n):
        for k in range(1, len(kernel) + 1):
            # Before the sweep the current is taken to have been its first value.
            past = sweep.current[i - k] if i >= k else sweep.current[0]
            x[i, columns["input"]] += kernel[k - 1] * past * step_ms
    if design.after_spike is not None and sweep.spikes is not None:
        kernel = design.after_spike.evaluate(design.after_spike.lags(step_ms))
        for spike in sweep.spikes:
            for k in range(1, min(len(kernel), n - 1 - spike) + 1):
                x[spike + k, columns["after_spike"]] += kernel[k - 1]
    return x


def sample_is_used(sweep: Sweep, design: VoltageDesign, step_ms: float) -> BoolArray:
    """Whether a sample is kept and outside the window around every spike, shape (n,)."""
    used = sweep.keep.copy()
    before, after = design.spike_window_ms
    for spike in sweep.spikes if sweep.spikes is not None else ():
        for i in range(sweep.n_samples):
            if before - 1e-9 <= (i - spike) * step_ms <= after + 1e-9:
                used[i] = False
    return used


def recording_rows(recording: Recording, design: VoltageDesign, n_blocks: int = 1) -> Rows:
    """The kept rows of a recording, each sweep cut into `n_blocks` units of equal length."""
    m = design.samples_per_row(recording.step_ms)
    parts: list[tuple[FloatArray, float, int, int]] = []
    for number, sweep in enumerate(recording.sweeps):
        columns = sample_columns(sweep, design, recording.step_ms)
        used = sample_is_used(sweep, design, recording.step_ms)
        n_rows = sweep.n_samples // m
        edges = np.linspace(0, n_rows, n_blocks + 1).round().astype(int)
        for row in range(n_rows):
            here = slice(row * m, (row + 1) * m)
            if used[here].all():
                block = int(np.searchsorted(edges, row, side="right")) - 1
                mean = columns[here].mean(axis=0), float(sweep.voltage[here].mean())
                parts.append((*mean, number, number * n_blocks + block))
    x, v, sweeps, units = zip(*parts, strict=True)
    return Rows(np.array(x), np.array(v), np.array(sweeps), np.array(units))


def unit_gram(rows: Rows, unit: int) -> FloatArray:
    """``Σ zzᵀ`` with z = (x, v) over the rows of a unit, row by row, shape (P + 1, P + 1)."""
    z = np.column_stack([rows.x, rows.v])[rows.unit == unit]
    total = np.zeros((z.shape[1], z.shape[1]))
    for row in z:
        total += np.outer(row, row)
    return total


def whitened(rows: Rows, offset_ratio: float) -> tuple[FloatArray, FloatArray]:
    """Rows times the symmetric square root of ``(I + ρ 11ᵀ)⁻¹``, sweep by sweep.

    With n rows in a sweep it is ``I − 11ᵀ (1 − (1 + nρ)^(−1/2))/n``; its square is the weight
    ``I − 11ᵀ ρ/(1 + nρ)``.
    """
    x, v = rows.x.copy(), rows.v.copy()
    for sweep in np.unique(rows.sweep):
        here = rows.sweep == sweep
        n = int(here.sum())
        root = np.eye(n) - (1 - (1 + n * offset_ratio) ** -0.5) / n
        x[here], v[here] = root @ x[here], root @ v[here]
    return x, v


def estimate(rows: Rows, offset_ratio: float = 0.0) -> tuple[FloatArray, FloatArray, float]:
    """Least squares by QR of scaled columns: ŵ (P,), H⁻¹ (P, P), residual variance."""
    x, v = whitened(rows, offset_ratio)
    scale = 1.0 / np.linalg.norm(x, axis=0)
    q, r = qr(x * scale, mode="economic")
    weights = scale * solve_triangular(r, q.T @ v)
    root = scale[:, None] * solve_triangular(r, np.eye(len(scale)))
    misfit = v - x @ weights
    return weights, root @ root.T, float(misfit @ misfit) / (len(v) - len(weights))


def white_covariance(rows: Rows, offset_ratio: float = 0.0) -> FloatArray:
    """Covariance of ŵ if residuals were white, shape (P, P)."""
    _, inverse, variance = estimate(rows, offset_ratio)
    return variance * inverse


def cluster_covariance(rows: Rows, offset_ratio: float = 0.0) -> FloatArray:
    """``H⁻¹ (Σ_b s_b s_bᵀ) H⁻¹``, s_b the unit's sum of x times residual less offset, (P, P)."""
    weights, inverse, _ = estimate(rows, offset_ratio)
    residual = rows.v - rows.x @ weights
    for sweep in np.unique(rows.sweep):
        here = rows.sweep == sweep
        ratio = offset_ratio * here.sum()
        residual[here] -= residual[here].mean() * ratio / (1 + ratio)
    middle = np.zeros_like(inverse)
    for unit in np.unique(rows.unit):
        score = rows.x[rows.unit == unit].T @ residual[rows.unit == unit]
        middle += np.outer(score, score)
    return inverse @ middle @ inverse


def jackknife_covariance(rows: Rows, offset_ratio: float = 0.0) -> FloatArray:
    """``(B − 1)/B Σ_b (ŵ − ŵ₋b)(ŵ − ŵ₋b)ᵀ``, each unit left out in turn and all fitted again.

    Rows of the same sweep that stay keep an offset of their own.
    """
    whole, _, _ = estimate(rows, offset_ratio)
    units = np.unique(rows.unit)
    total = np.zeros((len(whole), len(whole)))
    for unit in units:
        change = whole - estimate(rows.where(rows.unit != unit), offset_ratio)[0]
        total += np.outer(change, change)
    return (len(units) - 1) / len(units) * total

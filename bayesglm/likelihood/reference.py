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

NO_EFFECTS = np.zeros(1)


@dataclass(frozen=True, eq=False)
class Rows:
    """The kept rows of a recording.

    Attributes
    ----------
    x
        Columns of the linear model, shape (n, P).
    v
        Voltage, mV, shape (n,).
    effects
        Columns of which each sweep has an effect of its own: ones, and a line, shape (n, R).
    sweep, unit
        Index of the sweep and of the unit of each row, shape (n,).
    """

    x: FloatArray
    v: FloatArray
    effects: FloatArray
    sweep: IntArray
    unit: IntArray

    def where(self, chosen: BoolArray) -> Rows:
        """Only the chosen rows."""
        effects, sweep = self.effects[chosen], self.sweep[chosen]
        return Rows(self.x[chosen], self.v[chosen], effects, sweep, self.unit[chosen])


def sample_columns(sweep: Sweep, design: VoltageDesign, step_ms: float) -> FloatArray:
    """Columns at every sample of a sweep, one sample and one lag after the other, (n, P)."""
    columns, n = design.columns, sweep.n_samples
    x = np.zeros((n, design.n_weights))
    x[:, columns["offset"]] = 1.0
    if design.electrode:
        x[:, columns["electrode"].start] = sweep.current
    if design.electrode_kernel is not None:
        bins, first = design.electrode_kernel, columns["electrode"].start + 1
        for i in range(n):
            for j in range(bins.weights):
                lags = [
                    k
                    for k in range(1, n + 1)
                    if bins.edges_ms[j] + 1e-9 < k * step_ms <= bins.edges_ms[j + 1] + 1e-9
                ]
                x[i, first + j] = np.mean([sweep.current[max(i - k, 0)] for k in lags])
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
    parts: list[tuple[FloatArray, float, FloatArray, int, int]] = []
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
                line = np.sqrt(3.0) * (2 * row / (n_rows - 1) - 1)
                effects = np.array([1.0, line] if design.drift else [1.0])
                parts.append((*mean, effects, number, number * n_blocks + block))
    return Rows(*(np.array(column) for column in zip(*parts, strict=True)))


def unit_gram(rows: Rows, unit: int) -> FloatArray:
    """``Σ zzᵀ`` over the rows of a unit, row by row; z = (x, v), or (x, t, v) with a drift."""
    z = np.column_stack([rows.x, rows.effects[:, 1:], rows.v])[rows.unit == unit]
    total = np.zeros((z.shape[1], z.shape[1]))
    for row in z:
        total += np.outer(row, row)
    return total


def whitened(rows: Rows, ratios: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Rows times the symmetric square root of ``(I + Z D Zᵀ)⁻¹``, sweep by sweep.

    With ``Z = QR`` it is ``I − Q (I − (I + R D Rᵀ)^(−1/2)) Qᵀ``.
    """
    x, v = rows.x.copy(), rows.v.copy()
    for sweep in np.unique(rows.sweep):
        here = rows.sweep == sweep
        q, r = np.linalg.qr(rows.effects[here])
        values, vectors = np.linalg.eigh(np.eye(len(r)) + (r * ratios) @ r.T)
        root = np.eye(here.sum()) - q @ vectors @ np.diag(1 - values**-0.5) @ vectors.T @ q.T
        x[here], v[here] = root @ x[here], root @ v[here]
    return x, v


def estimate(rows: Rows, ratios: FloatArray = NO_EFFECTS) -> tuple[FloatArray, FloatArray, float]:
    """Least squares by QR of scaled columns: ŵ (P,), H⁻¹ (P, P), residual variance."""
    x, v = whitened(rows, ratios)
    scale = 1.0 / np.linalg.norm(x, axis=0)
    q, r = qr(x * scale, mode="economic")
    weights = scale * solve_triangular(r, q.T @ v)
    root = scale[:, None] * solve_triangular(r, np.eye(len(scale)))
    misfit = v - x @ weights
    return weights, root @ root.T, float(misfit @ misfit) / (len(v) - len(weights))


def white_covariance(rows: Rows, ratios: FloatArray = NO_EFFECTS) -> FloatArray:
    """Covariance of ŵ if residuals were white, shape (P, P)."""
    _, inverse, variance = estimate(rows, ratios)
    return variance * inverse


def cluster_covariance(rows: Rows, ratios: FloatArray = NO_EFFECTS) -> FloatArray:
    """``H⁻¹ (Σ_b s_b s_bᵀ) H⁻¹``, shape (P, P).

    s_b is the unit's sum of x times the residual less the effects of its sweep.
    """
    weights, inverse, _ = estimate(rows, ratios)
    residual = rows.v - rows.x @ weights
    for sweep in np.unique(rows.sweep):
        here = rows.sweep == sweep
        z = rows.effects[here]
        spread = np.diag(ratios)
        shrink = np.linalg.solve(np.eye(len(ratios)) + spread @ z.T @ z, spread)
        residual[here] -= z @ shrink @ z.T @ residual[here]
    middle = np.zeros_like(inverse)
    for unit in np.unique(rows.unit):
        score = rows.x[rows.unit == unit].T @ residual[rows.unit == unit]
        middle += np.outer(score, score)
    return inverse @ middle @ inverse


def jackknife_covariance(rows: Rows, ratios: FloatArray = NO_EFFECTS) -> FloatArray:
    """``(B − 1)/B Σ_b (ŵ − ŵ₋b)(ŵ − ŵ₋b)ᵀ``, each unit left out in turn and all fitted again.

    Rows of the same sweep that stay keep effects of their own.
    """
    whole, _, _ = estimate(rows, ratios)
    units = np.unique(rows.unit)
    total = np.zeros((len(whole), len(whole)))
    for unit in units:
        change = whole - estimate(rows.where(rows.unit != unit), ratios)[0]
        total += np.outer(change, change)
    return (len(units) - 1) / len(units) * total

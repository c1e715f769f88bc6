"""What the linear model leaves over, row by row: for the linearity check and the figures."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np

from bayesglm.kernels.design import VoltageDesign, row_means
from bayesglm.likelihood.voltage import kept_rows, predict_rows
from bayesglm.recording.recording import BoolArray, FloatArray, Recording, Sweep

#: Bins of the predicted voltage, of equal numbers of rows.
_BINS = 10


@dataclass(frozen=True, eq=False)
class SweepRows:
    """One sweep in rows: measured and predicted voltage, mV, and which rows were fitted.

    Attributes
    ----------
    sweep
        The sweep.
    time_ms
        Middle of each row, shape (n_rows,).
    voltage, prediction
        Shape (n_rows,), mV; voltage may be NaN where nothing is kept.
    kept
        Rows that were fitted, shape (n_rows,).
    """

    sweep: Sweep
    time_ms: FloatArray
    voltage: FloatArray
    prediction: FloatArray
    kept: BoolArray

    @property
    def residual(self) -> FloatArray:
        """Measured minus predicted, NaN where a row was not fitted, shape (n_rows,)."""
        return np.where(self.kept, self.voltage - self.prediction, np.nan)


def sweep_rows(
    recordings: Sequence[Recording], design: VoltageDesign, weights: FloatArray
) -> Iterator[SweepRows]:
    """Predict every sweep with given weights, one sweep at a time.

    Parameters
    ----------
    recordings
        The fitted recordings.
    design
        The linear model.
    weights
        Shape (P,).
    """
    for recording in recordings:
        m = design.samples_per_row(recording.step_ms)
        for sweep in recording.sweeps:
            prediction = predict_rows(sweep, design, recording.step_ms, weights[:, None])[:, 0]
            yield SweepRows(
                sweep=sweep,
                time_ms=(np.arange(len(prediction)) + 0.5) * design.row_ms,
                voltage=row_means(sweep.voltage, m),
                prediction=prediction,
                kept=kept_rows(sweep, design, recording.step_ms, m),
            )


@dataclass(frozen=True, eq=False)
class Linearity:
    """Whether the residual still depends on the prediction.

    Attributes
    ----------
    prediction, residual
        Mean prediction and mean residual in bins of equal numbers of rows, mV, shape (10,).
    share
        Share of the residual's variance that lies between the bins beyond what correlated noise
        leaves there by chance; 0 for a linear cell.
    """

    prediction: FloatArray
    residual: FloatArray
    share: float


def linearity(
    recordings: Sequence[Recording],
    design: VoltageDesign,
    weights: FloatArray,
    correlation_ms: float,
) -> Linearity:
    """Bin the residual by the predicted voltage.

    Each sweep's mean residual is taken out first: offsets of sweeps are part of the model.

    Parameters
    ----------
    recordings, design
        What was fitted.
    weights
        Posterior mean of the weights, shape (P,).
    correlation_ms
        Correlation time of the residual, ms: rows two of these apart count as independent.
    """
    predictions, residuals = [], []
    for rows in sweep_rows(recordings, design, weights):
        if rows.kept.any():
            residual = rows.residual[rows.kept]
            predictions.append(rows.prediction[rows.kept])
            residuals.append(residual - residual.mean())
    prediction, residual = np.concatenate(predictions), np.concatenate(residuals)
    order = np.argsort(prediction, kind="stable")
    bins = [part for part in np.array_split(order, _BINS) if len(part)]
    means = np.array([residual[part].mean() for part in bins])
    sizes = np.array([len(part) for part in bins])
    variance = float(residual.var())
    share = float((sizes @ means**2) / sizes.sum() / variance) if variance > 0 else 0.0
    independent = len(residual) / max(1.0, 2 * correlation_ms / design.row_ms)
    chance = (len(bins) - 1) / max(independent, 1.0)
    centres = np.array([prediction[part].mean() for part in bins])
    return Linearity(centres, means, max(0.0, share - chance))

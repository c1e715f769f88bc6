"""What the linear model leaves over, row by row: for the linearity check and the figures."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace

import numpy as np

from bayesglm.kernels.design import VoltageDesign, row_means
from bayesglm.likelihood.least_squares import rows_apart
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

    def own_line(self, drift: bool) -> FloatArray:
        """Mean of the residual over the sweep, with `drift` its straight line, shape (n_rows,)."""
        kept = self.kept
        time = self.time_ms - self.time_ms[kept].mean()
        degree = int(drift and np.count_nonzero(kept) > 1)
        own = np.polynomial.polynomial.polyfit(time[kept], self.residual[kept], degree)
        line: FloatArray = np.polynomial.polynomial.polyval(time, own)
        return line

    def centred(self, drift: bool) -> FloatArray:
        """Residual less the sweep's own mean, or line with `drift`, shape (n_rows,)."""
        return self.residual - self.own_line(drift)

    def with_own_line(self, drift: bool) -> SweepRows:
        """The same with the sweep's own mean, or line with `drift`, in its prediction."""
        if not self.kept.any():
            return self
        return replace(self, prediction=self.prediction + self.own_line(drift))


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
    drift: bool = False,
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
    drift
        Whether sweeps were found to drift, so that a line is taken out instead.
    """
    predictions, residuals = [], []
    for rows in sweep_rows(recordings, design, weights):
        if rows.kept.any():
            predictions.append(rows.prediction[rows.kept])
            residuals.append(rows.centred(drift)[rows.kept])
    prediction, residual = np.concatenate(predictions), np.concatenate(residuals)
    order = np.argsort(prediction, kind="stable")
    bins = [part for part in np.array_split(order, _BINS) if len(part)]
    means = np.array([residual[part].mean() for part in bins])
    sizes = np.array([len(part) for part in bins])
    variance = float(residual.var())
    share = float((sizes @ means**2) / sizes.sum() / variance) if variance > 0 else 0.0
    independent = len(residual) / rows_apart(correlation_ms, design.row_ms)
    chance = (len(bins) - 1) / max(independent, 1.0)
    centres = np.array([prediction[part].mean() for part in bins])
    return Linearity(centres, means, max(0.0, share - chance))


#: An excursion beyond so many robust sds is an event: a normal residual lies there in one of
#: 16 000 independent rows.
EVENT_SDS = 4.0
#: Sd of a normal variate over its median absolute deviation.
_SD_OVER_MAD = 1.4826


@dataclass(frozen=True)
class ResidualMoments:
    """How the residual is distributed, all rows together.

    Attributes
    ----------
    sd, robust_sd
        Standard deviation, and 1.4826 times the median absolute deviation, mV: the same for a
        normal residual.
    median
        mV.
    skewness, excess_kurtosis
        Third and fourth standardised moment, the latter less three; both 0 for a normal residual.
    above, below
        Events: stretches of rows on one side of the median, each counted once, that go beyond
        `EVENT_SDS` robust sds.
    seconds
        Time that was looked at, s.
    """

    sd: float
    robust_sd: float
    median: float
    skewness: float
    excess_kurtosis: float
    above: int
    below: int
    seconds: float

    @property
    def limits(self) -> tuple[float, float]:
        """Residual beyond which an excursion is an event, mV."""
        reach = EVENT_SDS * self.robust_sd
        return self.median - reach, self.median + reach


def residual_moments(residuals: Sequence[FloatArray], row_ms: float) -> ResidualMoments:
    """Measure the distribution of the residual and count its large excursions.

    Parameters
    ----------
    residuals
        Residual of each sweep, mV, shape (n_rows,) each, NaN where a row was not fitted.
    row_ms
        Length of a row, ms.

    Returns
    -------
    ResidualMoments
        Not a test: rows are correlated, so that moments scatter far more than those of as many
        independent values.
    """
    pooled = np.concatenate(list(residuals))
    pooled = pooled[np.isfinite(pooled)]
    sd, median = float(pooled.std()), float(np.median(pooled))
    robust_sd = _SD_OVER_MAD * float(np.median(np.abs(pooled - median)))
    standard = (pooled - pooled.mean()) / (sd if sd > 0 else 1.0)
    reach = EVENT_SDS * robust_sd
    extremes = np.concatenate([_extremes(values - median) for values in residuals])
    return ResidualMoments(
        sd=sd,
        robust_sd=robust_sd,
        median=median,
        skewness=float(np.mean(standard**3)),
        excess_kurtosis=float(np.mean(standard**4)) - 3.0,
        above=int(np.count_nonzero(extremes > reach)),
        below=int(np.count_nonzero(extremes < -reach)),
        seconds=len(pooled) * row_ms / 1e3,
    )


def _extremes(values: FloatArray) -> FloatArray:
    """Value farthest from zero of each stretch of one sign; NaN ends a stretch, counted as 0."""
    filled = np.nan_to_num(values, nan=0.0)
    sign = np.sign(filled)
    starts = np.flatnonzero(np.append(True, sign[1:] != sign[:-1]))
    farthest: FloatArray = sign[starts] * np.maximum.reduceat(np.abs(filled), starts)
    return farthest

"""Whether a kernel has the shape that it was given.

A sum of exponentials is a strong statement. The splines that carry it could be any smooth kernel,
so least squares on them tells how far the data are from the sum.
"""

from __future__ import annotations

import numpy as np
from scipy.stats import f

from bayesglm.checks.splits import as_sds
from bayesglm.inference.bands import identified, kernel_lags, kernel_rows
from bayesglm.kernels.design import VoltageDesign
from bayesglm.likelihood.calibration import Calibration
from bayesglm.recording.recording import FloatArray

#: Directions of the curve with less than this share of the largest variance are rounding.
_SMALLEST_VARIANCE = 1e-9


def shape_misfit(
    design: VoltageDesign, calibration: Calibration, weights: FloatArray
) -> dict[str, float]:
    """How far least squares is from each kernel of exponentials.

    Parameters
    ----------
    design
        The linear model.
    calibration
        The estimate with its covariance.
    weights
        Posterior mean of the weights, shape (P,).

    Returns
    -------
    dict
        By kernel, for kernels of exponentials only: how surprising the squared distance in units
        of its covariance is, told as sds of a normal variate. It is held against F with the
        directions less two for each exponential, and ν degrees of freedom.
    """
    found = {}
    for name, spec in design.kernels.items():
        if spec.basis != "exponentials":
            continue
        # As curves: weights inside the spike window are arbitrary in least squares.
        lags = kernel_lags(design, name)
        rows = kernel_rows(design, name, lags[identified(design, name, lags)])
        responses = rows @ calibration.fit.basis
        values, vectors = np.linalg.eigh(responses @ calibration.covariance @ responses.T)
        kept = values > _SMALLEST_VARIANCE * values[-1]
        apart = vectors[:, kept].T @ (rows @ (calibration.fit.weights - weights))
        freedom = max(int(np.count_nonzero(kept)) - 2 * spec.terms, 1)
        statistic = float(np.sum(apart**2 / values[kept])) / freedom
        found[name] = as_sds(float(f.logsf(statistic, freedom, calibration.freedom)))
    return found

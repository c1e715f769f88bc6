"""B-spline kernels on a warped lag axis.

A kernel is ``k(s) = Σ_j w_j B_j(s)`` with cubic B-splines whose knots are even in
``log(1 + s/s0)``: fine where kernels change fast, coarse where they decay. The last spline is
left out, so every kernel ends at zero.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from scipy.interpolate import BSpline

from bayesglm.errors import InputError
from bayesglm.recording.recording import FloatArray

_DEGREE = 3


@dataclass(frozen=True)
class KernelSpec:
    """Shape of one kernel.

    Attributes
    ----------
    duration_ms
        Lag at which the kernel has come to zero, ms.
    weights
        Number of weights (B-splines).
    warp_ms
        Scale s0 of the warp ``log(1 + s/s0)``, ms.

    Raises
    ------
    InputError
        If the duration or the warp is not positive, or there are fewer than five weights.
    """

    duration_ms: float
    weights: int = 14
    warp_ms: float = 2.0

    def __post_init__(self) -> None:
        if not self.duration_ms > 0 or not self.warp_ms > 0:
            raise InputError(
                f"kernel of {self.duration_ms} ms warped at {self.warp_ms} ms; "
                "expected both above zero"
            )
        if self.weights < 5:
            raise InputError(f"kernel of {self.weights} weights; expected at least 5")

    def warp(self, lags_ms: FloatArray) -> FloatArray:
        """Map lags onto the axis on which the knots are even, from 0 to 1."""
        scaled: FloatArray = np.log1p(lags_ms / self.warp_ms)
        return scaled / float(np.log1p(self.duration_ms / self.warp_ms))

    @cached_property
    def _spline(self) -> BSpline:
        # One spline more than there are weights: the last, which is 1 at the end, is left out.
        inner = np.linspace(0.0, 1.0, self.weights + 1 - _DEGREE + 1)
        knots = np.concatenate([np.zeros(_DEGREE), inner, np.ones(_DEGREE)])
        return BSpline(knots, np.eye(self.weights + 1), _DEGREE, extrapolate=False)

    def evaluate(self, lags_ms: FloatArray) -> FloatArray:
        """Evaluate the splines.

        Parameters
        ----------
        lags_ms
            Lags, shape (n,), ms.

        Returns
        -------
        Array of shape (n, weights); zero before lag 0 and from `duration_ms` on.
        """
        lags = np.asarray(lags_ms, dtype=np.float64)
        inside = (lags >= 0) & (lags < self.duration_ms)
        values = np.zeros((len(lags), self.weights))
        values[inside] = self._spline(self.warp(lags[inside]))[:, :-1]
        return values

    def lags(self, step_ms: float) -> FloatArray:
        """Lags ``step, 2·step, …`` up to the duration, ms, shape (K,).

        Strict causality is here: the first lag is one step.
        """
        n = int(np.floor(self.duration_ms / step_ms + 1e-9))
        return step_ms * np.arange(1, n + 1)

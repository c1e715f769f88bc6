"""Shapes of kernels on a warped lag axis.

A kernel is ``k(s) = Σ_j w_j B_j(s)``. Four bases are offered:

- ``splines``: cubic B-splines whose knots are even in ``log(1 + s/s0)``: fine where kernels change
  fast, coarse where they decay. The last spline is left out, so that the kernel ends at zero.
- ``cosines``: raised cosines, evenly spaced on the same axis, each four spacings wide. The kernel
  ends at zero.
- ``lags``: one coefficient a lag, a straight line between them where they are far apart.
- ``exponentials``: ``Σ_i a_i exp(−s/τ_i)``. The columns are B-splines, all of them, on which
  sums of exponentials are a constraint; see `kernels.exponentials`.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import Final

import numpy as np
from scipy.interpolate import BSpline

from bayesglm.errors import InputError
from bayesglm.recording.recording import FloatArray
from bayesglm.recording.settings import Basis

_DEGREE = 3

#: Weights of a kernel where nothing is said. 14 splines hold exponentials to 0.3 % (50–400 ms).
DEFAULT_WEIGHTS: Final[dict[Basis, int]] = {
    "splines": 14,
    "cosines": 14,
    "lags": 60,
    "exponentials": 14,
}

#: Lags that differ by less than this share of the duration are the same.
_SAME_LAG = 1e-9


@dataclass(frozen=True)
class KernelSpec:
    """Shape of one kernel.

    Attributes
    ----------
    duration_ms
        Lag at which the kernel ends, ms.
    weights
        Number of weights: splines, cosines or lags.
    warp_ms
        Scale s0 of the warp ``log(1 + s/s0)``, ms.
    basis
        What the kernel is made of.
    finest_ms
        Of lags and exponentials: the finest lag that is told apart, the length of a row, ms. Lags
        are whole multiples of it, and no time constant is shorter.
    terms
        Number of exponentials.

    Raises
    ------
    InputError
        If the duration or the warp is not positive, there are too few weights, more weights than
        lags, no finest lag where one is needed, or no exponential.
    """

    duration_ms: float
    weights: int = 14
    warp_ms: float = 2.0
    basis: Basis = "splines"
    finest_ms: float = 0.0
    terms: int = 3

    def __post_init__(self) -> None:
        if not self.duration_ms > 0 or not self.warp_ms > 0:
            raise InputError(
                f"kernel of {self.duration_ms} ms warped at {self.warp_ms} ms; "
                "expected both above zero"
            )
        fewest = 1 if self.basis == "lags" else 5
        if self.weights < fewest:
            raise InputError(f"kernel of {self.weights} weights; expected at least {fewest}")
        if not 1 <= self.terms <= self.weights and self.basis == "exponentials":
            raise InputError(
                f"kernel of {self.terms} exponentials on {self.weights} splines; expected 1 to "
                f"{self.weights}"
            )
        if self.basis not in ("lags", "exponentials"):
            return
        if not 0 < self.finest_ms <= self.duration_ms * (1 + _SAME_LAG):
            raise InputError(
                f"kernel of {self.basis} with finest_ms {self.finest_ms:g}; expected the length of "
                f"a row, above 0 and at most the duration of {self.duration_ms:g} ms"
            )
        if self.basis == "lags" and self.weights > self.finest_lags:
            raise InputError(
                f"kernel of {self.weights} lags at least {self.finest_ms:g} ms apart in "
                f"{self.duration_ms:g} ms; expected at most {self.finest_lags} lags"
            )

    @property
    def finest_lags(self) -> int:
        """Number of lags, `finest_ms` apart, within the duration."""
        return int(self.duration_ms / self.finest_ms * (1 + _SAME_LAG))

    def warp(self, lags_ms: FloatArray) -> FloatArray:
        """Map lags onto the axis on which the knots are even, from 0 to 1."""
        scaled: FloatArray = np.log1p(lags_ms / self.warp_ms)
        return scaled / float(np.log1p(self.duration_ms / self.warp_ms))

    def unwarp(self, places: FloatArray) -> FloatArray:
        """Lags at places on the warped axis, ms."""
        lags: FloatArray = self.warp_ms * np.expm1(
            places * np.log1p(self.duration_ms / self.warp_ms)
        )
        return lags

    @property
    def centres(self) -> FloatArray:
        """Where each weight belongs on the warped axis, and the end, shape (weights + 1,).

        A kernel that is a straight line on that axis has weights on a straight line. Exponentials
        keep the spline at the end: shape (weights,).
        """
        if self.basis == "cosines":
            return np.append(self._cosine_centres, 1.0)
        if self.basis == "lags":
            # The kernel ends with its duration: it is zero one lag later.
            return self.warp(np.append(self.edges_ms[1:], self.duration_ms + self.finest_ms))
        # Greville abscissae: means of three knots.
        knots = self._spline.t
        return np.array(
            [knots[j + 1 : j + 1 + _DEGREE].mean() for j in range(len(knots) - _DEGREE - 1)]
        )

    @cached_property
    def edges_ms(self) -> FloatArray:
        """The lags that have a coefficient, and 0 before them, ms, shape (weights + 1,).

        They are one `finest_ms` apart as long as lags that are even on the warped axis would be
        nearer. All but the last, the duration, are whole multiples of `finest_ms`.
        """
        n, finest = self.weights, self.finest_ms
        for narrow in range(n):
            ends = self.warp(finest * np.array([narrow, self.finest_lags]))
            even = self.unwarp(np.linspace(ends[0], ends[1], n - narrow + 1)) / finest
            if even[1] - even[0] >= 1 - _SAME_LAG:
                break
        # Widths grow from one on, so that rounding makes no two lags the same.
        edges = finest * np.concatenate([np.arange(narrow), np.floor(even + 0.5 + _SAME_LAG)])
        edges[-1] = self.duration_ms
        return edges

    @cached_property
    def _spline(self) -> BSpline:
        # Of a kernel that ends at zero the last spline, which is 1 at the end, is left out.
        n = self.weights + (self.basis == "splines")
        inner = np.linspace(0.0, 1.0, n - _DEGREE + 1)
        knots = np.concatenate([np.zeros(_DEGREE), inner, np.ones(_DEGREE)])
        return BSpline(knots, np.eye(n), _DEGREE, extrapolate=False)

    @property
    def _cosine_centres(self) -> FloatArray:
        spacing = 1.0 / (self.weights - 1)
        return spacing * np.arange(-1.0, self.weights - 1)

    def evaluate(self, lags_ms: FloatArray) -> FloatArray:
        """Evaluate the basis.

        Parameters
        ----------
        lags_ms
            Lags, shape (n,), ms.

        Returns
        -------
        Array of shape (n, weights); zero before lag 0 and beyond `duration_ms`. Splines and cosines
        are zero at `duration_ms`; lags and exponentials end with it.
        """
        lags = np.asarray(lags_ms, dtype=np.float64)
        beyond = lags > self.duration_ms * (1 + _SAME_LAG)
        if self.basis in ("splines", "cosines"):
            beyond = lags >= self.duration_ms
        inside = (lags >= 0) & ~beyond
        values = np.zeros((len(lags), self.weights))
        values[inside] = self._inside(lags[inside])
        return values

    def _inside(self, lags: FloatArray) -> FloatArray:
        if self.basis == "lags":
            return self._lines(lags)
        places = np.minimum(self.warp(lags), 1.0)
        if self.basis == "cosines":
            return self._cosines(places)
        values: FloatArray = self._spline(places)[:, : self.weights]
        return values

    def _lines(self, lags: FloatArray) -> FloatArray:
        """Straight lines between the lags with a coefficient; constant before the first."""
        last = self.weights - 1
        place = np.interp(lags, self.edges_ms[1:], np.arange(self.weights))
        left = np.minimum(place.astype(np.int64), max(last - 1, 0))
        share, each = (place - left)[:, None], np.eye(self.weights)
        lines: FloatArray = (1 - share) * each[left] + share * each[np.minimum(left + 1, last)]
        return lines

    def bins(self, lags_ms: FloatArray) -> FloatArray:
        """Which of the intervals between the edges each lag lies in, closed on the right.

        Parameters
        ----------
        lags_ms
            Lags above 0 and at most the duration, shape (n,), ms.

        Returns
        -------
        Array of zeros and ones, shape (n, weights).
        """
        inside: FloatArray = np.eye(self.weights)[
            np.searchsorted(self.edges_ms[1:] * (1 + _SAME_LAG), lags_ms)
        ]
        return inside

    def _cosines(self, places: FloatArray) -> FloatArray:
        spacing, centres = 1.0 / (self.weights - 1), self._cosine_centres

        def bumps(at: FloatArray) -> FloatArray:
            away = np.abs(places[:, None] - at) / (2 * spacing)
            return np.where(away < 1, (1 + np.cos(np.pi * np.minimum(away, 1.0))) / 2, 0.0)

        # Less the mirror image about the end: only the last reaches beyond it.
        return bumps(centres) - bumps(2.0 - centres)

    def lags(self, step_ms: float) -> FloatArray:
        """Lags ``step, 2·step, …`` up to the duration, ms, shape (K,).

        Strict causality is here: the first lag is one step.
        """
        n = int(np.floor(self.duration_ms / step_ms + 1e-9))
        return step_ms * np.arange(1, n + 1)

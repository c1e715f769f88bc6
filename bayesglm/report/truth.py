"""What a simulated cell was made from, to hold its fit against."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

from bayesglm.recording.recording import FloatArray


@dataclass(frozen=True, eq=False)
class Truth:
    """The known truth of one simulated cell.

    Attributes
    ----------
    features
        True values by feature, in the feature's unit.
    curves
        For each kernel its lags in ms and its values in the kernel's unit, shape (n,) each.
    """

    features: Mapping[str, float] = field(default_factory=dict)
    curves: Mapping[str, tuple[FloatArray, FloatArray]] = field(default_factory=dict)

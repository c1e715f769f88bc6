"""What a recording can say of the kernels, judged before any fit from current and spikes alone.

The precision of the weights depends on the columns of the linear model and on the size of the
noise, not on the voltage. With a nominal noise the posterior can be held to the prior before
anything is fitted. Lag by lag that is lenient: whoever knows the sum of a kernel alone knows more
of every lag than a wide prior does. How many numbers the data set is the stricter measure.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np

from bayesglm.errors import InputError
from bayesglm.inference.bands import identified, kernel_rows
from bayesglm.inference.diagnose import PRIOR_SHARE_LIMIT, UNITS_LIMIT
from bayesglm.inference.setup import nominal_unit_ms, resolve_design, settle
from bayesglm.likelihood.digest import VoltageDigest
from bayesglm.likelihood.least_squares import rows_apart
from bayesglm.likelihood.voltage import voltage_digest
from bayesglm.models.priors import WeightPrior, weight_prior
from bayesglm.recording.loading import join
from bayesglm.recording.recording import FloatArray, Recording
from bayesglm.recording.selection import refuse_defects
from bayesglm.recording.settings import Settings
from bayesglm.recording.wording import check_command, fixed, number
from bayesglm.verdict import Reason

#: The noise the design is judged with: sd and correlation time of a quiet cell's residual
#: (common practice, no source). Noise of twice this sd is as a quarter of the recording.
NOISE_MV: Final = 1.0
NOISE_MS: Final = 20.0
#: Above this ratio of posterior to prior sd a lag is set by the prior.
_LARGEST_RATIO: Final = PRIOR_SHARE_LIMIT
_SMALLEST_SHARE: Final = 0.5
#: A kernel's sum and one time are two numbers; its shape begins with the third. Less than one is
#: not even the sum.
_FEWEST_WEIGHTS: Final = 3.0
_NOTHING: Final = 1.0
_FEWEST_UNITS: Final = UNITS_LIMIT
_STEP_MS: Final = 1.0
_SMALLEST_RANGE_NA: Final = 0.1e-3
#: As short as an input kernel gets by default, ms.
_SHORTEST_SWEEP_MS: Final = 50.0

_ROWS: Final = {"input": "identifies_input", "after_spike": "identifies_after_spike"}
_REMEDY: Final = {
    "input": "record a fluctuating current, or more, longer or larger steps",
    "after_spike": "record more spikes",
}


@dataclass(frozen=True, eq=False)
class Identification:
    """What current and spikes say of one kernel.

    Attributes
    ----------
    lags_ms
        Every 1 ms where the voltage says something, shape (L,).
    ratio
        Posterior sd over prior sd, shape (L,).
    dimension
        Effective number of the kernel's weights that the data set, of `weights`.
    weights
        Number of weights.
    """

    lags_ms: FloatArray
    ratio: FloatArray
    dimension: float
    weights: int

    @property
    def share(self) -> float:
        """Share of the lags that are set by the data."""
        return float(np.mean(self.ratio < _LARGEST_RATIO)) if len(self.ratio) else 0.0


def design_rows(recordings: Sequence[Recording], settings: Settings) -> tuple[Reason, ...]:
    """Rows of the check on what the recordings of a cell can say.

    Parameters
    ----------
    recordings
        The recordings that a fit would use together, spikes found and selection applied.
    settings
        The study's settings.

    Returns
    -------
    tuple of Reason
        ``identifies_input``, ``identifies_after_spike``, ``few_sweeps``; their values begin with
        "not judged" where the recordings cannot be used as they are.
    """
    try:
        design_digest = _digest(recordings, settings)
    except InputError as error:
        return _not_judged(str(error))
    if isinstance(design_digest, str):
        return _not_judged(design_digest)
    prior = weight_prior(design_digest.design, settings.priors)
    found = identification(design_digest, prior, settings.model.sweep_offsets)
    return (
        *(_identifies(name, found.get(name), recordings) for name in _ROWS),
        _few_sweeps(design_digest, recordings),
    )


def identification(
    digest: VoltageDigest, prior: WeightPrior, sweep_offsets: bool
) -> dict[str, Identification]:
    """Hold the posterior's sd to the prior's for a nominal noise; the voltage has no part in it.

    Parameters
    ----------
    digest
        Its Gram matrices of the columns are used.
    prior
        Prior of the weights, at the scales of the kernels' sds.
    sweep_offsets
        Whether each sweep has an offset of its own; it is taken to be free.

    Returns
    -------
    dict from kernel to Identification
    """
    design = digest.design
    variance = NOISE_MV**2 * rows_apart(NOISE_MS, design.row_ms)
    precision = _information(digest, sweep_offsets) / variance
    # In coordinates in which the prior has unit size.
    root = prior.root
    data = root.T @ precision @ root
    covariance = np.linalg.inv(np.eye(len(data)) + (data + data.T) / 2)
    learnt = np.diag(np.eye(len(data)) - covariance)
    found = {}
    for name, spec in design.kernels.items():
        lags = spec.lags(_STEP_MS)
        lags = lags[identified(design, name, lags) & (lags < spec.duration_ms)]
        rows = kernel_rows(design, name, lags) @ root
        posterior = np.einsum("lp,pq,lq->l", rows, covariance, rows)
        found[name] = Identification(
            lags_ms=lags,
            ratio=np.sqrt(posterior / np.sum(rows**2, axis=1)),
            dimension=float(learnt[design.columns[name]].sum()),
            weights=spec.weights,
        )
    return found


def _digest(recordings: Sequence[Recording], settings: Settings) -> VoltageDigest | str:
    """Reduce the recordings to the units a fit would begin with; words where that cannot be."""
    ranges = [np.ptp(sweep.current) for one in recordings for sweep in one.sweeps]
    if max(ranges) < _SMALLEST_RANGE_NA:
        return "the current is constant"
    longest_ms = max(sweep.n_samples * one.step_ms for one in recordings for sweep in one.sweeps)
    if longest_ms < _SHORTEST_SWEEP_MS:
        return f"no sweep lasts {_SHORTEST_SWEEP_MS:g} ms"
    try:
        for recording in recordings:
            refuse_defects(recording)
    except InputError:
        return "missing values or jumps in time"
    joined = [join(recording, settings.recording) for recording in recordings]
    design = resolve_design(joined, settings)
    settled = settle(joined, design.input.duration_ms, settings)
    return voltage_digest(settled, design, nominal_unit_ms(settled, settings))


def _information(digest: VoltageDigest, sweep_offsets: bool) -> FloatArray:
    """Gram matrix of the columns, what the sweeps' own offsets take up removed.

    Offsets are taken to be free, as different baselines are the rule. How much sweeps drift, only
    the voltage tells.
    """
    columns = digest.gram[:, :-1, :-1]
    total: FloatArray = columns.sum(axis=0)
    if sweep_offsets:
        for sweep in np.unique(digest.sweep):
            sums = columns[digest.sweep == sweep, 0].sum(axis=0)
            total = total - np.outer(sums, sums) / sums[0]
    return total


def _identifies(
    kernel: str, found: Identification | None, recordings: Sequence[Recording]
) -> Reason:
    name = _ROWS[kernel]
    limit = (
        f"at least {_FEWEST_WEIGHTS:g} weights, and sd below {_LARGEST_RATIO:g} of the prior's at "
        f"{100 * _SMALLEST_SHARE:.0f} % of lags, for noise of {NOISE_MV:g} mV over {NOISE_MS:g} ms"
    )
    if found is None:
        return Reason(name, "not judged: no spikes", limit)
    if not len(found.lags_ms):
        return Reason(name, "not judged: the kernel ends within its spike window", limit)
    value = (
        f"{fixed(found.dimension, 1)} of {found.weights} weights, and "
        f"{fixed(100 * found.share, 0)} % of lags from {found.lags_ms[0]:.0f} to "
        f"{found.lags_ms[-1]:.0f} ms, set by the data"
    )
    if found.share >= _SMALLEST_SHARE and found.dimension >= _FEWEST_WEIGHTS:
        return Reason(name, value, limit)
    nothing = found.share == 0 or found.dimension < _NOTHING
    return Reason(
        name,
        value,
        limit,
        "failed" if nothing else "caution",
        f"{'the kernel' if nothing else 'most of its shape'} would be set by the prior: "
        f"{_REMEDY[kernel]}",
        check_command(recordings),
    )


def _few_sweeps(digest: VoltageDigest, recordings: Sequence[Recording]) -> Reason:
    """Count the units a fit would find, and say what is lacking."""
    limit = f"at least {_FEWEST_UNITS} independent units"
    n, different = digest.n_units, len(np.unique(digest.stimulus))
    whole = n == len(np.unique(digest.sweep))
    each_s = float(np.median(digest.seconds))
    noun = ("sweep" if n == 1 else "sweeps") if whole else f"blocks of {number(each_s, 2)} s"
    repeated = f", {different} different currents" if different < n else ""
    value = f"{n} {noun}{repeated}"
    lacking = _FEWEST_UNITS - different
    if lacking <= 0:
        return Reason("few_sweeps", value, limit)
    more = f"{lacking} more {'sweep' if lacking == 1 else 'sweeps'}, " if whole else ""
    others = " of other currents" if repeated else ""
    return Reason(
        "few_sweeps",
        value,
        limit,
        "caution",
        "the error bars rest on how much independent parts differ: record at least "
        f"{more}{number(lacking * each_s, 2)} s{others}"
        + ("; with fewer than 4 a fit is judged failed" if different < 4 else ""),
        check_command(recordings),
    )


def _not_judged(why: str) -> tuple[Reason, ...]:
    return tuple(Reason(name, f"not judged: {why}") for name in (*_ROWS.values(), "few_sweeps"))

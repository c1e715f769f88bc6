"""Checks of a fit: the sampler, the units, the recording against itself; and the verdict.

Each function takes plain numbers and returns rows with the value, the limit, what it means and
the next command. Limits of the sampler follow Vehtari et al. (2021, Bayesian Analysis
16:667–718) and Betancourt (2016, arXiv:1604.00695) for the energy.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from arviz_stats.base import array_stats

from bayesglm.inference.sample import Chains
from bayesglm.likelihood.jackknife import MAX_LEVERAGE, UnitCount
from bayesglm.recording.recording import FloatArray
from bayesglm.verdict import Reason, Severity

_RHAT_LIMIT, _RHAT_FAILED = 1.01, 1.05
_ESS_LIMIT, _ESS_FAILED = 400.0, 100.0
_BFMI_LIMIT = 0.3
UNITS_LIMIT, _UNITS_FAILED = 10, 4
_RATIO_LIMIT = 1.5
#: Disagreement is that of the worst lag. A kernel has some ten independent ones, and four such
#: checks are made: chance exceeds this in two of a hundred linear cells, and 3 in ten.
_DISAGREEMENT_LIMIT = 3.5
_LINEARITY_LIMIT = 0.1
PRIOR_SHARE_LIMIT = 0.8

KERNEL_SIGNS = {"input": "input kernel κ", "after_spike": "after-spike kernel η"}


@dataclass(frozen=True)
class Commands:
    """Commands to copy into an advice.

    Attributes
    ----------
    check
        Look at the recordings again.
    narrower
        Fit a range over which the membrane is linear.
    one_drive
        Fit the sweeps of one range of drive, with their spikes.
    calibrated
        Fit with the calibrated likelihood.
    more_draws
        Sample longer.
    """

    check: str
    narrower: str
    one_drive: str
    calibrated: str
    more_draws: str

    def other_range(self, kernel: str) -> str:
        """Fit a range over which a kernel is more nearly one kernel."""
        return self.narrower if kernel == "input" else self.one_drive


@dataclass(frozen=True)
class SamplerSummary:
    """Convergence of everything sampled.

    Attributes
    ----------
    rhat_max
        Largest rank-normalised split R̂.
    ess_min
        Smallest bulk or tail effective sample size.
    bfmi_min
        Smallest energy Bayesian fraction of missing information of the chains.
    divergences
        Number of divergent transitions.
    sampler
        How the draws were made.
    """

    rhat_max: float
    ess_min: float
    bfmi_min: float
    divergences: int
    sampler: str = "NUTS"


def summarise_sampler(chains: Chains, weights: FloatArray) -> SamplerSummary:
    """Summarise convergence over the kernels' sds, φ, time constants and all weights.

    Parameters
    ----------
    chains
        The run.
    weights
        Exact draws of the weights, shape (chains, draws, P).
    """
    sampled = np.concatenate(
        [
            chains.draws["sd"],
            chains.draws["phi"][..., None],
            *(np.log(tau) for tau in chains.time_constants.values()),
            weights,
        ],
        axis=-1,
    )
    axes = {"chain_axis": 0, "draw_axis": 1}
    rhat = array_stats.rhat(sampled, **axes)
    bulk = array_stats.ess(sampled, **axes)
    tail = array_stats.ess(sampled, **axes, method="tail", prob=(0.05, 0.95))
    energy = np.diff(chains.energy, axis=1)
    bfmi = np.mean(energy**2, axis=1) / chains.energy.var(axis=1)
    return SamplerSummary(
        rhat_max=float(np.max(rhat)),
        ess_min=float(min(np.min(bulk), np.min(tail))),
        bfmi_min=float(np.min(bfmi)),
        divergences=int(chains.diverging.sum()),
        sampler=chains.sampler,
    )


def sampler_reasons(summary: SamplerSummary, commands: Commands) -> list[Reason]:
    """Rows on the sampler; divergences and energy are those of NUTS alone."""
    advice = "the chains have not settled; run them longer"
    # Asked so that NaN, as of a chain that never moved, is on the bad side of every limit.
    settled = [
        Reason(
            "rhat",
            f"{summary.rhat_max:.3f}",
            f"< {_RHAT_LIMIT}",
            _grade(summary.rhat_max < _RHAT_LIMIT, not summary.rhat_max < _RHAT_FAILED),
            *_when(not summary.rhat_max < _RHAT_LIMIT, advice, commands.more_draws),
        ),
        Reason(
            "effective_draws",
            f"{summary.ess_min:.0f}",
            f"> {_ESS_LIMIT:.0f}",
            _grade(summary.ess_min > _ESS_LIMIT, not summary.ess_min >= _ESS_FAILED),
            *_when(not summary.ess_min > _ESS_LIMIT, advice, commands.more_draws),
        ),
    ]
    if summary.sampler != "NUTS":
        return settled
    return [
        *settled,
        Reason(
            "divergences",
            str(summary.divergences),
            "0",
            "failed" if summary.divergences else "passed",
            *_when(
                summary.divergences > 0,
                "transitions diverged even at a higher target acceptance",
                commands.more_draws,
            ),
        ),
        Reason(
            "energy",
            f"{summary.bfmi_min:.2f}",
            f"> {_BFMI_LIMIT}",
            _grade(summary.bfmi_min > _BFMI_LIMIT),
            *_when(not summary.bfmi_min > _BFMI_LIMIT, advice, commands.more_draws),
        ),
    ]


def unit_reasons(
    units: UnitCount,
    freedom: float,
    leverage: FloatArray,
    labels: tuple[str, ...],
    commands: Commands,
) -> list[Reason]:
    """Rows on the independent units; `leverage` and `labels` are those of each unit."""
    few = units.clusters < UNITS_LIMIT
    heaviest = int(np.argmax(leverage))
    return [
        Reason(
            "units",
            _units_in_words(units, freedom, len(labels)),
            f"≥ {UNITS_LIMIT}",
            _grade(not few, units.clusters < _UNITS_FAILED),
            *_when(
                few,
                "the error bars rest on the spread between units; record more sweeps"
                + (" with other currents" if units.repeated else ""),
                commands.check,
            ),
        ),
        Reason(
            "one_unit_decides",
            f"{labels[heaviest]} carries {100 * min(leverage[heaviest], 1.0):.0f} % of a direction",
            f"≤ {100 * MAX_LEVERAGE:.0f} %",
            _grade(leverage[heaviest] <= MAX_LEVERAGE),
            *_when(
                leverage[heaviest] > MAX_LEVERAGE,
                "part of a kernel rests on one unit; record more like it",
                commands.check,
            ),
        ),
    ]


def _units_in_words(units: UnitCount, freedom: float, n_units: int) -> str:
    """Say on how many units the error bars rest, and how they were counted."""
    worth = f"worth {units.effective:.1f} equal ones"
    if units.repeated:
        said = (
            f"{n_units} units of {units.clusters} different currents, {worth}: repeats of a "
            "current count as one"
        )
    else:
        said = f"{units.clusters} independent units, {worth}"
    if units.neighbours:
        said += "; short blocks are joined to their neighbours"
    if units.floored:
        said += f"; {units.floored} negative variances are set to zero"
    return f"{said}; {freedom:.1f} degrees of freedom"


def ratio_reasons(ratio: dict[str, float], commands: Commands) -> list[Reason]:
    """Rows on the spread between units against the spread the residual's spectrum predicts."""
    return [
        Reason(
            f"calibration_ratio_{kernel}",
            f"{value:.2f}",
            f"≤ {_RATIO_LIMIT}",
            _grade(value <= _RATIO_LIMIT),
            *_when(
                value > _RATIO_LIMIT,
                f"units differ in the {KERNEL_SIGNS[kernel]} by more than correlated noise "
                "explains; the band is widened accordingly",
                commands.other_range(kernel),
            ),
        )
        for kernel, value in ratio.items()
    ]


def half_reasons(disagreements: dict[str, float], commands: Commands) -> list[Reason]:
    """Rows on odd against even units."""
    return [
        Reason(
            f"odd_even_{kernel}",
            f"{value:.1f} sd apart",
            f"≤ {_DISAGREEMENT_LIMIT:g}",
            _grade(value <= _DISAGREEMENT_LIMIT),
            *_when(
                value > _DISAGREEMENT_LIMIT,
                f"odd and even units disagree on the {KERNEL_SIGNS[kernel]}: the recording does "
                "not repeat itself; look for drift",
                commands.check,
            ),
        )
        for kernel, value in disagreements.items()
    ]


def drive_reason(kernel: str, disagreement: float, told: str, commands: Commands) -> Reason:
    """Row on the split by drive of one kernel.

    Parameters
    ----------
    kernel
        Name of the kernel.
    disagreement
        How far the ranges are apart at the worst lag, in sds.
    told
        What each range says, in words.
    commands
        Commands to copy.
    """
    apart = disagreement > _DISAGREEMENT_LIMIT
    return Reason(
        f"drive_split_{kernel}",
        f"{disagreement:.1f} sd apart: {told}",
        f"≤ {_DISAGREEMENT_LIMIT:g}",
        _grade(not apart),
        *_when(
            apart,
            f"the {KERNEL_SIGNS[kernel]} depends on the drive: it belongs to this protocol, and "
            "the protocol columns say how far",
            commands.other_range(kernel),
        ),
    )


def unsplit_reason(kernel: str, exciting: int, fewest: int, commands: Commands) -> Reason:
    """Row on a kernel that could not be split by drive: too few units, or all driven alike."""
    few = exciting < fewest
    return Reason(
        f"drive_split_{kernel}",
        f"{exciting} units excite it" if few else "not split: units do not differ in drive",
        f"≥ {fewest} units that excite it",
        _grade(not few),
        *_when(
            few,
            f"whether the {KERNEL_SIGNS[kernel]} depends on the drive cannot be told; record more "
            "sweeps",
            commands.check,
        ),
    )


def linearity_reason(share: float, commands: Commands) -> Reason:
    """Row on the residual's dependence on the prediction."""
    bent = share > _LINEARITY_LIMIT
    return Reason(
        "linearity",
        f"{100 * share:.0f} % of the residual's variance follows the predicted voltage",
        f"≤ {100 * _LINEARITY_LIMIT:.0f} %",
        _grade(not bent),
        *_when(
            bent,
            "the membrane is not linear over this range; fit a narrower one",
            commands.narrower,
        ),
    )


def shape_reason(kernel: str, misfit: float, command: str) -> Reason:
    """Row on a kernel of exponentials: whether the data have that shape.

    Parameters
    ----------
    kernel
        Name of the kernel.
    misfit
        Distance of least squares from it, in sds.
    command
        Fit with splines instead.
    """
    bad = misfit > _DISAGREEMENT_LIMIT
    return Reason(
        f"shape_{kernel}",
        f"least squares lies {misfit:.1f} sd from the exponentials",
        f"≤ {_DISAGREEMENT_LIMIT:g}",
        _grade(not bad),
        *_when(
            bad,
            f"the {KERNEL_SIGNS[kernel]} is no sum of so few exponentials, and its band does not "
            "know of that; add terms or fit splines",
            command,
        ),
    )


def prior_reasons(shares: dict[str, FloatArray], commands: Commands) -> list[Reason]:
    """Rows on how much of each kernel the data set."""
    reasons = []
    for kernel, by_lag in shares.items():
        # Where the prior pins a kernel to zero, as at its end, there is no share.
        share = by_lag[np.isfinite(by_lag)]
        set_by_prior = float(np.mean(share > PRIOR_SHARE_LIMIT)) if len(share) else 1.0
        severity: Severity = "passed"
        if set_by_prior > 0.5:
            severity = "failed" if set_by_prior == 1.0 else "caution"
        reasons.append(
            Reason(
                f"prior_share_{kernel}",
                f"{100 * set_by_prior:.0f} % of lags are set by the prior",
                "≤ 50 %",
                severity,
                *_when(
                    severity != "passed",
                    f"the recording says little of the {KERNEL_SIGNS[kernel]}",
                    commands.check,
                ),
            )
        )
    return reasons


def _grade(good: bool, bad: bool = False) -> Severity:
    if bad:
        return "failed"
    return "passed" if good else "caution"


def _when(raised: bool, advice: str, command: str) -> tuple[str, str]:
    return (advice, command) if raised else ("", "")

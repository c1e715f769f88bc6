"""Figures of the page, with what each shows in words for those who cannot see it."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np

from bayesglm.checks.residuals import EVENT_SDS, residual_moments
from bayesglm.inference.diagnose import PRIOR_SHARE_LIMIT
from bayesglm.inference.results import Band, CellFit
from bayesglm.report.influence_figures import most_influential
from bayesglm.report.kernel_figures import drawn_kernels
from bayesglm.report.predicted import centred_residuals, predict_sweeps
from bayesglm.report.residual_figures import moments_in_words
from bayesglm.report.trace_figures import representative_sweeps
from bayesglm.report.wording import count, decimals, percent, with_unit


@dataclass(frozen=True)
class PageFigure:
    """A figure: its heading, its address, what it shows in words, and its caption.

    Figures that check a fit stand apart from those that show its result.
    """

    title: str
    address: str
    alt: str
    caption: str
    is_check: bool = False


def page_figures(fit: CellFit, images: Mapping[str, str]) -> tuple[PageFigure, ...]:
    """Put a cell's figures in order, the kernels first; those without an image are left out.

    Parameters
    ----------
    fit
        The fit.
    images
        Addresses of the figures by name.
    """
    told = _results(fit) | _checks(fit)
    return tuple(
        replace(figure, address=images[name]) for name, figure in told.items() if name in images
    )


def _results(fit: CellFit) -> dict[str, PageFigure]:
    """What the kernels are, and what they explain."""
    level = percent(fit.settings.sampling.level)
    before, after = fit.design.spike_window_ms
    window = f"−{abs(before):g} to {after:g} ms around a spike"
    return {
        "kernels": PageFigure(
            "Kernels",
            "",
            " ".join(_curve_in_words(fit.kernels[name]) for name in drawn_kernels(fit)),
            f"Thick line and filled band: posterior mean and {level} band, which covers the truth "
            f"on average over lags. Thin lines: the band that holds the whole curve, "
            f"{_simultaneous_ranges(fit)}. Dotted: the "
            "band if noise were white, which is several times too narrow on real cells. Broken "
            "lines: what each range of drive says alone; where they leave the band, the kernel "
            "belongs to the protocol as much as to the cell.",
        ),
        "prediction": PageFigure(
            "Voltage and prediction",
            "",
            "Recorded voltage in mV against time in ms with the posterior mean of the prediction, "
            "and the residual below, for sweeps from the weakest to the strongest drive.",
            f"Recorded voltage in rows of {fit.design.row_ms:g} ms and the posterior mean of its "
            "prediction from current and spikes, with the sweep’s own offset, and its drift where "
            f"sweeps drift; the residual is their difference. Rows from {window} are left out.",
        ),
        "traces": PageFigure(
            "Recording",
            "",
            "Voltage in mV above and injected current in pA below against time in ms, with "
            f"{count(sum(r.n_spikes for r in fit.recordings), 'spike')} in all sweeps marked.",
            "Sweeps as recorded, chosen evenly from the lowest to the highest mean current; a tick "
            "above each spike that was detected.",
        ),
        "residuals": PageFigure(
            "Residual",
            "",
            "Autocorrelation of the residual against lags to 500 ms, and its power density in "
            "mV²/Hz against frequency in Hz, each beside the level of white noise.",
            "What current and spikes do not explain. It is correlated in every cell, which is why "
            "error bars come from the spread between independent units and not from the number "
            "of samples.",
        ),
        "voltage_current": PageFigure(
            "Voltage against current",
            "",
            "Change of the voltage in mV against the current step in pA, steady and peak, a point "
            "each step, with the lines that the kernels predict and the linear range marked.",
            "Circles and triangles: mean of the last fifth of the step (at most 100 ms) and "
            "largest change, of steps from the holding current without spikes. Lines: what the "
            f"kernels predict of the same, with the {level} band of the steady one. Grey, where "
            "there is one: the range in which the steady points lie on one line. Points that leave "
            "the lines on one side show a membrane that is not linear there; a peak beyond the "
            "steady points is sag, which a line can hold only if it is proportional to the step.",
        ),
    }


def _checks(fit: CellFit) -> dict[str, PageFigure]:
    """Whether to believe the fit."""
    level = percent(fit.settings.sampling.level)
    rows = list(predict_sweeps(fit, also=list(representative_sweeps(fit))).values())
    moments = residual_moments(centred_residuals(rows, fit), fit.design.row_ms)
    named = ", ".join(fit.digest.labels[unit] for unit in most_influential(fit)[:3])
    return {
        "by_sweep": PageFigure(
            "Drift over the recording",
            "",
            "Baseline in mV, input resistance in MΩ and series jump in MΩ by sweep, where they "
            "can be measured, each with a straight line.",
            "Baseline before the first change of the current, resistance in the step that recurs "
            "in most sweeps, and the jump of the voltage at the onset of steps. Line: least "
            "squares; its change from the first sweep to the last, with its "
            f"{level} interval, stands above. A fit takes the cell for the same throughout: a "
            "line that climbs through the height of the panel, or a jump, says that it is not.",
            is_check=True,
        ),
        "leave_one_out": PageFigure(
            "Kernels without each unit",
            "",
            f"Kernels without each of {fit.digest.n_units} independent units against the lag in "
            f"ms, over the band; the change in posterior sds below. Most counts {named}.",
            "Kernels as they would be without one unit (to first order, sds of the kernels held), "
            "and below the change in sds of the posterior. The three units that change a kernel "
            "most, root mean square over lags, are named. The error bars are made of such changes, "
            "so that lines fill part of the band. One line far from all the others, or near one sd "
            "over many lags: look at that unit, and fit without it.",
            is_check=True,
        ),
        "residual_distribution": PageFigure(
            "Distribution of the residual",
            "",
            "Histogram of the residual in mV on a logarithmic axis of density, beside a normal of "
            "the same sd, with its moments and the number of its large excursions.",
            f"{'; '.join(moments_in_words(moments))}. Fitted rows of {count(len(rows), 'sweep')}, "
            "less what each sweep has as its own. An event is a stretch on one side of "
            f"the median that goes beyond {EVENT_SDS:g} robust sd (1.4826 times the median "
            "absolute deviation), counted once; a normal residual is there in one of 16 000 "
            "independent rows. Many events on one side are what synaptic potentials, spikes that "
            "were missed, or a current that opens at some voltages leave. No error bar rests on a "
            "normal residual; rows are correlated, so that these numbers scatter widely.",
            is_check=True,
        ),
        "prior_posterior": PageFigure(
            "Prior and posterior",
            "",
            f"Prior and posterior {level} bands of each kernel against the lag in ms, the share of "
            "the prior’s sd that is left below, and prior and posterior of the hyperparameters.",
            f"Grey: {level} band of the prior around its mean of zero, linear around zero and "
            "logarithmic beyond. Prior share: posterior sd over prior sd. Where it is above "
            f"{PRIOR_SHARE_LIMIT:g} the data say next to nothing, and the kernel is set by the "
            "prior; far below, another prior would give nearly the same kernel. φ near its prior "
            "and sds away from theirs are as they should be; an sd in the tail of its prior asks "
            "for a wider one.",
            is_check=True,
        ),
        "trace_rank": PageFigure(
            "Chains of the sampler",
            "",
            "Draws of each hyperparameter and of the input resistance, one chain after the other, "
            "and the ranks of each chain’s draws among those of all chains.",
            "Left: the chains side by side; all should scatter alike, without steps or slow "
            "waves. Right: how much more or less often than expected a chain holds draws of a "
            "rank; bars scatter about each chain’s line. A slope means a chain that lies higher or "
            "lower than the others, a hump or a trough one that is too narrow or too wide.",
            is_check=True,
        ),
    }


def _simultaneous_ranges(fit: CellFit) -> str:
    """Between which lags the whole curve is held, such as ``κ from 0.5 to 150 ms``."""
    ranges = [
        (sign, *fit.kernels[name].simultaneous_range_ms)
        for name, sign in (("input", "κ"), ("after_spike", "η"))
        if name in fit.kernels
    ]
    told = [f"{sign} from {a:g} to {b:g} ms" for sign, a, b in ranges if np.isfinite(a)]
    return " and ".join(told) or "known at no lag"


def _curve_in_words(band: Band) -> str:
    """Tell where a kernel starts and where it is farthest from zero."""
    title = {"input": "Input kernel κ", "after_spike": "After-spike kernel η"}[band.kernel]
    known = np.flatnonzero(np.isfinite(band.mean))
    if len(known) == 0:
        return f"{title}: not identified at any lag."
    first = int(known[0])
    far = int(known[np.argmax(np.abs(band.mean[known]))])
    start, most = (
        f"{with_unit(band.mean[at], decimals(band.sd[at], band.mean[at]), band.unit)} at "
        f"{band.lags_ms[at]:g} ms"
        for at in (first, far)
    )
    farthest = "" if far == first else f", farthest from zero with {most}"
    return f"{title} with its bands: {start}{farthest}, zero from {band.lags_ms[-1]:.0f} ms on."

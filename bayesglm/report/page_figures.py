"""Figures of the page, with what each shows in words for those who cannot see it."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from bayesglm.inference.results import Band, CellFit
from bayesglm.report.wording import count, decimals, percent, with_unit


@dataclass(frozen=True)
class PageFigure:
    """A figure: its heading, its address, what it shows in words, and its caption."""

    title: str
    address: str
    alt: str
    caption: str


def page_figures(fit: CellFit, images: Mapping[str, str]) -> tuple[PageFigure, ...]:
    """Put a cell's figures in order, the kernels first.

    Parameters
    ----------
    fit
        The fit.
    images
        Addresses of the figures by name.
    """
    level = percent(fit.settings.sampling.level)
    before, after = fit.design.spike_window_ms
    window = f"−{abs(before):g} to {after:g} ms around a spike"
    told = {
        "kernels": PageFigure(
            "Kernels",
            "",
            " ".join(_curve_in_words(band) for band in fit.kernels.values() if len(band.mean) > 1),
            f"Thick line and filled band: posterior mean and {level} band, which covers the truth "
            "on average over lags. Thin lines: the band that holds the whole curve. Dotted: the "
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
            "prediction from current and spikes; the residual is their difference. A sweep’s own "
            f"offset is not part of the prediction. Rows from {window} are left out.",
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
    }
    return tuple(
        PageFigure(figure.title, images[name], figure.alt, figure.caption)
        for name, figure in told.items()
    )


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

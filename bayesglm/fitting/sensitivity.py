"""The same cell under other choices, and what that says of the fit: durations, spike window."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from bayesglm.checks.durations import duration_grid, longest_design
from bayesglm.checks.spike_window import spike_windows
from bayesglm.features import linear_features
from bayesglm.fitting.posterior import Posterior
from bayesglm.inference.sensitivity import DurationGrid, Sensitivity, SpikeWindows
from bayesglm.inference.setup import make_digest, room_ms, settle
from bayesglm.likelihood.calibration import Calibration, calibrate
from bayesglm.models.priors import weight_prior
from bayesglm.recording.recording import Recording
from bayesglm.recording.settings import Settings
from bayesglm.recording.wording import fit_command, fixed
from bayesglm.verdict import Reason

#: In 80 simulated linear cells durations that predict as well moved a feature by more than 2.5 sds
#: in two, by more than 3 in one; by more than 1 in two of five.
_MOVED_LIMIT = 3.0
#: Of the best of up to 36 pairs of durations chance makes 2 se in one cell of ten. Beyond 3 se
#: were those few whose κ, cut after five time constants, missed a percent of its area …
_WORSE_SE_LIMIT = 3.0
#: … which is nothing to a reader: the error must also be larger by this share.
_WORSE_SHARE_LIMIT = 0.02
#: In 60 such cells other ends of the window moved η by no more than this.
_WINDOW_LIMIT = 1.5


def find_sensitivity(
    recordings: Sequence[Recording],
    posterior: Posterior,
    calibration: Calibration,
    settings: Settings,
) -> Sensitivity:
    """Vary the durations and the end of the spike window, where the settings want it.

    Parameters
    ----------
    recordings
        What was fitted.
    posterior, calibration
        Of the fit.
    settings
        ``model.duration_grid`` and ``model.window_sensitivity``.
    """
    durations, windows = None, None
    if settings.model.duration_grid:
        durations = _durations(recordings, posterior, settings)
    if settings.model.window_sensitivity and posterior.design.after_spike is not None:
        windows = spike_windows(
            recordings,
            calibration,
            posterior.design,
            posterior.prior,
            posterior.kernel_sd,
            settings,
        )
    return Sensitivity(durations, windows)


def _durations(
    recordings: Sequence[Recording], posterior: Posterior, settings: Settings
) -> DurationGrid | None:
    longest = longest_design(posterior.design, room_ms(recordings))
    # Longer kernels remember more of what came before a sweep.
    settled = settle(recordings, longest.input.duration_ms, settings)
    prior = weight_prior(longest, settings.priors)
    digest, least = make_digest(settled, longest, prior, settings)
    report_at_ms = settings.kernels.after_spike.report_at_ms
    rows = linear_features(longest, posterior.step_ms, report_at_ms)
    calibration = calibrate(digest, least, np.array([*rows.values()]))
    return duration_grid(digest, calibration, prior, posterior.design, rows)


def sensitivity_reasons(
    found: Sensitivity, recordings: Sequence[Recording], settings: Settings
) -> list[Reason]:
    """Rows of the verdict on durations and spike window."""
    reasons = []
    if found.durations is not None:
        grid = found.durations
        reasons.append(_held_out_reason(grid, recordings, settings))
        for kernel, prefix in (("input", "input_"), ("after_spike", "after_spike_")):
            names = [name for name in grid.features if name.startswith(prefix)]
            if names:
                worst = max(names, key=grid.moved)
                reasons.append(_moved_reason(grid, kernel, worst, recordings, settings))
    if found.windows is not None:
        reason = _window_reason(found.windows, recordings, settings)
        reasons += [reason] if reason else []
    return reasons


def _held_out_reason(
    grid: DurationGrid, recordings: Sequence[Recording], settings: Settings
) -> Reason:
    own, best = grid.chosen, grid.best
    excess, se = float(grid.excess_mV2[own]), float(grid.held_out_se_mV2[own])
    worse = excess > _WORSE_SE_LIMIT * se and excess > _WORSE_SHARE_LIMIT * grid.held_out_mV2[best]
    error = fixed(float(grid.held_out_mV2[own]), 2)
    told = f"held-out error {error} mV² at {grid.named(own)}, the best"
    if own != best:
        told = (
            f"held-out error {error} mV² at {grid.named(own)}, "
            f"{fixed(float(grid.held_out_mV2[best]), 2)} at {grid.named(best)}: "
            f"{fixed(excess, 2)} ± {fixed(se, 2)} worse"
        )
        told += "".join(
            f"; {_words(name)} {_value(grid, name, own)} against {_value(grid, name, best)}"
            for name in grid.features
            if worse
        )
    return Reason(
        "durations",
        told,
        f"≤ {_WORSE_SE_LIMIT:g} se or {100 * _WORSE_SHARE_LIMIT:g} % worse",
        "caution" if worse else "passed",
        "other durations of the kernels predict better what was left out; fit with them"
        if worse
        else "",
        _command(grid, best, recordings, settings) if worse else "",
    )


def _moved_reason(
    grid: DurationGrid,
    kernel: str,
    feature: str,
    recordings: Sequence[Recording],
    settings: Settings,
) -> Reason:
    own, far = grid.chosen, grid.farthest(feature)
    moved = grid.moved(feature)
    raised = moved > _MOVED_LIMIT
    there = f" to {_value(grid, feature, far)} at {grid.named(far)}" if far != own else ""
    return Reason(
        f"durations_{kernel}",
        f"{moved:.1f} sd: {_words(feature)} {_value(grid, feature, own)} at {grid.named(own)}"
        + there,
        f"≤ {_MOVED_LIMIT:g} sd where held-out errors are as good",
        "caution" if raised else "passed",
        f"the {_words(feature)} rests on the durations of the kernels, and the recording cannot "
        "tell which are right; report it with its durations, and fit others"
        if raised
        else "",
        _command(grid, far, recordings, settings) if raised else "",
    )


def _window_reason(
    windows: SpikeWindows, recordings: Sequence[Recording], settings: Settings
) -> Reason | None:
    """Row on the end of the spike window; None where the chosen one hides all that is compared."""
    moved = {
        name: distance
        for name in windows.features
        if np.isfinite(distance := windows.moved(name)).sum() > 1
    }
    if not moved:
        return None
    feature = max(moved, key=lambda name: float(np.nanmax(moved[name])))
    far = int(np.nanargmax(moved[feature]))
    raised = bool(moved[feature][far] > _WINDOW_LIMIT)
    means = windows.features[feature][0]
    end, other = windows.ends_ms[windows.chosen], windows.ends_ms[far]
    before = settings.model.spike_window_ms[0]
    changed = settings.model.model_copy(update={"spike_window_ms": (before, float(other))})
    return Reason(
        "spike_window",
        f"{moved[feature][far]:.1f} sd: {_words(feature)} {fixed(means[windows.chosen], 1)} mV "
        f"with the window to {end:g} ms, {fixed(means[far], 1)} mV to {other:g} ms",
        f"≤ {_WINDOW_LIMIT:g} sd of the value",
        "caution" if raised else "passed",
        "the first milliseconds of η rest on where the spike window ends; look whether the spike "
        "is over there, and report the window with them"
        if raised
        else "",
        fit_command(recordings, "", settings.model_copy(update={"model": changed}), "window")
        if raised
        else "",
    )


def _command(
    grid: DurationGrid,
    place: tuple[int, int],
    recordings: Sequence[Recording],
    settings: Settings,
) -> str:
    """The fit with the durations of a place in the grid."""
    kernels = settings.kernels
    input_ms = float(np.round(grid.input_ms[place[0]]))
    update = {"input": kernels.input.model_copy(update={"duration_ms": input_ms})}
    if len(grid.after_spike_ms):
        after_ms = float(np.round(grid.after_spike_ms[place[1]]))
        after_spike = kernels.after_spike.model_copy(update={"duration_ms": after_ms})
        update["after_spike"] = after_spike
    changed = settings.model_copy(update={"kernels": kernels.model_copy(update=update)})
    return fit_command(recordings, "", changed, "durations")


def _value(grid: DurationGrid, feature: str, place: tuple[int, int]) -> str:
    value = float(grid.features[feature][0][place])
    return f"{fixed(value, 0)} MΩ" if feature == "input_resistance" else f"{fixed(value, 1)} mV"


def _words(feature: str) -> str:
    if feature == "input_resistance":
        return "input resistance"
    if feature == "after_spike_minimum":
        return "minimum of η"
    return f"η({feature.removeprefix('after_spike_at_').removesuffix('ms')} ms)"

"""Numbers and sentences of the report: each number to the digits its error allows.

Sentences say what is believed and how firmly; none calls a result significant, and none leaves
out that a kernel belongs to the protocol it was measured with.
"""

from __future__ import annotations

import math
import re
from collections.abc import Sequence
from typing import Final

from bayesglm.features import BUMP_MS, BUMP_MV
from bayesglm.inference.results import CellFit, Feature, Split
from bayesglm.recording.wording import fixed, minus
from bayesglm.verdict import Severity

#: Symbol and word of each verdict: severity never rests on colour alone.
VERDICTS: Final[dict[Severity, tuple[str, str]]] = {
    "passed": ("✓", "Passed"),
    "caution": ("▲", "Caution"),
    "failed": ("✕", "Failed"),
}

CAUTION: Final = (
    "For research only: these results are no basis for clinical decisions. Work with animals and "
    "tissue follows local rules and licensed practice."
)

_FEATURES: Final = {
    "input_resistance": "Input resistance",
    "membrane_time_constant": "Membrane time constant",
    "input_half_width": "Lag by which κ has reached half of the input resistance",
    "offset": "Offset E: voltage at zero recorded current",
    "electrode_resistance": "Electrode term: response in the same sample",
    "noise_sd": "Sd of the residual",
    "after_spike_minimum": "Minimum of η",
    "after_spike_minimum_time": "Time of the minimum of η",
    "after_spike_half_width": "Width of η below half of its minimum",
    "after_spike_peak": "Highest η after its minimum",
    "after_spike_peak_time": "Time of the highest η after its minimum",
    "after_spike_peak_probability": (
        f"Probability that η rises above {BUMP_MV:g} mV for {BUMP_MS:g} ms after its minimum"
    ),
}
_CHECKS: Final = {
    "rhat": "R̂",
    "energy": "Energy of the sampler",
    "odd_even": "Odd against even units",
    "drive_split": "Ranges of drive",
    "prior_share": "Share of the prior",
    "shape": "Shape of exponentials",
    "one_unit_decides": "Weight of one unit",
    "durations": "Durations of the kernels",
    "spike_window": "End of the spike window",
}
_NEGATIVE: Final = re.compile(r"(?<![\w-])-(?=\d)")
_AT: Final = "after_spike_at_"
_TAU: Final = re.compile(r"(input|after_spike)_time_constant_(\d+)")
_SIGNS: Final = {"input": "κ", "after_spike": "η"}
_BUMP: Final = "after_spike_peak_probability"
_MOST_DECIMALS: Final = 3


def decimals(sd: float, value: float) -> int:
    """Decimals to which a number is shown; negative where tens or hundreds are rounded.

    Two digits of the sd where it begins with 1 or 2, one digit otherwise: the last digit shown
    is then never worth less than a tenth of the sd, nor more than a half of it. Without an sd
    the value is shown to three digits.
    """
    if not math.isfinite(sd) or sd <= 0:
        _, _, behind = f"{value:.3g}".partition(".")
        return 0 if "e" in behind else min(len(behind), _MOST_DECIMALS)
    leading, _, exponent = f"{sd:.2e}".partition("e")
    return min(-int(exponent) + (1 if float(leading) < 3 else 0), _MOST_DECIMALS)


def rounded(value: float, places: int) -> str:
    """Write a number with `places` decimals, with a true minus sign; "–" where there is none."""
    if not math.isfinite(value):
        return "–"
    if places >= 0:
        return fixed(value, places)
    return fixed(round(value, places), 0)


def interval(lower: float, upper: float, places: int) -> str:
    """Write an interval such as ``3.3 to 5.3``; "–" where there is none."""
    if not (math.isfinite(lower) and math.isfinite(upper)):
        return "–"
    return f"{rounded(lower, places)} to {rounded(upper, places)}"


def percent(level: float) -> str:
    """Write a level such as ``90 %``."""
    return f"{100 * level:g} %"


def probability(value: float) -> str:
    """Write a probability with two decimals, never as 0 or 1: draws cannot tell these.

    "–" where there is none.
    """
    if not math.isfinite(value):
        return "–"
    if value < 0.01:
        return "below 0.01"
    return "above 0.99" if value > 0.99 else f"{value:.2f}"


def with_unit(value: float, places: int, unit: str) -> str:
    """Write a number with its unit; a pure number has none."""
    return rounded(value, places) + ("" if unit == "1" else f" {unit}")


def count(n: int, what: str) -> str:
    """Write a count such as ``1 spike`` or ``3 spikes``."""
    return f"{n} {what}" if n == 1 else f"{n} {what}s"


def feature_label(name: str) -> str:
    """Name a feature in words."""
    if name.startswith(_AT):
        return f"η at {_lag_ms(name):g} ms after a spike"
    if found := _TAU.fullmatch(name):
        return f"Time constant {found[2]} of {_SIGNS[found[1]]}"
    return _FEATURES.get(name, name.replace("_", " ").capitalize())


def check_label(check: str) -> str:
    """Name a check in words, with the kernel it is of."""
    for kernel, sign in (("_after_spike", ", η"), ("_input", ", κ")):
        if check.endswith(kernel):
            return check_label(check.removesuffix(kernel)) + sign
    return _CHECKS.get(check, check.replace("_", " ").capitalize())


def true_minus(text: str) -> str:
    """Write the hyphen before a number as a minus sign, and leave those within words."""
    return _NEGATIVE.sub("−", text)


def with_interval(feature: Feature) -> str:
    """Write a feature with its interval, such as ``98 MΩ (90 % interval 93 to 103)``."""
    places = decimals(feature.sd, feature.mean)
    ends = interval(feature.lower, feature.upper, places)
    shown = with_unit(feature.mean, places, feature.unit)
    return f"{shown} ({percent(feature.level)} interval {ends})"


def verdict_sentence(fit: CellFit) -> str:
    """Say in words whether to believe a fit."""
    reservations = len(fit.verdict.open_reasons)
    if fit.verdict.verdict == "passed":
        return "Every check is within its limit."
    if fit.verdict.verdict == "caution":
        return f"Usable with {count(reservations, 'reservation')}, each with what to do about it."
    return "Do not use these numbers before the failed checks are solved."


def study_sentence(fits: Sequence[CellFit]) -> str:
    """Say in words how many cells of a study may be believed."""
    verdicts = [fit.verdict.verdict for fit in fits]
    if len(set(verdicts)) == 1:
        same = {"passed": "passed", "caution": "need caution", "failed": "failed"}[verdicts[0]]
        return f"All {len(fits)} cells {same}."
    parts = [
        f"{n} {verb}"
        for severity, verb in (
            ("passed", "passed"),
            ("caution", "with caution"),
            ("failed", "failed"),
        )
        if (n := sum(one == severity for one in verdicts))
    ]
    return f"Of {len(fits)} cells {', '.join(parts[:-1])} and {parts[-1]}."


def result_sentences(fit: CellFit) -> list[str]:
    """Say what was found in a cell, one sentence a result.

    Returns
    -------
    list of str
        Sentences on the input kernel, then on the after-spike kernel where there is one.
    """
    sentences = [_sentence(feature, fit) for feature in fit.features]
    # What happens at a lag is told before what happens after it.
    last = [s for s, f in zip(sentences, fit.features, strict=True) if f.name == _BUMP]
    return [sentence for sentence in sentences if sentence and sentence not in last] + last


def _sentence(feature: Feature, fit: CellFit) -> str:
    """Say what one feature says; empty for those that only the table shows."""
    shown = with_unit(feature.mean, decimals(feature.sd, feature.mean), feature.unit)
    if feature.name == "input_resistance":
        over = f"{fit.design.input.duration_ms:.0f} ms"
        return f"The input resistance over {over} is {shown} ({_details(feature, fit.splits)})."
    if feature.name == "membrane_time_constant":
        return f"The membrane time constant is {shown} ({_details(feature, fit.splits)})."
    if feature.name.startswith(_AT):
        return _pulled(feature, fit.splits)
    if feature.name == _BUMP:
        return (
            f"The probability that η rises above {BUMP_MV:g} mV for at least {BUMP_MS:g} ms after "
            f"its minimum is {probability(feature.mean)}."
        )
    return ""


def _pulled(feature: Feature, splits: dict[str, Split]) -> str:
    """Say where the membrane is some time after a spike: pulled down, lifted, or unknown."""
    when = f"{_lag_ms(feature.name):g} ms after a spike"
    if feature.lower <= 0 <= feature.upper:
        places = decimals(feature.sd, feature.mean)
        shown = with_unit(feature.mean, places, feature.unit)
        return (
            f"{when} it is open whether the membrane is pulled down or lifted: {shown} "
            f"({_details(feature, splits)})."
        )
    sign, verb = (1.0, "lifted") if feature.mean > 0 else (-1.0, "pulled down")
    size = with_unit(sign * feature.mean, decimals(feature.sd, feature.mean), feature.unit)
    return f"{when} the membrane is {verb} by {size} ({_details(feature, splits, sign)})."


def _details(feature: Feature, splits: dict[str, Split], sign: float = 1.0) -> str:
    """Interval, what it is conditional on, and what ranges of drive say alone."""
    places = decimals(feature.sd, feature.mean)
    ends = sorted((sign * feature.lower, sign * feature.upper))
    parts = [f"{percent(feature.level)} interval {interval(ends[0], ends[1], places)}"]
    parts.append("under this protocol")
    ranges = _by_range(feature, splits, places)
    return "; ".join([*parts, ranges] if ranges else parts)


def _by_range(feature: Feature, splits: dict[str, Split], places: int) -> str:
    kernel = "after_spike" if feature.name.startswith("after_spike") else "input"
    split = splits.get(kernel)
    ranges = [one for one in split.ranges if feature.name in one.features] if split else []
    if not ranges:
        return ""
    means = [one.features[feature.name][0] for one in ranges]
    # Those in between are told only where they are not in between.
    if all(min(means[0], means[-1]) <= mean <= max(means[0], means[-1]) for mean in means):
        ranges = [ranges[0], ranges[-1]]
    # The sentence may speak of a size ("pulled down by"); a range's value has its sign.
    what = "η " if kernel == "after_spike" else ""
    return what + ", ".join(
        f"{with_unit(one.features[feature.name][0], places, feature.unit)} at {minus(one.label)}"
        for one in ranges
    )


def _lag_ms(name: str) -> float:
    return float(name.removeprefix(_AT).removesuffix("ms"))

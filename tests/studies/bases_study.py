"""One cell, four bases: do the kernels agree within their bands?

    python tests/studies/bases_study.py --workers 2

The six invented cells of the demo and the real cell under steps, each fitted with splines,
cosines, one coefficient a lag, and sums of exponentials. All fits see the same data, so that
their errors are alike and differences should be well inside the bands. Splines and cosines have as
many weights as the demo states, since fewer blur a steep η. Where a basis cannot make a kernel the
verdict must say so: a sum of few exponentials has no bumps.
"""

from __future__ import annotations

from functools import partial
from pathlib import Path
from typing import Final

import numpy as np
from study_runs import Found, Plan, plan_from_command_line, provenance, run_all, stream, table

from bayesglm.checks.scenario import demo_cells, record
from bayesglm.fitting.run import fit
from bayesglm.inference.results import CellFit
from bayesglm.recording.reading import read_recording
from bayesglm.recording.recording import Recording
from bayesglm.recording.settings import Settings
from bayesglm.recording.settings_input import override
from bayesglm.recording.spikes import detect_spikes

BASES: Final = ("splines", "cosines", "lags", "exponentials")
REAL_CELL: Final = Path(__file__).resolve().parents[1] / "data" / "cell_a_steps.csv.gz"
KERNELS: Final = {"input": "κ", "after_spike": "η"}
FEATURES: Final = {
    "input_resistance": "R_in, MΩ",
    "membrane_time_constant": "τ_m, ms",
    "after_spike_at_30ms": "η(30 ms), mV",
}
DEMO: Final = ("input.duration_ms=150",)
#: Lags where the sd of the reference is below this share of the largest are pinned.
PINNED: Final = 0.02


def cell(number: int, seed: int) -> tuple[str, Recording, tuple[str, ...]]:
    """Name, recording and settings of a cell; the last is the real one."""
    invented = demo_cells()
    if number < len(invented):
        one = invented[number]
        return one.name, record(one, stream(seed, "bases", number)), DEMO
    real = detect_spikes(read_recording(REAL_CELL), Settings().recording)
    return "real", real, ("input.duration_ms=400",)


def settings_of(basis: str, extra: tuple[str, ...]) -> Settings:
    """Both kernels in one basis, and durations given, so that all fits have the same."""
    stated = [*extra, "after_spike.duration_ms=300"]
    stated += [f"{kernel}.basis={basis}" for kernel in KERNELS]
    if extra == DEMO and basis != "lags":
        stated.append("after_spike.weights=20")
    plain = ["model.duration_grid=false", "model.window_sensitivity=false"]
    return override(Settings(), [f"kernels.{one}" for one in stated] + plain)


def compare(one: CellFit, reference: CellFit) -> Found:
    """How far two fits of one cell are apart.

    Returns
    -------
    dict
        By kernel the largest difference in sds of the wider of the two, and the share of lags
        where each mean lies in the other's pointwise band; features; verdict.
    """
    found: Found = {"verdict": one.verdict.verdict, "rhat": one.verdict.rhat_max}
    for kernel in KERNELS:
        a, b = one.kernel(kernel), reference.kernel(kernel)
        duration = reference.design.kernels[kernel].duration_ms
        known = np.isfinite(a.mean) & np.isfinite(b.mean) & (b.lags_ms < duration)
        known &= b.sd > PINNED * np.nanmax(b.sd)
        apart = np.abs(a.mean - b.mean)[known] / np.maximum(a.sd, b.sd)[known]
        inside = (a.lower <= b.mean) & (b.mean <= a.upper)
        inside &= (b.lower <= a.mean) & (a.mean <= b.upper)
        found[f"{kernel} apart"] = float(apart.max())
        found[f"{kernel} at"] = float(b.lags_ms[known][np.argmax(apart)])
        found[f"{kernel} inside"] = float(inside[known].mean())
    for name in FEATURES:
        feature = one.feature(name)
        found[name] = [feature.mean, feature.sd]
    return found


def fit_one(seed: int, number: int) -> Found:
    """Fit one cell in every basis and hold each to the splines."""
    name, recording, extra = cell(number, seed)
    fits = {basis: fit(recording, settings_of(basis, extra)) for basis in BASES}
    return {"cell": name} | {b: compare(one, fits[BASES[0]]) for b, one in fits.items()}


def run(plan: Plan) -> list[Found]:
    """All cells."""
    return run_all("bases", partial(fit_one, plan.seed), plan)


def main() -> None:
    """Run the study and print its table."""
    cells = len(demo_cells()) + 1
    plan = plan_from_command_line(__doc__, recordings=cells)
    found = run(plan)
    print("\n# Four bases on the same cells\n")
    words = f"{len(found)} cells: the demo's six and the real one under steps"
    print(provenance(__file__, plan, words) + "\n")
    print(
        "Each basis against splines: the largest difference of the means in sds of the wider "
        "band (its lag), and the share of lags where each mean lies in the other's 90 % band.\n"
    )
    rows = []
    for one in found:
        for basis in BASES:
            entry = one[basis]
            row = [one["cell"], basis]
            for kernel in KERNELS:
                if basis == BASES[0]:
                    row.append("–")
                    continue
                row.append(
                    f"{entry[f'{kernel} apart']:.1f} ({entry[f'{kernel} at']:g} ms), "
                    f"{100 * entry[f'{kernel} inside']:.0f} %"
                )
            row += ["{:.1f} ± {:.1f}".format(*entry[name]) for name in FEATURES]
            rows.append([*row, f"{entry['rhat']:.3f}", entry["verdict"]])
    head = ["cell", "basis", *(f"{sign} against splines" for sign in KERNELS.values())]
    print(table([*head, *FEATURES.values(), "R̂", "verdict"], rows))


if __name__ == "__main__":
    main()

"""Fit a real recording: steps of current from −100 to 300 pA into one cell.

The recording is `tests/data/cell_a_steps.csv.gz`, converted from the file `171116sh_0018.abf` in
the data folder of the pyABF repository, copyright (c) 2018 Scott W Harden, MIT licence (its text
is in `tests/data/LICENSE-MIT.txt`, and what is known of the cell in `tests/data/README.md`).
Holding current, bridge balance, temperature and species are not known.

    python examples/real_cell.py
"""

from __future__ import annotations

from pathlib import Path

from bayesglm import CellFit, Settings, detect_spikes, fit, read_recording

RECORDING = Path(__file__).resolve().parent.parent / "tests" / "data" / "cell_a_steps.csv.gz"


def fit_real_cell() -> CellFit:
    """Read the recording, find its spikes and fit the cell."""
    settings = Settings()
    recording = detect_spikes(read_recording(RECORDING), settings.recording)
    return fit(recording, settings)


def print_cell(cell: CellFit) -> None:
    """Print every feature with its interval, then the verdict and what to do about it."""
    print(f"{cell.name}: {cell.verdict.verdict}")
    for feature in cell.features:
        interval = (
            f"{100 * feature.level:.0f} % interval {feature.lower:.1f} to {feature.upper:.1f}"
        )
        print(f"  {feature.name}: {feature.mean:.2f} {feature.unit}, {interval}")
    for reason in cell.verdict.open_reasons:
        print(f"  {reason.verdict}: {reason.check}: {reason.value} (limit {reason.limit})")
        print(f"    {reason.advice}")
        print(f"    {reason.command}")


if __name__ == "__main__":
    print_cell(fit_real_cell())

from __future__ import annotations

import xml.etree.ElementTree as ET
from pathlib import Path

import matplotlib
import pytest
from made_fit import made_neuron, made_truth, renamed

from bayesglm.inference.results import CellFit
from bayesglm.report import figures
from bayesglm.report.style import as_svg

LABELS = {
    "kernels": ("κ (MΩ/ms)", "η (mV)", "Lag (ms, compressed scale)", "Time after the spike (ms)"),
    "prediction": ("Voltage (mV)", "Residual (mV)", "Time (ms)"),
    "traces": ("Voltage (mV)", "Current (pA)", "Time (ms)"),
    "residuals": ("Lag (ms)", "Frequency (Hz)", "Power density (mV²/Hz)"),
    "voltage_current": ("Current step (pA)", "Voltage change (mV)"),
    "by_sweep": ("Voltage (mV)", "Sweep"),
    "leave_one_out": ("κ (MΩ/ms)", "η (mV)", "Change (sd)", "Time after the spike (ms)"),
    "residual_distribution": ("Residual (mV)", "Density (1/mV)", "normal of the same sd"),
    "prior_posterior": ("Prior share", "above: set by the prior", "Sd of κ (MΩ/ms)", "φ (no unit)"),
    "trace_rank": ("Chain", "Draw, one chain after the other", "Input resistance (MΩ)"),
}
#: What a fluctuating current has not.
OF_STEPS = {"voltage_current", "by_sweep"}


def texts(path: Path) -> set[str]:
    root = ET.parse(path).getroot()
    return {"".join(node.itertext()).strip() for node in root.iter() if node.tag.endswith("}text")}


@pytest.mark.parametrize("width_mm", [85.0, 180.0])
@pytest.mark.parametrize("protocol", ["fit", "noise_fit"])
def test_every_figure_is_saved_with_labels_and_units(
    protocol: str, width_mm: float, tmp_path: Path, request: pytest.FixtureRequest
) -> None:
    saved = figures.save_figures(
        request.getfixturevalue(protocol), tmp_path / "figures", width_mm=width_mm
    )
    shown = {
        name: told for name, told in LABELS.items() if protocol == "fit" or name not in OF_STEPS
    }
    assert set(saved) == {f"{name}.{kind}" for name in shown for kind in ("svg", "png")}
    for name, labels in shown.items():
        assert set(labels) <= texts(saved[f"{name}.svg"])
        assert saved[f"{name}.svg"].stat().st_size < 300_000
        assert saved[f"{name}.png"].read_bytes().startswith(b"\x89PNG")


def test_figures_are_drawn_in_the_order_of_the_page(fit: CellFit, noise_fit: CellFit) -> None:
    assert tuple(figures.draw_figures(fit)) == figures.FIGURES
    without = [name for name in figures.FIGURES if name not in OF_STEPS]
    assert list(figures.draw_figures(noise_fit)) == without


def test_figures_are_reproducible_and_leave_no_global_state(fit: CellFit) -> None:
    before = dict(matplotlib.rcParams)
    first, second = (
        {name: as_svg(figure) for name, figure in figures.draw_figures(fit).items()}
        for _ in range(2)
    )
    assert first == second
    assert "<dc:date>" not in "".join(first.values())
    assert dict(matplotlib.rcParams) == before


def test_ranges_of_drive_and_bands_are_named(fit: CellFit, tmp_path: Path) -> None:
    found = texts(figures.save_figures(fit, tmp_path)["kernels.svg"])
    assert {part.label for split in fit.splits.values() for part in split.ranges} <= found
    assert "90 % band if noise were white" in found
    assert "spike window: not identified" in found
    assert "truth of the simulation" not in found


def test_a_known_truth_is_drawn(fit: CellFit, tmp_path: Path) -> None:
    saved = figures.save_figures(fit, tmp_path, made_truth(made_neuron()))
    assert "truth of the simulation" in texts(saved["kernels.svg"])


def test_without_an_after_spike_kernel_there_is_one_panel(
    quiet_fit: CellFit, tmp_path: Path
) -> None:
    found = texts(figures.save_figures(quiet_fit, tmp_path)["kernels.svg"])
    assert "κ (MΩ/ms)" in found
    assert "η (mV)" not in found


def test_steps_are_shown_by_level(fit: CellFit, tmp_path: Path) -> None:
    found = texts(figures.save_figures(fit, tmp_path)["prediction.svg"])
    assert {"Step to −100 pA", "Step to 300 pA"} <= found
    assert any(text.endswith("the lowest with spikes") for text in found)


def test_the_overview_names_the_classes(fit: CellFit, quiet_fit: CellFit) -> None:
    cells = [renamed(fit, "a", "regular"), renamed(quiet_fit, "b", "fast")]
    text = as_svg(figures.draw_overview(cells))
    assert ">regular<" in text
    assert ">fast<" in text

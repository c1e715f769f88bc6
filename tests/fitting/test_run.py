"""The whole fit: truth recovered, to the bit again, compiled once, and told as it goes."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from simulated_cells import STEP_MS, after_spike_kernel, neuron, recording_of_noise

from bayesglm.errors import InputError
from bayesglm.fitting.run import fit, fit_study
from bayesglm.inference import sample
from bayesglm.inference.results import CellFit
from bayesglm.likelihood.digest import content_hash
from bayesglm.recording.recording import Recording
from bayesglm.recording.settings import Settings
from bayesglm.recording.settings_input import override
from bayesglm.recording.study import CellEntry, RecordingEntry, study_from_recordings

#: Two classes: resistance MΩ, time constant ms, threshold mV; common practice, no source.
CLASSES = {"regular": (100.0, 20.0, -50.0), "fast": (200.0, 10.0, -42.0)}


@pytest.mark.parametrize("shape", ["monotone", "bump"])
@pytest.mark.parametrize("cell_class", CLASSES)
def test_known_cells_are_recovered(cell_class: str, shape: str) -> None:
    """40 s of fluctuating current: κ exponential, η with and without a bump (common practice)."""
    resistance, tau, threshold = CLASSES[cell_class]
    cell = neuron(resistance, tau, shape, threshold_mV=threshold)
    found = fit(recording_of_noise(cell, seed=1))
    eta = after_spike_kernel(shape)
    expected = {
        "input_resistance": resistance,
        "membrane_time_constant": tau,
        "offset": -65.0,
        "electrode_resistance": 0.0,
        "after_spike_at_30ms": eta[59],
    }
    # Beside the interval: five time constants of κ miss 0.7 %, and 14 splines blur η.
    beside = {"input_resistance": 0.01 * resistance, "after_spike_at_30ms": 0.1}
    for name, truth in expected.items():
        feature = found.feature(name)
        assert abs(feature.mean - truth) < 3.5 * feature.sd + beside.get(name, 0.0), name
        assert feature.sd < 0.03 * max(abs(truth), 10), name
    probability = found.feature("after_spike_peak_probability").mean
    assert probability < 0.15 if shape == "monotone" else probability > 0.9
    if shape == "bump":
        assert found.feature("after_spike_peak").mean == pytest.approx(eta.max(), abs=0.2)
        peak_ms = 0.5 * (eta.argmax() + 1)
        assert found.feature("after_spike_peak_time").mean == pytest.approx(peak_ms, abs=5)
    band = found.kernel("input")
    kernel = cell.input[np.round(band.lags_ms / STEP_MS).astype(int) - 1]
    inside = (kernel >= band.lower) & (kernel <= band.upper)
    assert inside.mean() > 0.5
    assert np.abs(band.mean - kernel).max() < 0.06 * kernel.max()
    assert not found.chains.diverging.any()


def test_same_seed_same_numbers_to_the_bit(
    linear_fit: CellFit, linear_recording: Recording
) -> None:
    again = fit(linear_recording)
    np.testing.assert_array_equal(again.weights, linear_fit.weights)
    for site, draws in linear_fit.chains.draws.items():
        np.testing.assert_array_equal(again.chains.draws[site], draws)
    assert content_hash(again.digest) == content_hash(linear_fit.digest)
    assert [repr(one) for one in again.features] == [repr(one) for one in linear_fit.features]


def test_another_seed_gives_other_draws_of_the_same_posterior(
    linear_fit: CellFit, linear_recording: Recording
) -> None:
    other = fit(linear_recording, override(Settings(), ["sampling.seed=1"]))
    assert not np.any(other.weights == linear_fit.weights)
    for feature in ("input_resistance", "offset", "after_spike_at_30ms"):
        one, two = other.feature(feature), linear_fit.feature(feature)
        assert abs(one.mean - two.mean) < 4 * np.hypot(one.mcse_mean, two.mcse_mean)


def test_a_second_fit_of_the_same_shape_compiles_nothing(linear_fit: CellFit) -> None:
    """Another recording of another length, with as many weights."""
    del linear_fit
    traced = sample._compiled_run._cache_size()  # type: ignore[attr-defined]
    assert traced > 0
    fit(recording_of_noise(neuron(120.0, 15.0), seed=8, n_sweeps=8, seconds=3.0))
    assert sample._compiled_run._cache_size() == traced  # type: ignore[attr-defined]


def test_stages_are_told_and_timed(linear_recording: Recording) -> None:
    told: list[str] = []
    found = fit(linear_recording, progress=told.append)
    assert told == ["digest", "calibrate", "sample", "summarise", "sensitivity"]
    assert list(found.verdict.seconds) == told
    assert all(seconds >= 0 for seconds in found.verdict.seconds.values())


def test_recordings_of_one_cell_are_pooled(linear_recording: Recording) -> None:
    other = replace(recording_of_noise(neuron(), seed=9, n_sweeps=5), name="second")
    both = fit((linear_recording, other))
    assert both.cell == "simulated"
    assert both.digest.n_units == 60
    assert len(both.recordings) == 2
    assert both.verdict.spikes == linear_recording.n_spikes + other.n_spikes
    assert both.verdict.bins == sum(s.n_samples for r in both.recordings for s in r.sweeps)


def test_without_spikes_the_after_spike_kernel_is_left_out() -> None:
    quiet = recording_of_noise(neuron(threshold_mV=100.0), seed=4)
    found = fit(quiet)
    assert list(found.kernels) == ["input", "electrode"]
    assert found.warnings == ("no spikes in what is fitted: the after-spike kernel is left out",)
    assert "after_spike" not in found.splits
    assert found.feature("input_resistance").mean == pytest.approx(100, abs=4)


def test_white_noise_is_warned_of_and_several_times_narrower(
    linear_fit: CellFit, white_fit: CellFit
) -> None:
    """On noise of 15 ms in rows of 0.5 ms the level's sd is off by about √(2·15/0.5) = 8."""
    white = white_fit
    assert len(white.warnings) == 1
    assert "model.noise is white" in white.warnings[0]
    assert linear_fit.feature("offset").sd > 4 * white.feature("offset").sd
    assert linear_fit.feature("input_resistance").sd > 4 * white.feature("input_resistance").sd
    # The dotted band of the calibrated fit says the same.
    dotted = linear_fit.kernel("input")
    solid = white.kernel("input")
    known = solid.sd > 0.1 * solid.sd.max()
    half = (dotted.white_upper - dotted.white_lower)[known] / 2
    # Its kernel sds are those of the calibrated fit, which are smaller.
    np.testing.assert_allclose(half, 1.645 * solid.sd[known], rtol=0.5)


def test_missing_values_are_refused_also_from_python(linear_recording: Recording) -> None:
    first, *others = linear_recording.sweeps
    voltage = first.voltage.copy()
    voltage[5] = np.nan
    broken = replace(linear_recording, sweeps=(replace(first, voltage=voltage), *others))
    with pytest.raises(InputError, match="missing"):
        fit(broken)


def test_class_and_animal_are_carried(linear_recording: Recording) -> None:
    entry = CellEntry("c7", (), condition="drug", cell_class="pyramidal", animal="m1")
    found = fit(linear_recording, None, entry)
    assert (found.name, found.cell_class, found.animal) == ("c7@drug", "pyramidal", "m1")


def test_refuses_kernels_longer_than_the_recording(linear_recording: Recording) -> None:
    settings = override(Settings(), ["kernels.input.duration_ms=5000"])
    with pytest.raises(
        InputError, match=r"kernels\.input\.duration_ms is 5000 ms, but the longest"
    ):
        fit(linear_recording, settings)


def write(recording: Recording, path: Path) -> None:
    """A recording as CSV, with its spikes."""
    lines = ["time_ms,current_nA,voltage_mV,spike,sweep"]
    for sweep in recording.sweeps:
        spike = np.zeros(sweep.n_samples, dtype=int)
        if sweep.spikes is not None:
            spike[sweep.spikes] = 1
        lines += [
            f"{k * recording.step_ms},{i!r},{v!r},{s},{sweep.number}"
            for k, (i, v, s) in enumerate(
                zip(sweep.current.tolist(), sweep.voltage.tolist(), spike.tolist(), strict=True)
            )
        ]
    path.write_text("\n".join(lines) + "\n")


def test_cells_of_a_study_come_in_order_and_excluded_ones_are_passed_over(
    tmp_path: Path, linear_fit: CellFit, linear_recording: Recording
) -> None:
    """What is read from files gives the same numbers as the arrays."""
    small = recording_of_noise(neuron(), seed=6, n_sweeps=4, seconds=2.0)
    write(small, tmp_path / "b.csv")
    write(linear_recording, tmp_path / "a.csv")
    study = study_from_recordings([tmp_path / "b.csv", tmp_path / "a.csv"], Settings())
    out = CellEntry(
        "gone", (RecordingEntry(tmp_path / "b.csv", exclude=True, exclude_reason="drift"),)
    )
    found = list(fit_study(replace(study, cells=(study.cells[0], out, study.cells[1]))))
    assert [one.cell for one in found] == ["b", "a"]
    np.testing.assert_array_equal(found[1].weights, linear_fit.weights)

"""What the user left open is filled from the data: row, durations, units."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from simulated_cells import STEP_MS, neuron, recording_of_noise, steps_current

from bayesglm.checks.simulation import Noise, simulate
from bayesglm.errors import InputError
from bayesglm.inference.setup import (
    common_row_ms,
    fit_digest,
    make_digest,
    refuse_unusable,
    resolve_design,
)
from bayesglm.kernels.basis import KernelSpec
from bayesglm.likelihood.least_squares import correlation_time_ms
from bayesglm.models.priors import weight_prior
from bayesglm.recording.recording import Recording
from bayesglm.recording.settings import Settings
from bayesglm.recording.settings_input import override
from bayesglm.recording.study import CellEntry, RecordingEntry

LEVELS = np.arange(-0.1, 0.31, 0.05)


def step_recording(
    tau_ms: float = 20.0, sweep_ms: float = 1500.0, spiking: bool = True, noise_mV: float = 0.5
) -> Recording:
    noise = Noise((noise_mV,), (15.0,))
    cell = neuron(tau_ms=tau_ms, threshold_mV=-50.0 if spiking else 100.0, noise=noise)
    rng = np.random.default_rng(0)
    return simulate(cell, steps_current(LEVELS, sweep_ms), STEP_MS, rng, "steps")


def short(recording: Recording, ms: float) -> Recording:
    """The first sweep cut to a length."""
    n = round(ms / recording.step_ms)
    sweep = recording.sweeps[0]
    spikes = sweep.spikes[sweep.spikes < n] if sweep.spikes is not None else None
    cut = replace(
        sweep,
        current=sweep.current[:n],
        voltage=sweep.voltage[:n],
        keep=sweep.keep[:n],
        spikes=spikes,
    )
    return replace(recording, sweeps=(cut,))


@pytest.mark.parametrize("tau_ms", [12.0, 20.0, 40.0])
def test_input_kernel_lasts_five_time_constants_of_the_steps(tau_ms: float) -> None:
    design = resolve_design((step_recording(tau_ms, noise_mV=0.02),), Settings())
    assert design.input.duration_ms == pytest.approx(5 * tau_ms, rel=0.03)


def test_without_steps_the_time_constant_comes_from_a_first_fit(
    linear_recording: Recording,
) -> None:
    """Truth 20 ms; the mean lag of κ errs on the long side."""
    duration = resolve_design((linear_recording,), Settings()).input.duration_ms
    assert 90 <= duration <= 150


@pytest.mark.parametrize(("tau_ms", "duration"), [(3.0, 50.0), (150.0, 400.0)])
def test_input_kernel_stays_within_50_and_400_ms(tau_ms: float, duration: float) -> None:
    recording = recording_of_noise(neuron(tau_ms=tau_ms), seed=2, n_sweeps=4)
    assert resolve_design((recording,), Settings()).input.duration_ms == duration


def test_kernels_last_at_most_half_the_longest_sweep() -> None:
    design = resolve_design((step_recording(tau_ms=40, sweep_ms=1100),), Settings())
    assert design.after_spike is not None
    assert design.after_spike.duration_ms == 300.0
    cut = short(recording_of_noise(neuron(), seed=1, n_sweeps=1), 300.0)
    assert cut.n_spikes
    design = resolve_design((cut,), Settings())
    assert design.input.duration_ms <= 150
    assert design.after_spike is not None
    assert design.after_spike.duration_ms == 150.0


def test_stated_values_stand() -> None:
    settings = override(
        Settings(),
        [
            "kernels.input.duration_ms=77",
            "kernels.input.weights=9",
            "kernels.after_spike.warp_ms=5",
            "kernels.electrode.include=false",
            "model.row_ms=1",
            "model.spike_window_ms=[-2, 4]",
        ],
    )
    design = resolve_design((step_recording(),), settings)
    assert (design.input.duration_ms, design.input.weights) == (77, 9)
    assert design.after_spike is not None
    assert design.after_spike.warp_ms == 5
    assert (design.row_ms, design.electrode, design.spike_window_ms) == (1.0, False, (-2.0, 4.0))


def test_a_basis_has_its_own_number_of_weights_and_no_more_bins_than_rows() -> None:
    assignments = ["kernels.after_spike.duration_ms=200", "kernels.input.basis=lags"]
    assignments += ["kernels.after_spike.basis=exponentials", "kernels.after_spike.terms=2"]
    for duration, weights in ((25, 50), (100, 60)):
        settings = override(Settings(), [*assignments, f"kernels.input.duration_ms={duration}"])
        design = resolve_design((step_recording(),), settings)
        assert design.input == KernelSpec(duration, weights, 2.0, "lags", 0.5)
        assert design.after_spike == KernelSpec(200, 14, 2.0, "exponentials", 0.5, 2)


@pytest.mark.parametrize("basis", ["cosines", "lags", "exponentials"])
def test_the_time_constant_of_a_first_fit_needs_no_certain_basis(
    basis: str, linear_recording: Recording
) -> None:
    """Truth 20 ms; the mean lag of κ errs on the long side."""
    assignments = [f"kernels.{name}.basis={basis}" for name in ("input", "after_spike")]
    duration = resolve_design((linear_recording,), override(Settings(), assignments))
    assert 90 <= duration.input.duration_ms <= 150


def test_an_electrode_kernel_has_bins_of_whole_steps() -> None:
    fine = replace(step_recording(), step_ms=0.05)
    settings = override(Settings(), ["kernels.electrode.duration_ms=0.8"])
    found = resolve_design((fine,), settings).electrode_kernel
    assert found is not None
    assert (found.duration_ms, found.weights) == (0.8, 4)
    with pytest.raises(InputError, match="set it to at least 1, or to 0"):
        resolve_design((replace(fine, step_ms=1.0),), settings)


@pytest.mark.parametrize(
    ("assignments", "message"),
    [
        (["kernels.electrode.duration_ms=1"], "expected less than 1"),
        (
            ["kernels.electrode.include=false", "kernels.electrode.duration_ms=0.5"],
            "kernels.electrode: duration_ms is 0.5 where include is false; expected 0",
        ),
        (["kernels.input.weights=61"], "kernels.input: weights is 61; expected at most 60 splines"),
        (["kernels.input.basis=bumps"], "expected 'splines', 'cosines', 'lags' or 'exponentials'"),
        (["kernels.input.terms=0"], "expected greater than or equal to 1"),
    ],
)
def test_refuses_shapes_that_cannot_be(assignments: list[str], message: str) -> None:
    with pytest.raises(InputError, match=message):
        override(Settings(), assignments)


def test_without_spikes_there_is_no_after_spike_kernel() -> None:
    assert resolve_design((step_recording(spiking=False),), Settings()).after_spike is None


def test_row_suits_the_coarsest_recording() -> None:
    recordings = [replace(step_recording(), step_ms=step) for step in (0.05, 0.2)]
    assert common_row_ms(recordings, Settings()) == pytest.approx(0.6)
    assert common_row_ms(recordings, override(Settings(), ["model.row_ms=1"])) == 1.0


def units_of(recording: Recording, *assignments: str) -> tuple[int, tuple[str, ...]]:
    settings = override(Settings(), list(assignments))
    design = resolve_design((recording,), settings)
    prior = weight_prior(design, settings.priors)
    digest, fit = make_digest((recording,), design, prior, settings)
    expected = fit_digest(digest, prior.root, settings)
    np.testing.assert_array_equal(fit.weights, expected.weights)
    return digest.n_units, digest.labels


def test_sweeps_are_the_units_of_steps() -> None:
    assert units_of(step_recording()) == (9, tuple(f"sweep {k}" for k in range(9)))


def test_fluctuating_current_is_cut_into_blocks(linear_recording: Recording) -> None:
    """Ten sweeps of 4 s, correlation time 15 ms: blocks of 1 s."""
    n, labels = units_of(linear_recording)
    assert n == 40
    assert labels[1] == "sweep 0, 1000–2000 ms"


def test_units_as_stated(linear_recording: Recording) -> None:
    assert units_of(linear_recording, "model.units=sweep")[0] == 10
    assert units_of(linear_recording, "model.block_ms=2000")[0] == 20
    assert units_of(step_recording(), "model.units=block")[0] == 9
    assert units_of(step_recording(), "model.block_ms=500")[0] == 27


def test_blocks_are_at_least_twenty_correlation_times() -> None:
    """Noise of 120 ms asks for blocks of 2.4 s and more."""
    recording = recording_of_noise(
        neuron(noise=Noise((2.0,), (120.0,)), threshold_mV=100.0), seed=3, n_sweeps=6, seconds=12.0
    )
    settings = Settings()
    design = resolve_design((recording,), settings)
    prior = weight_prior(design, settings.priors)
    digest, fit = make_digest((recording,), design, prior, settings)
    assert digest.seconds.min() * 1e3 > 0.8 * 20 * correlation_time_ms(digest, fit)
    assert digest.seconds.min() >= 1.5
    assert digest.seconds.sum() == pytest.approx(72.0)


def test_there_are_at_most_about_two_hundred_blocks() -> None:
    recording = recording_of_noise(neuron(threshold_mV=100.0), seed=4, n_sweeps=1, seconds=300.0)
    assert 150 <= units_of(recording, "kernels.input.duration_ms=100")[0] <= 200


def written(tmp_path: Path, n: int = 2000, spikes: bool = True) -> CellEntry:
    """A recording of 1 s at 0.5 ms on disk, as the entry of a cell."""
    rng = np.random.default_rng(0)
    lines = ["time_ms,current_pA,voltage_mV" + (",spike" if spikes else "")]
    for k in range(n):
        row = f"{k * 0.5},{100 * rng.normal():.2f},{-65 + rng.normal():.3f}"
        lines.append(row + (f",{int(k % 400 == 99)}" if spikes else ""))
    path = tmp_path / "cell.csv"
    path.write_text("\n".join(lines) + "\n")
    return CellEntry("cell", (RecordingEntry(path),))


def test_what_cannot_be_fitted_is_refused_before_anything_is_written(tmp_path: Path) -> None:
    entry = written(tmp_path)
    assert refuse_unusable(entry, Settings())
    held_out = replace(entry, recordings=(replace(entry.recordings[0], role="held-out"),))
    assert not refuse_unusable(held_out, Settings())
    for assignment, message in {
        "model.row_ms=0.7": "a row of 0.7 ms is not a whole number of steps of 0.5 ms",
        "kernels.input.duration_ms=1200": r"kernels\.input\.duration_ms is 1200 ms, but the",
        "kernels.after_spike.duration_ms=1200": r"kernels\.after_spike\.duration_ms is 1200 ms",
    }.items():
        with pytest.raises(InputError, match=message):
            refuse_unusable(entry, override(Settings(), [assignment]))

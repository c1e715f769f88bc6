"""The verdict: a linear cell passes, and each kind of trouble is seen for what it is."""

from __future__ import annotations

from dataclasses import replace
from types import SimpleNamespace

import numpy as np
import pytest
from simulated_cells import (
    STEP_MS,
    coloured_current,
    interleaved,
    neuron,
    recording_of_noise,
)

from bayesglm.checks.simulation import simulate
from bayesglm.fitting import judge
from bayesglm.fitting.run import fit
from bayesglm.inference.results import CellFit
from bayesglm.recording.recording import Recording
from bayesglm.recording.settings import Settings
from bayesglm.recording.settings_input import override
from bayesglm.verdict import worst

SWEEPS = override(Settings(), ["model.units=sweep"])


def open_checks(found: CellFit) -> dict[str, str]:
    """Checks that are not passed, with their severity."""
    return {reason.check: reason.verdict for reason in found.verdict.open_reasons}


def checks(found: CellFit) -> dict[str, str]:
    return {reason.check: reason.verdict for reason in found.verdict.reasons}


def driven(after_spike_gain: list[float], seed: int) -> Recording:
    """Twelve sweeps with a rising mean current; η of each sweep times its gain."""
    rng = np.random.default_rng(seed)
    sweeps = []
    for k, (mean, gain) in enumerate(
        zip(np.linspace(0.05, 0.25, 12), after_spike_gain, strict=True)
    ):
        cell = neuron()
        cell = replace(cell, after_spike=gain * cell.after_spike)
        made = simulate(cell, coloured_current(rng, 1, 3.0, mean, 0.08), STEP_MS, rng)
        sweeps.append(replace(made.sweeps[0], number=k))
    return Recording("driven", STEP_MS, tuple(sweeps), spikes_from="simulation")


def test_a_linear_cell_passes(linear_fit: CellFit) -> None:
    assert open_checks(linear_fit) == {}
    assert linear_fit.verdict.verdict == "passed"
    assert set(checks(linear_fit)) == {
        "rhat",
        "effective_draws",
        "divergences",
        "energy",
        "units",
        "one_unit_decides",
        "calibration_ratio_input",
        "calibration_ratio_after_spike",
        "odd_even_input",
        "odd_even_after_spike",
        "drive_split_input",
        "drive_split_after_spike",
        "linearity",
        "prior_share_input",
        "prior_share_after_spike",
        "durations",
        "durations_input",
        "durations_after_spike",
        "spike_window",
    }
    verdict = linear_fit.verdict
    assert (verdict.units, verdict.observe, verdict.divergences) == (40, "voltage", 0)
    assert verdict.route == "least squares, calibrated; NUTS"
    assert verdict.calibration_ratio == linear_fit.calibration.ratio
    assert (verdict.rhat_max < 1.01, verdict.ess_min > 400) == (True, True)


def test_the_verdict_is_the_worst_of_its_reasons(linear_fit: CellFit) -> None:
    verdict = linear_fit.verdict
    assert verdict.verdict == worst(reason.verdict for reason in verdict.reasons)


@pytest.mark.parametrize("seed", [1, 2])
def test_after_spike_kernel_that_grows_with_the_drive(seed: int) -> None:
    """The split by drive speaks of η, with a value for each range, and its ratio is raised."""
    found = fit(driven(np.linspace(0.3, 1.6, 12).tolist(), seed), SWEEPS)
    assert found.verdict.verdict == "caution"
    assert checks(found)["drive_split_after_spike"] == "caution"
    assert checks(found)["calibration_ratio_after_spike"] == "caution"
    reason = next(r for r in found.verdict.reasons if r.check == "drive_split_after_spike")
    assert all(one.label in reason.value for one in found.splits["after_spike"].ranges)
    values = [one.features["after_spike_at_30ms"][0] for one in found.splits["after_spike"].ranges]
    # Truth −3.0 mV times the mean gain of each four sweeps.
    gains = np.linspace(0.3, 1.6, 12).reshape(3, 4).mean(axis=1)
    assert np.all(np.diff(values) < 0)
    np.testing.assert_allclose(values, -2.96 * gains, atol=0.6)
    feature = found.feature("after_spike_at_30ms")
    assert feature.between_range_sd == pytest.approx(np.std(-2.96 * gains, ddof=1), abs=0.4)


@pytest.mark.parametrize("seed", [1, 2])
def test_the_same_drives_with_one_kernel_pass(seed: int) -> None:
    """Control: nothing speaks where η is the same in every sweep."""
    assert open_checks(fit(driven([1.0] * 12, seed), SWEEPS)) == {}


def test_a_cell_that_differs_between_odd_and_even_sweeps() -> None:
    first, second = (recording_of_noise(neuron(r), seed=k) for k, r in ((1, 100.0), (2, 125.0)))
    found = fit(interleaved(first, second), SWEEPS)
    assert checks(found)["odd_even_input"] == "caution"
    assert checks(found)["calibration_ratio_input"] == "caution"
    assert checks(found)["odd_even_after_spike"] == "passed"
    same = fit(interleaved(first, recording_of_noise(neuron(100.0), seed=2)), SWEEPS)
    assert checks(same)["odd_even_input"] == "passed"


@pytest.mark.parametrize(("n", "severity"), [(3, "failed"), (5, "caution")])
def test_few_units(linear_recording: Recording, n: int, severity: str) -> None:
    few = replace(linear_recording, sweeps=linear_recording.sweeps[:n])
    found = fit(few, SWEEPS)
    assert checks(found)["units"] == severity
    assert found.verdict.verdict == severity
    # Too few to split by drive as well: that is told, not passed over.
    assert checks(found)["drive_split_input"] == "caution"
    assert found.splits["input"].ranges == ()
    assert np.isnan(found.feature("input_resistance").protocol_lower)


def test_one_sweep_that_decides(linear_recording: Recording) -> None:
    """Nine sweeps hardly move the voltage: the tenth carries the kernels."""
    still = recording_of_noise(neuron(), seed=1, mean_nA=0.0, sd_nA=0.004)
    sweeps = (linear_recording.sweeps[0], *still.sweeps[1:])
    found = fit(replace(linear_recording, sweeps=sweeps), SWEEPS)
    reason = next(r for r in found.verdict.reasons if r.check == "one_unit_decides")
    assert (reason.verdict, reason.value) == ("caution", "sweep 0 carries 100 % of a direction")


def test_a_membrane_that_is_not_linear(linear_recording: Recording) -> None:
    """Depolarisation shrinks: v − 0.03 u² up to 15 mV above rest."""
    sweeps = []
    for sweep in linear_recording.sweeps:
        u = sweep.voltage + 65
        bent = np.where(u < 15, sweep.voltage - 0.03 * u**2, sweep.voltage)
        sweeps.append(replace(sweep, voltage=bent))
    found = fit(replace(linear_recording, sweeps=tuple(sweeps)))
    assert checks(found)["linearity"] == "caution"
    assert found.verdict.verdict == "caution"


def test_white_noise_is_never_passed(white_fit: CellFit) -> None:
    assert checks(white_fit)["white_noise"] == "caution"
    assert white_fit.verdict.verdict == "caution"
    assert white_fit.verdict.route == "white; NUTS"


def test_spikes_of_which_nothing_is_seen() -> None:
    """A spike in the last but one sample of each sweep says nothing of η: failed, not silent."""
    quiet = recording_of_noise(neuron(threshold_mV=100.0), seed=1)
    sweeps = tuple(replace(s, spikes=np.array([s.n_samples - 2])) for s in quiet.sweeps)
    found = fit(replace(quiet, sweeps=sweeps))
    assert checks(found)["prior_share_after_spike"] == "failed"
    assert checks(found)["prior_share_input"] == "passed"
    assert np.isfinite(list(found.verdict.calibration_ratio.values())).all()


def test_chains_too_short_are_not_passed(linear_recording: Recording) -> None:
    settings = override(
        Settings(), ["sampling.chains=2", "sampling.draws=50", "sampling.warmup=50"]
    )
    found = fit(linear_recording, settings)
    assert checks(found)["effective_draws"] in ("caution", "failed")
    reason = next(r for r in found.verdict.reasons if r.check == "effective_draws")
    assert "sampling.draws=200" in reason.command


def test_every_open_reason_has_advice_and_a_command(
    linear_recording: Recording, white_fit: CellFit
) -> None:
    few = fit(replace(linear_recording, sweeps=linear_recording.sweeps[:3]), SWEEPS)
    assert few.verdict.open_reasons
    for reason in (*few.verdict.open_reasons, *white_fit.verdict.open_reasons):
        assert reason.advice, reason.check
        assert reason.command.startswith("bayesglm "), reason.check


def test_the_command_for_one_drive_names_every_sweep_that_was_joined() -> None:
    """Two of three units are the strongest; each is two sweeps of the file."""
    recording = recording_of_noise(neuron(), seed=1, n_sweeps=3, seconds=0.2)
    sweeps = tuple(
        replace(sweep, number=2 * k, joined=((2 * k, 0), (2 * k + 1, 200)))
        for k, sweep in enumerate(recording.sweeps)
    )
    split = SimpleNamespace(ranges=[SimpleNamespace(units=np.array([1, 2]))])
    digest = SimpleNamespace(n_units=3, sweep=np.arange(3))
    summary = SimpleNamespace(splits={"after_spike": split})
    joined = replace(recording, sweeps=sweeps)
    command = judge._one_drive([joined], digest, summary, Settings())  # type: ignore[arg-type]
    assert "--select 'sweeps=2-5'" in command

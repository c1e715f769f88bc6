"""What the verdict says of durations and spike window, from made-up grids and from a fit."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from bayesglm.fitting.sensitivity import sensitivity_reasons
from bayesglm.inference.results import CellFit
from bayesglm.inference.sensitivity import DurationGrid, Sensitivity, SpikeWindows
from bayesglm.recording.recording import Recording
from bayesglm.recording.settings import Settings
from bayesglm.verdict import Reason


@pytest.fixture
def recording(linear_recording: Recording) -> Recording:
    return replace(linear_recording, path=Path("cell.csv"))


def grid(excess: float = 0.05, se: float = 0.1, eta: float = -3.0, sd: float = 0.4) -> DurationGrid:
    """Two by two: the chosen place is worse than the best by `excess`, where η(30 ms) is `eta`."""
    held_out = np.array([[4.0 + excess, 4.0], [9.0, 9.0]])
    return DurationGrid(
        input_ms=np.array([100.0, 400.0]),
        after_spike_ms=np.array([200.0, 300.0]),
        chosen=(0, 0),
        held_out_mV2=held_out,
        held_out_se_mV2=np.array([[se, 0.0], [0.5, 0.5]]),
        folds=10,
        features={
            "input_resistance": (np.full((2, 2), 100.0), np.full((2, 2), 2.0)),
            "after_spike_at_30ms": (np.array([[-3.0, eta], [0.0, 0.0]]), np.full((2, 2), sd)),
        },
    )


def reasons_of(found: Sensitivity, recording: Recording) -> dict[str, Reason]:
    return {one.check: one for one in sensitivity_reasons(found, (recording,), Settings())}


def test_durations_that_say_the_same_pass(recording: Recording) -> None:
    found = reasons_of(Sensitivity(durations=grid()), recording)
    assert list(found) == ["durations", "durations_input", "durations_after_spike"]
    assert {one.verdict for one in found.values()} == {"passed"}
    assert not any(one.advice or one.command for one in found.values())


def test_a_feature_that_moves_is_told_with_its_durations(recording: Recording) -> None:
    found = reasons_of(Sensitivity(durations=grid(eta=-5.1)), recording)
    one = found["durations_after_spike"]
    assert one.verdict == "caution"
    assert one.value == "5.2 sd: η(30 ms) −3.0 mV at 100/200 ms to −5.1 mV at 100/300 ms"
    assert "--set 'kernels.after_spike.duration_ms=300'" in one.command
    assert "--set 'kernels.input.duration_ms=100'" in one.command
    assert found["durations_input"].verdict == "passed"


@pytest.mark.parametrize(
    ("excess", "se", "verdict"),
    [(1.0, 0.3, "caution"), (1.0, 0.4, "passed"), (0.07, 0.001, "passed")],
)
def test_durations_that_predict_worse(
    recording: Recording, excess: float, se: float, verdict: str
) -> None:
    """Both limits must be passed: 3 standard errors and 2 % of the error."""
    one = reasons_of(Sensitivity(durations=grid(excess, se, -3.5)), recording)["durations"]
    assert one.verdict == verdict
    if verdict == "caution":
        assert one.value.startswith("held-out error 5.00 mV² at 100/200 ms, 4.00 at 100/300 ms")
        assert "1.00 ± 0.30 worse" in one.value
        assert "η(30 ms) −3.0 mV against −3.5 mV" in one.value
        assert "kernels.after_spike.duration_ms=300" in one.command


def windows(moved: float) -> SpikeWindows:
    values = (np.array([-3.0 - moved, -3.0, np.nan]), np.array([0.9, 1.0, np.nan]))
    nothing = (np.full(3, np.nan), np.full(3, np.nan))
    return SpikeWindows(
        np.array([3.0, 5.0, 10.0]),
        1,
        {"after_spike_at_10ms": values, "after_spike_minimum": nothing},
    )


@pytest.mark.parametrize(("moved", "verdict"), [(1.4, "passed"), (1.6, "caution")])
def test_window(recording: Recording, moved: float, verdict: str) -> None:
    one = reasons_of(Sensitivity(windows=windows(moved)), recording)["spike_window"]
    assert one.verdict == verdict
    assert one.value == (
        f"{moved:.1f} sd: η(10 ms) −3.0 mV with the window to 5 ms, −{3 + moved:.1f} mV to 3 ms"
    )
    assert ("model.spike_window_ms=[-1.0, 3.0]" in one.command) == (verdict == "caution")


def test_nothing_that_can_be_compared_says_nothing(recording: Recording) -> None:
    hidden = replace(windows(0.0), features={"after_spike_minimum": (np.full(3, np.nan),) * 2})
    assert reasons_of(Sensitivity(windows=hidden), recording) == {}
    assert reasons_of(Sensitivity(), recording) == {}


def test_a_fit_has_both(linear_fit: CellFit) -> None:
    found = linear_fit.sensitivity
    assert found.durations is not None
    assert found.windows is not None
    assert list(found.durations.features) == ["input_resistance", "after_spike_at_30ms"]
    checks = {reason.check: reason.verdict for reason in linear_fit.verdict.reasons}
    for name in ("durations", "durations_input", "durations_after_spike", "spike_window"):
        assert checks[name] == "passed"
    chosen = found.durations.chosen
    durations = linear_fit.design.kernels
    assert found.durations.input_ms[chosen[0]] == pytest.approx(durations["input"].duration_ms)
    # Hardly smoothed and ending smoothly, the grid says what the fit says.
    for name, (mean, _) in found.durations.features.items():
        feature = linear_fit.feature(name)
        assert abs(mean[chosen] - feature.mean) < 2 * feature.sd

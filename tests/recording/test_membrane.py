"""Rows on the membrane: baseline, resistances, bridge and linearity, against an RC cell."""

from __future__ import annotations

import numpy as np
import pytest
from rc_cell import rc_recording, rc_voltage, recording_of, step_current

from bayesglm.recording.membrane import baseline_row, membrane_rows
from bayesglm.recording.recording import Recording
from bayesglm.recording.settings import RecordingSection, Settings
from bayesglm.recording.steps import measure_steps
from bayesglm.verdict import Reason


def _rows(recording: Recording, settings: Settings | None = None) -> dict[str, Reason]:
    """Return the rows by name; of several input resistances the last."""
    settings = settings or Settings()
    measures = measure_steps(recording, settings.sampling.level)
    rows = (baseline_row(measures, settings), *membrane_rows(recording, measures, settings))
    return {row.check: row for row in rows}


@pytest.mark.parametrize(
    ("holding_pA", "recorded_pA", "name"),
    [
        (None, 0.0, "baseline at holding"),
        (-50.0, 0.0, "baseline at holding"),
        (0.0, 0.0, "rest"),
        (0.0, -50.0, "baseline at holding"),
    ],
)
def test_baseline_is_called_rest_only_where_nothing_is_held(
    holding_pA: float | None, recorded_pA: float, name: str
) -> None:
    current = step_current(-100, holding_pA=recorded_pA)
    recording = recording_of([(current, rc_voltage(current))])
    settings = Settings(recording=RecordingSection(holding_pA=holding_pA))
    row = _rows(recording, settings)["baseline"]
    assert row.value == f"{name} {'−75.0' if recorded_pA else '−70.0'} mV (one sweep)"
    assert ("holding_pA" in row.advice) is (holding_pA is None)


@pytest.mark.parametrize(
    ("series_MOhm", "verdict"), [(14.0, "passed"), (19.0, "caution"), (30.0, "caution")]
)
def test_an_unbalanced_bridge_is_a_caution(series_MOhm: float, verdict: str) -> None:
    row = _rows(rc_recording([-100, -50], series_MOhm=series_MOhm))["series_jump"]
    assert row.verdict == verdict
    assert row.value.startswith(f"{series_MOhm:.1f} MΩ (90 % interval")


def test_the_interval_has_the_level_of_the_settings() -> None:
    recording = rc_recording([-100, -50, 50, 100], series_MOhm=5, noise_mV=0.1)
    settings = Settings.model_validate({"sampling": {"level": 0.8}})
    assert "(80 % interval" in _rows(recording, settings)["series_jump"].value


def test_fluctuating_current_says_that_it_has_no_steps() -> None:
    current = 0.05 * np.random.default_rng(6).standard_normal(10_000)
    current[:1000] = 0
    rows = _rows(recording_of([(current, rc_voltage(current))]))
    for name in ("input_resistance", "series_jump", "linearity"):
        assert rows[name].value == "not measured: no complete steps of current"
        assert rows[name].verdict == "passed"
    assert rows["baseline"].value == "baseline at holding −70.0 mV (one sweep)"


def test_each_level_has_its_resistance_and_says_how_many_steps_it_rests_on() -> None:
    recording = rc_recording([-100, -100, 50], noise_mV=0.05)
    settings = Settings()
    rows = membrane_rows(recording, measure_steps(recording), settings)
    shown = [row.value for row in rows if row.check == "input_resistance"]
    # The RC cell has 100 MΩ.
    assert shown[0].startswith("−100 pA: steady 100 MΩ (90 % interval")
    assert shown[0].endswith("; 2 steps")
    assert shown[1].startswith("50 pA: steady 100 MΩ, peak")
    assert shown[1].endswith("; 1 step")


@pytest.mark.parametrize(("lowest", "selection"), [((-100, -75), True), ((-100,), False)])
def test_a_cell_that_bends_is_not_called_linear(lowest: tuple[int, ...], selection: bool) -> None:
    """A range is offered for a fit where it holds at least four sweeps."""
    bent = []
    for level in (*lowest, -50, 50, 100):
        current = step_current(level)
        voltage = rc_voltage(current)
        # Half of the depolarisation beyond −66 mV is lost, as to an outward current.
        bent.append((current, np.where(voltage > -66, -66 + 0.5 * (voltage + 66), voltage)))
    row = _rows(recording_of(bent))["linearity"]
    assert row.verdict == "caution"
    assert row.value.startswith("linear from −100 to 50 pA (")
    assert ("'current=-100:50pA'" in row.command) == selection

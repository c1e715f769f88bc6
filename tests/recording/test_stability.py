"""What drifts by sweep: known drifts, drifts that must not be seen, and the real cell by hand."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from rc_cell import R_MOHM, rc_recording, rc_voltage, recording_of, step_current
from scipy import stats

from bayesglm.recording.reading import read_recording
from bayesglm.recording.recording import Recording
from bayesglm.recording.settings import RecordingSection, Settings
from bayesglm.recording.spikes import detect_spikes
from bayesglm.recording.stability import BySweep, by_sweep, drift_of, stability_rows
from bayesglm.recording.steps import measure_steps
from bayesglm.verdict import Reason

REAL_CELL = Path(__file__).parents[1] / "data" / "cell_a_steps.csv.gz"


def _rows(recording: Recording) -> dict[str, Reason]:
    settings = Settings()
    rows = stability_rows(recording, measure_steps(recording), settings)
    return {row.check: row for row in rows}


def measured(recording: Recording) -> BySweep:
    return by_sweep(recording, measure_steps(recording))


def _drifting(change: float, n: int = 6, noise_mV: float = 0.02) -> Recording:
    """Steps of −100 pA into a cell whose resistance changes by a share from first to last."""
    rng = np.random.default_rng(8)
    pairs = []
    for k in range(n):
        current = step_current(-100)
        rest = rc_voltage(current)[0]
        voltage = rest + (rc_voltage(current) - rest) * (1 + change * (k / (n - 1) - 0.5))
        pairs.append((current, voltage + noise_mV * rng.standard_normal(len(current))))
    return recording_of(pairs)


@pytest.mark.parametrize(("drift_mV", "verdict"), [(2.5, "passed"), (-3.5, "caution")])
def test_drift_beyond_its_limit_is_a_caution(drift_mV: float, verdict: str) -> None:
    recording = rc_recording([-100] * 5)
    sweeps = tuple(
        replace(sweep, voltage=sweep.voltage + drift_mV * sweep.number / 4)
        for sweep in recording.sweeps
    )
    row = _rows(replace(recording, sweeps=sweeps))["baseline_drift"]
    assert row.verdict == verdict
    assert row.value.startswith(f"{drift_mV:.1f} mV".replace("-", "−"))
    assert ("sweeps=0-2" in row.command) is (verdict == "caution")


def test_values_by_sweep_are_those_of_the_cell() -> None:
    recording = rc_recording([-100, -100, -100, 50], series_MOhm=5)
    found = measured(recording)
    assert found.sweeps.tolist() == [0, 1, 2, 3]
    assert found.baseline_mV == pytest.approx(np.full(4, -70.0))
    # The RC cell: 100 MΩ, and the series jump on top.
    assert found.resistance_MOhm[:3] == pytest.approx(np.full(3, R_MOHM + 5), abs=0.1)
    assert np.isnan(found.resistance_MOhm[3])  # a step of another level does not recur
    assert found.series_MOhm == pytest.approx(np.full(4, 5.0), abs=0.1)
    assert found.level_nA == pytest.approx(-0.1)


def test_sweeps_stand_at_their_starts_where_all_are_stated() -> None:
    recording = rc_recording([-100] * 3)
    assert measured(recording).place.tolist() == [0, 1, 2]
    starts = (10.0, 12.0, 40.0)
    sweeps = tuple(
        replace(sweep, start_s=start) for sweep, start in zip(recording.sweeps, starts, strict=True)
    )
    assert measured(replace(recording, sweeps=sweeps)).place.tolist() == list(starts)
    half = (replace(sweeps[0], start_s=None), *sweeps[1:])
    assert measured(replace(recording, sweeps=half)).place.tolist() == [0, 1, 2]


@pytest.mark.parametrize(("change", "verdict"), [(0.12, "passed"), (-0.2, "caution")])
def test_a_change_of_resistance_beyond_its_limit_is_a_caution(change: float, verdict: str) -> None:
    row = _rows(_drifting(change))["resistance_drift"]
    assert row.verdict == verdict
    assert row.value.startswith(f"{100 * change:.0f} % (90 % interval".replace("-", "−"))
    assert "over sweeps 0–5, −100 pA, mean 100 MΩ" in row.value
    assert ("sweeps=0-2" in row.command) is (verdict == "caution")


def test_a_large_change_that_could_be_none_is_told_but_is_no_caution() -> None:
    """Steps during which the cell wanders by 3 mV, so that 100 MΩ are known to 30 MΩ a sweep."""
    recording = _drifting(0.0)
    wander = (-3.0, 3.0, -2.0, 2.5, -2.0, 3.0)
    step = np.abs(recording.sweeps[0].current) > 0
    sweeps = tuple(
        replace(sweep, voltage=sweep.voltage - mV * step)
        for sweep, mV in zip(recording.sweeps, wander, strict=True)
    )
    row = _rows(replace(recording, sweeps=sweeps))["resistance_drift"]
    assert float(row.value.split(" %")[0]) > 15
    assert row.verdict == "passed"
    assert row.advice == "a change of 15 % would not be seen with certainty"


def test_steps_with_spikes_and_steps_that_do_not_recur_are_not_used() -> None:
    recording = _drifting(-0.5, n=4)
    # A spike within the second before the step: only sweeps 2 and 3 are quiet.
    spiking = tuple(
        replace(sweep, spikes=np.array([500])) if sweep.number < 2 else sweep
        for sweep in recording.sweeps
    )
    row = _rows(replace(recording, sweeps=spiking))["resistance_drift"]
    assert (row.value.split(":")[0], row.verdict) == ("not measured", "passed")
    others = _rows(rc_recording([-100, -50, 50, 100]))["resistance_drift"]
    assert others.value.startswith("not measured")


def test_a_step_at_another_place_is_another_step() -> None:
    """Blind spot by design: resistances at different places are never compared."""
    pairs = [(current := step_current(-100), rc_voltage(current)) for _ in range(2)]
    for shift in (500, 1000):
        current = np.roll(step_current(-100), shift)
        pairs.append((current, rc_voltage(current)))
    found = measured(recording_of(pairs))
    assert np.isnan(found.resistance_MOhm).all()
    assert np.isnan(found.level_nA)


def test_of_steps_that_recur_as_often_the_largest_is_used() -> None:
    current = step_current(-100)
    current[8000:9500] = -0.02
    pairs = [(current, rc_voltage(current)) for _ in range(3)]
    assert measured(recording_of(pairs)).level_nA == pytest.approx(-0.1)


def test_drift_is_the_line_of_least_squares_with_its_t_interval() -> None:
    recording = rc_recording([-100] * 5)
    values = np.array([1.0, np.nan, 1.5, 2.5, 2.0])
    drift = drift_of(measured(recording), values, level=0.8)
    assert drift is not None
    slope, intercept = np.polyfit([0, 2, 3, 4], values[np.isfinite(values)], 1)
    assert (drift.slope, drift.intercept) == pytest.approx((slope, intercept))
    assert drift.change == pytest.approx(4 * slope)
    x = np.array([0, 2, 3, 4.0])
    residual = values[np.isfinite(values)] - intercept - slope * x
    error = np.sqrt(residual @ residual / 2 / np.sum((x - x.mean()) ** 2))
    half = stats.t.ppf(0.9, 2) * 4 * error
    assert (drift.lower, drift.upper) == pytest.approx((4 * slope - half, 4 * slope + half))
    assert drift_of(measured(recording), np.array([1, 2, np.nan, np.nan, np.nan])) is None


def test_the_real_cell_by_hand() -> None:
    recording = detect_spikes(read_recording(REAL_CELL), RecordingSection())
    # −100 pA from 1146.85 to 1646.85 ms in every sweep, 20 samples a ms; sweeps 0 (whose step is
    # longer) and 6 on (which spike in the step before) are of no use.
    start, stop = round(1146.85 * 20), round(1646.85 * 20)
    byhand = [
        (s.voltage[stop - 2000 : stop].mean() - s.voltage[start - 1000 : start].mean()) / -0.1
        for s in recording.sweeps[1:6]
    ]
    found = measured(recording)
    assert found.resistance_MOhm[1:6] == pytest.approx(byhand, abs=0.05)
    assert np.isnan(found.resistance_MOhm[[0, *range(6, 17)]]).all()
    slope, _ = np.polyfit(np.arange(5), byhand, 1)
    row = _rows(recording)["resistance_drift"]
    assert row.value.startswith(f"{100 * 4 * slope / np.mean(byhand):.0f} % (".replace("-", "−"))
    assert row.verdict == "passed"

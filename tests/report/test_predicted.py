from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from made_fit import step_recording

from bayesglm.checks.residuals import SweepRows
from bayesglm.inference.results import CellFit
from bayesglm.recording.settings import Settings
from bayesglm.recording.settings_input import override
from bayesglm.report import predicted


def rows_of(voltage: np.ndarray, kept: np.ndarray) -> SweepRows:
    sweep = step_recording().sweeps[0]
    return SweepRows(sweep, np.arange(len(voltage)) + 0.5, voltage, np.zeros(len(voltage)), kept)


def test_autocorrelation_is_that_of_the_noise_whatever_is_masked() -> None:
    rng = np.random.default_rng(0)
    noise = np.zeros(200_000)
    drive = rng.normal(size=len(noise))
    for i in range(1, len(noise)):
        noise[i] = 0.9 * noise[i - 1] + drive[i]
    kept = rng.random(len(noise)) > 0.3
    noise[~kept] = np.nan
    lags, found = predicted.residual_autocorrelation([noise], 1.0, 20.0)
    np.testing.assert_array_equal(lags, np.arange(21.0))
    np.testing.assert_allclose(found, 0.9**lags, atol=0.03)


def test_autocorrelation_agrees_with_a_plain_loop() -> None:
    rng = np.random.default_rng(1)
    sweeps = [rows_of(rng.normal(size=n), rng.random(n) > 0.2) for n in (60, 41)]
    _, found = predicted.residual_autocorrelation([s.residual for s in sweeps], 1.0, 5.0)
    for lag in range(6):
        pairs = [
            (s.residual[i], s.residual[i + lag])
            for s in sweeps
            for i in range(len(s.kept) - lag)
            if s.kept[i] and s.kept[i + lag]
        ]
        scale = np.mean([s.residual[i] ** 2 for s in sweeps for i in np.flatnonzero(s.kept)])
        assert found[lag] == pytest.approx(np.mean([a * b for a, b in pairs]) / scale)


def test_a_perfect_prediction_has_no_correlation() -> None:
    assert not predicted.residual_autocorrelation([np.zeros(50)], 1.0, 10.0)[1].any()


@pytest.mark.parametrize("drift", [True, False])
def test_offsets_and_drifts_of_sweeps_are_taken_out(drift: bool, fit: CellFit) -> None:
    """Measured: 3 mV and a line; what is left is closed form."""
    kept = np.arange(200) % 7 > 0
    slope = 0.01 * (np.arange(200) + 0.5)
    rows, empty = rows_of(3.0 + slope, kept), rows_of(slope, np.zeros(200, dtype=bool))
    least = replace(fit.calibration.fit, sweep_variances=np.array([0.1, 0.2 * drift]))
    drifting = replace(fit, calibration=replace(fit.calibration, fit=least))
    (found,) = predicted.centred_residuals([rows, empty], drifting)
    expected = np.zeros(200) if drift else slope - slope[kept].mean()
    np.testing.assert_allclose(found[kept], expected[kept], atol=1e-9)
    assert np.isnan(found[~kept]).all()
    plain = replace(fit, settings=override(Settings(), ["model.sweep_offsets=false"]))
    np.testing.assert_allclose(predicted.centred_residuals([rows], plain)[0], rows.residual)


def test_many_sweeps_are_thinned_and_wanted_ones_kept(
    fit: CellFit, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(predicted, "_MOST_SWEEPS", 3)
    assert list(predicted.predict_sweeps(fit, also=[(0, 1)])) == [(0, 0), (0, 1), (0, 4), (0, 8)]


def test_long_sweeps_are_cut(fit: CellFit, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(predicted, "_MOST_SAMPLES", 9 * 1000)
    for rows in predicted.predict_sweeps(fit).values():
        assert rows.sweep.n_samples == 1000
        assert len(rows.prediction) == 1000


def test_several_recordings_keep_their_places(fit: CellFit) -> None:
    recording = fit.recordings[0]
    twice = replace(fit, recordings=(recording, replace(recording, sweeps=recording.sweeps[:2])))
    found = predicted.predict_sweeps(twice)
    assert list(found)[-2:] == [(1, 0), (1, 1)]
    np.testing.assert_array_equal(found[(0, 1)].prediction, found[(1, 1)].prediction)


def test_cutting_drops_the_spikes_behind() -> None:
    sweep = step_recording().sweeps[-1]
    assert sweep.spikes is not None
    cut = predicted.cut_short(sweep, int(sweep.spikes[1]))
    assert cut.spikes is not None
    assert len(cut.spikes) == 1
    assert predicted.cut_short(sweep, 10**9) is sweep

"""A real cell under current steps: what was measured beforehand, and what the verdict says.

The recording is described in `tests/data/README.md`. Values "measured beforehand" stem from an
earlier program of ours, with hardly any smoothing and no sweep offsets: offset −60.9 ± 0.25 mV,
R_in 111 ± 6 MΩ, η(10, 30, 90, 200 ms) = −0.5, −4.3, −5.1, −1.4 ± 0.6 mV for all sweeps, and for
those from −100 to 25 pA an offset of −61.5 mV, R_in 100 ± 4 MΩ and 11.5 ± 4 MΩ in the electrode.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from bayesglm.features import reported_rows, resistance_row
from bayesglm.fitting.run import fit
from bayesglm.inference.results import CellFit
from bayesglm.inference.setup import make_digest, resolve_design
from bayesglm.likelihood.calibration import Calibration, calibrate
from bayesglm.likelihood.least_squares import noise_log_sd
from bayesglm.models.priors import weight_prior
from bayesglm.recording.reading import read_recording
from bayesglm.recording.recording import FloatArray, Recording
from bayesglm.recording.selection import parse_select, select
from bayesglm.recording.settings import Settings
from bayesglm.recording.settings_input import override
from bayesglm.recording.spikes import detect_spikes

FILE = Path(__file__).resolve().parents[1] / "data" / "cell_a_steps.csv.gz"
LAGS_MS = (10.0, 30.0, 90.0, 200.0)
SETTINGS = override(
    Settings(), ["kernels.input.duration_ms=400", "kernels.after_spike.duration_ms=300"]
)
NO_OFFSETS = override(SETTINGS, ["model.sweep_offsets=false"])


@pytest.fixture(scope="module")
def recording() -> Recording:
    return detect_spikes(read_recording(FILE), SETTINGS.recording)


@pytest.fixture(scope="module")
def subthreshold(recording: Recording) -> Recording:
    return select(recording, parse_select(["current=-100:25pA"]))


@pytest.fixture(scope="module")
def whole_fit(recording: Recording) -> CellFit:
    return fit(recording, SETTINGS)


def least_squares_of(
    recording: Recording, settings: Settings
) -> tuple[FloatArray, FloatArray, FloatArray, Calibration, float]:
    """Offset, electrode, R_in, η at the lags: estimates, calibrated and white sds; rms."""
    design = resolve_design((recording,), settings)
    digest, least = make_digest(
        (recording,), design, weight_prior(design, settings.priors), settings
    )
    rows = reported_rows(design, recording.step_ms, LAGS_MS)
    rows = np.insert(rows, 1, np.eye(design.n_weights)[1], axis=0)
    calibration = calibrate(digest, least, rows)
    covariance = least.basis @ calibration.covariance @ least.basis.T
    sd = np.sqrt(np.einsum("np,pq,nq->n", rows, covariance, rows))
    white = np.sqrt(np.einsum("np,pq,nq->n", rows, least.white_covariance, rows))
    return rows @ least.weights, sd, white, calibration, np.exp(noise_log_sd(digest, least)[0])


def test_recording_is_as_described(recording: Recording) -> None:
    assert (len(recording.sweeps), recording.n_spikes, recording.step_ms) == (17, 117, 0.05)


def test_least_squares_agree_with_what_was_measured_beforehand(recording: Recording) -> None:
    """Calibrated least squares without sweep offsets; white sds are several times smaller."""
    found, sd, white, calibration, _ = least_squares_of(recording, NO_OFFSETS)
    names = ["offset", "electrode", "R", "η(10)", "η(30)", "η(90)", "η(200)"]
    expected = dict(zip(names, [-60.9, 11.0, 111.0, -0.5, -4.3, -5.1, -1.4], strict=True))
    within = dict(zip(names, [0.1, 4.0, 4.0, 0.3, 0.15, 0.15, 0.15], strict=True))
    for k, name in enumerate(names):
        assert found[k] == pytest.approx(expected[name], abs=within[name]), name
    assert sd[[0, 3, 4, 5, 6]] == pytest.approx([0.25, 0.6, 0.6, 0.6, 0.6], rel=0.3)
    assert np.all(sd[[0, 4, 5, 6]] / white[[0, 4, 5, 6]] > 5)
    # How the fast part is shared with the electrode is uncertain under white noise too.
    assert sd[2] / white[2] > 1.1
    squares = {name: ratio**2 for name, ratio in calibration.ratio.items()}
    # Measured beforehand 1.8 and 3.8, with other smoothing.
    assert 1.2 < squares["input"] < 2.2
    assert 3.5 < squares["after_spike"] < 6.5


def test_sweep_offsets_pull_the_level_towards_the_quiet_sweeps(recording: Recording) -> None:
    """Spiking sweeps pull the common level up; offsets of their own let it go, a little."""
    with_offsets = least_squares_of(recording, SETTINGS)[0]
    without = least_squares_of(recording, NO_OFFSETS)[0]
    assert -61.5 < with_offsets[0] < without[0] < -60.8
    np.testing.assert_allclose(with_offsets[3:], without[3:], atol=0.3)


@pytest.mark.parametrize("settings", [SETTINGS, NO_OFFSETS], ids=["offsets", "no offsets"])
def test_subthreshold_sweeps(subthreshold: Recording, settings: Settings) -> None:
    """−100 … 25 pA: rms 0.55–0.59 mV, offset −61.5 mV, R_in 100 ± 4, electrode 11.5 ± 4 MΩ."""
    found, sd, _, calibration, rms = least_squares_of(subthreshold, settings)
    assert (len(subthreshold.sweeps), subthreshold.n_spikes) == (6, 0)
    assert 0.55 < rms < 0.595
    assert found[0] == pytest.approx(-61.5, abs=0.05)
    assert found[1] == pytest.approx(11.5, abs=1.0)
    assert found[2] == pytest.approx(100.0, abs=1.0)
    assert 1.0 < sd[2] < 5.0
    assert calibration.ratio["input"] < 1.5


def test_posterior_agrees_within_its_uncertainty(whole_fit: CellFit) -> None:
    """It is smoother and wider than least squares; both contain what was measured beforehand."""
    band = whole_fit.kernel("after_spike")
    for lag, expected in zip(LAGS_MS, [-0.5, -4.3, -5.1, -1.4], strict=True):
        at = int(np.argmin(np.abs(band.lags_ms - lag)))
        assert abs(band.mean[at] - expected) < 2 * np.hypot(band.sd[at], 0.6), lag
        assert 0.3 < band.sd[at] < 1.5
        white = (band.white_upper[at] - band.white_lower[at]) / 2 / 1.645
        assert band.sd[at] > 4 * white
    for name, expected, sd in (("offset", -60.9, 0.25), ("input_resistance", 111.0, 6.0)):
        feature = whole_fit.feature(name)
        assert abs(feature.mean - expected) < 2 * np.hypot(feature.sd, sd), name


def test_subthreshold_posterior_agrees_within_its_uncertainty(subthreshold: Recording) -> None:
    found = fit(subthreshold, SETTINGS)
    assert "after_spike" not in found.kernels
    values = {
        "offset": (-61.5, 0.1),
        "input_resistance": (100, 4),
        "electrode_resistance": (11.5, 4),
    }
    for name, (expected, sd) in values.items():
        feature = found.feature(name)
        assert abs(feature.mean - expected) < 2 * np.hypot(feature.sd, sd), name
    # How the fast part is shared between κ and electrode is uncertain; their sum is less so.
    weights = found.weights.reshape(-1, found.design.n_weights)
    resistance = weights @ resistance_row(found.design, 0.05)
    total = resistance + weights[:, found.design.columns["electrode"].start]
    assert total.std() < resistance.std()
    assert abs(total.mean() - 111.7) < 2 * total.std()


def test_verdict_is_caution_because_eta_depends_on_the_drive(whole_fit: CellFit) -> None:
    """Beforehand: η(30) = −0.1 mV at 50–125 pA, −4.2 at 150–225, −5.3 at 250–300 pA."""
    assert whole_fit.verdict.verdict == "caution"
    reasons = {reason.check: reason for reason in whole_fit.verdict.reasons}
    drive = reasons["drive_split_after_spike"]
    assert drive.verdict == "caution"
    assert all(label in drive.value for label in ("50–125 pA", "150–225 pA", "250–300 pA"))
    assert drive.command.startswith("bayesglm ")
    assert reasons["calibration_ratio_after_spike"].verdict == "caution"
    ranges = whole_fit.splits["after_spike"].ranges
    for one, expected in zip(ranges, [-0.1, -4.2, -5.3], strict=True):
        mean, sd = one.features["after_spike_at_30ms"]
        assert abs(mean - expected) < 2 * np.hypot(sd, 0.6)
    at_30ms = whole_fit.feature("after_spike_at_30ms")
    assert at_30ms.protocol_upper > -1.0
    assert at_30ms.protocol_lower < -5.0
    assert 2.0 < at_30ms.between_range_sd < 4.0


def test_odd_and_even_sweeps_agree(whole_fit: CellFit) -> None:
    """Neighbouring sweeps share a level: the split by drive sees what this one cannot."""
    reasons = {reason.check: reason for reason in whole_fit.verdict.reasons}
    assert reasons["odd_even_after_spike"].verdict == "passed"
    assert reasons["odd_even_input"].verdict == "passed"


def test_odd_and_even_estimates(recording: Recording) -> None:
    """Beforehand: η(30) = −4.2 mV from the odd sweeps, −4.4 mV from the even ones."""
    for selection, expected in {
        "sweeps=" + ",".join(str(k) for k in range(0, 17, 2)): -4.4,
        "sweeps=" + ",".join(str(k) for k in range(1, 17, 2)): -4.2,
    }.items():
        half = select(recording, parse_select([selection]))
        found = least_squares_of(half, NO_OFFSETS)[0]
        assert found[4] == pytest.approx(expected, abs=0.4)

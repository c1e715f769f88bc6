"""The grid of durations: columns that stay are kernels that end, held-out errors are those of a
slow twin, and what is found agrees with cells of known durations.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from simulated_cells import (
    STEP_MS,
    arbitrary_recording,
    matrix_digest,
    neuron,
    plain_design,
    recording_of_noise,
)
from threadpoolctl import threadpool_limits

from bayesglm.checks import durations
from bayesglm.checks.durations import (
    duration_grid,
    hold_out_groups,
    kept_columns,
    knots_ms,
    longest_design,
)
from bayesglm.features import linear_features
from bayesglm.inference.sensitivity import DurationGrid
from bayesglm.inference.setup import make_digest
from bayesglm.kernels.basis import KernelSpec
from bayesglm.kernels.design import VoltageDesign
from bayesglm.likelihood.calibration import Calibration, calibrate
from bayesglm.likelihood.digest import VoltageDigest
from bayesglm.likelihood.least_squares import correlation_time_ms
from bayesglm.likelihood.reference import recording_rows, whitened
from bayesglm.models.cell import voltage_evidence, weight_moments
from bayesglm.models.priors import WeightPrior, weight_prior
from bayesglm.recording.recording import Recording
from bayesglm.recording.settings import Settings

CHOSEN = VoltageDesign(KernelSpec(100.0), KernelSpec(300.0))


@pytest.mark.parametrize("chosen_ms", [50.0, 105.0, 185.0, 273.0, 399.0, 400.0, 700.0])
def test_the_chosen_duration_is_a_knot_and_the_last_is_the_longest(chosen_ms: float) -> None:
    spec = longest_design(replace(CHOSEN, input=KernelSpec(chosen_ms)), 2000.0).input
    knots = knots_ms(spec)
    assert np.abs(knots - chosen_ms).min() < 0.01 * chosen_ms
    assert knots[-1] == pytest.approx(max(400.0, chosen_ms))
    assert knots[0] == 0


def test_short_sweeps_leave_no_room() -> None:
    assert longest_design(CHOSEN, 150.0).input.duration_ms == 150
    after = longest_design(CHOSEN, 150.0).after_spike
    assert after is not None
    assert after.duration_ms == 300


@pytest.mark.parametrize("n", [8, 14, 20])
def test_kept_splines_end_smoothly_at_their_knot(n: int) -> None:
    """Value, slope and curvature are zero there; one spline more reaches beyond."""
    spec = longest_design(CHOSEN, 2000.0).input
    end = knots_ms(spec)[n]
    lags = np.linspace(0.001, spec.duration_ms, 20_001)
    values = spec.evaluate(lags)
    beyond = lags >= end
    assert np.all(values[beyond][:, :n] == 0)
    assert np.all(values[(lags > 0.93 * end) & ~beyond].sum(axis=1) > 0)
    if n < spec.weights - 2:
        assert np.any(values[beyond][:, n] > 0)
    step = 1e-3 * end
    before = spec.evaluate(end - step * np.array([3.0, 2.0, 1.0]))[:, :n]
    # Cubic at the end: the value a step before is of the order of the step cubed.
    assert np.abs(before[-1]).max() < 1e-4 * before.max(initial=1.0)


def test_columns_that_stay() -> None:
    design = VoltageDesign(KernelSpec(100.0, 6), KernelSpec(100.0, 5))
    assert kept_columns(design, [4, 2]).tolist() == [0, 1, 2, 3, 4, 5, 8, 9]


def made(
    recording: Recording, room_ms: float = 2000.0
) -> tuple[VoltageDigest, Calibration, WeightPrior, DurationGrid]:
    design = longest_design(CHOSEN, room_ms)
    prior = weight_prior(design, Settings().priors)
    rows = linear_features(design, STEP_MS, (30.0,))
    with threadpool_limits(1, user_api="blas"):
        digest, least = make_digest((recording,), design, prior, Settings())
        calibration = calibrate(digest, least, np.array([*rows.values()]))
        grid = duration_grid(digest, calibration, prior, CHOSEN, rows)
    assert grid is not None
    return digest, calibration, prior, grid


@pytest.fixture(scope="module")
def linear(
    linear_recording: Recording,
) -> tuple[VoltageDigest, Calibration, WeightPrior, DurationGrid]:
    return made(linear_recording)


def test_shape_of_the_grid(
    linear: tuple[VoltageDigest, Calibration, WeightPrior, DurationGrid],
) -> None:
    grid = linear[-1]
    assert grid.held_out_mV2.shape == (6, 6)
    assert grid.input_ms[grid.chosen[0]] == pytest.approx(100.0)
    assert grid.after_spike_ms[grid.chosen[1]] == pytest.approx(300.0)
    assert grid.named(grid.chosen) == "100/300 ms"
    assert 40 < grid.input_ms[0] < 60
    assert (grid.input_ms[-1], grid.after_spike_ms[-1]) == pytest.approx((400, 400))
    assert grid.held_out_se_mV2[grid.best] == 0
    assert grid.as_good[grid.best]
    assert grid.folds == 10


def test_a_cell_of_known_durations(
    linear: tuple[VoltageDigest, Calibration, WeightPrior, DurationGrid],
) -> None:
    """Truth: τ 20 ms, so that 50 ms is too short; η lasts 300 ms with 1/50 of it left at 150."""
    grid = linear[-1]
    assert not grid.as_good[0].any()
    assert not grid.as_good[:, :2].any()
    assert np.all(grid.excess_mV2[0] > 3 * grid.held_out_se_mV2[0])
    mean, sd = grid.features["input_resistance"]
    assert np.all(np.abs(mean[grid.as_good] - 100) < 3 * sd[grid.as_good])
    # What is cut off is missing from the area: 100 MΩ times 1 − exp(−50/20) = 92 at most.
    assert np.all(mean[0] < 94)
    # A longer kernel is less certain.
    assert sd[-1, grid.chosen[1]] > 1.3 * sd[grid.chosen]


def test_held_out_errors_are_those_of_a_slow_twin(monkeypatch: pytest.MonkeyPatch) -> None:
    """Row by row from the reference design matrix: leave a sweep out, ridge, predict it."""
    monkeypatch.setattr(durations, "_MOST", 3)
    recording = recording_of_noise(neuron(), seed=3, n_sweeps=4, seconds=0.5)
    digest, calibration, prior, grid = made(recording, room_ms=200.0)
    apart = max(1.0, 2 * correlation_time_ms(digest, calibration.fit) / digest.design.row_ms)
    tempered = calibration.fit.residual_variance * apart
    place = (1, 1)
    ends = (grid.input_ms[place[0]], grid.after_spike_ms[place[1]])
    splines = [
        int(np.argmin(np.abs(knots_ms(spec) - end)))
        for spec, end in zip(digest.design.kernels.values(), ends, strict=True)
    ]
    columns = kept_columns(digest.design, splines)
    q = prior.precision(prior.sd_scale)
    pulled, precision = (q @ prior.mean)[columns], q[np.ix_(columns, columns)]
    total = 0.0
    with threadpool_limits(1, user_api="blas"):
        rows = recording_rows(recording, digest.design)
        # Each sweep's offset integrated out: rows times (I + ρ 1 1ᵀ)^(−1/2).
        x, v = whitened(rows, calibration.fit.sweep_ratios)
        for left_out in np.unique(rows.sweep):
            held = rows.sweep == left_out
            a = x[~held][:, columns]
            h = a.T @ a / tempered + precision
            weights = np.linalg.solve(h, a.T @ v[~held] / tempered + pulled)
            total += np.sum((v[held] - x[held][:, columns] @ weights) ** 2)
    assert grid.held_out_mV2[place] == pytest.approx(total / len(v), rel=1e-6)


def test_features_of_all_columns_are_those_of_the_fit(
    linear: tuple[VoltageDigest, Calibration, WeightPrior, DurationGrid],
) -> None:
    """With nothing dropped the read-out is `weight_moments` of the calibrated digest."""
    digest, calibration, prior, _ = linear
    sd = prior.sd_scale
    rows = np.array([*linear_features(digest.design, STEP_MS, (30.0,)).values()])
    every = np.arange(digest.design.n_weights)
    found = durations._read(digest, calibration, prior.mean, prior.precision(sd), [every], rows)[
        :, :, 0
    ]
    fit = calibration.fit
    evidence = voltage_evidence(fit.weights, calibration.precision, fit.rank, 1.0, prior)
    mean, covariance = weight_moments(evidence, prior, sd)
    # Directions that are hardly excited at all may be kept by one and dropped by the other.
    np.testing.assert_allclose(found[:, 0], rows @ mean, rtol=1e-4)
    np.testing.assert_allclose(
        found[:, 1], np.sqrt(np.einsum("fp,pq,fq->f", rows, covariance, rows)), rtol=0.02
    )


def test_without_spikes_there_is_one_column() -> None:
    quiet = recording_of_noise(neuron(threshold_mV=100.0), seed=4, n_sweeps=5, seconds=2.0)
    chosen = replace(CHOSEN, after_spike=None)
    design = longest_design(chosen, 1000.0)
    prior = weight_prior(design, Settings().priors)
    digest, least = make_digest((quiet,), design, prior, Settings())
    rows = linear_features(design, STEP_MS, ())
    grid = duration_grid(digest, calibrate(digest, least, np.array([*rows.values()])), prior,
                         chosen, rows)  # fmt: skip
    assert grid is not None
    assert grid.held_out_mV2.shape == (6, 1)
    assert grid.named(grid.chosen) == "100 ms"


def test_one_unit_cannot_be_held_out() -> None:
    recording = arbitrary_recording(STEP_MS, (3000,))
    design = longest_design(CHOSEN, 750.0)
    prior = weight_prior(design, Settings().priors)
    digest, least = make_digest((recording,), design, prior, Settings())
    one = replace(digest, stimulus=np.zeros(digest.n_units, dtype=np.int64))
    calibration = calibrate(digest, least, np.empty((0, design.n_weights)))
    assert duration_grid(one, calibration, prior, CHOSEN, {}) is None


def units(n: int, sweep: list[int], stimulus: list[int]) -> VoltageDigest:
    x = np.column_stack([np.ones(20 * n), np.arange(20.0 * n), np.arange(20.0 * n) ** 2])
    digest = matrix_digest(x, x[:, 1], n, plain_design(1 + 4, electrode=True))
    return replace(digest, sweep=np.array(sweep), stimulus=np.array(stimulus))


def test_sweeps_are_held_out_whole_and_repeats_together() -> None:
    digest = units(10, [0, 0, 1, 1, 2, 2, 3, 3, 4, 4], [1, 2, 3, 4, 5, 6, 7, 8, 1, 2])
    groups, folds = hold_out_groups(digest)
    assert groups.tolist() == [0, 0, 1, 1, 2, 2, 3, 3, 0, 0]
    assert folds.tolist() == groups.tolist()


def test_one_long_sweep_is_held_out_in_runs_of_blocks() -> None:
    digest = units(24, [0] * 24, list(range(24)))
    groups, folds = hold_out_groups(digest)
    assert groups.tolist() == list(range(24))
    assert np.all(np.diff(folds) >= 0)
    assert np.unique(folds).tolist() == list(range(10))


def test_neighbours_of_blocks_that_are_held_out_are_not_fitted() -> None:
    sweep = np.array([0, 0, 0, 0, 1, 1, 1])
    held = np.array([0, 0, 0, 1, 0, 0, 0], dtype=bool)
    assert durations._to_fit(sweep, held).tolist() == [0, 1, 4, 5, 6]
    held = np.array([0, 1, 0, 0, 0, 0, 0], dtype=bool)
    assert durations._to_fit(sweep, held).tolist() == [3, 4, 5, 6]

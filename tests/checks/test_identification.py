"""What a design can say of the kernels: against a dense slow twin, and each row's three cases."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from numpy.typing import NDArray
from simulated_cells import STEP_MS, coloured_current, neuron, recording_of_noise, steps_current

from bayesglm.checks.identification import (
    NOISE_MS,
    NOISE_MV,
    Identification,
    design_rows,
    identification,
)
from bayesglm.checks.simulation import Noise, simulate
from bayesglm.inference.setup import resolve_design
from bayesglm.likelihood.voltage import kept_rows, voltage_digest
from bayesglm.models.priors import weight_prior
from bayesglm.recording.recording import Recording, TimeJump
from bayesglm.recording.settings import Settings
from bayesglm.verdict import Reason

FloatArray = NDArray[np.float64]

SETTINGS = Settings.model_validate(
    {"kernels": {"input": {"duration_ms": 100}, "after_spike": {"duration_ms": 150}}}
)


def _under(current: FloatArray, threshold_mV: float = 0.0) -> Recording:
    """A cell under a current, shape (n_sweeps, n); it does not spike unless told to."""
    cell = neuron(threshold_mV=threshold_mV)
    return simulate(cell, current, STEP_MS, np.random.default_rng(1), "simulated")


def _rows(*recordings: Recording, settings: Settings = SETTINGS) -> dict[str, Reason]:
    return {row.check: row for row in design_rows(recordings, settings)}


def _noise(sd_nA: float = 0.1, n_sweeps: int = 12, seconds: float = 1.0) -> Recording:
    rng = np.random.default_rng(2)
    return _under(coloured_current(rng, n_sweeps, seconds, 0.05, sd_nA))


@pytest.mark.parametrize("offsets", [True, False])
def test_the_ratio_equals_that_of_dense_algebra(offsets: bool) -> None:
    """Slow twin: every column at full length, sweeps centred by hand, weights' covariances."""
    recording = recording_of_noise(neuron(), 3, n_sweeps=2, seconds=1.0)
    assert recording.n_spikes
    design = resolve_design([recording], SETTINGS)
    prior = weight_prior(design, SETTINGS.priors)
    found = identification(voltage_digest([recording], design, None), prior, offsets)

    total = np.zeros((design.n_weights, design.n_weights))
    after_spike = design.after_spike
    assert after_spike is not None
    for sweep in recording.sweeps:
        n = sweep.n_samples
        x = np.zeros((n, design.n_weights))
        x[:, design.columns["offset"]] = 1.0
        x[:, design.columns["electrode"]] = sweep.current[:, None]
        long = np.concatenate([np.full(400, sweep.current[0]), sweep.current])
        for k, values in enumerate(design.input.evaluate(design.input.lags(STEP_MS)).T):
            column = STEP_MS * np.convolve(long, np.concatenate([[0], values]))[400 : 400 + n]
            x[:, design.columns["input"].start + k] = column
        train = np.zeros(n)
        train[sweep.spikes] = 1.0
        for k, values in enumerate(after_spike.evaluate(after_spike.lags(STEP_MS)).T):
            column = np.convolve(train, np.concatenate([[0], values]))[:n]
            x[:, design.columns["after_spike"].start + k] = column
        x = x[kept_rows(sweep, design, STEP_MS, 1)]
        if offsets:
            x = x - x.mean(axis=0)
        total += x.T @ x
    data = total / (NOISE_MV**2 * 2 * NOISE_MS / STEP_MS)
    before = np.linalg.inv(prior.precision(prior.sd_scale))
    after = np.linalg.inv(prior.precision(prior.sd_scale) + data)
    for name, spec in design.kernels.items():
        basis, place = spec.evaluate(found[name].lags_ms), design.columns[name]
        ratio = [
            np.sqrt((b @ after[place, place] @ b) / (b @ before[place, place] @ b)) for b in basis
        ]
        assert found[name].ratio == pytest.approx(ratio, rel=1e-5)
        shrinkage = np.diag(after @ data)[place].sum()
        assert found[name].dimension == pytest.approx(shrinkage, rel=1e-5)
    assert found["input"].lags_ms[0] == 1
    assert found["input"].lags_ms[-1] == 99
    assert found["after_spike"].lags_ms[0] == 6  # the spike window is 5 ms


def test_the_voltage_has_no_part_in_it() -> None:
    recording = _noise()
    other = tuple(replace(sweep, voltage=sweep.voltage * 3 + 7) for sweep in recording.sweeps)
    assert _rows(recording) == _rows(replace(recording, sweeps=other))


def test_share_is_that_of_lags_below_the_limit() -> None:
    lags, ratio = np.arange(4.0), np.array([0.1, 0.79, 0.81, 1.0])
    assert Identification(lags, ratio, 2.0, 14).share == 0.5
    assert Identification(lags[:0], ratio[:0], 0.0, 14).share == 0.0


def test_fluctuating_current_with_spikes_identifies_both_kernels() -> None:
    rows = _rows(recording_of_noise(neuron(), 3, n_sweeps=10, seconds=2.0))
    assert {row.verdict for row in rows.values()} == {"passed"}
    assert "100 % of lags from 1 to 99 ms, set by the data" in rows["identifies_input"].value
    assert "% of lags from 6 to 149 ms" in rows["identifies_after_spike"].value
    assert not any(row.advice or row.command for row in rows.values())


def test_a_ramp_tells_resistance_and_no_shape() -> None:
    ramp = _under(np.tile(np.linspace(0, 0.1, 4000), (12, 1)))
    row = _rows(ramp)["identifies_input"]
    assert row.verdict == "caution"
    assert row.advice.startswith("most of its shape would be set by the prior")
    assert row.command == "bayesglm check simulated"
    steps = _under(steps_current(np.linspace(-0.1, 0.1, 12)))
    assert _rows(steps)["identifies_input"].verdict == "passed"


@pytest.mark.parametrize(
    ("sd_pA", "lags", "verdict"), [(0.3, "100 % of lags", "caution"), (0.02, "0 % of", "failed")]
)
def test_a_current_that_drowns_in_the_noise(sd_pA: float, lags: str, verdict: str) -> None:
    """The sd lag by lag is lenient: 0.3 pA bring it below 0.8 of the prior's at every lag."""
    row = _rows(_noise(sd_nA=sd_pA * 1e-3))["identifies_input"]
    assert lags in row.value
    assert row.verdict == verdict
    whole = "most of its shape" if verdict == "caution" else "the kernel"
    assert row.advice.startswith(f"{whole} would be set by the prior")


def test_blind_spot_more_noise_than_the_nominal_one() -> None:
    """The voltage is not looked at: a cell with noise of 20 mV passes like a quiet one."""
    cell = neuron(noise=Noise((20.0,), (15.0,)), threshold_mV=1000)
    rng = np.random.default_rng(2)
    current = coloured_current(rng, 12, 1.0, 0.05, 0.01)
    loud = simulate(cell, current, STEP_MS, rng, "loud")
    assert _rows(loud)["identifies_input"].verdict == "passed"


def test_without_spikes_the_after_spike_kernel_is_not_judged() -> None:
    row = _rows(_noise())["identifies_after_spike"]
    assert (row.value, row.verdict) == ("not judged: no spikes", "passed")


def test_one_spike_tells_less_than_many() -> None:
    recording = recording_of_noise(neuron(), 3, n_sweeps=10, seconds=2.0)
    found = []
    for used in (1, 10):
        sweeps = tuple(
            replace(sweep, spikes=np.array([1000] if k < used else [], dtype=np.int64))
            for k, sweep in enumerate(recording.sweeps)
        )
        value = _rows(replace(recording, sweeps=sweeps))["identifies_after_spike"].value
        found.append(float(value.split(" of ")[0]))
    assert found[0] < found[1]


@pytest.mark.parametrize("defect", ["voltage", "current", "jump", "constant"])
def test_what_cannot_be_fitted_is_not_judged(defect: str) -> None:
    recording = _noise()
    sweep = recording.sweeps[3]
    if defect == "jump":
        broken = replace(sweep, jumps=(TimeJump(9, 7, 3.5, 9.0),))
    elif defect == "constant":
        still = tuple(replace(s, current=np.full(s.n_samples, 0.1)) for s in recording.sweeps)
        recording, broken = replace(recording, sweeps=still), still[3]
    else:
        values = getattr(sweep, defect).copy()
        values[5] = np.nan
        broken = replace(sweep, **{defect: values})
    sweeps = (*recording.sweeps[:3], broken, *recording.sweeps[4:])
    rows = _rows(replace(recording, sweeps=sweeps))
    why = "the current is constant" if defect == "constant" else "missing values or jumps in time"
    assert {row.value for row in rows.values()} == {f"not judged: {why}"}
    assert {row.verdict for row in rows.values()} == {"passed"}


def test_a_kernel_longer_than_the_sweeps_is_told_not_raised() -> None:
    settings = Settings.model_validate({"kernels": {"input": {"duration_ms": 5000}}})
    row = _rows(_noise(), settings=settings)["identifies_input"]
    assert row.value.startswith("not judged: simulated: kernels.input.duration_ms is 5000 ms")


@pytest.mark.parametrize("n_samples", [3, 30, 99])
def test_sweeps_too_short_for_a_kernel_are_not_judged(n_samples: int) -> None:
    current = np.arange(n_samples, dtype=np.float64)[None] * 0.01
    rows = design_rows([_under(current)], Settings())
    assert {row.value for row in rows} == {"not judged: no sweep lasts 50 ms"}


@pytest.mark.parametrize(
    ("n_sweeps", "verdict", "value", "advice"),
    [
        (12, "passed", "12 sweeps", ""),
        (9, "caution", "9 sweeps", "record at least 1 more sweep, 1.5 s"),
        (3, "caution", "3 sweeps", "7 more sweeps, 10 s; with fewer than 4 a fit is judged failed"),
    ],
)
def test_few_sweeps_of_steps(n_sweeps: int, verdict: str, value: str, advice: str) -> None:
    levels = np.linspace(-0.1, -0.02, n_sweeps)
    row = _rows(_under(steps_current(levels)))["few_sweeps"]
    assert (row.value, row.verdict) == (value, verdict)
    assert row.advice.endswith(advice)


def test_long_sweeps_of_fluctuating_current_are_counted_in_blocks() -> None:
    row = _rows(_noise(n_sweeps=2, seconds=6.0))["few_sweeps"]
    assert (row.value, row.verdict) == ("12 blocks of 1 s", "passed")
    few = _rows(_noise(n_sweeps=2, seconds=3.0))["few_sweeps"]
    assert (few.value, few.verdict) == ("6 blocks of 1 s", "caution")
    assert few.advice.endswith("record at least 4 s")


def test_repeats_count_once() -> None:
    once = _noise(n_sweeps=6)
    current = np.concatenate([[sweep.current for sweep in once.sweeps]] * 2)
    row = _rows(_under(current))["few_sweeps"]
    assert (row.value, row.verdict) == ("12 sweeps, 6 different currents", "caution")
    assert "of other currents" in row.advice


def test_recordings_of_one_cell_are_judged_together() -> None:
    first = _noise(n_sweeps=6)
    second = _under(coloured_current(np.random.default_rng(9), 6, 1.0, 0.05, 0.1))
    assert _rows(first)["few_sweeps"].verdict == "caution"
    both = _rows(first, replace(second, name="second"))
    assert (both["few_sweeps"].verdict, both["few_sweeps"].value) == ("passed", "12 sweeps")

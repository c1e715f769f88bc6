"""The streamed digest against plain loops over samples, and what goes into it."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import pytest
from simulated_cells import arbitrary_recording

from bayesglm.errors import InputError
from bayesglm.kernels.basis import KernelSpec
from bayesglm.kernels.design import VoltageDesign, electrode_spec, filter_rows
from bayesglm.likelihood import chunks, reference, voltage
from bayesglm.likelihood.digest import BAND_EDGES_HZ, VoltageDigest
from bayesglm.likelihood.voltage import (
    common_current,
    kept_rows,
    predict_rows,
    refuse_long_kernels,
    row_digest,
    voltage_digest,
)
from bayesglm.recording.recording import Recording, Sweep


@dataclass(frozen=True)
class Case:
    """A recording's step, its sweeps and how it is reduced."""

    step_ms: float
    row_ms: float
    lengths: tuple[int, ...]
    n_blocks: int = 1
    masked: bool = True
    electrode: bool = True
    after_spike: bool = True
    drift: bool = False
    electrode_ms: float = 0.0

    @property
    def design(self) -> VoltageDesign:
        """A short kernel of each kind, for the sake of the plain loops."""
        unit = 30 * self.step_ms
        after = KernelSpec(1.4 * unit, 5, warp_ms=unit) if self.after_spike else None
        window = (-2 * self.step_ms, 4 * self.step_ms)
        return VoltageDesign(
            KernelSpec(unit, 6, warp_ms=unit),
            after,
            electrode=self.electrode,
            row_ms=self.row_ms,
            spike_window_ms=window,
            drift=self.drift,
            electrode_kernel=(
                electrode_spec(self.electrode_ms, self.step_ms) if self.electrode_ms else None
            ),
        )

    @property
    def recording(self) -> Recording:
        return arbitrary_recording(self.step_ms, self.lengths, masked=self.masked)

    @property
    def block_ms(self) -> float | None:
        """Such that the shortest and the longest sweep are cut into `n_blocks`."""
        return None if self.n_blocks == 1 else min(self.lengths) * self.step_ms / self.n_blocks


CASES = {
    "20 kHz, ten samples a row": Case(0.05, 0.5, (2003, 1500, 1017)),
    "10 kHz": Case(0.1, 0.5, (1204, 777)),
    "three samples a row": Case(0.2, 0.6, (1003, 800, 601, 500)),
    "one sample a row": Case(0.5, 0.5, (900, 700)),
    "blocks": Case(0.25, 0.5, (1600, 1600), n_blocks=4),
    "no mask": Case(0.25, 0.5, (600, 601), masked=False),
    "no electrode": Case(0.25, 0.5, (600, 601), electrode=False),
    "no after-spike kernel": Case(0.25, 0.5, (600, 601), after_spike=False),
    "drift": Case(0.25, 0.5, (1600, 1600), n_blocks=3, drift=True),
    "an electrode that charges": Case(0.1, 0.5, (1203, 800), electrode_ms=0.7),
    "longer than a chunk": Case(0.5, 0.5, (9003,)),
}


@pytest.fixture(params=CASES.values(), ids=CASES.keys())
def case(request: pytest.FixtureRequest) -> Case:
    """Each case in turn."""
    found: Case = request.param
    return found


def scaled_difference(found: np.ndarray, expected: np.ndarray) -> float:
    """Largest difference of Gram matrices in units of the columns' norms over all units."""
    norms = np.sqrt(np.diagonal(expected.sum(axis=0)))
    return float(np.max(np.abs(found - expected) / np.outer(norms, norms)))


def test_gram_matrices_equal_those_of_plain_loops(case: Case) -> None:
    """Every unit's Σzzᵀ with z = (x, v): design, masks, spike windows, row averages, units."""
    digest = voltage_digest((case.recording,), case.design, case.block_ms)
    rows = reference.recording_rows(case.recording, case.design, case.n_blocks)
    expected = np.array([reference.unit_gram(rows, unit) for unit in np.unique(rows.unit)])
    assert digest.sums.shape == expected.shape
    assert scaled_difference(digest.sums, expected) < 1e-12


def test_predictions_equal_the_plain_columns_times_weights(case: Case) -> None:
    recording, design = case.recording, case.design
    weights = np.random.default_rng(3).normal(size=(design.n_weights, 2))
    m = design.samples_per_row(case.step_ms)
    for sweep in recording.sweeps[:2]:
        columns = reference.sample_columns(sweep, design, case.step_ms)
        n_rows = sweep.n_samples // m
        expected = (columns[: n_rows * m] @ weights).reshape(n_rows, m, 2).mean(axis=1)
        found = predict_rows(sweep, design, case.step_ms, weights)
        np.testing.assert_allclose(found, expected, atol=1e-11)


def test_bands_are_the_gram_matrix_split_by_frequency() -> None:
    """Source: numpy's Fourier transform of the whole unit, zeros where rows are masked."""
    case = CASES["10 kHz"]
    recording, design = case.recording, case.design
    digest = voltage_digest((recording,), design, None)
    np.testing.assert_allclose(digest.bands.sum(axis=1), digest.gram, rtol=1e-9, atol=1e-9)
    sweep = recording.sweeps[0]
    columns = reference.sample_columns(sweep, design, case.step_ms)
    z = np.column_stack([columns, np.nan_to_num(sweep.voltage)])
    z = z[: sweep.n_samples // 5 * 5].reshape(-1, 5, z.shape[1]).mean(axis=1)
    z[~kept_rows(sweep, design, case.step_ms, 5)] = 0.0
    spectrum = np.fft.fft(z, n=8192, axis=0)
    frequency = np.abs(np.fft.fftfreq(8192, 0.5e-3))
    band = np.searchsorted(BAND_EDGES_HZ, frequency, side="right")
    for f in range(len(BAND_EDGES_HZ) + 1):
        part = spectrum[band == f]
        expected = (part.conj().T @ part).real / 8192
        np.testing.assert_allclose(digest.bands[0, f], expected, rtol=1e-8, atol=1e-8)
        assert digest.band_share[0, f] == pytest.approx(np.mean(band == f))


@pytest.mark.parametrize("frequency_Hz", [10.0, 100.0])
def test_a_sine_falls_into_the_band_of_its_frequency(frequency_Hz: float) -> None:
    n = 8192
    v = np.sin(2 * np.pi * frequency_Hz * np.arange(n) * 0.5e-3)
    design = VoltageDesign(KernelSpec(20.0, 5), None, electrode=False)
    digest = row_digest(np.ones((n, 1)), v, np.zeros(n, int), np.zeros(n, int), design)
    power = digest.bands[0, :, -1, -1] / digest.gram[0, -1, -1]
    assert power[np.searchsorted(BAND_EDGES_HZ, frequency_Hz)] > 0.95


def test_blocks_are_cut_evenly_and_add_up_to_the_sweep() -> None:
    case = CASES["blocks"]
    blocks = voltage_digest((case.recording,), case.design, case.block_ms)
    sweeps = voltage_digest((case.recording,), case.design, None)
    assert blocks.labels[:2] == ("sweep 0, 0–100 ms", "sweep 0, 100–200 ms")
    assert sweeps.labels == ("sweep 0", "sweep 1")
    for sweep in range(2):
        total = blocks.gram[blocks.sweep == sweep].sum(axis=0, keepdims=True)
        assert scaled_difference(total, sweeps.gram[[sweep]]) < 1e-12
    assert blocks.spikes.sum() == case.recording.n_spikes
    assert blocks.seconds.sum() == pytest.approx(0.8)


def test_a_unit_without_rows_is_left_out() -> None:
    recording = CASES["one sample a row"].recording
    hidden = replace(recording.sweeps[0], keep=np.zeros(900, dtype=np.bool_))
    shorter = replace(recording, sweeps=(hidden, recording.sweeps[1]))
    assert voltage_digest((shorter,), CASES["one sample a row"].design, None).labels == ("sweep 1",)


def test_the_current_of_masked_samples_still_acts() -> None:
    """Masking hides the voltage of a stretch, not what its current does later."""
    case = replace(CASES["one sample a row"], masked=False, after_spike=False)
    sweep = case.recording.sweeps[0]
    keep = np.ones(900, dtype=np.bool_)
    keep[:400] = False
    none = np.array([], dtype=np.int64)
    masked = Recording("masked", 0.5, (replace(sweep, keep=keep, spikes=none),))
    cut = Recording(
        "cut", 0.5, (Sweep(0, sweep.current[400:], sweep.voltage[400:], keep[400:], none),)
    )
    there = voltage_digest((masked,), case.design, None).gram
    away = voltage_digest((cut,), case.design, None).gram
    assert there[0, 0, 0] == away[0, 0, 0] == 500
    assert scaled_difference(there, away) > 1e-3
    rows = reference.recording_rows(masked, case.design)
    assert scaled_difference(there, reference.unit_gram(rows, 0)[None]) < 1e-12


def test_nan_voltage_in_masked_samples_does_no_harm() -> None:
    recording = CASES["10 kHz"].recording
    assert any(np.isnan(sweep.voltage).any() for sweep in recording.sweeps)
    assert np.isfinite(voltage_digest((recording,), CASES["10 kHz"].design, None).gram).all()


def test_rows_that_touch_the_window_of_a_spike_are_left_out() -> None:
    """Window −1 … 5 ms, rows of 0.5 ms, a spike at 20 ms: rows from 19 to 25 ms go."""
    keep = np.ones(1000, dtype=np.bool_)
    sweep = Sweep(0, np.zeros(1000), np.zeros(1000), keep, np.array([200]))
    design = VoltageDesign(KernelSpec(20.0, 5), KernelSpec(20.0, 5))
    kept = kept_rows(sweep, design, 0.1, 5)
    assert np.flatnonzero(~kept).tolist() == list(range(38, 51))
    assert np.array_equal(kept, reference.sample_is_used(sweep, design, 0.1).reshape(-1, 5).all(1))


def test_drive_is_the_current_outside_what_all_sweeps_share() -> None:
    """A test pulse common to all sweeps does not tell them apart."""
    levels = np.array([0.0, 0.1, 0.2])
    currents = np.zeros((3, 1000))
    currents[:, 100:300] = -0.1
    currents[:, 500:700] = levels[:, None]
    keep = np.ones(1000, dtype=np.bool_)
    sweeps = [Sweep(k, c, np.zeros(1000), keep, np.array([], int)) for k, c in enumerate(currents)]
    recording = Recording("pulses", 0.5, tuple(sweeps))
    design = VoltageDesign(KernelSpec(20.0, 5), None)
    same = common_current(recording)
    assert (same[:500].all(), same[500:700].any(), same[700:].all()) == (True, False, True)
    digest = voltage_digest((recording,), design, None)
    np.testing.assert_allclose(digest.drive_nA, levels)
    np.testing.assert_allclose(digest.current_sd_nA, currents.std(axis=1))


def test_nothing_is_common_to_one_sweep_or_to_sweeps_all_alike() -> None:
    recording = CASES["10 kHz"].recording
    alone = replace(recording, sweeps=recording.sweeps[:1])
    alike = replace(recording, sweeps=(recording.sweeps[0], recording.sweeps[0]))
    assert not common_current(alone).any()
    assert not common_current(alike).any()


def test_refuses_recordings_with_every_row_masked() -> None:
    case = CASES["one sample a row"]
    sweeps = tuple(replace(s, keep=np.zeros_like(s.keep)) for s in case.recording.sweeps)
    with pytest.raises(InputError, match="arbitrary0: every row is masked; widen the selection"):
        voltage_digest((replace(case.recording, sweeps=sweeps),), case.design, None)


def test_refuses_kernels_longer_than_the_longest_sweep() -> None:
    recording = CASES["one sample a row"].recording
    refuse_long_kernels(recording, {"input": 450.0})
    expected = r"kernels\.input\.duration_ms is 500 ms, but the longest sweep lasts 450 ms; set it"
    with pytest.raises(InputError, match=expected):
        refuse_long_kernels(recording, {"input": 500.0})
    long = replace(CASES["one sample a row"].design, after_spike=KernelSpec(500.0))
    with pytest.raises(InputError, match=r"kernels\.after_spike\.duration_ms is 500 ms"):
        voltage_digest((recording,), long, None)


def test_rows_given_as_a_matrix_give_the_same_digest() -> None:
    case = CASES["blocks"]
    rows = reference.recording_rows(case.recording, case.design, case.n_blocks)
    streamed = voltage_digest((case.recording,), case.design, case.block_ms)
    given = row_digest(rows.x, rows.v, rows.unit, rows.sweep, case.design)
    assert scaled_difference(given.gram, streamed.gram) < 1e-12
    assert isinstance(given, VoltageDigest)
    np.testing.assert_array_equal(given.sweep, streamed.sweep)


def test_a_recording_of_another_length_does_not_retrace() -> None:
    """Compiled once a shape of the kernels, whatever the number and length of sweeps."""
    design = CASES["one sample a row"].design
    voltage_digest((arbitrary_recording(0.5, (900,)),), design, None)
    counters = (filter_rows, voltage._join_columns, chunks.chunk_sums)
    traced = [one._cache_size() for one in counters]  # type: ignore[attr-defined]
    voltage_digest((arbitrary_recording(0.5, (9500, 333)),), design, 100.0)
    assert [one._cache_size() for one in counters] == traced  # type: ignore[attr-defined]


def test_joined_sweeps_stay_units_of_their_own() -> None:
    """Sweeps without a gap share their past, but each is a unit, as in a protocol of steps."""
    recording = arbitrary_recording(0.25, (3000,), masked=False)
    parts = ((4, 0), (5, 900), (6, 2101))
    joined = replace(recording, sweeps=(replace(recording.sweeps[0], joined=parts),))
    design = CASES["blocks"].design
    digest = voltage_digest((joined,), design, None)
    np.testing.assert_allclose(digest.seconds, [0.225, 0.3, 0.225])
    whole = voltage_digest((recording,), design, None)
    assert scaled_difference(digest.sums.sum(axis=0)[None], whole.sums) < 1e-12
    assert set(digest.sweep.tolist()) == {0}

"""Sweeps without a gap between them are one: held against recordings that were never cut."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from simulated_cells import arbitrary_recording, coloured_current, neuron

from bayesglm.checks.simulation import simulate
from bayesglm.errors import InputError
from bayesglm.kernels.basis import KernelSpec
from bayesglm.kernels.design import VoltageDesign
from bayesglm.likelihood.digest import VoltageDigest
from bayesglm.likelihood.voltage import voltage_digest
from bayesglm.recording.joining import (
    check_contiguous,
    contiguous_groups,
    join_contiguous,
    parse_contiguous,
)
from bayesglm.recording.loading import load_cell, load_recording
from bayesglm.recording.reading import read_recording
from bayesglm.recording.recording import Recording, Sweep, TimeJump
from bayesglm.recording.selection import leave_out_unsettled
from bayesglm.recording.settings import RecordingSection, Settings
from bayesglm.recording.settings_input import add_selection, override, validate
from bayesglm.recording.study import CellEntry, RecordingEntry

DATA = Path(__file__).parents[1] / "data" / "cell_a_sweep_and_ramp.csv.gz"
DESIGN = VoltageDesign(KernelSpec(100.0, 8), KernelSpec(80.0, 6))
STEP_MS = 0.5
NOTHING = RecordingSection()


def declared(*ranges: str) -> RecordingSection:
    return RecordingSection(contiguous=ranges)


@pytest.fixture(scope="module")
def whole() -> Recording:
    """A cell of six seconds that spikes, in one sweep."""
    rng = np.random.default_rng(3)
    cell = neuron(threshold_mV=-56.0)
    found = simulate(cell, coloured_current(rng, 1, 6.0), STEP_MS, rng, "cell")
    assert found.n_spikes > 20
    return found


def write(whole: Recording, path: Path, starts: str, pieces: int = 6, cut_ms: float = 0.0) -> Path:
    """Cut a sweep into pieces and write them; `cut_ms` is lost before each piece but the first.

    `starts` says how the file tells when a piece began: a column of starts, times that run on,
    or not at all.
    """
    (sweep,) = whole.sweeps
    n = sweep.n_samples // pieces
    index = np.arange(n * pieces)
    number, within = index // n, index % n
    lost = cut_ms * number
    columns = {
        "time_ms": index * STEP_MS + lost if starts == "times" else within * STEP_MS,
        "current_nA": sweep.current[: n * pieces],
        "voltage_mV": sweep.voltage[: n * pieces],
        "spike": np.isin(index, sweep.spikes).astype(int),
        "sweep": number + 3,
    }
    if starts == "column":
        columns["sweep_start_s"] = 7.5 + (number * n * STEP_MS + lost) / 1e3
    pd.DataFrame(columns).to_csv(path, index=False, float_format="%.17g")
    return path


def digest(recording: Recording) -> VoltageDigest:
    return voltage_digest((recording,), DESIGN, 1000.0)


def load(path: Path, *assignments: str, selects: tuple[str, ...] = ()) -> Recording:
    settings = add_selection(override(Settings(), assignments), selects)
    (found,) = load_cell(CellEntry("x", (RecordingEntry(path),)), settings)
    return found


@pytest.mark.parametrize(
    ("starts", "assignments"),
    [
        ("column", ()),
        ("times", ()),
        ("none", ('recording.contiguous=["3-8"]',)),
        ("column", ('recording.contiguous=["3-8"]',)),
    ],
)
def test_joined_is_as_if_never_cut(
    starts: str, assignments: tuple[str, ...], whole: Recording, tmp_path: Path
) -> None:
    path = write(whole, tmp_path / "cell.csv", starts)
    joined = load(path, *assignments)
    expected, found = digest(whole), digest(joined)
    scale = np.abs(expected.gram).max()
    np.testing.assert_allclose(found.gram, expected.gram, rtol=1e-12, atol=1e-12 * scale)
    np.testing.assert_allclose(found.bands, expected.bands, rtol=1e-9, atol=1e-12 * scale)
    np.testing.assert_array_equal(found.spikes, expected.spikes)
    np.testing.assert_array_equal(found.stimulus, expected.stimulus)
    assert found.labels[0] == "sweeps 3–8, 0–1000 ms"


def test_not_joined_it_is_another(whole: Recording, tmp_path: Path) -> None:
    """The history before each piece is missing: nothing tells that they follow on each other."""
    apart = load(write(whole, tmp_path / "cell.csv", "none"))
    assert len(apart.sweeps) == 6
    difference = digest(apart).gram - digest(whole).gram
    assert np.abs(difference).max() > 1e-3 * np.abs(digest(whole).gram).max()


@pytest.mark.parametrize("starts", ["column", "times"])
@pytest.mark.parametrize(("cut_ms", "n"), [(0.0, 1), (0.2, 1), (0.3, 6), (0.5, 6), (-0.3, 6)])
def test_half_a_step_is_the_limit(
    cut_ms: float, n: int, starts: str, whole: Recording, tmp_path: Path
) -> None:
    """A step is 0.5 ms: a gap of one sample parts, and so does an overlap."""
    path = write(whole, tmp_path / "cell.csv", starts, cut_ms=cut_ms)
    assert len(load(path).sweeps) == n


def test_a_left_out_sweep_breaks_the_chain(whole: Recording, tmp_path: Path) -> None:
    for starts, stated in (("column", ()), ("none", ('recording.contiguous=["3-8"]',))):
        path = write(whole, tmp_path / f"{starts}.csv", starts)
        joined = load(path, *stated, selects=("sweeps=3-4,6-8",))
        assert [sweep.label for sweep in joined.sweeps] == ["sweeps 3–4", "sweeps 6–8"]
        alone = load(path, *stated, selects=("sweeps=3,5,8",))
        assert [sweep.label for sweep in alone.sweeps] == ["sweep 3", "sweep 5", "sweep 8"]


def test_a_mask_does_not_break_the_chain(whole: Recording, tmp_path: Path) -> None:
    """A window is counted in each sweep of the file, and its current still acts."""
    path = write(whole, tmp_path / "cell.csv", "column")
    (sweep,) = load(path, selects=("window=100:ms",)).sweeps
    assert sweep.keep.sum() == 6 * 1800
    assert not sweep.keep[2000:2200].any()


def test_every_field_of_a_joined_sweep() -> None:
    first = Sweep(
        3, np.arange(4.0), np.arange(4.0) - 65, np.array([True, True, False, True]),
        np.array([1]), 2, 1.0, (TimeJump(4, 2, 1.0, 9.0),), 0.01,
    )  # fmt: skip
    second = Sweep(
        4, np.arange(3.0), np.arange(3.0) - 60, np.ones(3, dtype=bool),
        np.array([0, 2]), 6, 1.002, (TimeJump(8, 2, 5.0, 11.0),), 0.03,
    )  # fmt: skip
    third = replace(first, number=9, start_s=5.0)
    recording = Recording("a", 0.5, (first, second, third))
    joined = join_contiguous(recording, NOTHING)
    one, other = joined.sweeps
    assert other is third
    assert one.current.tolist() == [0, 1, 2, 3, 0, 1, 2]
    assert one.voltage.tolist() == [-65, -64, -63, -62, -60, -59, -58]
    assert one.keep.tolist() == [True, True, False, True, True, True, True]
    assert one.spikes is not None
    assert one.spikes.tolist() == [1, 4, 6]
    assert (one.number, one.last_number, one.numbers) == (3, 4, (3, 4))
    assert (one.first_row, one.start_s, one.jitter_ms) == (2, 1.0, 0.03)
    assert [(jump.row, jump.sample) for jump in one.jumps] == [(4, 2), (8, 6)]
    assert one.joined == ((3, 0), (4, 4))
    with pytest.raises(ValueError, match="read-only"):
        one.voltage[0] = 0
    assert join_contiguous(joined, NOTHING) is joined


def test_nothing_to_join_is_the_same_recording() -> None:
    recording = arbitrary_recording(STEP_MS, (100, 100))
    assert contiguous_groups(recording, NOTHING) == ()
    assert join_contiguous(recording, NOTHING) is recording


def test_joining_again_keeps_the_files_numbers() -> None:
    """A chain of a chain: 0–1 joined, then with 2."""
    recording = arbitrary_recording(STEP_MS, (100, 100, 100))
    once = join_contiguous(recording, declared("0-1"))
    timed = replace(
        once,
        sweeps=(replace(once.sweeps[0], start_s=0.0), replace(once.sweeps[1], start_s=0.1)),
    )
    (sweep,) = join_contiguous(timed, NOTHING).sweeps
    assert sweep.joined == ((0, 0), (1, 100), (2, 200))


def test_spikes_not_looked_for_stay_so() -> None:
    recording = arbitrary_recording(STEP_MS, (100, 100), masked=False)
    unseen = replace(recording, sweeps=tuple(replace(s, spikes=None) for s in recording.sweeps))
    (sweep,) = join_contiguous(unseen, declared("0-1")).sweeps
    assert sweep.spikes is None


def test_a_spike_across_a_seam_is_found(tmp_path: Path) -> None:
    """It crosses −10 mV in the last sample of one sweep and peaks in the first of the next."""
    voltage = np.full(400, -65.0)
    voltage[198:203] = [-40, -5, 30, 5, -40]
    table = pd.DataFrame(
        {
            "time_ms": np.arange(400) * 0.5,
            "current_nA": np.repeat([0.0, 0.1], 200),
            "voltage_mV": voltage,
            "sweep": np.repeat([0, 1], 200),
        }
    )
    table.to_csv(tmp_path / "cell.csv", index=False)
    entry = RecordingEntry(tmp_path / "cell.csv")
    assert load_recording(entry, Settings()).n_spikes == 0  # apart, neither sweep has its peak
    (sweep,) = load(tmp_path / "cell.csv").sweeps
    assert sweep.spikes is not None
    assert sweep.spikes.tolist() == [199]


def test_only_the_first_sweep_of_a_chain_begins_unsettled(whole: Recording, tmp_path: Path) -> None:
    path = write(whole, tmp_path / "cell.csv", "column")
    joined = leave_out_unsettled(load(path), 100.0)
    (sweep,) = joined.sweeps
    assert np.flatnonzero(~sweep.keep).tolist() == list(range(200))
    apart = leave_out_unsettled(read_recording(path), 100.0)
    assert all(not sweep.keep[:200].any() for sweep in apart.sweeps)


def test_real_ramp_and_sines_are_joined() -> None:
    """Starts in the file: sines of 10 s at 16, 26, 36 s; pieces of 1 s of a ramp at 0, 1, … s."""
    recording = read_recording(DATA)
    assert contiguous_groups(recording, NOTHING) == ((0, 1, 2), tuple(range(3, 14)))
    sines, ramp = load(DATA).sweeps
    assert (sines.label, ramp.label) == ("sweeps 0–2", "sweeps 3–13")
    assert (sines.n_samples, ramp.n_samples) == (300_000, 110_000)
    assert ramp.spikes is not None
    assert len(ramp.spikes) == 10  # as its licence's page says
    # The command goes up by 1 pA in 100 ms throughout: no step at the seams.
    assert np.abs(np.diff(ramp.current)).max() < 0.5e-3


@pytest.mark.parametrize(
    ("ranges", "message"),
    [
        (["3"], r"found '3'; expected the first and the last"),
        (["3,5"], r"found '3,5'; expected the first"),
        (["3-x"], r"found '3-x'"),
        ([""], r"found ''; expected"),
        (["3-3"], r"'3-3' is a single sweep; expected at least two"),
        (["5-3"], r"'5-3' runs backwards"),
        (["3-5", "5-7"], r"'3-5' and '5-7' overlap"),
        (["4-5", "3-9"], r"'3-9' and '4-5' overlap"),
    ],
)
def test_ranges_that_cannot_be_read(ranges: list[str], message: str) -> None:
    with pytest.raises(InputError, match=message) as caught:
        parse_contiguous(ranges)
    assert "recording.contiguous" in str(caught.value)
    assert "\n" not in str(caught.value)


def test_ranges_that_can() -> None:
    assert parse_contiguous([]) == ()
    assert parse_contiguous(["7-9", " 3 – 5 "]) == ((3, 5), (7, 9))


def numbered(numbers: list[int], starts: list[float | None] | None = None) -> Recording:
    """Sweeps of 50 ms with these numbers and starts."""
    found = arbitrary_recording(STEP_MS, (100,) * len(numbers))
    pairs = zip(found.sweeps, numbers, starts or [None] * len(numbers), strict=True)
    sweeps = tuple(replace(sweep, number=n, start_s=start) for sweep, n, start in pairs)
    return replace(found, sweeps=sweeps)


@pytest.mark.parametrize(
    ("recording", "message"),
    [
        (numbered([0, 1, 2]), r"'1-4' names 3-4; expected sweeps out of 0-2"),
        (numbered([1, 3, 2, 4]), r"'1-4': these sweeps do not follow on each other in the file"),
        (
            numbered([1, 2, 3, 4], [0.0, 0.05, 0.35, 0.4]),
            r"'1-4': by the starts in the file, sweep 3 begins 0\.25 s after the end of sweep 2",
        ),
        (
            numbered([1, 2, 3, 4], [0.0, 0.05, 0.03, 0.08]),
            r"sweep 3 begins 0\.07 s before the end of sweep 2",
        ),
    ],
)
def test_ranges_the_file_does_not_hold(recording: Recording, message: str) -> None:
    with pytest.raises(InputError, match=message) as caught:
        check_contiguous(recording, declared("1-4"))
    assert str(caught.value).startswith(f"{recording.source}: recording.contiguous '1-4'")


def test_coarse_starts_neither_join_nor_contradict() -> None:
    """Starts to the second say nothing of sweeps of 50 ms; a declaration may then stand."""
    recording = numbered([0, 1, 2], [3.0, 3.0, 4.0])
    assert contiguous_groups(recording, NOTHING) == ()
    check_contiguous(recording, declared("0-2"))
    assert contiguous_groups(recording, declared("0-2")) == ((0, 1, 2),)


def test_a_wrong_range_is_refused_when_loaded(whole: Recording, tmp_path: Path) -> None:
    entry = RecordingEntry(write(whole, tmp_path / "cell.csv", "none"))
    settings = override(Settings(), ['recording.contiguous=["3-9"]'])
    with pytest.raises(InputError, match="names 9; expected sweeps out of 3-8"):
        load_recording(entry, settings)


def test_setting_comes_from_a_study() -> None:
    settings = validate({"recording": {"contiguous": ["3-13"]}}, "study.toml")
    assert settings.recording.contiguous == ("3-13",)
    with pytest.raises(InputError, match=r"recording\.contiguous"):
        validate({"recording": {"contiguous": "3-13"}}, "study.toml")

"""Recordings as arrays: read as the same table in text is, refused as politely, never executed."""

from __future__ import annotations

import hashlib
import io
import json
import pickle
import zipfile
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray
from typer.testing import CliRunner

from bayesglm.cli.main import app
from bayesglm.errors import InputError
from bayesglm.kernels.basis import KernelSpec
from bayesglm.kernels.design import VoltageDesign
from bayesglm.likelihood.voltage import voltage_digest
from bayesglm.recording import npz
from bayesglm.recording.loading import load_cell
from bayesglm.recording.reading import read_recording
from bayesglm.recording.recording import Recording
from bayesglm.recording.selection import refuse_defects
from bayesglm.recording.settings import Settings
from bayesglm.recording.study import CellEntry, RecordingEntry
from bayesglm.recording.table import open_table, parse_numbers

DATA = Path(__file__).parents[1] / "data"
N = 40

Arrays = dict[str, Any]


def sound() -> Arrays:
    """Two sweeps of 20 samples in the package's units."""
    rng = np.random.default_rng(1)
    return {
        "time_ms": np.tile(0.5 * np.arange(N // 2), 2),
        "current_nA": rng.normal(size=N),
        "voltage_mV": rng.normal(-65, 2, N),
        "sweep": np.repeat([0, 1], N // 2),
    }


def read(folder: Path, arrays: Arrays, compressed: bool = False) -> Recording:
    path = folder / "cell.npz"
    (np.savez_compressed if compressed else np.savez)(path, **arrays)
    return read_recording(path)


def assert_same(one: Recording, other: Recording, header_rows: int = 0) -> None:
    """All of a recording but path and hash; rows of a text begin below its header."""
    for name in ("name", "step_ms", "spikes_from", "left_out"):
        assert getattr(one, name) == getattr(other, name)
    for mine, theirs in zip(one.sweeps, other.sweeps, strict=True):
        for name in ("current", "voltage", "keep", "spikes"):
            np.testing.assert_array_equal(getattr(mine, name), getattr(theirs, name))
        assert mine.first_row == theirs.first_row + header_rows
        assert mine.jumps == tuple(
            replace(jump, row=jump.row + header_rows) for jump in theirs.jumps
        )
        for name in ("number", "start_s", "jitter_ms"):
            assert getattr(mine, name) == getattr(theirs, name)


def base_of(values: NDArray[Any]) -> object:
    """What an array is a view of in the end."""
    base: Any = values
    while isinstance(base, np.ndarray) and base.base is not None:
        base = base.base
    return base


@pytest.mark.parametrize("name", ["cell_a_steps", "cell_a_sweep_and_ramp"])
def test_real_recording_comes_back_from_arrays(name: str, tmp_path: Path) -> None:
    """Text to arrays in the same units: the same numbers to the bit."""
    text = DATA / f"{name}.csv.gz"
    np.savez(tmp_path / f"{name}.npz", **parse_numbers(open_table(text)))
    assert_same(read_recording(text), read_recording(tmp_path / f"{name}.npz"), header_rows=2)


@pytest.mark.parametrize("compressed", [False, True])
def test_arrays_are_read_as_they_are(compressed: bool, tmp_path: Path) -> None:
    arrays = sound() | {"spike": np.arange(N) % 7 == 0, "sweep_start_ms": np.repeat([500, 900], 20)}
    recording = read(tmp_path, arrays, compressed)
    first, second = recording.sweeps
    np.testing.assert_array_equal(first.current, arrays["current_nA"][:20])
    np.testing.assert_array_equal(second.voltage, arrays["voltage_mV"][20:])
    assert first.spikes is not None
    assert first.spikes.tolist() == [0, 7, 14]
    assert (first.start_s, second.start_s) == (0.5, 0.9)
    assert (first.first_row, second.first_row) == (0, 20)
    assert (recording.name, recording.step_ms) == ("cell", 0.5)
    path = tmp_path / "cell.npz"
    assert recording.sha256 == hashlib.sha256(path.read_bytes()).hexdigest()


@pytest.mark.parametrize(
    ("name", "value", "step_ms"), [("step_ms", 0.05, 0.05), ("step_s", 1, 1e3)]
)
def test_a_step_stands_for_times(name: str, value: float, step_ms: float, tmp_path: Path) -> None:
    arrays = {key: values for key, values in sound().items() if key != "time_ms"}
    recording = read(tmp_path, arrays | {name: value})
    assert recording.step_ms == pytest.approx(step_ms)
    assert [sweep.n_samples for sweep in recording.sweeps] == [20, 20]
    assert {(sweep.jumps, sweep.jitter_ms, sweep.start_s) for sweep in recording.sweeps} == {
        ((), 0.0, None)
    }


@pytest.mark.parametrize("kind", ["<f4", ">f8", "<i2", "<i8", "u1", "<f2"])
def test_every_kind_of_number_becomes_float64(kind: str, tmp_path: Path) -> None:
    values = np.arange(N, dtype=np.dtype(kind))
    found = read(tmp_path, sound() | {"voltage_mV": values}).sweeps
    assert {sweep.voltage.dtype for sweep in found} == {np.dtype(np.float64)}
    np.testing.assert_array_equal(np.concatenate([s.voltage for s in found]), np.arange(N))


def test_units_are_converted(tmp_path: Path) -> None:
    arrays = sound()
    other = {
        "time_s": arrays["time_ms"] / 1e3,
        "current_pA": arrays["current_nA"] * 1e3,
        "voltage_V": arrays["voltage_mV"] / 1e3,
        "sweep": arrays["sweep"],
    }
    one, two = read(tmp_path, arrays), read(tmp_path, other)
    assert one.step_ms == pytest.approx(two.step_ms)
    np.testing.assert_allclose(one.sweeps[1].current, two.sweeps[1].current, rtol=1e-14)
    np.testing.assert_allclose(one.sweeps[1].voltage, two.sweeps[1].voltage, rtol=1e-14)


def test_times_of_single_precision(tmp_path: Path) -> None:
    """100 s at 20 kHz: times are told apart to 0.008 ms, and the step comes out whole."""
    n = 2_000_000
    times = (0.05 * np.arange(n)).astype(np.float32)
    arrays = {"time_ms": times, "current_nA": np.ones(n), "voltage_mV": np.full(n, -65.0)}
    recording = read(tmp_path, arrays)
    assert recording.step_ms == 0.05
    assert recording.sweeps[0].jumps == ()
    assert 0.001 < recording.sweeps[0].jitter_ms < 0.008


def test_jumps_and_missing_values_are_kept(tmp_path: Path) -> None:
    arrays = sound()
    arrays["time_ms"][25:] += 100
    arrays["voltage_mV"][3] = np.nan
    recording = read(tmp_path, arrays)
    ((jump,),) = [sweep.jumps for sweep in recording.sweeps if sweep.jumps]
    assert (jump.row, jump.sample) == (25, 5)
    assert np.isnan(recording.sweeps[0].voltage[3])
    with pytest.raises(InputError, match=r"cell\.npz, sample 3: voltage is missing in 1 row of"):
        refuse_defects(recording)


@pytest.mark.parametrize("compressed", [False, True])
def test_large_plain_arrays_are_mapped(
    compressed: bool, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """In the package's unit and type they stay on disk; anything else is a copy."""
    monkeypatch.setattr(npz, "SMALLEST_MAPPED_BYTES", N * 4)
    arrays = sound()
    recording = read(tmp_path, arrays, compressed)
    for sweep in recording.sweeps:
        assert (type(base_of(sweep.voltage)).__name__ == "mmap") is not compressed
        assert type(sweep.voltage) is np.ndarray
    np.testing.assert_array_equal(recording.sweeps[1].voltage, arrays["voltage_mV"][20:])
    other = sound() | {"voltage_mV": arrays["voltage_mV"].astype(np.float32)}
    other["current_pA"] = other.pop("current_nA")
    for sweep in read(tmp_path, other).sweeps:
        assert isinstance(base_of(sweep.voltage), np.ndarray)
        assert isinstance(base_of(sweep.current), np.ndarray)


def test_small_arrays_are_copies(tmp_path: Path) -> None:
    assert isinstance(base_of(read(tmp_path, sound()).sweeps[0].voltage), np.ndarray)


@pytest.mark.parametrize("mapped", [False, True])
def test_arrays_are_closed_to_writing(
    mapped: bool, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(npz, "SMALLEST_MAPPED_BYTES", 0 if mapped else 10**9)
    for values in (
        read(tmp_path, sound()).sweeps[0].voltage,
        read(tmp_path, sound()).sweeps[1].current,
    ):
        with pytest.raises(ValueError, match="read-only"):
            values[0] = 0


def test_a_mapped_array_whose_content_was_damaged(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(npz, "SMALLEST_MAPPED_BYTES", 0)
    n = 20_000  # beyond what is read together with the header
    arrays = {"step_ms": 0.1, "current_nA": np.ones(n), "voltage_mV": np.linspace(-70, -60, n)}
    read(tmp_path, arrays)
    content = (tmp_path / "cell.npz").read_bytes()
    place = content.index(arrays["voltage_mV"].tobytes()) + 8 * n // 2
    (tmp_path / "cell.npz").write_bytes(content[:place] + b"\x01" + content[place + 1 :])
    with pytest.raises(
        InputError, match=r"array voltage_mV: the archive is damaged \(its checksum"
    ):
        read_recording(tmp_path / "cell.npz")


class Trap:
    """Makes a file when it is unpickled."""

    def __init__(self, path: Path) -> None:
        self.path = path

    def __reduce__(self) -> tuple[Any, ...]:
        return (Path.touch, (self.path,))


def test_a_pickle_is_never_run(tmp_path: Path) -> None:
    """As an array of objects, inside a structure, and as the whole file."""
    trap = tmp_path / "sprung"
    pickle.loads(pickle.dumps(Trap(trap)))
    assert trap.exists()  # the trap works
    trap.unlink()
    objects = np.array([Trap(trap)] * N, dtype=object)
    for values in (objects, np.zeros(N, dtype=[("a", object)]), np.array(Trap(trap))):
        with pytest.raises(InputError, match="array voltage_mV: holds Python objects, which could"):
            read(tmp_path, sound() | {"voltage_mV": values})
    whole = tmp_path / "pickle.npz"
    whole.write_bytes(pickle.dumps(Trap(trap)))
    with pytest.raises(InputError, match="found no archive"):
        read_recording(whole)
    # A header that says float64 in front of a pickle: its bytes are numbers, whatever they mean.
    assert not trap.exists()


def changed(**changes: Any) -> Arrays:
    """The sound arrays with some replaced, or left out where None."""
    return {name: value for name, value in (sound() | changes).items() if value is not None}


def with_value(name: str, index: int, value: float) -> Arrays:
    arrays = sound()
    arrays[name] = arrays[name].astype(float)
    arrays[name][index] = value
    return arrays


@pytest.mark.parametrize(
    ("arrays", "message"),
    [
        (changed(voltage_mV=None), r"no array holds the voltage; found time_ms, .*add the array"),
        (changed(time_ms=None), r"no array holds the time; .* or the number step_ms or the number"),
        (changed(curent_pA=1), r"array 'curent_pA' is unknown; .*mean 'current_pA'"),
        (changed(spikes=1), r"array 'spikes' is unknown; .*mean 'spike'"),
        (
            changed(time=np.zeros(N)),
            r"array 'time' has no unit; expected time_ms or time_s; rename",
        ),
        (changed(time_us=np.zeros(N)), r"array 'time_us' has unknown unit 'us'"),
        (changed(time_s=np.zeros(N)), r"arrays 'time_ms' and 'time_s' both hold the time"),
        (changed(step_ms=0.5), r"arrays 'time_ms' and 'step_ms' both say when"),
        (
            changed(time_ms=None, step_ms=0.5, step_s=1),
            r"'step_ms' and 'step_s' both hold the step",
        ),
        (changed(time_ms=None, step_ms=[0.5]), r"step_ms: has shape \(1,\); expected a single num"),
        (changed(time_ms=None, step_ms=0.0), r"step_ms: found 0; expected a positive number"),
        (changed(time_ms=None, step_ms=np.nan), r"step_ms: found nan; expected a positive"),
        (changed(time_ms=None, step_ms="x"), r"step_ms: holds text \(type <U1\)"),
        (changed(current_nA=np.zeros(N - 1)), r"current_nA: has 39 samples and voltage_mV 40; exp"),
        (
            changed(voltage_mV=np.zeros((2, 20))),
            r"voltage_mV: has shape \(2, 20\); expected one dim",
        ),
        (changed(voltage_mV=-65.0), r"voltage_mV: has shape \(\); expected one dimension"),
        ({name: values[:0] for name, values in sound().items()}, r"time_ms: holds no samples"),
        (
            changed(voltage_mV=np.full(N, "x")),
            r"voltage_mV: holds text \(type <U1\); expected real",
        ),
        (changed(voltage_mV=np.zeros(N, complex)), r"holds complex numbers \(type complex128\)"),
        (changed(current_nA=np.zeros(N, bool)), r"current_nA: holds true and false"),
        (changed(time_ms=np.zeros(N, "M8[ms]")), r"time_ms: holds values \(type datetime64"),
        (changed(spike=np.zeros(N, complex)), r"spike: holds complex numbers .*expected 0 and 1"),
        (changed(spike=np.arange(N)), r"sample 2, array spike: found 2; expected 0 or 1"),
        (
            with_value("voltage_mV", 7, np.inf),
            r"sample 7, array voltage_mV: found inf; .*write NaN",
        ),
        (with_value("current_nA", 39, -np.inf), r"sample 39, array current_nA: found -inf"),
        (with_value("time_ms", 4, np.nan), r"sample 4, array time_ms: found NaN; expected a num"),
        (with_value("sweep", 39, 1.5), r"sample 39, array sweep: found 1\.5; expected a whole"),
        (with_value("sweep", 39, 0), r"sample 39, array sweep: sweep 0 comes back .*samples of a"),
        (with_value("sweep", 39, 2), r"sample 39, array time_ms: sweep 2 has one sample"),
        (
            changed(time_ms=np.zeros(N)),
            r"sample 0, array time_ms: time does not advance in sweep 0",
        ),
        (changed(voltage_mV=np.full(N, -0.065)), r"found -0\.065; .*unit in the array's name is"),
        (changed(voltage_mV=np.full(N, -6.5e4)), r"sample 0, array voltage_mV: found -65000"),
        (
            changed(current_nA=np.full(N, 150)),
            r"sample 0, array current_nA: found 150; .*current_pA",
        ),
        (changed(sweep_start_s=np.arange(N)), r"sample 1, array sweep_start_s: found 1 after 0 in"),
        (
            changed(time_ms=np.concatenate([np.arange(20), 2 * np.arange(20)])),
            r"array time_ms: sweep 1, from sample 20, has a step of 2; expected 1",
        ),
    ],
)
def test_refused(arrays: Arrays, message: str, tmp_path: Path) -> None:
    with pytest.raises(InputError, match=message) as caught:
        read(tmp_path, arrays)
    assert str(caught.value).startswith(str(tmp_path / "cell.npz"))
    assert "\n" not in str(caught.value)


def archive(**members: bytes) -> bytes:
    """A zip archive of files."""
    stream = io.BytesIO()
    with zipfile.ZipFile(stream, "w") as file:
        for name, content in members.items():
            file.writestr(name, content)
    return stream.getvalue()


def array_bytes(values: NDArray[Any]) -> bytes:
    stream = io.BytesIO()
    np.save(stream, values)
    return stream.getvalue()


def saved() -> bytes:
    stream = io.BytesIO()
    np.savez(stream, **sound())
    return stream.getvalue()


@pytest.mark.parametrize(
    ("content", "message"),
    [
        (b"", "the file is empty"),
        (b"time_ms,current_pA,voltage_mV\n0,0,-65\n", "found no archive; expected arrays as numpy"),
        (saved()[:-100], "found an archive cut short"),
        (saved()[: len(saved()) // 2], "found an archive cut short"),
        (array_bytes(np.zeros(3)), "found a single array; expected an archive"),
        (archive(), "the archive holds no arrays"),
        (archive(**{"xl/workbook.xml": b"x"}), "holds 'xl/workbook.xml', which is no array"),
        (archive(**{"voltage_mV.npy": b"junk"}), "no array holds the time"),
        (
            archive(**{f"{name}.npy": b"junk" for name in sound()}),
            r"array time_ms: the archive is damaged",
        ),
        (
            # A header that promises more than there is, which would take 8 TB of memory.
            archive(
                **{
                    f"{name}.npy": array_bytes(np.zeros(10**3)).replace(
                        b"(1000,), }" + b" " * 9, b"(1000000000000,), }"
                    )
                    for name in sound()
                }
            ),
            r"its header states 8000000000128 bytes, the archive 8128",
        ),
    ],
)  # fmt: skip
def test_files_that_are_no_archive_of_arrays(content: bytes, message: str, tmp_path: Path) -> None:
    path = tmp_path / "cell.npz"
    path.write_bytes(content)
    with pytest.raises(InputError, match=message) as caught:
        read_recording(path)
    assert str(caught.value).startswith(str(path))
    assert "\n" not in str(caught.value)


def test_an_array_lost_from_the_directory(tmp_path: Path) -> None:
    """One entry swallows the next: without a word the sweeps would be one."""
    content = bytearray(saved())
    entries = [k for k in range(len(content)) if content[k : k + 4] == b"PK\x01\x02"]
    end = content.rindex(b"PK\x05\x06")
    content[entries[-2] + 32] += end - entries[-1]  # length of its comment
    path = tmp_path / "cell.npz"
    path.write_bytes(content)
    with np.load(path) as file:
        assert "sweep" not in file.files
    with pytest.raises(InputError, match="the archive is damaged"):
        read_recording(path)


def test_files_that_are_not_there(tmp_path: Path) -> None:
    with pytest.raises(InputError, match=r"none\.npz: no such file"):
        read_recording(tmp_path / "none.npz")
    (tmp_path / "folder.npz").mkdir()
    with pytest.raises(InputError, match="found a folder"):
        read_recording(tmp_path / "folder.npz")


@settings(suppress_health_check=[HealthCheck.function_scoped_fixture], max_examples=300)
@given(place=st.floats(0, 1, exclude_max=True), value=st.integers(0, 255), mapped=st.booleans())
def test_any_damage_is_one_line_or_harmless(
    place: float, value: int, mapped: bool, tmp_path: Path
) -> None:
    """One byte anywhere is changed: refused in words, or read as before (dates, for instance)."""
    whole = bytearray(saved())
    whole[int(place * len(whole))] = value
    path = tmp_path / "cell.npz"
    path.write_bytes(whole)
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(npz, "SMALLEST_MAPPED_BYTES", 0 if mapped else 10**9)
        refused = ""
        try:
            found = read_recording(path)
        except InputError as error:
            refused = str(error)
        if refused:
            assert "\n" not in refused
        else:
            path.write_bytes(saved())
            assert_same(found, read_recording(path))


def test_check_says_the_same_of_text_and_of_arrays(tmp_path: Path) -> None:
    text = Path(__file__).parents[2] / "examples" / "spreadsheet.csv"
    arrays = tmp_path / "spreadsheet.npz"
    np.savez_compressed(arrays, **parse_numbers(open_table(text)))
    outcomes = [CliRunner().invoke(app, ["check", str(p), "--json"]) for p in (text, arrays)]
    assert [outcome.exit_code for outcome in outcomes] == [0, 0]
    one, other = (json.loads(outcome.stdout)[0] for outcome in outcomes)
    assert other.pop("file") == str(arrays)
    one.pop("file")
    for rows in (one["rows"], other["rows"]):
        for row in rows:
            row.pop("command")
    assert one == other


def test_a_mapped_recording_is_fitted_like_any_other(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Mapped numbers need not lie at a multiple of eight bytes; the sums are the same."""
    rng = np.random.default_rng(2)
    n = 20_000
    arrays = {"step_ms": 0.5, "current_nA": rng.normal(size=n), "voltage_mV": rng.normal(-65, 2, n)}
    np.savez(tmp_path / "cell.npz", **arrays)
    design = VoltageDesign(KernelSpec(50.0, 8), None)
    grams = []
    for smallest in (0, 10**9):
        monkeypatch.setattr(npz, "SMALLEST_MAPPED_BYTES", smallest)
        (recording,) = load_cell(
            CellEntry("x", (RecordingEntry(tmp_path / "cell.npz"),)), Settings()
        )
        mapped = type(base_of(recording.sweeps[0].voltage)).__name__ == "mmap"
        assert mapped == (smallest == 0)
        grams.append(voltage_digest((recording,), design, 1000.0).gram)
    np.testing.assert_array_equal(*grams)

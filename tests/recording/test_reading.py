"""From files to recordings: units, sweeps, grids of time, and faults named by row and column."""

import gzip
import hashlib
from pathlib import Path

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from bayesglm.errors import InputError
from bayesglm.recording.reading import read_recording
from bayesglm.recording.recording import Recording

DATA = Path(__file__).parents[1] / "data" / "cell_a_steps.csv.gz"


def read(folder: Path, content: str, name: str = "cell.csv") -> Recording:
    path = folder / name
    path.write_text(content, encoding="utf-8")
    return read_recording(path)


def test_units_become_nA_mV_ms(tmp_path: Path) -> None:
    small = read(tmp_path, "time_ms,current_pA,voltage_mV\n0,100,-65\n0.5,-50,-64\n1,0,-63\n")
    large = read(
        tmp_path, "time_s,current_nA,voltage_V\n0,.1,-.065\n.0005,-.05,-.064\n.001,0,-.063"
    )
    for recording in (small, large):
        (sweep,) = recording.sweeps
        assert recording.step_ms == pytest.approx(0.5)
        np.testing.assert_allclose(sweep.current, [0.1, -0.05, 0])
        np.testing.assert_allclose(sweep.voltage, [-65, -64, -63])
        assert sweep.keep.all()
        assert (sweep.number, sweep.spikes, sweep.start_s, sweep.jumps) == (0, None, None, ())


def test_name_path_and_hash(tmp_path: Path) -> None:
    content = b"time_ms,current_pA,voltage_mV\n0,1,-65\n1,0,-65\n"
    path = tmp_path / "cell.1.csv.gz"
    path.write_bytes(gzip.compress(content))
    recording = read_recording(str(path))
    assert (recording.name, recording.path) == ("cell.1", path)
    assert recording.sha256 == hashlib.sha256(path.read_bytes()).hexdigest()


def test_gzip_is_told_by_its_content(tmp_path: Path) -> None:
    path = tmp_path / "cell.csv"
    path.write_bytes(gzip.compress(b"time_ms,current_pA,voltage_mV\n0,1,-65\n1,0,-65\n"))
    assert read_recording(path).sweeps[0].n_samples == 2


def test_sweeps_starts_and_spikes(tmp_path: Path) -> None:
    recording = read(
        tmp_path,
        "# rig 2\nsweep,time_ms,current_pA,voltage_mV,spike,sweep_start_ms\n"
        "3,0,0,-65,0,1000\n3,1,0,20,1,1000\n3,2,0,-65,0,1000\n"
        "1,0,0,-65,0,500\n1,1,0,-65,0,500\n",
    )
    first, second = recording.sweeps
    assert (first.number, first.first_row, first.start_s) == (3, 3, 1.0)
    assert (second.number, second.first_row, second.start_s) == (1, 6, 0.5)
    assert first.spikes is not None
    assert first.spikes.tolist() == [1]
    assert second.spikes is not None
    assert second.spikes.tolist() == []
    assert recording.spikes_from == "spike column of the file"


def test_time_that_runs_on_is_a_clock(tmp_path: Path) -> None:
    recording = read(
        tmp_path,
        "time_ms,current_pA,voltage_mV,sweep\n0,0,-65,0\n1,0,-65,0\n500,0,-65,1\n501,0,-65,1\n",
    )
    assert [sweep.start_s for sweep in recording.sweeps] == [0.0, 0.5]


def test_missing_samples_stay_missing(tmp_path: Path) -> None:
    recording = read(tmp_path, "time_ms,current_pA,voltage_mV\n0,1,\n1,,-65\n2,1,NaN\n")
    (sweep,) = recording.sweeps
    assert np.isnan(sweep.voltage).tolist() == [True, False, True]
    assert np.isnan(sweep.current).tolist() == [False, True, False]
    assert sweep.keep.all()


def test_arrays_are_closed_to_writing(tmp_path: Path) -> None:
    recording = read(tmp_path, "time_ms,current_pA,voltage_mV\n0,1,-65\n1,1,-65\n")
    with pytest.raises(ValueError, match="read-only"):
        recording.sweeps[0].voltage[0] = 0


def test_jump_is_noted_with_its_row(tmp_path: Path) -> None:
    rows = "".join(f"{t},0,-65\n" for t in (0, 1, 2, 3, 9, 10, 11, 2, 3))
    recording = read(tmp_path, "# c\ntime_ms,current_pA,voltage_mV\n" + rows)
    found = [(j.row, j.sample, j.before_ms, j.after_ms) for j in recording.sweeps[0].jumps]
    assert found == [(7, 4, 3, 9), (10, 7, 11, 2)]
    assert recording.step_ms == 1


@pytest.mark.parametrize(
    ("unit", "decimals", "step_ms"),
    [("ms", 2, 0.05), ("s", 5, 0.05), ("s", 4, 0.05), ("s", 4, 0.1), ("s", 5, 1 / 30)],
)
def test_step_behind_printed_times(
    tmp_path: Path, unit: str, decimals: int, step_ms: float
) -> None:
    factor = 1e3 if unit == "s" else 1.0
    rows = "".join(f"{i * step_ms / factor:.{decimals}f},0,-65\n" for i in range(3000))
    recording = read(tmp_path, f"time_{unit},current_pA,voltage_mV\n" + rows)
    assert recording.step_ms == pytest.approx(step_ms, rel=1e-6)
    (sweep,) = recording.sweeps
    assert sweep.jumps == ()
    assert sweep.jitter_ms <= 0.51 * 10.0**-decimals * factor


HEAD = "time_ms,current_pA,voltage_mV\n"


@pytest.mark.parametrize(
    ("content", "message"),
    [
        (
            "time,current_pA,voltage_mV\n0,0,0\n",
            r"row 1: column 'time' has no unit; expected time_ms",
        ),
        ("# c\ntime_ms,current_uA,voltage_mV\n0,0,0\n", r"row 2: .*unknown unit 'uA'"),
        ("time_ms,curent_pA,voltage_mV\n0,0,0\n", r"'curent_pA' is unknown; .*mean 'current_pA'"),
        ("time_ms,current_pA,voltage_mV,spikes\n0,0,0,0\n", r"'spikes' is unknown.*mean 'spike'"),
        ("time_ms,current_pA,voltage_mV,note\n0,0,0,0\n", r"'note' is unknown; expected time_ms"),
        ("time_ms,time_s,current_pA,voltage_mV\n0,0,0,0\n", r"'time_ms' and 'time_s' both hold"),
        ("time_ms,voltage_mV\n0,0\n", r"no column holds the current; found time_ms, voltage_mV"),
        ("current_pA,voltage_mV\n0,0\n", r"no column holds the time; .*expected time_ms or time_s"),
        (HEAD + "0,0,-65\n,0,-65\n", r"row 3, column time_ms: found an empty field"),
        (HEAD + "0,0,-65\n1,0\n", r"row 3: found 2 fields; expected 3"),
        (HEAD + "0,0,-65\n1,0,x\n", r"row 3, column voltage_mV: found 'x'"),
        (HEAD + "0,0,-65\n1,0,inf\n", r"row 3, column voltage_mV: found an infinite value"),
        (
            HEAD + "0,0,-65\n1,0,-1e4\n",
            r"row 3, column voltage_mV: found -10000.*unit in the header",
        ),
        ("time_ms,current_pA,voltage_V\n0,0,-65\n1,0,-65\n", r"row 2, column voltage_V: found -65"),
        (
            "time_ms,current_nA,voltage_mV\n0,0,-65\n1,150,-65\n",
            r"row 3, column current_nA: found 150",
        ),
        (HEAD + "0,0,-65\n", r"row 2, column time_ms: the recording has one row"),
        (HEAD + "2,0,-65\n1,0,-65\n0,0,-65\n", r"time does not advance in the recording"),
        (HEAD + "0,0,-65\n" * 5, r"time does not advance .*more decimals"),
    ],
)
def test_refused(tmp_path: Path, content: str, message: str) -> None:
    with pytest.raises(InputError, match=message) as caught:
        read(tmp_path, content)
    assert str(caught.value).startswith(str(tmp_path / "cell.csv"))
    assert "\n" not in str(caught.value)


@pytest.mark.parametrize(
    ("column", "values", "message"),
    [
        ("spike", [0, 2, 0, 0], r"row 3, column spike: found 2; expected 0 or 1"),
        ("spike", [0, "", 0, 0], r"row 3, column spike: found an empty field; expected a number"),
        ("sweep", [0, 0, 0.5, 0.5], r"row 4, column sweep: found 0.5; expected a whole number"),
        ("sweep", [0, 0, -1, -1], r"row 4, column sweep: found -1; expected a whole number"),
        ("sweep", [0, 0, 1, ""], r"row 5, column sweep: found an empty field"),
        ("sweep", [0, 0, 1, 0], r"row 5, column sweep: sweep 0 comes back after another sweep"),
        ("sweep", [0, 0, 0, 1], r"row 5, column time_ms: sweep 1 has one row"),
        (
            "sweep_start_s",
            [1, 1, 2, 2],
            r"row 4, column sweep_start_s: found 2 after 1 in one sweep",
        ),
    ],
)
def test_optional_columns_refused(
    tmp_path: Path, column: str, values: list[object], message: str
) -> None:
    rows = "".join(f"{i},0,-65,{value}\n" for i, value in enumerate(values))
    with pytest.raises(InputError, match=message):
        read(tmp_path, f"time_ms,current_pA,voltage_mV,{column}\n{rows}")


def test_sweeps_of_unlike_steps(tmp_path: Path) -> None:
    rows = [f"{i * step:g},0,-65,{sweep}\n" for sweep, step in ((4, 1), (7, 2)) for i in range(20)]
    with pytest.raises(InputError, match=r"sweep 7, from row 22, has a step of 2; expected 1"):
        read(tmp_path, "time_ms,current_pA,voltage_mV,sweep\n" + "".join(rows))


def test_times_printed_too_coarsely(tmp_path: Path) -> None:
    rows = "".join(f"{i * 0.05:.0f},0,-65\n" for i in range(2000))
    with pytest.raises(InputError, match=r"printed to 1 and the step is 0\.05; .*more decimals"):
        read(tmp_path, HEAD + rows)


def test_volts_under_a_header_of_millivolts(tmp_path: Path) -> None:
    rows = "".join(f"{i * 0.1:.1f},{i % 7},-0.0652\n" for i in range(200))
    with pytest.raises(InputError, match=r"found -0\.0652; .*beyond 1 mV.*voltage_V"):
        read(tmp_path, HEAD + rows)


@settings(suppress_health_check=[HealthCheck.function_scoped_fixture], max_examples=40)
@given(
    columns=st.lists(
        st.tuples(
            st.floats(-5e3, 5e3, allow_subnormal=False),
            st.floats(-500, -1) | st.floats(1, 500) | st.just(float("nan")),
            st.booleans(),
        ),
        min_size=2,
        max_size=40,
    ),
    step=st.sampled_from([0.02, 0.05, 0.1, 0.5, 1.0]),
)
def test_what_is_written_is_read(
    tmp_path: Path, columns: list[tuple[float, float, bool]], step: float
) -> None:
    rows = "".join(
        f"{i * step:.2f},{current!r},{'' if np.isnan(voltage) else repr(voltage)},{spike:d}\n"
        for i, (current, voltage, spike) in enumerate(columns)
    )
    recording = read(tmp_path, "time_ms,current_pA,voltage_mV,spike\n" + rows)
    (sweep,) = recording.sweeps
    current, voltage, spike = (np.array(part) for part in zip(*columns, strict=True))
    assert recording.step_ms == pytest.approx(step)
    np.testing.assert_allclose(sweep.current, current / 1e3, rtol=1e-12)
    np.testing.assert_allclose(sweep.voltage, voltage, rtol=1e-12)
    assert sweep.spikes is not None
    assert sweep.spikes.tolist() == np.flatnonzero(spike).tolist()


def test_real_recording() -> None:
    recording = read_recording(DATA)
    assert (recording.name, recording.step_ms) == ("cell_a_steps", 0.05)
    assert [sweep.number for sweep in recording.sweeps] == list(range(17))
    assert {sweep.n_samples for sweep in recording.sweeps} == {50_000}
    assert recording.sweeps[1].start_s == 62.0
    assert all(not sweep.jumps and sweep.jitter_ms < 1e-9 for sweep in recording.sweeps)
    levels = [round(float(sweep.current[4000]) * 1e3) for sweep in recording.sweeps]
    assert levels == list(range(-100, 301, 25))

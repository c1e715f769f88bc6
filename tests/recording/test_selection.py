"""Selecting: what is left, what is told, and the defects a fit refuses."""

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from bayesglm.errors import InputError
from bayesglm.recording.reading import read_recording
from bayesglm.recording.recording import Recording, Sweep, TimeJump
from bayesglm.recording.selection import check_select, parse_select, refuse_defects, select
from bayesglm.recording.settings import RowSelection, SelectSection

DATA = Path(__file__).parents[1] / "data" / "cell_a_steps.csv.gz"


def make_sweep(number: int, level_nA: float, spikes: tuple[int, ...] = ()) -> Sweep:
    current = np.zeros(100)
    current[40:60] = level_nA
    return Sweep(
        number,
        current,
        np.linspace(-70, -50, 100),
        np.ones(100, dtype=bool),
        spikes=np.array(spikes, dtype=np.int64),
        first_row=2 + 100 * number,
    )


def make_recording() -> Recording:
    """Return four sweeps of 100 ms with steps of −100, 0, 100 and 200 pA and 0, 0, 1, 3 spikes."""
    sweeps = (
        make_sweep(0, -0.1),
        make_sweep(1, 0.0),
        make_sweep(2, 0.1, (50,)),
        make_sweep(3, 0.2, (45, 50, 55)),
    )
    return Recording("cell", 1.0, sweeps)


def numbers(recording: Recording) -> list[int]:
    return [sweep.number for sweep in recording.sweeps]


@pytest.mark.parametrize(
    ("expression", "left", "sentence"),
    [
        ("sweeps=0,2-3", [0, 2, 3], "1 of 4 sweeps left out (1): not in sweeps=0,2-3"),
        ("current=-100:0pA", [0, 1], "(2-3): some of their current lies outside -100:0pA"),
        ("current=:0.1nA", [0, 1, 2], "1 of 4 sweeps left out (3)"),
        ("rate=0:15Hz", [0, 1, 2], "(3): their rate lies outside 0:15Hz"),
        ("rate=0:10Hz", [0, 1, 2], "(3)"),
    ],
)
def test_whole_sweeps(expression: str, left: list[int], sentence: str) -> None:
    result = select(make_recording(), parse_select([expression]))
    assert numbers(result) == left
    (told,) = result.left_out
    assert sentence in told
    assert all(sweep.keep.all() and sweep.n_samples == 100 for sweep in result.sweeps)


@pytest.mark.parametrize(
    ("expression", "kept", "sentence"),
    [
        ("window=10:19ms", 4 * 10, "360 of 400 rows left out: outside window=10:19ms"),
        ("window=0.09:s", 4 * 10, "360 of 400 rows"),
        ("rows.current=0:100pA", 4 * 100 - 40, "40 of 400 rows left out: outside rows.current="),
        ("rows.voltage=:-60mV", 4 * 50, "200 of 400 rows left out: outside rows.voltage=:-60mV"),
    ],
)
def test_masks_never_trim(expression: str, kept: int, sentence: str) -> None:
    result = select(make_recording(), parse_select([expression]))
    assert numbers(result) == [0, 1, 2, 3]
    assert sum(int(sweep.keep.sum()) for sweep in result.sweeps) == kept
    assert {sweep.n_samples for sweep in result.sweeps} == {100}
    (told,) = result.left_out
    assert sentence in told


def test_all_must_hold_and_each_is_told() -> None:
    wanted = parse_select(["current=-100:100pA", "window=20:99ms", "rows.voltage=:-60mV"])
    result = select(make_recording(), wanted)
    assert numbers(result) == [0, 1, 2]
    assert [np.flatnonzero(sweep.keep).tolist() for sweep in result.sweeps] == [
        [*range(20, 50)]
    ] * 3
    assert len(result.left_out) == 3


def test_earlier_masks_stay() -> None:
    once = select(make_recording(), parse_select(["window=0:49ms"]))
    twice = select(once, parse_select(["window=40:99ms"]))
    assert np.flatnonzero(twice.sweeps[0].keep).tolist() == list(range(40, 50))


def test_selecting_everything_changes_nothing() -> None:
    recording = make_recording()
    assert select(recording, SelectSection()) is recording
    assert select(recording, parse_select(["sweeps=0-3", "window=0:99ms"])).left_out == ()


def test_missing_values_are_outside_rows_only() -> None:
    sweep = make_sweep(0, 0.1)
    current, voltage = sweep.current.copy(), sweep.voltage.copy()
    current[5] = voltage[7] = np.nan
    recording = Recording("cell", 1.0, (replace(sweep, current=current, voltage=voltage),))
    assert select(recording, parse_select(["current=0:100pA"])).left_out == ()
    rows = select(recording, parse_select(["rows.current=0:100pA", "rows.voltage=-80:0mV"]))
    assert np.flatnonzero(~rows.sweeps[0].keep).tolist() == [5, 7]


@pytest.mark.parametrize(
    ("expression", "message"),
    [
        (
            "current=500:600pA",
            r"cell: nothing is left by the selection current=500:600pA; the recor",
        ),
        ("rows.voltage=0:10mV", r"sweeps 0-3, current -100 to 200 pA, voltage -70 to -50 mV"),
        ("window=100:200ms", r"sweeps of 100 ms, rates 0 to 30 Hz; widen"),
        ("rate=50:Hz", r"nothing is left by the selection rate=50:Hz"),
        ("sweeps=2,9-11", r"sweeps=2,9-11 asks for 9-11; expected sweeps out of 0-3"),
    ],
)
def test_nothing_left(expression: str, message: str) -> None:
    with pytest.raises(InputError, match=message):
        select(make_recording(), parse_select([expression]))


def test_rate_needs_spikes() -> None:
    sweep = replace(make_sweep(0, 0.1), spikes=None)
    with pytest.raises(InputError, match="no spikes were looked for"):
        select(Recording("cell", 1.0, (sweep,)), SelectSection(rate="0:5Hz"))


@pytest.mark.parametrize(
    ("expression", "message"),
    [
        ("current", r"'current': expected KEY=RANGE, such as current="),
        ("current=", r"expected KEY=RANGE"),
        ("curent=0:1pA", r"unknown key 'curent'; expected one of sweeps, .*mean 'current'"),
        ("voltage=-90:0mV", r"unknown key 'voltage'; .*did you mean 'rows.voltage'"),
        ("current=0:1", r"selection current=0:1: found no unit"),
        ("sweeps=a", r"selection sweeps=a: expected numbers"),
    ],
)
def test_expressions_refused(expression: str, message: str) -> None:
    with pytest.raises(InputError, match=message):
        parse_select([expression])


def test_parse_select_fills_the_section() -> None:
    expressions = ["sweeps=0-4", "current=0:1pA", "rate=0:5Hz", "window=0:9ms"]
    expected = SelectSection(
        sweeps="0-4",
        current="0:1pA",
        rate="0:5Hz",
        window="0:9ms",
        rows=RowSelection(current="0:2pA", voltage="-9:0mV"),
    )
    assert parse_select([*expressions, "rows.current=0:2pA", "rows.voltage=-9:0mV"]) == expected


def test_two_statements_of_a_key_leave_what_both_leave() -> None:
    base = SelectSection(current="-200:0pA", sweeps="0-5")
    both = parse_select(["current=-0.1:0.025nA", "sweeps=4-9", "current=-50:pA"], base)
    assert (both.current, both.sweeps) == ("-50:0pA", "4-5")


@pytest.mark.parametrize(
    ("base", "expression"),
    [
        (SelectSection(current="-200:-100pA"), "current=0:100pA"),
        (SelectSection(sweeps="0-2"), "sweeps=3"),
    ],
)
def test_statements_that_exclude_each_other(base: SelectSection, expression: str) -> None:
    with pytest.raises(InputError, match="nothing is left together with"):
        parse_select([expression], base)


@pytest.mark.parametrize("section", [SelectSection(sweeps="x"), SelectSection(window="0:1")])
def test_check_select(section: SelectSection) -> None:
    with pytest.raises(InputError, match=r"selection (sweeps=x|window=0:1)"):
        check_select(section)


def damaged(*damages: tuple[int, str, slice]) -> Recording:
    """Return the recording with NaN in places: (sweep, attribute, samples)."""
    sweeps = list(make_recording().sweeps)
    for index, name, part in damages:
        values = getattr(sweeps[index], name).copy()
        values[part] = np.nan
        sweeps[index] = replace(sweeps[index], **{name: values})
    return replace(make_recording(), sweeps=tuple(sweeps))


def test_sound_recording_passes() -> None:
    refuse_defects(make_recording())


@pytest.mark.parametrize(
    ("damages", "message"),
    [
        (
            [(1, "voltage", slice(7, 10))],
            r"row 109: voltage is missing in 3 rows of sweep 1; .*--select 'sweeps=0,2-3'",
        ),
        ([(0, "current", slice(99, 100))], r"row 101: current is missing in 1 row of sweep 0"),
        (
            [(0, "voltage", slice(0, 1)), (3, "current", slice(4, 5))],
            r"row 2: .* \(and 1 more sweeps with defects\); .*'sweeps=1-2'",
        ),
        (
            [(i, "voltage", slice(20, 30)) for i in range(4)],
            r"row 22: voltage is missing in 10 rows .* --select 'window=30:99ms'",
        ),
        ([(i, "voltage", slice(0, 100)) for i in range(4)], r"export .* with its whole voltage"),
        ([(i, "current", slice(0, 1)) for i in range(4)], r"export .* with its whole current"),
    ],
)
def test_missing_values_are_refused(damages: list[tuple[int, str, slice]], message: str) -> None:
    with pytest.raises(InputError, match=message):
        refuse_defects(damaged(*damages))


def test_what_the_message_offers_mends_it() -> None:
    holed = damaged(*[(i, "voltage", slice(20, 30)) for i in range(4)])
    refuse_defects(select(holed, parse_select(["window=30:99ms"])))
    one = damaged((1, "voltage", slice(7, 10)))
    refuse_defects(select(one, parse_select(["sweeps=0,2-3"])))


def test_missing_current_is_refused_also_where_masked() -> None:
    recording = select(damaged((0, "current", slice(5, 6))), parse_select(["window=50:99ms"]))
    with pytest.raises(InputError, match="current is missing in 1 row of sweep 0"):
        refuse_defects(recording)


def test_jump_is_refused() -> None:
    sweeps = list(make_recording().sweeps)
    sweeps[2] = replace(sweeps[2], jumps=(TimeJump(210, 8, 7.0, 12.5),))
    recording = replace(make_recording(), sweeps=tuple(sweeps))
    with pytest.raises(
        InputError, match=r"row 210: time jumps from 7 to 12\.5 ms in sweep 2.*0-1,3"
    ):
        refuse_defects(recording)
    alone = replace(recording, sweeps=(sweeps[2],))
    with pytest.raises(InputError, match="give the rows from the jump on a sweep number"):
        refuse_defects(alone)


def test_constant_current_is_refused() -> None:
    recording = select(make_recording(), parse_select(["sweeps=1"]))
    with pytest.raises(InputError, match=r"current never varies \(it is 0 pA throughout\)"):
        refuse_defects(recording)


def test_real_recording() -> None:
    recording = select(read_recording(DATA), parse_select(["current=-100:25pA"]))
    assert numbers(recording) == [0, 1, 2, 3, 4, 5]
    assert recording.left_out == (
        "11 of 17 sweeps left out (6-16): some of their current lies outside -100:25pA",
    )
    refuse_defects(recording)

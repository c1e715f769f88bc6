"""Recordings validate themselves when they are made."""

import dataclasses
from pathlib import Path

import numpy as np
import pytest

from bayesglm.errors import InputError
from bayesglm.recording.recording import Recording, Sweep


def make_sweep(n: int = 5, spikes: list[int] | None = None) -> Sweep:
    indices = None if spikes is None else np.array(spikes, dtype=np.int64)
    return Sweep(0, np.zeros(n), np.zeros(n), np.ones(n, dtype=bool), spikes=indices)


def test_counts() -> None:
    recording = Recording("a", 0.5, (make_sweep(5, [1, 3]), make_sweep(3)))
    assert recording.n_spikes == 2
    assert recording.seconds == pytest.approx(8 * 0.5e-3)
    assert [sweep.n_samples for sweep in recording.sweeps] == [5, 3]


def test_source_is_the_path_or_the_name() -> None:
    assert Recording("a", 0.5, (make_sweep(),)).source == "a"
    path = Path("folder") / "a.csv"
    assert Recording("a", 0.5, (make_sweep(),), path=path).source == str(path)


def test_is_frozen() -> None:
    with pytest.raises(dataclasses.FrozenInstanceError, match="cannot assign"):
        make_sweep().number = 1  # type: ignore[misc]


def test_empty_sweep() -> None:
    with pytest.raises(InputError, match="sweep 0 has no samples"):
        make_sweep(0)


def test_unequal_lengths() -> None:
    with pytest.raises(InputError, match="must have the same length"):
        Sweep(3, np.zeros(5), np.zeros(4), np.ones(5, dtype=bool))


@pytest.mark.parametrize("spikes", [[5], [-1], [2, 2], [3, 1]])
def test_spikes_outside_or_out_of_order(spikes: list[int]) -> None:
    with pytest.raises(InputError, match=r"spike indices must increase and lie in 0…4"):
        make_sweep(5, spikes)


@pytest.mark.parametrize("step", [0.0, -1.0, float("nan")])
def test_step_must_be_positive(step: float) -> None:
    with pytest.raises(InputError, match="expected a positive step"):
        Recording("a", step, (make_sweep(),))


def test_needs_a_sweep() -> None:
    with pytest.raises(InputError, match="expected at least one"):
        Recording("a", 1.0, ())


def test_a_sweep_in_words() -> None:
    alone = make_sweep()
    assert (alone.label, alone.numbers, alone.last_number) == ("sweep 0", (0,), None)
    joined = dataclasses.replace(alone, number=3, joined=((3, 0), (4, 2), (5, 4)))
    assert (joined.label, joined.numbers, joined.last_number) == ("sweeps 3–5", (3, 4, 5), 5)


def test_rows_are_samples_where_the_file_holds_arrays() -> None:
    for path, expected in (
        (Path("a.npz"), "sample 7"),
        (Path("a.csv.gz"), "row 7"),
        (None, "row 7"),
    ):
        assert Recording("a", 0.5, (make_sweep(),), path=path).place(7) == expected

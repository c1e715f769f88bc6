"""Digests add, part, merge and come back from disk unchanged; unlike ones are refused."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from simulated_cells import arbitrary_recording

from bayesglm.errors import InputError
from bayesglm.kernels.basis import KernelSpec
from bayesglm.kernels.design import VoltageDesign
from bayesglm.likelihood.digest import VoltageDigest, add, content_hash
from bayesglm.likelihood.voltage import voltage_digest

DESIGN = VoltageDesign(KernelSpec(20.0, 6), KernelSpec(15.0, 5), spike_window_ms=(-0.5, 1.0))
ARRAYS = (
    "sums",
    "band_sums",
    "band_share",
    "sweep",
    "drive_nA",
    "current_sd_nA",
    "spikes",
    "seconds",
)


@pytest.fixture(scope="module")
def digest() -> VoltageDigest:
    """Three sweeps cut into blocks of 100 ms."""
    recording = arbitrary_recording(0.5, (1000, 640, 420), masked=False)
    return voltage_digest((recording,), DESIGN, 100.0)


def assert_same(one: VoltageDigest, other: VoltageDigest) -> None:
    """Every array and name is the same."""
    for name in ARRAYS:
        np.testing.assert_array_equal(getattr(one, name), getattr(other, name))
    assert (one.design, one.labels, one.sources) == (other.design, other.labels, other.sources)


@pytest.mark.parametrize("after_spike", [DESIGN.after_spike, None])
def test_comes_back_from_disk_to_the_bit(
    digest: VoltageDigest, after_spike: KernelSpec | None, tmp_path: Path
) -> None:
    saved = replace(digest, design=replace(DESIGN, after_spike=after_spike))
    saved.save(tmp_path / "digest.npz")
    assert_same(VoltageDigest.load(tmp_path / "digest.npz"), saved)


def test_refuses_a_file_that_is_no_digest(digest: VoltageDigest, tmp_path: Path) -> None:
    """Among them a digest cut short, as when writing it was killed."""
    for name, content in {"text": b"abc", "empty": b""}.items():
        (tmp_path / name).write_bytes(content)
        with pytest.raises(InputError, match=f"{name}: is not a digest; make it anew"):
            VoltageDigest.load(tmp_path / name)
    digest.save(tmp_path / "whole.npz")
    whole = (tmp_path / "whole.npz").read_bytes()
    (tmp_path / "short.npz").write_bytes(whole[: len(whole) // 2])
    np.save(tmp_path / "array.npy", np.zeros(2))
    for name in ("short.npz", "array.npy"):
        with pytest.raises(InputError, match=f"{name}: is not a digest"):
            VoltageDigest.load(tmp_path / name)
    np.savez(tmp_path / "other.npz", x=np.zeros(2))
    with pytest.raises(InputError, match=r"other\.npz: is not a digest"):
        VoltageDigest.load(tmp_path / "other.npz")
    with pytest.raises(InputError, match=r"missing\.npz: is not a digest"):
        VoltageDigest.load(tmp_path / "missing.npz")


def test_refuses_a_pickle(tmp_path: Path) -> None:
    """Nothing in a file is ever executed."""
    np.savez(tmp_path / "pickle.npz", version=np.array([object()], dtype=object))
    with pytest.raises(InputError, match="is not a digest"):
        VoltageDigest.load(tmp_path / "pickle.npz")


def test_refuses_another_version(digest: VoltageDigest, tmp_path: Path) -> None:
    digest.save(tmp_path / "now.npz")
    with np.load(tmp_path / "now.npz") as file:
        content = {name: file[name] for name in file.files}
    np.savez(tmp_path / "later.npz", **(content | {"version": np.array(99)}))
    with pytest.raises(InputError, match=r"later\.npz: digest of version 99; expected 2"):
        VoltageDigest.load(tmp_path / "later.npz")


def test_two_recordings_add_to_all_their_units() -> None:
    """Sweeps of different recordings are different sweeps."""
    recordings = [
        arbitrary_recording(0.5, lengths, seed=seed)
        for seed, lengths in enumerate([(600, 500), (700,)])
    ]
    apart = [voltage_digest((recording,), DESIGN, 100.0) for recording in recordings]
    both = add(apart)
    assert_same(both, voltage_digest(recordings, DESIGN, 100.0))
    assert both.n_units == apart[0].n_units + apart[1].n_units
    assert sorted(set(both.sweep.tolist())) == [0, 1, 2]
    assert both.sources == (("arbitrary0", "hash0"), ("arbitrary1", "hash1"))
    assert both.labels[-1].startswith("arbitrary1, sweep 0, ")
    assert both.n_rows == apart[0].n_rows + apart[1].n_rows


@pytest.mark.parametrize(
    ("change", "named"),
    [
        ({"row_ms": 1.0}, "row_ms is 0.5 in one and 1.0 in another"),
        ({"spike_window_ms": (-1.0, 5.0)}, "spike_window_ms is"),
        ({"input": KernelSpec(21.0, 6)}, "input is"),
        ({"after_spike": None}, "after_spike is"),
    ],
)
def test_adding_unlike_digests_names_the_difference(
    digest: VoltageDigest, change: dict[str, object], named: str
) -> None:
    other = replace(digest, design=replace(DESIGN, **change))  # type: ignore[arg-type]
    with pytest.raises(InputError, match=f"cannot be added: {named}"):
        add([digest, other])


def test_merged_units_sum_and_stay_within_their_sweep(digest: VoltageDigest) -> None:
    """Units of 5, 3 and 2 blocks a sweep: pairs, and a remainder joins the unit before it."""
    merged = digest.merge(2)
    assert np.bincount(digest.sweep).tolist() == [5, 3, 2]
    assert np.bincount(merged.sweep).tolist() == [2, 1, 1]
    for sweep in range(3):
        for name in ("sums", "band_sums", "spikes", "seconds"):
            whole = getattr(digest, name)[digest.sweep == sweep].sum(axis=0)
            np.testing.assert_allclose(
                getattr(merged, name)[merged.sweep == sweep].sum(axis=0), whole
            )
    assert merged.labels[:3] == ("sweep 0, 0–300 ms", "sweep 0, 300–500 ms", "sweep 1, 0–320 ms")
    assert digest.merge(1) is digest


def test_merged_current_is_that_of_the_whole_stretch() -> None:
    """Mean and mean square of the current are weighted by time."""
    recording = arbitrary_recording(0.5, (1200, 1200), masked=False)
    fine = voltage_digest((recording,), DESIGN, 100.0).merge(6)
    whole = voltage_digest((recording,), DESIGN, None)
    np.testing.assert_allclose(fine.drive_nA, whole.drive_nA)
    # The sd within blocks misses what differs between the means of blocks.
    assert np.all(fine.current_sd_nA <= whole.current_sd_nA)
    np.testing.assert_allclose(fine.current_sd_nA, whole.current_sd_nA, rtol=0.02)


def test_taking_units_keeps_everything_of_them(digest: VoltageDigest) -> None:
    chosen = digest.take(np.array([1, 4]))
    for name in ARRAYS:
        np.testing.assert_array_equal(getattr(chosen, name), getattr(digest, name)[[1, 4]])
    assert chosen.labels == (digest.labels[1], digest.labels[4])


def test_hash_tells_numbers_apart(digest: VoltageDigest) -> None:
    changed = digest.sums.copy()
    changed[0, 0, 0] = np.nextafter(changed[0, 0, 0], np.inf)
    assert content_hash(digest) == content_hash(digest.take(np.arange(digest.n_units)))
    assert content_hash(digest) != content_hash(replace(digest, sums=changed))


def test_labels_of_joined_sweeps_name_their_whole_span(digest: VoltageDigest) -> None:
    """A dash may stand in the name of the sweep as well as in its span."""
    labels = tuple(f"sweeps 3–13, {k}000–{k + 1}000 ms" for k in range(digest.n_units))
    whole = replace(digest, labels=labels, sweep=np.zeros(digest.n_units, dtype=np.int64))
    assert whole.merge(2).labels[0] == "sweeps 3–13, 0000–2000 ms"

"""The voltage digest: a recording reduced, unit by unit, to what the posterior needs.

For each independent unit b the digest keeps the Gram matrix of the rows ``z = (x, v)``, which
holds ``H_b = Σxxᵀ``, ``g_b = Σxv``, ``q_b = Σv²`` and ``n_b`` (the first column of x is one), and
the same Gram matrix split by frequency band. Digests add: sweeps to a cell, cells to a
laboratory; and they subtract, which gives folds and splits. Nothing here depends on the
recording's length.
"""

from __future__ import annotations

import hashlib
import json
import zipfile
import zlib
from collections.abc import Sequence
from dataclasses import asdict, dataclass, replace
from functools import cached_property
from pathlib import Path
from typing import Any, Final

import numpy as np

from bayesglm.errors import InputError
from bayesglm.kernels.basis import KernelSpec
from bayesglm.kernels.design import VoltageDesign
from bayesglm.recording.recording import FloatArray, IntArray

_VERSION: Final = 2

#: What NumPy raises for a file that is no NPZ, or one cut short.
_UNREADABLE: Final = (OSError, EOFError, ValueError, TypeError, zipfile.BadZipFile, zlib.error)

#: Upper edges of the frequency bands in Hz: half octaves from 0.5 Hz. The first band holds
#: what is slower than that, the last what is faster.
BAND_EDGES_HZ: Final[tuple[float, ...]] = tuple(float(0.5 * 2 ** (i / 2)) for i in range(24))


@dataclass(frozen=True, eq=False)
class VoltageDigest:
    """Sums over the rows of each unit.

    Attributes
    ----------
    design
        The linear model the rows belong to.
    sums
        ``Σ zzᵀ`` a unit with z = (x, v), shape (B, P + 1, P + 1); with z = (x, t, v), where the
        design has a drift along t, shape (B, P + 2, P + 2).
    band_sums
        The same by frequency band, shape (B, F, …); sums over F to `sums`.
    band_share
        Share of white noise that falls in each band, shape (B, F).
    sweep
        Index of the unit's sweep, shape (B,); units of one sweep share its offset.
    drive_nA
        Mean current of the unit outside what all sweeps have in common, nA, shape (B,).
    current_sd_nA
        Standard deviation of the unit's current, nA, shape (B,).
    spikes
        Number of spikes in the unit, shape (B,).
    seconds
        Recorded time of the unit, s, shape (B,).
    stimulus
        Hash of the unit's current, shape (B,).
    part
        Which of the file's sweeps, of those joined to one, the unit begins in, shape (B,).
    labels
        The unit in words, such as ``sweep 3`` or ``sweep 0, 2000–3000 ms``.
    sources
        Hashes of the recordings, with their names.
    """

    design: VoltageDesign
    sums: FloatArray
    band_sums: FloatArray
    band_share: FloatArray
    sweep: IntArray
    drive_nA: FloatArray
    current_sd_nA: FloatArray
    spikes: IntArray
    seconds: FloatArray
    stimulus: IntArray
    part: IntArray
    labels: tuple[str, ...]
    sources: tuple[tuple[str, str], ...] = ()

    @cached_property
    def gram(self) -> FloatArray:
        """``Σ zzᵀ`` a unit with z = (x, v), shape (B, P + 1, P + 1)."""
        return self._without_drift(self.sums)

    @cached_property
    def bands(self) -> FloatArray:
        """`gram` by frequency band, shape (B, F, P + 1, P + 1)."""
        return self._without_drift(self.band_sums)

    def _without_drift(self, sums: FloatArray) -> FloatArray:
        if not self.design.drift:
            return sums
        kept = np.delete(np.arange(sums.shape[-1]), -2)
        return sums[..., kept[:, None], kept]

    @property
    def n_units(self) -> int:
        """Number of units, B."""
        return len(self.sums)

    @property
    def n_rows(self) -> float:
        """Number of rows in all units."""
        return float(self.sums[:, 0, 0].sum())

    def take(self, units: IntArray) -> VoltageDigest:
        """Keep the units at the given indices."""
        return replace(
            self,
            labels=tuple(self.labels[i] for i in units),
            **{name: getattr(self, name)[units] for name in _UNIT_ARRAYS},
        )

    def merge(self, factor: int) -> VoltageDigest:
        """Join up to `factor` neighbouring units of each sweep into one.

        A remainder joins the unit before it, so that no unit is shorter than the others.
        """
        if factor <= 1:
            return self
        groups: list[IntArray] = []
        for members in self._mergeable(factor):
            n_groups = max(1, len(members) // factor)
            groups += [np.asarray(g) for g in np.array_split(members, n_groups)]
        weights = [self.seconds[g] / self.seconds[g].sum() for g in groups]
        return replace(
            self,
            sums=np.array([self.sums[g].sum(axis=0) for g in groups]),
            band_sums=np.array([self.band_sums[g].sum(axis=0) for g in groups]),
            band_share=np.array(
                [w @ self.band_share[g] for g, w in zip(groups, weights, strict=True)]
            ),
            sweep=np.array([self.sweep[g[0]] for g in groups]),
            drive_nA=np.array([w @ self.drive_nA[g] for g, w in zip(groups, weights, strict=True)]),
            current_sd_nA=np.array(
                [
                    np.sqrt(w @ self.current_sd_nA[g] ** 2)
                    for g, w in zip(groups, weights, strict=True)
                ]
            ),
            spikes=np.array([self.spikes[g].sum() for g in groups]),
            seconds=np.array([self.seconds[g].sum() for g in groups]),
            stimulus=np.array([hash_of(self.stimulus[g].tobytes()) for g in groups]),
            part=np.array([self.part[g[0]] for g in groups]),
            labels=tuple(_joined(self.labels[g[0]], self.labels[g[-1]]) for g in groups),
        )

    def _mergeable(self, factor: int) -> list[IntArray]:
        """Units between which neighbours may be joined: those of a sweep.

        Where a sweep was joined of others that are long enough, those of each, so that repeats
        from sweep to sweep stay repeats.
        """
        found: list[IntArray] = []
        for sweep in np.unique(self.sweep):
            members = np.flatnonzero(self.sweep == sweep)
            parts = [members[self.part[members] == part] for part in np.unique(self.part[members])]
            found += parts if min(len(part) for part in parts) >= factor else [members]
        return found

    def save(self, path: Path) -> None:
        """Write the digest as NPZ; `load` reads it without executing anything."""
        np.savez_compressed(
            path,
            version=np.array(_VERSION),
            design=np.array(json.dumps(asdict(self.design))),
            labels=np.array(self.labels),
            sources=np.array(self.sources, dtype=np.str_).reshape(-1, 2),
            **{name: getattr(self, name) for name in _UNIT_ARRAYS},
        )

    @staticmethod
    def load(path: Path) -> VoltageDigest:
        """Read a digest.

        Raises
        ------
        InputError
            If the file is no digest, or one of another version.
        """
        try:
            with path.open("rb") as stream, np.load(stream, allow_pickle=False) as file:
                content = {name: file[name] for name in file.files}
            version = int(content["version"])
            design = json.loads(str(content["design"]))
        except (*_UNREADABLE, KeyError) as error:
            raise InputError(f"{path}: is not a digest; make it anew with bayesglm fit") from error
        if version != _VERSION:
            raise InputError(
                f"{path}: digest of version {version}; expected {_VERSION}; "
                "make it anew with bayesglm fit"
            )
        return VoltageDigest(
            design=_design_from(design),
            labels=tuple(str(label) for label in content["labels"]),
            sources=tuple((str(name), str(digest)) for name, digest in content["sources"]),
            **{name: content[name] for name in _UNIT_ARRAYS},
        )


_UNIT_ARRAYS: Final = (
    "sums", "band_sums", "band_share", "sweep", "drive_nA", "current_sd_nA", "spikes", "seconds",
    "stimulus", "part",
)  # fmt: skip


def add(digests: Sequence[VoltageDigest]) -> VoltageDigest:
    """Join digests of several recordings into one of all their units.

    Raises
    ------
    InputError
        If their designs differ; the message names the difference.
    """
    first = digests[0]
    for other in digests[1:]:
        mine, theirs = asdict(first.design), asdict(other.design)
        for key in mine:
            if mine[key] != theirs[key]:
                raise InputError(
                    f"digests cannot be added: {key} is {mine[key]} in one and {theirs[key]} in "
                    "another; fit both with the same settings"
                )
    # Sweeps of different recordings are different sweeps.
    counts = [int(d.sweep.max()) + 1 for d in digests]
    shifts = np.concatenate([[0], np.cumsum(counts)[:-1]])
    arrays = {name: np.concatenate([getattr(d, name) for d in digests]) for name in _UNIT_ARRAYS}
    arrays["sweep"] = np.concatenate(
        [d.sweep + shift for d, shift in zip(digests, shifts, strict=True)]
    )
    several = len(digests) > 1
    labels = tuple(
        f"{d.sources[0][0]}, {label}" if several and d.sources else label
        for d in digests
        for label in d.labels
    )
    sources = tuple(source for d in digests for source in d.sources)
    return VoltageDigest(design=first.design, labels=labels, sources=sources, **arrays)


def hash_of(content: bytes) -> int:
    """Hash as a signed integer of 64 bits."""
    return int.from_bytes(hashlib.sha256(content).digest()[:8], "big", signed=True)


def content_hash(digest: VoltageDigest) -> str:
    """Hash of the numbers in a digest: equal for equal digests on one machine."""
    h = hashlib.sha256()
    for name in _UNIT_ARRAYS:
        h.update(np.ascontiguousarray(getattr(digest, name)).tobytes())
    return h.hexdigest()


def _design_from(fields: dict[str, Any]) -> VoltageDesign:
    after_spike, electrode = fields.pop("after_spike"), fields.pop("electrode_kernel")
    window = fields.pop("spike_window_ms")
    return VoltageDesign(
        input=KernelSpec(**fields.pop("input")),
        after_spike=KernelSpec(**after_spike) if after_spike is not None else None,
        spike_window_ms=(window[0], window[1]),
        electrode_kernel=KernelSpec(**electrode) if electrode is not None else None,
        **fields,
    )


def _joined(first: str, last: str) -> str:
    """Label of a unit that runs from one unit to another of the same sweep."""
    if first == last:
        return first
    return f"{first.rpartition('–')[0]}–{last.rpartition('–')[2]}"

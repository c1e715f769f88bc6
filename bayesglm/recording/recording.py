"""The recording of one cell as immutable arrays in the package's units.

A `Recording` is one file: sweeps of injected current and membrane voltage on a regular grid of
`step_ms`. It is what reading returns and what checking, selecting and fitting take. Missing
values stay NaN and jumps in time stay listed, so that `check` can report them and `fit` can
refuse them; nothing is repaired.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from bayesglm.errors import InputError

FloatArray = NDArray[np.floating]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]


@dataclass(frozen=True)
class TimeJump:
    """A place where the time column does not advance by one step.

    Attributes
    ----------
    row
        Line of the file, counted from 1 with the header as line 1; of arrays the index from 0.
    sample
        Index of the first sample after the jump, within its sweep.
    before_ms, after_ms
        Time on both sides of the jump.
    """

    row: int
    sample: int
    before_ms: float
    after_ms: float


@dataclass(frozen=True, eq=False)
class Sweep:
    """One uninterrupted stretch of recording.

    Attributes
    ----------
    number
        The sweep's number in the file; 0 where the file has no sweep column.
    current
        Injected current, nA, float64, shape (n,).
    voltage
        Membrane voltage, mV, float64, shape (n,); NaN where the file has an empty field.
    spikes
        Indices of the bins that hold a spike, sorted, shape (n_spikes,); None where spikes
        are neither given nor yet detected.
    keep
        True where the sample may be used as data, shape (n,). The current of a sample that is
        left out still acts on the voltage after it.
    first_row
        Line of the file that holds the first sample; of arrays its index from 0.
    start_s
        Start of the sweep on the recording's clock in s; None where not given.
    jumps
        Places where time does not advance by one step.
    jitter_ms
        Largest deviation of the time column from the regular grid.
    joined
        Number and first sample of each of the file's sweeps that were joined to this one; empty
        for a sweep as it stands in the file.
    """

    number: int
    current: FloatArray
    voltage: FloatArray
    keep: BoolArray
    spikes: IntArray | None = None
    first_row: int = 2
    start_s: float | None = None
    jumps: tuple[TimeJump, ...] = ()
    jitter_ms: float = 0.0
    joined: tuple[tuple[int, int], ...] = ()

    def __post_init__(self) -> None:
        n = len(self.current)
        if n == 0:
            raise InputError(f"sweep {self.number} has no samples; leave it out of the recording")
        if self.voltage.shape != (n,) or self.keep.shape != (n,):
            raise InputError(
                f"sweep {self.number}: current has {n} samples, voltage {self.voltage.shape}, "
                f"keep {self.keep.shape}; all must have the same length"
            )
        if self.spikes is not None and len(self.spikes):
            outside = self.spikes[(self.spikes < 0) | (self.spikes >= n)]
            if len(outside) or np.any(np.diff(self.spikes) <= 0):
                raise InputError(
                    f"sweep {self.number}: spike indices must increase and lie in 0…{n - 1}"
                )

    @property
    def n_samples(self) -> int:
        """Number of samples."""
        return len(self.current)

    @property
    def numbers(self) -> tuple[int, ...]:
        """Numbers in the file of the sweeps that it is made of, for selections."""
        return tuple(number for number, _ in self.joined) or (self.number,)

    @property
    def last_number(self) -> int | None:
        """Number of the last of the sweeps that were joined; None where none were."""
        return self.joined[-1][0] if self.joined else None

    @property
    def label(self) -> str:
        """The sweep in words, such as ``sweep 3`` or ``sweeps 3–13``."""
        if self.last_number is None:
            return f"sweep {self.number}"
        return f"sweeps {self.number}–{self.last_number}"


@dataclass(frozen=True, eq=False)
class Recording:
    """One recorded file of one cell.

    Attributes
    ----------
    name
        Name of the recording: the file's stem.
    step_ms
        Sampling step in ms.
    sweeps
        The sweeps in the order of the file.
    path
        The file it was read from; None for arrays made in memory.
    sha256
        Hash of the file's bytes; empty for arrays made in memory.
    spikes_from
        How the spikes were found, in words; empty where they were not yet looked for.
    left_out
        What selection removed, one sentence each, for the report.
    """

    name: str
    step_ms: float
    sweeps: tuple[Sweep, ...]
    path: Path | None = None
    sha256: str = ""
    spikes_from: str = ""
    left_out: tuple[str, ...] = field(default=())

    def __post_init__(self) -> None:
        if not self.step_ms > 0:
            raise InputError(f"{self.name}: step_ms is {self.step_ms}; expected a positive step")
        if not self.sweeps:
            raise InputError(f"{self.name}: no sweeps; expected at least one")

    @property
    def source(self) -> str:
        """The file's path, or the recording's name where it was made in memory."""
        return str(self.path) if self.path is not None else self.name

    def place(self, row: int) -> str:
        """Name a row as the file counts it: ``row 12`` of a text, ``sample 12`` of arrays."""
        arrays = self.path is not None and self.path.suffix == ".npz"
        return f"{'sample' if arrays else 'row'} {row}"

    @property
    def n_spikes(self) -> int:
        """Number of spikes in all sweeps; 0 where none were looked for."""
        return sum(len(sweep.spikes) for sweep in self.sweeps if sweep.spikes is not None)

    @property
    def seconds(self) -> float:
        """Recorded time of all sweeps in s."""
        return sum(sweep.n_samples for sweep in self.sweeps) * self.step_ms / 1e3

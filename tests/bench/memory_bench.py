"""Peak memory of a fit of 10⁷ samples, in a process of its own.

    python tests/bench/memory_bench.py

The recording itself is counted too: current, voltage and mask are 17 bytes a sample.
"""

from __future__ import annotations

import resource
import sys

from measuring import SETTINGS, arguments, recording, table

from bayesglm.fitting.run import fit

LIMIT_GIB = 1.5


def main() -> int:
    """Print the table; 1 where the limit is missed."""
    small = arguments().small
    made = recording(40_000 if small else 10_000_000)
    before = peak_gib()
    fit(made, SETTINGS)
    after = peak_gib()
    samples = sum(sweep.n_samples for sweep in made.sweeps)
    rows = [("packages and recording", before), ("with the fit", after)]
    table(f"peak memory, {samples:,} samples", ("what", "GiB"), rows)
    print(f"limit {LIMIT_GIB} GiB: {after:.2f}")
    return int(after > LIMIT_GIB)


def peak_gib() -> float:
    """Largest resident set of this process so far, GiB (Linux counts in KiB)."""
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 2**20


if __name__ == "__main__":
    sys.exit(main())

"""Where time grows with the recording, and where it does not.

    python tests/bench/flatness_bench.py

T = 10⁵, 10⁶ and 10⁷ samples. Digest and the checks that walk over all samples may cost at most
10.5 times as much for ten times the samples; sampling does not depend on T.
"""

from __future__ import annotations

import sys
import time

from measuring import DESIGN, SETTINGS, arguments, recording, seconds, table
from threadpoolctl import threadpool_limits

from bayesglm.fitting.run import fit
from bayesglm.inference.setup import nominal_unit_ms
from bayesglm.likelihood.voltage import voltage_digest

LIMIT = 10.5


def main() -> int:
    """Print the table; 1 where the limit is missed."""
    small = arguments().small
    sizes = (40_000, 80_000) if small else (100_000, 1_000_000, 10_000_000)
    rows: list[tuple[object, ...]] = []
    digests: list[float] = []
    fit(recording(sizes[0]), SETTINGS)
    for n in sizes:
        made = recording(n)
        with threadpool_limits(1, user_api="blas"):
            # In blocks as long as those of a fit, which makes at most 200.
            unit_ms = nominal_unit_ms((made,), SETTINGS)
            voltage_digest((made,), DESIGN, unit_ms)
            digest, _ = seconds(
                lambda made=made, ms=unit_ms: voltage_digest((made,), DESIGN, ms).sums, 2
            )
        start = time.perf_counter()
        stages = fit(made, SETTINGS).verdict.seconds
        whole = time.perf_counter() - start
        ratio = digest / digests[-1] if digests else float("nan")
        digests.append(digest)
        rows.append((f"{n:,}", digest, ratio, *stages.values(), whole))
        heads = ("samples", "digest alone", "ratio", *stages, "fit")
    table("seconds by length of the recording", heads, rows)
    print(f"limit of the digest's last ratio {LIMIT}: {digests[-1] / digests[-2]:.1f}")
    return int(not small and digests[-1] / digests[-2] > LIMIT)


if __name__ == "__main__":
    sys.exit(main())

"""Seconds until ``bayesglm --help`` has answered, beside an empty Python.

python tests/bench/help_bench.py
"""

from __future__ import annotations

import subprocess
import sys

from measuring import arguments, seconds, table

LIMIT_S = 1.0


def main() -> int:
    """Print the table; 1 where the limit is missed."""
    repeats = 1 if arguments().small else 5
    empty = [sys.executable, "-c", "pass"]
    told = [sys.executable, "-m", "bayesglm", "--help"]
    rows: list[tuple[object, ...]] = []
    for name, command in (("python -c pass", empty), ("bayesglm --help", told)):
        spent, _ = seconds(
            lambda command=command: subprocess.run(command, check=True, capture_output=True),
            repeats,
        )
        rows.append((name, spent))
    table(f"shortest of {repeats}", ("command", "seconds"), rows)
    print(f"limit {LIMIT_S} s: {spent:.2f}")
    return int(repeats > 1 and spent > LIMIT_S)


if __name__ == "__main__":
    sys.exit(main())

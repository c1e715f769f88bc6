"""What all studies share: many recordings in parallel, resumable, and tables with their errors.

Every recording has a random stream of its own, fixed by the study's seed, the scenario's name and
the recording's number, so that results depend neither on the number of workers nor on where a
study was interrupted. With `--store` each result is kept as soon as it is known, in a file
whose name holds a hash of the code it was made with: what other code made is never mixed in.
"""

from __future__ import annotations

import argparse
import datetime
import hashlib
import json
import re
import sys
from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence
from concurrent.futures import ProcessPoolExecutor, as_completed
from dataclasses import dataclass
from functools import cache
from importlib.metadata import version
from multiprocessing import get_context
from pathlib import Path
from typing import Any

import numpy as np
from scipy.stats import beta

import bayesglm
from bayesglm.recording.recording import FloatArray

#: What one recording gave: numbers, truth values, words and lists of them, as JSON has them.
Found = dict[str, Any]


@dataclass(frozen=True)
class Plan:
    """How a study runs.

    Attributes
    ----------
    recordings
        Number of recordings.
    seed
        Seed of everything random.
    workers
        Number of processes.
    store
        Folder in which results are kept; None to keep none.
    """

    recordings: int
    seed: int = 2026
    workers: int = 1
    store: Path | None = None


def plan_from_command_line(description: str | None, recordings: int) -> Plan:
    """Read the options that all studies have."""
    parser = argparse.ArgumentParser(
        description=description, formatter_class=argparse.RawDescriptionHelpFormatter
    )
    parser.add_argument("--recordings", type=int, default=recordings)
    parser.add_argument("--seed", type=int, default=2026)
    parser.add_argument("--workers", type=int, default=1, help="number of processes")
    parser.add_argument("--store", type=Path, help="folder that keeps results, to go on later")
    return Plan(**vars(parser.parse_args()))


def stream(seed: int, name: str, number: int) -> np.random.Generator:
    """Random stream of one recording of a scenario."""
    sequence = np.random.SeedSequence([seed, *name.encode()], spawn_key=(number,))
    return np.random.default_rng(sequence)


def run_all(label: str, work: Callable[[int], Found], plan: Plan) -> list[Found]:
    """Do the work for every recording.

    Parameters
    ----------
    label
        Names study, scenario and whatever else the results depend on but the seed and the code.
    work
        Takes the recording's number; with several workers it must be picklable.
    plan
        How to run.

    Returns
    -------
    list
        In the order of the recordings.
    """
    kept = _Store(label, plan)
    found = {k: one for k, one in kept.read().items() if k < plan.recordings}
    todo = [k for k in range(plan.recordings) if k not in found]
    for number, one in _work_off(work, todo, plan.workers):
        # Through JSON, so that what was read back and what was just found are alike.
        found[number] = kept.write(number, one)
        print(f"{label}: {len(found)} of {plan.recordings}", file=sys.stderr, flush=True)
    return [found[k] for k in range(plan.recordings)]


def _work_off(
    work: Callable[[int], Found], todo: Sequence[int], workers: int
) -> Iterator[tuple[int, Found]]:
    if workers <= 1:
        for number in todo:
            yield number, work(number)
        return
    # JAX's threads do not survive a fork.
    with ProcessPoolExecutor(workers, mp_context=get_context("spawn")) as pool:
        futures = {pool.submit(work, number): number for number in todo}
        for future in as_completed(futures):
            yield futures[future], future.result()


class _Store:
    """Results of one scenario, one JSON object a line."""

    def __init__(self, label: str, plan: Plan) -> None:
        name = re.sub(r"\W+", "-", f"{label} seed {plan.seed} {code_hash()}") + ".jsonl"
        self._path = plan.store / name if plan.store is not None else None

    def read(self) -> dict[int, Found]:
        """What is kept; a last line cut short by an interruption is passed over."""
        if self._path is None or not self._path.exists():
            return {}
        *lines, cut = self._path.read_text(encoding="utf-8").split("\n")
        if cut:
            self._path.write_text("".join(f"{line}\n" for line in lines), encoding="utf-8")
        return {one["number"]: one["found"] for one in map(json.loads, lines)}

    def write(self, number: int, found: Found) -> Found:
        """Keep one result and return it as it would be read back."""
        line = json.dumps({"number": number, "found": found})
        if self._path is not None:
            self._path.parent.mkdir(parents=True, exist_ok=True)
            with self._path.open("a", encoding="utf-8") as file:
                file.write(line + "\n")
        again: Found = json.loads(line)["found"]
        return again


@cache
def code_hash() -> str:
    """Hash of the package's and the studies' code, eight digits."""
    here = sorted(Path(__file__).parent.glob("*.py"))
    package = sorted(Path(bayesglm.__file__).parent.rglob("*.py"))
    h = hashlib.sha256()
    for path in [*package, *here]:
        h.update(path.read_bytes())
    return h.hexdigest()[:8]


def column(found: Iterable[Found], key: str) -> FloatArray:
    """One number of every recording, shape (recordings,); a list a recording gives two axes."""
    return np.array([one[key] for one in found], dtype=np.float64)


def with_error(values: FloatArray | Sequence[float]) -> str:
    """Mean with its 95 % Monte Carlo interval over recordings, in per cent.

    Events have a Clopper–Pearson interval; shares of lags, which are correlated inside a
    recording, a normal interval over recordings.
    """
    x = np.asarray(values, dtype=np.float64)
    x = x[np.isfinite(x)]
    n = len(x)
    if n < 2:
        return "–"
    mean = float(x.mean())
    if set(np.unique(x)) <= {0.0, 1.0}:
        k = int(x.sum())
        low = float(beta.ppf(0.025, k, n - k + 1)) if k else 0.0
        high = float(beta.ppf(0.975, k + 1, n - k)) if k < n else 1.0
    else:
        error = 1.96 * x.std(ddof=1) / np.sqrt(n)
        low, high = max(0.0, mean - error), min(1.0, mean + error)
    return f"{100 * mean:.0f} % ({100 * low:.0f}–{100 * high:.0f})"


def mean_with_error(values: FloatArray, digits: int = 2) -> str:
    """Mean ± Monte Carlo standard error over recordings."""
    x = np.asarray(values, dtype=np.float64)
    x = x[np.isfinite(x)]
    if len(x) < 2:
        return "–"
    return f"{x.mean():.{digits}f} ± {x.std(ddof=1) / np.sqrt(len(x)):.{digits}f}"


def table(head: Sequence[str], rows: Iterable[Sequence[str]]) -> str:
    """A Markdown table."""
    lines = [head, ["---"] * len(head), *rows]
    return "\n".join("| " + " | ".join(line) + " |" for line in lines)


def rows_of(words: Mapping[str, str], columns: Mapping[str, list[Found]]) -> list[list[str]]:
    """A row for each quantity with its share and error in every column of a table.

    Parameters
    ----------
    words
        What a row is called, and the key of its numbers.
    columns
        What a column is called, and what was found.
    """
    return [
        [text, *(with_error(column(found, key)) for found in columns.values())]
        for text, key in words.items()
    ]


def provenance(script: str, plan: Plan, words: str) -> str:
    """One sentence that says what was run, when and with what."""
    libraries = ", ".join(f"{name} {version(name)}" for name in ("bayesglm", "jax", "numpy"))
    name = Path(script).name
    return (
        f"{words}; seed {plan.seed}, {libraries}, code {code_hash()}, "
        f"{datetime.date.today().isoformat()}; made by `tests/studies/{name}`. Per cents have "
        "their 95 % Monte Carlo interval in brackets; ± is a Monte Carlo standard error."
    )

"""Options that several commands share, and how commands speak."""

from __future__ import annotations

import json
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from bayesglm.errors import InputError

if TYPE_CHECKING:
    from bayesglm.fitting.run import Progress
    from bayesglm.recording.study import Study

Inputs = Annotated[
    list[Path],
    typer.Argument(
        metavar="STUDY|RECORDING…",
        help="A study.toml or its folder, or recordings (CSV, CSV.gz or NPZ), each one cell.",
    ),
]
AsJson = Annotated[bool, typer.Option("--json", help="Print JSON instead of text.")]
Quiet = Annotated[bool, typer.Option("--quiet", "-q", help="Print nothing but errors.")]
Seed = Annotated[int | None, typer.Option(help="Seed of everything random.", min=0)]
Select = Annotated[
    list[str] | None,
    typer.Option(
        "--select",
        metavar="KEY=RANGE",
        help="What part is used: current=-100:25pA, rows.current=, rows.voltage=, sweeps=0-4,7, "
        "window=100:2400ms, rate=0:5Hz. Repeatable; all must hold.",
    ),
]
Assign = Annotated[
    list[str] | None,
    typer.Option(
        "--set",
        metavar="KEY=VALUE",
        help="A key of study.toml, such as kernels.input.duration_ms=200. Repeatable.",
    ),
]
Cell = Annotated[
    str | None, typer.Option("--cell", metavar="NAME", help="Pool all recordings as one cell.")
]


def load_study(
    paths: list[Path],
    assignments: list[str] | None,
    selects: list[str] | None,
    cell: str | None,
    seed: int | None,
) -> Study:
    """Load and validate everything the user gave, before anything is done."""
    from bayesglm.recording.study import load

    wanted = list(assignments or ())
    if seed is not None:
        wanted.append(f"sampling.seed={seed}")
    return load(paths, wanted, selects or (), cell)


def refuse_full_folder(out: Path) -> None:
    """Refuse to write into a folder that holds something."""
    if out.is_file():
        raise InputError(f"{out}: is a file; --out wants a folder that is empty or new")
    if out.is_dir() and any(out.iterdir()):
        raise InputError(f"{out}: is not empty; name a new folder with --out, or empty this one")


def print_json(content: Any) -> None:
    """Print JSON to the standard output."""
    typer.echo(json.dumps(content, indent=2, ensure_ascii=False, allow_nan=False))


@contextmanager
def progress_bar(steps: int, shown: bool) -> Iterator[Progress]:
    """Show a bar with the time left on the standard error; yields what is called at each step."""
    from rich.console import Console
    from rich.progress import (
        BarColumn,
        MofNCompleteColumn,
        Progress,
        TextColumn,
        TimeRemainingColumn,
    )

    columns = (
        TextColumn("{task.description:<24}"),
        BarColumn(bar_width=20),
        MofNCompleteColumn(),
        TextColumn("left"),
        TimeRemainingColumn(),
    )
    bar = Progress(*columns, console=Console(stderr=True), disable=not shown)
    task = bar.add_task("", total=steps)
    started = False

    def tell(stage: str) -> None:
        nonlocal started
        # Not before the first stage: input that is refused leaves one line and no bar.
        bar.start()
        # A stage is done when the next one begins.
        bar.update(task, description=stage, advance=1 if started else 0)
        started = True

    try:
        yield tell
        bar.update(task, description="done", advance=1)
    finally:
        if started:
            bar.stop()

"""``bayesglm demo``: a made-up study, start to finish."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from bayesglm.cli.options import AsJson, Quiet, print_json, progress_bar, refuse_full_folder


def demo(
    out: Annotated[
        Path, typer.Option("--out", metavar="DIR", help="Where to; new or empty.")
    ] = Path("bayesglm-demo"),
    as_json: AsJson = False,
    quiet: Quiet = False,
    seed: Annotated[int, typer.Option(help="Seed of the simulation and the fits.", min=0)] = 0,
) -> None:
    """Make an invented study of six cells, check it, fit it, say where the report is."""
    refuse_full_folder(out)

    from bayesglm.checks.scenario import demo_cells
    from bayesglm.report import demo as report_demo
    from bayesglm.report import folder as report_folder

    steps = report_demo.STAGES + len(demo_cells()) * report_folder.STAGES
    with progress_bar(steps, shown=not quiet and not as_json) as progress:
        result = report_demo.run_demo(out, seed, progress)
    if as_json:
        print_json({**result.study.as_dict(), "lines": list(result.lines)})
    elif not quiet:
        from bayesglm.cli.printing import print_demo

        print_demo(result)

"""``bayesglm fit``: the posterior of every cell."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated, Literal

import typer

from bayesglm.cli.options import (
    AsJson,
    Assign,
    Cell,
    Inputs,
    Quiet,
    Seed,
    Select,
    load_study,
    print_json,
    progress_bar,
    refuse_full_folder,
)


def fit(
    inputs: Inputs,
    out: Annotated[
        Path, typer.Option("--out", metavar="DIR", help="Results folder, new or empty.")
    ],
    select: Select = None,
    assign: Assign = None,
    cell: Cell = None,
    observe: Annotated[Literal["voltage"] | None, typer.Option(help="What is fitted.")] = None,
    as_json: AsJson = False,
    quiet: Quiet = False,
    seed: Seed = None,
) -> None:
    """Fit every cell; write kernels, features, verdicts, figures and a page."""
    refuse_full_folder(out)
    if observe is not None:
        assign = [*(assign or ()), f"model.observe={observe}"]
    study = load_study(inputs, assign, select, cell, seed)

    from bayesglm.report.folder import STAGES, fit_to_folder

    with progress_bar(len(study.cells) * STAGES, shown=not quiet and not as_json) as progress:
        result = fit_to_folder(study, out, progress)
    if as_json:
        print_json(result.as_dict())
    elif not quiet:
        from bayesglm.cli.printing import print_fit
        from bayesglm.report.wording import result_sentences

        for one in result.fits:
            print_fit(one, result_sentences(one))
        typer.echo(f"report: {result.page}")
    if any(one.verdict.verdict == "failed" for one in result.fits):
        raise typer.Exit(3)

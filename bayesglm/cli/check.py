"""``bayesglm check``: what is on the trace, and is it fit for fitting?"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

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
)

if TYPE_CHECKING:
    from bayesglm.recording.settings import Settings
    from bayesglm.recording.study import CellEntry
    from bayesglm.verdict import Reason


def check(
    inputs: Inputs,
    select: Select = None,
    assign: Assign = None,
    cell: Cell = None,
    as_json: AsJson = False,
    quiet: Quiet = False,
    seed: Seed = None,
) -> None:
    """Say what is on the trace and whether it can be fitted; exit 3 if not."""
    from bayesglm.cli.printing import print_reasons

    study = load_study(inputs, assign, select, cell, seed)
    found = [
        (entry, file, rows)
        for entry in study.cells
        for file, rows in _check_cell(entry, study.settings)
    ]
    if as_json:
        print_json([_as_dict(entry, file, rows) for entry, file, rows in found])
    elif not quiet:
        for entry, file, rows in found:
            print_reasons(file or f"{entry.name}: its fitted recordings together", rows)
    if any(row.verdict == "failed" for _, _, rows in found for row in rows):
        raise typer.Exit(3)


def _check_cell(
    entry: CellEntry, settings: Settings
) -> list[tuple[str | None, tuple[Reason, ...]]]:
    """Rows of each file of a cell, and of those that are fitted together without a file's name."""
    from bayesglm.checks.identification import design_rows
    from bayesglm.recording.loading import load_recording
    from bayesglm.recording.quality import check_recording
    from bayesglm.recording.selection import select

    found: list[tuple[str | None, tuple[Reason, ...]]] = []
    fitted, places = [], []
    for one in entry.recordings:
        if one.exclude:
            continue
        recording = select(load_recording(one, settings), settings.recording.select)
        if one.role == "fit":
            fitted.append(recording)
            places.append(len(found))
        found.append((recording.source, check_recording(recording, settings)))
    if not fitted:
        return found
    design = design_rows(fitted, settings)
    if len(fitted) > 1:
        return [*found, (None, design)]
    file, rows = found[places[0]]
    found[places[0]] = (file, (*rows, *design))
    return found


def _as_dict(entry: CellEntry, file: str | None, rows: tuple[Reason, ...]) -> dict[str, Any]:
    from bayesglm.verdict import worst

    return {
        "cell": entry.name,
        "condition": entry.condition,
        "file": file,
        "verdict": worst(row.verdict for row in rows),
        "rows": [row.as_dict() for row in rows],
    }

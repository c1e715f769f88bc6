"""``bayesglm check``: what is on the trace, and is it fit for fitting?"""

from __future__ import annotations

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
    from bayesglm.recording.loading import load_recording
    from bayesglm.recording.quality import check_recording
    from bayesglm.recording.selection import select as select_part
    from bayesglm.verdict import worst

    study = load_study(inputs, assign, select, cell, seed)
    found = []
    for entry in study.cells:
        for one in entry.recordings:
            if one.exclude:
                continue
            recording = load_recording(one, study.settings)
            recording = select_part(recording, study.settings.recording.select)
            found.append((entry, recording, check_recording(recording, study.settings)))
    if as_json:
        print_json(
            [
                {
                    "cell": entry.name,
                    "condition": entry.condition,
                    "file": recording.source,
                    "verdict": worst(row.verdict for row in rows),
                    "rows": [row.as_dict() for row in rows],
                }
                for entry, recording, rows in found
            ]
        )
    elif not quiet:
        for _, recording, rows in found:
            print_reasons(recording.source, rows)
    if any(row.verdict == "failed" for _, _, rows in found for row in rows):
        raise typer.Exit(3)

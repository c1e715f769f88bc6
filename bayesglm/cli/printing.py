"""Rows of checks and fits on a terminal of 80 columns; severity is a word, colour only helps."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, Final

from rich.console import Console
from rich.markup import escape
from rich.padding import Padding
from rich.table import Table
from rich.text import Text

from bayesglm.verdict import Reason, Severity

if TYPE_CHECKING:
    from bayesglm.inference.results import CellFit
    from bayesglm.report.demo import DemoResult

_STYLES: Final[dict[Severity, str]] = {
    "passed": "green",
    "caution": "yellow",
    "failed": "bold red",
}


def print_reasons(title: str, reasons: Sequence[Reason]) -> None:
    """Print the rows of a check, and below them what to do about those that did not pass."""
    console = Console(highlight=False)
    console.print(f"[bold]{escape(title)}[/bold]")
    table = Table(box=None, pad_edge=False, show_header=False, padding=(0, 2, 0, 0))
    table.add_column(no_wrap=True)
    table.add_column(overflow="fold")
    table.add_column(no_wrap=True)
    for row in reasons:
        table.add_row(row.check.replace("_", " "), escape(row.value), _mark(row))
    console.print(table)
    print_advice(console, reasons)
    console.print()


def print_advice(console: Console, reasons: Sequence[Reason]) -> None:
    """Print what each row means, and below those that share it the next command to try."""
    told = [row for row in reasons if row.advice]
    for command in dict.fromkeys(row.command for row in told):
        console.print()
        shown = [(row.verdict, row.check, row.advice) for row in told if row.command == command]
        for verdict, check, advice in dict.fromkeys(shown):
            # Advice on a row that passed is a note.
            word = Text("note") if verdict == "passed" else _severity(verdict)
            console.print(Text.assemble(word, f" {check.replace('_', ' ')}: {advice}"))
        if command:
            # Not wrapped: a command must be copied as one line.
            console.print(Text(f"    {command}"), soft_wrap=True)


def print_fit(fit: CellFit, sentences: Sequence[str]) -> None:
    """Print a fit: verdict, sentences, and the reasons that did not pass."""
    console = Console(highlight=False)
    title = Text.assemble((fit.name, "bold"), ": ", _severity(fit.verdict.verdict))
    console.print(title)
    for sentence in (*sentences, *fit.warnings):
        console.print(Padding(Text(sentence), (0, 0, 0, 2)))
    print_advice(console, fit.verdict.open_reasons)
    console.print()


def print_demo(result: DemoResult) -> None:
    """Print what the demo found, against the truth, and where its report is."""
    console = Console(highlight=False)
    fitted = {fit.name: fit for fit in result.study.fits}
    table = Table(box=None, pad_edge=False, padding=(0, 2, 0, 0))
    for heading in ("cell", "class", "check", "fit"):
        table.add_column(heading)
    for name, checked in result.checks:
        fit = fitted[name]
        verdict = _severity(fit.verdict.verdict)
        table.add_row(name, fit.cell_class, _severity(checked), verdict)
    console.print(table)
    console.print()
    for line in result.lines:
        console.print(line)
    console.print()
    console.print(f"report: {result.study.page}", soft_wrap=True)


def _mark(row: Reason) -> Text:
    # What was not measured or judged did not pass.
    return (
        Text("–")
        if row.value.startswith(("not measured", "not judged"))
        else _severity(row.verdict)
    )


def _severity(severity: Severity) -> Text:
    return Text(severity, style=_STYLES[severity])

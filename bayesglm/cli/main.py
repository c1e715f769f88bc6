"""The program: its commands, and what an error looks like.

Heavy imports wait until a command needs them, so that ``--help`` answers at once.
"""

from __future__ import annotations

import sys
from typing import Final

import typer

from bayesglm.cli.check import check
from bayesglm.cli.demo import demo
from bayesglm.cli.fit import fit
from bayesglm.errors import InputError

CAUTION: Final = (
    "For research only: results are no basis for clinical decisions. Work with animals and tissue "
    "follows local rules and licensed practice."
)

app = typer.Typer(
    name="bayesglm",
    help="Input filters and after-spike kernels of neurons, with error bars that can be "
    f"believed.\n\n{CAUTION}",
    no_args_is_help=True,
    add_completion=False,
    pretty_exceptions_enable=False,
    context_settings={"help_option_names": ["-h", "--help"]},
)
app.command(epilog=CAUTION)(demo)
app.command(epilog=CAUTION)(check)
app.command(epilog=CAUTION)(fit)


@app.callback(invoke_without_command=True)
def _version(
    context: typer.Context,
    version: bool = typer.Option(False, "--version", help="Print the version."),
) -> None:
    if version:
        from importlib.metadata import version as installed

        typer.echo(f"bayesglm {installed('bayesglm')}")
        raise typer.Exit
    if context.invoked_subcommand is None:
        typer.echo(context.get_help())


def run() -> None:
    """Run the program; input that cannot be used is one line on stderr and exit code 2."""
    try:
        app()
    except InputError as error:
        print(f"bayesglm: {error}", file=sys.stderr)
        raise SystemExit(2) from None

"""The command line: parse, call, print."""

from __future__ import annotations

import contextlib
import os
import sys
from typing import Annotated

import typer

from loopfit import __version__
from loopfit.cli.analyze import analyze_command
from loopfit.cli.equivalent import EquivalentCommand, equivalent_command
from loopfit.cli.exits import UNUSABLE_INPUT
from loopfit.cli.retune import retune_command

app = typer.Typer(
    name="loopfit",
    rich_markup_mode=None,
    add_completion=False,
    no_args_is_help=True,
    pretty_exceptions_enable=False,
    context_settings={"help_option_names": ["--help", "-h"]},
)


def _version(asked: bool) -> None:
    if asked:
        typer.echo(f"loopfit {__version__}")
        raise typer.Exit


@app.callback()
def root(
    version: Annotated[
        bool, typer.Option("--version", callback=_version, is_eager=True, help="Print the version and stop.")
    ] = False,
) -> None:
    """Damping of a control loop from a recorded step test, with its interval."""


app.command("analyze")(analyze_command)
app.command("equivalent", cls=EquivalentCommand)(equivalent_command)
app.command("retune")(retune_command)


def main() -> None:
    """Run the command line."""
    for stream in (sys.stdout, sys.stderr):
        if hasattr(stream, "reconfigure"):
            stream.reconfigure(errors="replace")  # a terminal that cannot show a degree sign
    try:
        app()
    except OSError as error:  # a full disk, a closed pipe
        reason = error.strerror or str(error)
        with contextlib.suppress(OSError):
            sys.stderr.write(f"loopfit: the output could not be written: {reason}\n")
        os._exit(UNUSABLE_INPUT)  # the interpreter would try to flush the same stream again


if __name__ == "__main__":
    main()

"""loopfit analyze: a record in, damping and figures out."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from loopfit.cli.exits import UNUSABLE_INPUT, one_line_errors, say, writable

PICTURES = (".png", ".svg", ".pdf")
Column = str | None
Number = float | None


def analyze_command(
    record: Annotated[str, typer.Argument(help="The record: a file, or - for standard input.", show_default=False)],
    json: Annotated[bool, typer.Option("--json", help="One JSON document on standard output.")] = False,
    plot: Annotated[Path | None, typer.Option(help="Write a picture: .png, .svg or .pdf.")] = None,
    band: Annotated[float, typer.Option(help="Settling band, ± % of the change.")] = 2.0,
    confidence: Annotated[float, typer.Option(help="Confidence of every interval, %.")] = 95.0,
    time: Annotated[Column, typer.Option(help="Time column: its name or number.")] = None,
    measurement: Annotated[Column, typer.Option(help="Measurement column: its name or number.")] = None,
    setpoint: Annotated[Column, typer.Option(help="Setpoint column: its name or number.")] = None,
    output: Annotated[Column, typer.Option(help="Controller output column: its name or number.")] = None,
    interval: Annotated[Number, typer.Option(help="Seconds between rows, when there is no time column.")] = None,
    from_: Annotated[Number, typer.Option("--from", help="Use the record from this time on, s.")] = None,
    to: Annotated[Number, typer.Option("--to", help="Use the record up to this time, s.")] = None,
    step: Annotated[int | None, typer.Option(help="Which step, counted from 1.")] = None,
    step_at: Annotated[Number, typer.Option(help="Instant of a step that the record does not hold, s.")] = None,
    step_from: Annotated[Number, typer.Option(help="Level before that step.")] = None,
    step_to: Annotated[Number, typer.Option(help="Level after that step.")] = None,
    quiet: Annotated[bool, typer.Option("--quiet", help="No notes on standard error.")] = False,
    force: Annotated[bool, typer.Option("--force", help="Overwrite a file that exists.")] = False,
) -> None:
    """Tell from a recorded step test how the loop is damped, and how sure that is."""
    with one_line_errors():
        writable(plot, PICTURES, force=force)
        from loopfit.analysis.analyze import analyze

        named = {"time": time, "measurement": measurement, "setpoint": setpoint, "output": output}
        columns = {role: name for role, name in named.items() if name is not None}
        window = (from_, to) if from_ is not None or to is not None else None
        analysis = analyze(
            record,
            columns=columns or None,
            interval_s=interval,
            window_s=window,
            step=step,
            step_at_s=step_at,
            step_from=step_from,
            step_to=step_to,
            band_percent=band,
            confidence_percent=confidence,
        )
        if json:
            typer.echo(analysis.to_json())
        elif analysis.model is not None:
            from loopfit.report.text import page

            typer.echo(page(analysis))
        if analysis.model is None:
            say(f"loopfit: {record}: {analysis.refusal}")
            raise typer.Exit(UNUSABLE_INPUT)
        if plot is not None:
            from loopfit.report.plot import picture

            picture(analysis, plot)
            if not quiet:
                say(f"picture written to {plot}")

"""loopfit analyze: a record in, damping and figures out."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from loopfit.cli import reading
from loopfit.cli.exits import UNUSABLE_INPUT, one_line_errors, say, writable
from loopfit.core.errors import UsageError

PICTURES = (".png", ".svg", ".pdf")


def analyze_command(
    record: Annotated[
        str,
        typer.Argument(
            help="The record: a file, or - for standard input; or a case, a file ending in .toml.", show_default=False
        ),
    ],
    json: reading.Json = False,
    plot: Annotated[Path | None, typer.Option(help="Write a picture: .png, .svg or .pdf.")] = None,
    band: reading.Band = None,
    confidence: reading.Confidence = None,
    time: reading.TimeColumn = None,
    measurement: reading.MeasurementColumn = None,
    setpoint: reading.SetpointColumn = None,
    output: reading.OutputColumn = None,
    interval: reading.Interval = None,
    from_: reading.From = None,
    to: reading.To = None,
    step: reading.Step = None,
    step_at: reading.StepAt = None,
    step_from: reading.StepFrom = None,
    step_to: reading.StepTo = None,
    quiet: reading.Quiet = False,
    force: reading.Force = False,
) -> None:
    """Tell from a recorded step test how the loop is damped, and how sure that is."""
    options = dict(locals())
    with one_line_errors():
        writable(plot, PICTURES, force=force)
        from loopfit.analysis.analyze import analyze
        from loopfit.case.load import is_case, load_case

        case = load_case(record) if is_case(record) else None
        if case is not None:
            if len(case.records) > 1:
                raise UsageError(f"{record} names {len(case.records)} records: give the one to analyze")
            (record,) = case.records
        analysis = analyze(record, **reading.reading_of(options, case))
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

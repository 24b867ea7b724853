"""loopfit retune: a record, the present settings and a target in, the settings to key in out."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from loopfit.cli import loop_settings as controls
from loopfit.cli import reading
from loopfit.cli.analyze import PICTURES
from loopfit.cli.exits import ANSWER_IS_NO, UNUSABLE_INPUT, one_line_errors, say, writable
from loopfit.core.errors import UsageError

if TYPE_CHECKING:
    from loopfit.case.schema import Case


def retune_command(
    records: Annotated[
        list[str],
        typer.Argument(
            metavar="RECORD-OR-CASE",
            help="The record, - for standard input; several of one loop; or a case, a file ending in .toml.",
            show_default=False,
        ),
    ],
    json: reading.Json = False,
    plot: Annotated[Path | None, typer.Option(help="Write a picture: .png, .svg or .pdf.")] = None,
    form: controls.Form = None,
    gain: controls.Gain = None,
    proportional_band: controls.Band = None,
    integral: controls.Integral = None,
    derivative: controls.Derivative = None,
    filter_: controls.Filter = None,
    setpoint_weight: controls.Weight = None,
    scan: controls.Scan = None,
    reverse: controls.Reverse = None,
    derivative_on: controls.DerivativeOn = None,
    measurement_range: controls.MeasurementRange = None,
    output_range: controls.OutputRange = None,
    output_limits: controls.OutputLimits = None,
    damping_ratio: controls.Damping = None,
    overshoot: controls.Overshoot = None,
    settling: controls.Settling = None,
    max_sensitivity: controls.Sensitivity = None,
    noise_gain: controls.NoiseGain = None,
    controller: controls.Terms = None,
    move: controls.Move = None,
    at_least: controls.AtLeast = None,
    at_most: controls.AtMost = None,
    digits: controls.Digits = None,
    confidence_of_target: controls.TargetConfidence = None,
    nominal: controls.Nominal = False,
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
    """Propose the settings to key in for a wanted damping, and how sure it is that they give it.

    Exit status 1: the target is not met, and what is shown is the best attainable.
    """
    options = dict(locals())
    with one_line_errors():
        writable(plot, PICTURES, force=force)
        case = _case_of(records)
        settings = controls.settings_from(options, case)
        wanted = controls.target_from(options, case)
        if case is not None and case.limits:
            wanted["limits"] = case.limits
        how = reading.reading_of(options, case)
        sources = records if case is None else list(case.records)
        from loopfit.tuning.retune import retune

        retuning = retune(sources[0] if len(sources) == 1 else sources, settings=settings, **wanted, **how)
        if retuning.proposed is None:
            if json:
                typer.echo(retuning.to_json())
            say(f"loopfit: {', '.join(sources)}: {retuning.refused or retuning.obstacle}")
            raise typer.Exit(UNUSABLE_INPUT if retuning.refused else ANSWER_IS_NO)
        if settings is not None and not quiet:
            for line in settings.in_words():
                say(f"settings: {line}")
        if plot is not None:
            from loopfit.report.retune_plot import draw

            draw(retuning, plot)
        if json:
            typer.echo(retuning.to_json())
        else:
            from loopfit.report.retune_text import page

            typer.echo(page(retuning))
        if plot is not None and not quiet:
            say(f"picture written to {plot}")
        if not retuning.met:
            raise typer.Exit(ANSWER_IS_NO)


def _case_of(records: list[str]) -> Case | None:
    """Return the case that the argument names; None where it names records."""
    from loopfit.case.load import is_case, load_case

    if len(records) == 1:
        return load_case(records[0]) if is_case(records[0]) else None
    if any(is_case(record) for record in records):
        raise UsageError("a case stands alone: it names its records itself")
    if "-" in records:
        raise UsageError("the standard input holds one record: name files where there are several")
    return None

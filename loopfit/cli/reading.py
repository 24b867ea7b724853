"""Options that say how to read a record, the same for every command that reads one."""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING, Annotated, Any

import typer

if TYPE_CHECKING:
    from loopfit.case.schema import Case

TimeColumn = Annotated[str | None, typer.Option("--time", help="Time column: its name or number.")]
MeasurementColumn = Annotated[str | None, typer.Option("--measurement", help="Measurement column: its name or number.")]
SetpointColumn = Annotated[str | None, typer.Option("--setpoint", help="Setpoint column: its name or number.")]
OutputColumn = Annotated[str | None, typer.Option("--output", help="Controller output column: its name or number.")]
Interval = Annotated[float | None, typer.Option(help="Seconds between rows, when there is no time column.")]
From = Annotated[float | None, typer.Option("--from", help="Use the record from this time on, s.")]
To = Annotated[float | None, typer.Option("--to", help="Use the record up to this time, s.")]
Step = Annotated[int | None, typer.Option(help="Which step, counted from 1.")]
StepAt = Annotated[float | None, typer.Option(help="Instant of a step that the record does not hold, s.")]
StepFrom = Annotated[float | None, typer.Option(help="Level before that step.")]
StepTo = Annotated[float | None, typer.Option(help="Level after that step.")]
Band = Annotated[float | None, typer.Option(help="Settling band, ± % of the change; 2 unless said.")]
Confidence = Annotated[float | None, typer.Option(help="Confidence of every interval, %; 95 unless said.")]
Json = Annotated[bool, typer.Option("--json", help="One JSON document on standard output.")]
Quiet = Annotated[bool, typer.Option("--quiet", help="No notes on standard error.")]
Force = Annotated[bool, typer.Option("--force", help="Overwrite a file that exists.")]

_COLUMNS = ("time", "measurement", "setpoint", "output")
_KEYS = {
    "interval": "interval_s", "from_": "from_s", "to": "to_s", "step": "step", "step_at": "step_at_s",
    "step_from": "step_from", "step_to": "step_to", "band": "band_percent", "confidence": "confidence_percent",
}  # fmt: skip
_STATED = ("step_at_s", "step_from", "step_to")


def reading_of(options: Mapping[str, Any], case: Case | None = None) -> dict[str, Any]:
    """Return the keyword arguments of `analyze`: those of the options, then those of the case.

    Parameters
    ----------
    options : mapping
        The command's parameters by their names; None where not given.
    case : Case, optional
    """
    from loopfit.case.arguments import reading_arguments

    typed = {key: options[name] for name, key in _KEYS.items() if options[name] is not None}
    columns = {role: options[role] for role in _COLUMNS if options[role] is not None}
    held = {} if case is None else dict(case.reading)
    if "step" in typed:
        held = {key: value for key, value in held.items() if key not in _STATED}
    elif any(key in typed for key in _STATED):
        held.pop("step", None)
    columns = {**held.pop("columns", {}), **columns}
    return reading_arguments({**held, **typed, **({"columns": columns} if columns else {})})

"""loopfit equivalent: a transfer function in, equivalent second-order models out."""

from __future__ import annotations

import re
from pathlib import Path
from typing import Annotated, Any

import typer
from typer.core import TyperCommand

from loopfit.cli.analyze import PICTURES
from loopfit.cli.exits import one_line_errors, say, writable
from loopfit.core.errors import UsageError

_NEGATIVE = re.compile(r"-[^-]|-+[\d.(]|-$")


class EquivalentCommand(TyperCommand):
    """A command whose argument may begin with a minus."""

    def parse_args(self, ctx: Any, args: list[str]) -> list[str]:
        """Set an expression such as -2/(s+1) behind --, where it cannot be taken for an option."""
        options = [part for part in self.get_params(ctx) if part.param_type_name == "option"]
        names = {name for option in options for name in option.opts}
        valued = {name for option in options if not getattr(option, "is_flag", True) for name in option.opts}
        before: list[str] = []
        behind: list[str] = []
        for at, word in enumerate(args):
            if word == "--":
                behind += args[at + 1 :]
                break
            is_value = at > 0 and args[at - 1] in valued
            negative = not is_value and word not in names and _NEGATIVE.match(word)
            (behind if negative else before).append(word)
        return super().parse_args(ctx, [*before, "--", *behind] if behind else before)


def equivalent_command(
    expression: Annotated[
        str | None,
        typer.Argument(
            metavar="EXPRESSION-OR-CASE",
            help="The system in s, as 2*exp(-0.5*s)/((3*s+1)*(s+1)); or a case (.toml), for its closed loop.",
            show_default=False,
        ),
    ] = None,
    json: Annotated[bool, typer.Option("--json", help="One JSON document on standard output.")] = False,
    plot: Annotated[Path | None, typer.Option(help="Write a picture: .png, .svg or .pdf.")] = None,
    band: Annotated[float, typer.Option(help="Settling band, ± % of the final value.")] = 2.0,
    numerator: Annotated[
        str | None, typer.Option(help='Coefficients instead of an expression, highest power first: "1 2 3".')
    ] = None,
    denominator: Annotated[str | None, typer.Option(help="Coefficients of the denominator.")] = None,
    dead_time: Annotated[float | None, typer.Option(help="Dead time besides that of the expression, s.")] = None,
    quiet: Annotated[bool, typer.Option("--quiet", help="No notes on standard error.")] = False,
    force: Annotated[bool, typer.Option("--force", help="Overwrite a file that exists.")] = False,
) -> None:
    """Give second-order models with dead time that stand for a transfer function, and how far each is off."""
    with one_line_errors():
        if (numerator is None) != (denominator is None):
            raise UsageError("--numerator and --denominator belong together: give both")
        if (expression is None) == (numerator is None):
            raise UsageError("give an expression in s, or --numerator with --denominator: one of the two")
        writable(plot, PICTURES, force=force)
        from loopfit.equivalents.public import equivalent

        coefficients = None
        if numerator is not None and denominator is not None:
            coefficients = (_numbers("--numerator", numerator), _numbers("--denominator", denominator))
        system: Any = expression
        if expression is not None and expression.lower().endswith(".toml"):
            from loopfit.case.load import load_case
            from loopfit.case.loop import loop_of

            system = loop_of(load_case(expression))
        result = equivalent(system, coefficients=coefficients, dead_time_s=dead_time, band_percent=band)
        if plot is not None:
            from loopfit.report.equivalent_plot import picture

            picture(result, plot)
        if json:
            typer.echo(result.to_json())
        else:
            from loopfit.report.equivalent_text import page

            typer.echo(page(result))
        if plot is not None and not quiet:
            say(f"picture written to {plot}")


def _numbers(name: str, text: str) -> list[float]:
    words = text.strip().removeprefix("[").removesuffix("]").replace(";", " ")
    out = []
    for word in re.split(r",\s+|\s+", words.strip()):
        try:
            out.append(float(word.removesuffix(",")))
        except ValueError:
            hint = f"; is it {word.replace(',', '.')} or {word.replace(',', ' ')}?" if "," in word else ""
            wanted = 'numbers with spaces between, as "1 2.5 3"'
            raise UsageError(f"{name} takes {wanted}: {word!r} is no number{hint}") from None
    return out

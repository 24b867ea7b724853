"""Exit statuses, and the one line that goes with them."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import typer

from loopfit.core.errors import LoopfitError, UsageError

DONE, ANSWER_IS_NO, WRONG_USAGE, UNUSABLE_INPUT = 0, 1, 2, 3


def say(line: str) -> None:
    """Print one line on standard error."""
    typer.echo(" ".join(line.split()), err=True)


@contextmanager
def one_line_errors() -> Iterator[None]:
    """Turn errors that a person can mend into one line and an exit status."""
    try:
        yield
    except UsageError as error:
        say(f"loopfit: {error}")
        raise typer.Exit(WRONG_USAGE) from None
    except LoopfitError as error:
        say(f"loopfit: {error}")
        raise typer.Exit(UNUSABLE_INPUT) from None


def writable(path: Path | None, kinds: tuple[str, ...], *, force: bool) -> None:
    """Check, before any work, that a file can be written.

    Raises
    ------
    UsageError
        If it exists and `force` is not given, its folder does not exist, or its ending is not one of `kinds`.
    """
    if path is None:
        return
    if path.suffix.lower() not in kinds:
        raise UsageError(f"{path}: the file name must end in {', '.join(kinds[:-1])} or {kinds[-1]}")
    if path.is_dir() or not path.parent.is_dir():
        raise UsageError(f"{path}: there is no such folder to write to, or the name is that of a folder")
    if path.exists() and not force:
        raise UsageError(f"{path}: exists already; give another name, or --force to overwrite it")

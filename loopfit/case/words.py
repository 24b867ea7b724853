"""What is said about a case file that is not as it should be."""

from __future__ import annotations

from collections.abc import Iterable
from difflib import get_close_matches

from loopfit.core.errors import LoopfitError

_ALIKE = 0.6  # share of common letters that makes two names look like one misspelt
_SHORT = 3  # letters: PDI is as near to PI as to PID
_SHOWN = 40


class CaseError(LoopfitError, ValueError):
    """A case file cannot be used.

    Parameters
    ----------
    file : str
        The case, as the user named it.
    place : str
        The key, as "controller.integral"; "" for the file as a whole.
    reason : str
        What is wrong and what to do, without a final stop.
    """

    def __init__(self, file: str, place: str, reason: str) -> None:
        super().__init__(file, place, reason)  # all arguments, in order, so that it pickles
        self.file, self.place, self.reason = file, place, reason

    def __str__(self) -> str:
        parts = [self.file, self.place, self.reason] if self.place else [self.file, self.reason]
        return " ".join(": ".join(parts).split())


def found(value: object) -> str:
    """Return what stands in the file, in words."""
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, str):
        return f'the text "{value if len(value) <= _SHOWN else value[:_SHOWN] + "..."}"'
    if isinstance(value, int | float):
        return f"{value:.6g}" if abs(value) < 1e300 else "a number too large"
    if isinstance(value, list):
        return f"a list of {len(value)}"
    return "a table" if isinstance(value, dict) else "a date or time"


def nearest(name: str, known: Iterable[str]) -> str | None:
    """Return the known name that a misspelt one most likely means; None when it looks like none."""
    if len(name) <= _SHORT:
        return None
    by_letters = {one.casefold(): one for one in known}
    close = get_close_matches(name.casefold(), by_letters, n=1, cutoff=_ALIKE)
    return by_letters[close[0]] if close else None


def hint(name: str, known: Iterable[str]) -> str:
    """Return "did you mean ...?", or else the names that there are."""
    names = list(known)
    close = nearest(name, names)
    return f"there are {', '.join(names)}" if close is None else f"did you mean {close}?"

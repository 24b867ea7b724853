"""Errors that a person can mend.

LoopfitError
├── UsageError    an option or argument does not make sense   (exit status 2)
└── RecordError   a record cannot be used                     (exit status 3)
"""

from __future__ import annotations


class LoopfitError(Exception):
    """Base of all errors; its text is the one line that the command prints."""


class UsageError(LoopfitError, ValueError):
    """An option or an argument does not make sense."""


class RecordError(LoopfitError, ValueError):
    """A record cannot be used.

    Parameters
    ----------
    source : str
        File as the user named it, or "arrays".
    reason : str
        What is wrong and what to do, without a final stop.
    row : int, optional
        Line of the file, counted from 1.
    column : str, optional
        Name of the column.
    """

    def __init__(self, source: str, reason: str, row: int | None = None, column: str | None = None) -> None:
        super().__init__(source, reason, row, column)  # all arguments, in order, so that it pickles
        self.source, self.reason, self.row, self.column = source, reason, row, column

    def __str__(self) -> str:
        place = self.source
        if self.row is not None:
            place += f", row {self.row}"
        if self.column is not None:
            place += f", column {self.column!r}"
        return " ".join(f"{place}: {self.reason}".split())

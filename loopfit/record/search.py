"""The state of a search for roles: what is free, what is found, what was said about it."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

from loopfit.core.arrays import Array
from loopfit.core.errors import RecordError
from loopfit.core.finding import Finding
from loopfit.record.table import Column
from loopfit.record.wording import names_text


@dataclass(slots=True)
class Search:
    """The state of one search: what has a role, what is free, what was said about it."""

    source: str
    free: list[Column]
    found: dict[str, Column] = field(default_factory=dict)
    findings: list[Finding] = field(default_factory=list)

    def take(self, role: str, column: Column) -> None:
        """Give a column its role."""
        self.found[role] = column
        self.free = [other for other in self.free if other.number != column.number]

    def say(self, code: str, text: str) -> None:
        """Note a choice."""
        self.findings.append(Finding(code=code, severity="note", text=text))

    def ask(self, role: str, choices: Sequence[Column]) -> RecordError:
        """Return the error that asks the user to name a column."""
        names = names_text([column.name for column in choices])
        return RecordError(self.source, f"cannot tell which of {names} is the {role}; say it with --{role} COL")


def values_of(column: Column) -> Array:
    """Return the values of a numeric column."""
    assert column.values is not None
    return column.values

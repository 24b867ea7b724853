"""What was noticed in a record, and what it does to the numbers."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Literal

Severity = Literal["note", "warning", "error"]


@dataclass(frozen=True, slots=True, kw_only=True)
class Finding:
    """One thing noticed.

    `code` is stable and made for scripts; `text` is one sentence for a person.
    `at_s` is where it is in time (start, end), on the record's clock, for the picture.
    """

    code: str
    severity: Severity
    text: str
    at_s: tuple[float, float] | None = field(default=None)

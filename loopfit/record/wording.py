"""Words: sets of them, and those for counts and places in findings."""

from __future__ import annotations

from collections.abc import Sequence


def word_set(text: str, mark: str = " ") -> frozenset[str]:
    """Return the words of a text."""
    return frozenset(text.split(mark))


def count_of(count: int, word: str) -> str:
    """Return "1 row", "3 rows"."""
    return f"{count} {word}" + ("" if count == 1 else "s")


def lines_text(lines: Sequence[int], shown: int = 3, word: str = "line") -> str:
    """Return "line 12" or "lines 12, 13, 20, ..."."""
    listed = ", ".join(str(int(line)) for line in lines[:shown])
    return f"{word}{'' if len(lines) == 1 else 's'} {listed}" + (", ..." if len(lines) > shown else "")


def names_text(names: Sequence[str], shown: int = 8) -> str:
    """Return the names, quoted and joined, cut after some, each no longer than 40 characters."""
    quoted = [repr(name if len(name) <= 40 else name[:37] + "...") for name in names[:shown]]
    more = f" and {len(names) - shown} more" if len(names) > shown else ""
    return ", ".join(quoted) + more

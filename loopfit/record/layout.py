"""How a text is laid out: which delimiter and which decimal mark make most sense of its rows."""

from __future__ import annotations

import csv
import re
from collections import Counter
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace
from itertools import pairwise

from loopfit.record.number import Marks, is_bad_word, parse_number, thousands_in, thousands_suspected

_DELIMITERS = ("\t", ";", "|", ",", " ")  # in order of trust: a blank or a comma may also be part of a cell
_MARKS = (
    Marks("."),
    Marks(","),
    Marks(".", ","),
    Marks(",", "."),
    Marks(",", " "),
    Marks(".", " "),
    Marks(".", "'"),
    Marks(",", "'"),
)
_MONTHS = (
    "jan|feb|fév|fev|ene|mar|mär|mrz|apr|avr|abr|may|mai|jun|jui|jul|aug|aoû|aou|ago|sep|oct|okt|nov|dec|dez|déc|dic"
)
STAMP = re.compile(
    r"(?:\d{4}-\d{1,2}-\d{1,2}|\d{1,4}([-/.])\d{1,2}\1\d{1,4}|\d{8}(?=T)"
    rf"|\d{{1,4}}[-/. ] ?(?:{_MONTHS})[^\d\s]*[-/. ]+\d{{1,4}})"
    r"(?:[T ,_]+\d{1,2}(?:[:.]?\d{2}){1,2}(?:[.,:]\d{1,9})?\s*(?:[ap]\.?m\.?)?\s*(?:Z|UTC|GMT|[+-]\d{2}:?\d{2})?)?"
    r"|[+-]?\d{1,4}:\d{2}(?::\d{2})?(?:[.,]\d+)?(?: ?[ap]\.?m\.?)?",
    re.ASCII | re.IGNORECASE,
)
Row = tuple[int, list[str]]  # line of the file, counted from 1, and its cells


@dataclass(frozen=True, slots=True)
class Layout:
    """The delimiter (" " for runs of blanks), the marks in numbers, and the usual number of cells in a row."""

    delimiter: str
    marks: Marks
    width: int
    thousands_guessed: bool = False


def split_line(line: str, delimiter: str) -> list[str]:
    """Return the cells of one line, without the blanks around them; quoted cells by the csv module."""
    if delimiter == " ":
        return line.split()
    if '"' in line:
        try:
            return [cell.strip() for cell in next(csv.reader([line], delimiter=delimiter, skipinitialspace=True), [])]
        except csv.Error:  # a cell beyond the module's limit
            pass
    return [cell.strip() for cell in line.split(delimiter)]


def rows_of(lines: Sequence[str], delimiter: str, first: int = 1) -> Iterator[Row]:
    """Yield each row with its line number; a quoted cell may run over up to five lines."""
    index = 0
    while index < len(lines):
        line, start = lines[index], index
        index += 1
        if line.count('"') % 2:
            for more in range(1, 6):
                joined = "\n".join(lines[start : start + 1 + more])
                if joined.count('"') % 2 == 0:
                    line, index = joined, start + 1 + more
                    break
        if "\n" in line:
            cells = next(csv.reader(line.splitlines(keepends=True), delimiter=delimiter, skipinitialspace=True), [])
            yield first + start, [" ".join(cell.split()) for cell in cells]
        else:
            yield first + start, split_line(line, delimiter)


def cell_kind(cell: str, marks: Marks) -> str:
    """Return "number", "stamp", "bad" (a word for no value, or nothing) or "text"."""
    if is_bad_word(cell):
        return "bad"
    if cell[0] in "+-.,0123456789\u2212":
        if parse_number(cell, marks) is not None:
            return "number"
        if STAMP.fullmatch(cell):
            return "stamp"
    return "text"


def find_layout(lines: Sequence[str]) -> Layout | None:
    """Return the layout that turns most of the sampled lines into rows of numbers and times, None when none does.

    A reading is scored by the share of lines that have its usual width times the share of its columns
    that hold numbers; more columns count for more. The simplest marks and the most trusted delimiter win ties.
    """
    best: tuple[float, Layout, list[list[str]]] | None = None
    for delimiter in _DELIMITERS:
        if delimiter != " " and not any(delimiter in line for line in lines) and delimiter != "\t":
            continue
        split = [cells for _, cells in rows_of(lines, delimiter) if any(cells)]
        for place, marks in enumerate(_MARKS):
            if marks.thousands and not any(marks.thousands in cell for cells in split for cell in cells):
                continue
            if delimiter == " " and marks.thousands == " ":
                continue
            score, width = _score(split, marks)
            score *= 1 - 0.02 * place
            if width and (best is None or score > best[0] * 1.001):
                best = score, Layout(delimiter, marks, width), split
    if best is None or best[0] <= 0:
        return None
    return _settle(best[1], best[2])


def layout_of_cells(rows: Sequence[list[str]]) -> Layout | None:
    """Return the layout of rows that are split already, as a spreadsheet has them."""
    best: tuple[float, Layout] | None = None
    for place, marks in enumerate(_MARKS[:2]):
        score, width = _score(rows, marks)
        score *= 1 - 0.02 * place
        if width and (best is None or score > best[0] * 1.001):
            best = score, Layout("\t", marks, width)
    return None if best is None else best[1]


def _score(split: Sequence[list[str]], marks: Marks) -> tuple[float, int]:
    kinds = [[cell_kind(cell, marks) for cell in cells] for cells in split]
    widths = Counter(len(row) for row in kinds if "number" in row or "stamp" in row)
    if not widths:
        return 0.0, 0
    usual = width = max(widths, key=lambda count: (widths[count], count))
    while width > 1 and not any(cells[width - 1] for cells in split if len(cells) >= width):
        width -= 1  # closing delimiters
    rows = [row[:width] for row in kinds if width <= len(row) <= usual]
    good = text = 0
    for column in zip(*rows, strict=True):
        full = sum(kind != "bad" for kind in column)
        numbers = sum(kind in ("number", "stamp") for kind in column)
        if full and numbers >= 0.6 * full:
            good += 1
        elif full:
            text += 1
    if not good:
        return 0.0, 0
    return len(rows) / len(split) * good / (good + text) * good**0.5, width


def numeric_columns(rows: Sequence[list[str]], layout: Layout) -> list[bool]:
    """Return which columns hold numbers or times in most rows, and are filled in at least half of them."""
    numeric = []
    for column in zip(*[row[: layout.width] for row in rows if len(row) >= layout.width], strict=True):
        kinds = [cell_kind(cell, layout.marks) for cell in column]
        full = sum(kind != "bad" for kind in kinds)
        good = sum(kind in ("number", "stamp") for kind in kinds)
        numeric.append(2 * full >= len(kinds) and good >= 0.6 * full)
    return numeric


def with_thousands(layout: Layout, rows: Sequence[Row], numeric: Sequence[bool]) -> Layout:
    """Return the layout with the mark between thousands that only some rows need: 998.5, 1,002.5."""
    if layout.marks.thousands:
        return layout
    wanted = [place for place, flag in enumerate(numeric) if flag]
    for _, cells in rows:
        for place in wanted:
            if place < len(cells):
                mark = thousands_in(cells[place], layout.marks.decimal)
                if mark and not (mark == " " and layout.delimiter == " "):
                    return replace(layout, marks=Marks(layout.marks.decimal, mark))
    return layout


def _settle(layout: Layout, split: Sequence[list[str]]) -> Layout:
    """Return the layout after the two doubts that counting cannot settle."""
    marks = layout.marks
    if (
        layout.delimiter == ","
        and marks == Marks(".")
        and layout.width == 2
        and not any("." in c for r in split for c in r)
    ):
        rows = [cells for cells in split if len(cells) == 2 and all(c.lstrip("+-").isdigit() for c in cells)]
        heads = [cells for cells in split if not any(c.lstrip("+-").isdigit() for c in cells)]
        rising = all(float(a[0]) < float(b[0]) for a, b in pairwise(rows))
        unsigned = all(row[1].isdigit() for row in rows)
        if unsigned and not rising and (not heads or len(heads[-1]) == 1):
            return Layout("\t", Marks(","), 1)  # one column of 12,5 rather than two of 12 and 5
    other = "," if marks.decimal == "." else "."
    if marks.thousands == "" and layout.delimiter != marks.decimal:
        columns = list(zip(*[cells[: layout.width] for cells in split if len(cells) >= layout.width], strict=True))
        suspects = [column for column in columns if thousands_suspected(column, marks.decimal)]
        if suspects and not any(
            _plain_decimal(cell, marks.decimal) for column in columns if column not in suspects for cell in column
        ):
            return Layout(layout.delimiter, Marks(other, marks.decimal), layout.width, thousands_guessed=True)
    return layout


def _plain_decimal(cell: str, mark: str) -> bool:
    """Return whether the cell can only be a number with this decimal mark."""
    return re.fullmatch(rf"[+\-]?\d*{re.escape(mark)}\d+(?:[eE][+\-]?\d+)?", cell) is not None and not re.fullmatch(
        rf"[+\-]?[1-9]\d{{0,2}}{re.escape(mark)}\d{{3}}", cell
    )

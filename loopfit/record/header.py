"""The rows above the data: names, units, title lines."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass

from loopfit.record.layout import Layout, Row, cell_kind, split_line
from loopfit.record.stated import interval_in
from loopfit.record.units import is_unit, split_unit

_COMMENT = re.compile(r"^\s*(?:#+|//+|%+(?=\s|[A-Za-z])|!+(?=\s))\s*")


@dataclass(frozen=True, slots=True, kw_only=True)
class Header:
    """Names and units of the columns, and where the data begin.

    `first` is the place of the first data row in the list of rows; `cells` are the header cells as
    they stand, by which a repeated header is known; `preamble` are the lines above the header.
    """

    names: tuple[str, ...]
    units: tuple[str | None, ...]
    named: bool
    cells: tuple[str, ...]
    first: int
    preamble: tuple[str, ...]
    unfit: tuple[int, int] | None = None  # line and number of names of a header that does not fit the rows


def is_comment(line: str) -> bool:
    """Return whether the line opens with a comment mark."""
    return _COMMENT.match(line) is not None


def find_header(rows: Sequence[Row], layout: Layout, numeric: Sequence[bool], lines: Sequence[str]) -> Header:
    """Return the header of rows whose numeric columns are known.

    Parameters
    ----------
    rows : sequence of (line, cells)
        From the top of the file on.
    numeric : sequence of bool
        Which columns hold numbers or times in most rows.
    lines : sequence of str
        The lines as they stand, for headers with another delimiter than the rows.
    """
    first = next((place for place, (_, cells) in enumerate(rows) if _is_data(cells, layout, numeric)), len(rows))
    while first > 0 and _is_poor_data(rows[first - 1][1], layout, numeric):
        first -= 1
    above = [(line, cells) for line, cells in rows[:first] if any(cells)]
    width = layout.width
    names: list[str] | None = None
    units: list[str | None] = [None] * width
    used = 0

    def whole(line: int, cells: list[str]) -> str:
        return lines[line - 1] if line <= len(lines) else "\t".join(cells).strip()

    for line, cells in reversed(above):
        fitted = _fit(cells, whole(line, cells), width, layout.delimiter in " \t")
        if fitted is None or interval_in(whole(line, cells)) is not None:
            break
        if names is None and used == 0 and _are_units(fitted):
            units = [cell.strip("()[]{}<> ") or None for cell in fitted]
            used = 1
            continue
        if names is None:
            names = fitted
            used += 1
        elif _is_group_row(fitted, names):
            names = [f"{top} {name}".strip() for top, name in zip(_spread(fitted), names, strict=True)]
            used += 1
            break
        else:
            break
    preamble = tuple(whole(line, cells) for line, cells in above[: len(above) - used])
    cells_above = tuple(above[-used][1]) if used else ()
    named = names is not None
    plain = [f"column {place + 1}" for place in range(width)]
    names = plain if names is None else [name or other for name, other in zip(names, plain, strict=True)]
    split = [split_unit(name) for name in names] if named else [(name, None) for name in names]
    units = [unit or own for unit, (_, own) in zip(units, split, strict=True)]
    unfit = None
    if (
        not named
        and above
        and len(above[-1][1]) > 1
        and all(cell_kind(c, layout.marks) == "text" for c in above[-1][1])
    ):
        unfit = above[-1][0], len(above[-1][1])
    return Header(
        names=tuple(names),
        units=tuple(units),
        named=named,
        cells=cells_above,
        first=first,
        preamble=preamble,
        unfit=unfit,
    )


def _is_data(cells: Sequence[str], layout: Layout, numeric: Sequence[bool]) -> bool:
    if len(cells) < layout.width * 0.5 or len(cells) < sum(numeric) * 0.5:
        return False
    kinds = [cell_kind(cell, layout.marks) for cell, wanted in zip(cells, numeric, strict=False) if wanted]
    good = sum(kind in ("number", "stamp") for kind in kinds)
    return "text" not in kinds and 2 * good > sum(numeric)


def _is_poor_data(cells: Sequence[str], layout: Layout, numeric: Sequence[bool]) -> bool:
    """Return whether a row is data with bad cells: of full width, its first number or time in place."""
    if len(cells) != layout.width or sum(numeric) < 2:
        return False
    kinds = [cell_kind(cell, layout.marks) for cell, wanted in zip(cells, numeric, strict=True) if wanted]
    good = sum(kind in ("number", "stamp") for kind in kinds)
    return kinds[0] in ("number", "stamp") and 2 * good >= len(kinds)


def _fit(cells: list[str], line: str, width: int, row_names: bool) -> list[str] | None:
    """Return the cells of a header line as `width` names, None when they cannot be brought to that number."""
    body = _COMMENT.sub("", line)
    choices = [cells]
    if body != line:
        choices = [[cells[0].lstrip("#/%! "), *cells[1:]], cells[1:]]
    choices += [split_line(body, mark) for mark in ("\t", ";", ",", "|")]
    choices.append([part for part in re.split(r"\s{2,}", body.strip()) if part])
    choices.append(re.findall(r"[^\s(\[]+(?:\s*[(\[][^)\]]*[)\]])?", body))
    choices.append(body.split())
    for choice in choices:
        while len(choice) > width and not choice[-1]:
            choice = choice[:-1]
        if len(choice) == width and any(choice):
            return [cell.strip().strip('"').strip() for cell in choice]
    if (
        row_names and len(cells) == width - 1 and width > 2 and all(cells)
    ):  # row names, as statistics programs write them
        return ["", *cells]
    return None


def _are_units(cells: Sequence[str]) -> bool:
    full = [cell for cell in cells if cell]
    return bool(full) and all(is_unit(cell) for cell in full)


def _is_group_row(top: Sequence[str], names: Sequence[str]) -> bool:
    """Return whether a row above the names carries names of groups of columns, not a title in its first cells."""
    full = [place for place, cell in enumerate(top) if cell]
    if len(top) != len(names) or len(full) < 2:
        return False
    return (2 * len(full) >= len(top) or full[-1] > 1) and not any(cell[:1].isdigit() for cell in top if cell)


def _spread(cells: Sequence[str]) -> list[str]:
    """Return the group names with empty cells filled from the left."""
    last, result = "", []
    for cell in cells:
        last = cell or last
        result.append(last)
    return result

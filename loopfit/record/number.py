"""Numbers as loggers write them: decimal mark, thousands mark, signs, words for "no value"."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass
from functools import lru_cache
from itertools import pairwise

import numpy as np

from loopfit.core.arrays import Array
from loopfit.record.units import UNITS
from loopfit.record.wording import word_set

BAD_WORDS = word_set(
    "nan|na|n/a|n.a.|#n/a|null|nil|none|bad|-|--|---|----|-----|no data|nodata|no_data|no "
    "value|error|err|#value!|#div/0!|#ref!"
    "|inf|-inf|+inf|1.#inf|-1.#inf|1.#qnan|1.#ind|-1.#ind|overrange|over range|under "
    "range|underrange|ol|+ol|-ol|overflow|fault"
    "|failed|comm fail|timeout|i/o timeout|invalid|missing|?|??|???|*|**|***|off-line|offline|shutdown|bad "
    "input|pt created"
    "|ungültig|fehler|kein wert|keine daten|erreur|défaut|invalide|pas de données|fallo|inválido|sin datos",
    "|",
)
_BLANKS = "[ \u00a0\u202f\u2009]"


@dataclass(frozen=True, slots=True)
class Marks:
    """The decimal mark, and the mark between thousands ("" for none)."""

    decimal: str = "."
    thousands: str = ""


@lru_cache(maxsize=32)
def _pattern(marks: Marks) -> re.Pattern[str]:
    decimal = re.escape(marks.decimal)
    whole = r"\d+"
    if marks.thousands:
        mark = _BLANKS if marks.thousands == " " else re.escape(marks.thousands)
        whole = rf"(?:[1-9]\d{{0,2}}(?:{mark}\d{{3}})+|\d+)"
    return re.compile(
        rf"([+\-\u2212]?(?:{whole}(?:{decimal}\d+)?|\d+{decimal}|{decimal}\d+)(?:[eEdD][+\-]?\d{{1,3}})?)(.*)",
        re.ASCII | re.DOTALL,
    )


def is_bad_word(cell: str) -> bool:
    """Return whether a logger writes this where it has no value; an empty cell counts."""
    return not cell or cell.lower() in BAD_WORDS


def parse_number(cell: str, marks: Marks) -> tuple[float, str] | None:
    """Return a number and the unit behind it ("" for none), or None when the cell is not a number."""
    found = _pattern(marks).fullmatch(cell)
    if found is None:
        return None
    digits, unit = found.group(1), found.group(2).strip()
    if unit and unit not in UNITS:
        return None
    if marks.thousands:
        digits = re.sub(_BLANKS, "", digits) if marks.thousands == " " else digits.replace(marks.thousands, "")
    digits = digits.replace(marks.decimal, ".").replace("\u2212", "-")
    try:
        return float(digits), unit
    except ValueError:  # the Fortran exponent
        return float(digits.replace("d", "e").replace("D", "e")), unit


def column_of_numbers(cells: Sequence[str], marks: Marks) -> tuple[Array, str | None]:
    """Return a column's values (n,), NaN where a cell is no finite number, and the unit written in its cells.

    The quick way is taken only where it must agree with the careful one: `float` is stricter than
    the grammar in nothing but thousands marks and units, and laxer in underscores, foreign digits,
    and the words for infinity.
    """
    text = "".join(cells)
    if text.isascii() and "_" not in text and not (marks.decimal == "," and "." in text):
        source = [cell.replace(",", ".") for cell in cells] if marks.decimal == "," else cells
        try:
            values = np.array([float(cell) for cell in source], dtype=np.float64)
        except ValueError:
            values = np.empty(0)
        if len(values) and np.isfinite(values).all():
            return values, None
    values = np.full(len(cells), np.nan)
    filled = [cell for cell in cells[:: max(1, len(cells) // 200)] if cell]
    if len(filled) > 20 and not any(parse_number(cell, marks) for cell in filled):
        return values, None  # a column of stamps or texts
    units: dict[str, int] = {}
    for index, cell in enumerate(cells):
        parsed = parse_number(cell.strip(), marks)
        if parsed is not None:
            values[index] = parsed[0] if np.isfinite(parsed[0]) else np.nan
            units[parsed[1]] = units.get(parsed[1], 0) + 1
    unit = max(units, key=lambda name: units[name]) if units else ""
    if len(units) > 1:  # 500 mV among 1 V: a number with another unit is another quantity, so no value of this column
        for index, cell in enumerate(cells):
            parsed = parse_number(cell.strip(), marks)
            if parsed is not None and parsed[1] not in (unit, ""):
                values[index] = np.nan
    return values, unit or None


_BOTH_MARKS = {
    decimal: re.compile(
        rf"[+\-\u2212]?[1-9]\d{{0,2}}(?:([{others}])\d{{3}})(?:\1\d{{3}})*{re.escape(decimal)}\d+", re.ASCII
    )
    for decimal, others in ((".", ",' \u00a0\u202f\u2009"), (",", ".' \u00a0\u202f\u2009"))
}


def thousands_in(cell: str, decimal: str) -> str | None:
    """Return the mark between thousands of a number that shows a decimal mark behind it, as in 1,002.5."""
    if len(cell) < 7 or decimal not in cell:
        return None
    found = _BOTH_MARKS[decimal].fullmatch(cell)
    return None if found is None else " " if found.group(1) in _BLANKS else found.group(1)


def thousands_suspected(cells: Sequence[str], mark: str) -> bool:
    """Return whether every such mark in a column stands before exactly three digits, and some cells have none.

    A logger with three fixed decimals marks every cell, one that drops closing zeros writes one or two
    decimals somewhere; only thousands leave small whole numbers bare and always show three digits.
    """
    marked = [cell for cell in cells if mark in cell]
    bare = [cell for cell in cells if cell and mark not in cell]
    grouped = re.compile(rf"[+\-]?[1-9]\d{{0,2}}(?:{re.escape(mark)}\d{{3}})+")
    if not marked or not all(grouped.fullmatch(cell) for cell in marked):
        return False
    if any(cell.count(mark) > 1 for cell in marked):
        return True
    if any(not re.fullmatch(r"[+\-]?\d{1,3}", cell) for cell in bare if any(letter.isdigit() for letter in cell)):
        return False
    return _thousands_join_better(cells, mark)


def _thousands_join_better(cells: Sequence[str], mark: str) -> bool:
    """Return whether marked cells lie nearer to their bare neighbours as thousands than as decimals: 998, 1.002."""
    votes = 0
    for before, after in pairwise(cells):
        marked, bare = (before, after) if mark in before else (after, before)
        if mark not in marked or mark in bare or not bare.lstrip("+-").isdigit() or int(bare) == 0:
            continue
        thousands = abs(float(marked.replace(mark, "")) / float(bare))
        votes += 1 if thousands < 1000 / thousands else -1  # as a decimal it is a thousandth of that
    return votes > 0

"""From a TOML file to a case, every error with its place."""

from __future__ import annotations

import os
import re
import tomllib
from collections.abc import Mapping
from pathlib import Path
from types import MappingProxyType
from typing import Any

from loopfit.case.arguments import check_controller, check_target
from loopfit.case.schema import CASE, READING, Case, Schema
from loopfit.case.words import CaseError, found, hint, nearest
from loopfit.core.errors import UsageError

_AT_LINE = re.compile(r"\s*\(at (line (\d+), column \d+|end of document)\)")
_DECIMAL_COMMA = re.compile(r"=\s*[+-]?\d+,\d+\s*(#.*)?$")


def is_case(source: object) -> bool:
    """Tell whether a path names a case: it ends in .toml."""
    return isinstance(source, str | os.PathLike) and os.fspath(source).lower().endswith(".toml")


def load_case(path: str | os.PathLike[str]) -> Case:
    """Return the case in a file; the records it names are looked for from its folder.

    Raises
    ------
    CaseError
        With the file and the place, if it cannot be read or something in it is not as it should be.
    """
    file = os.fspath(path)
    held = _read(file, "", _parsed(file), CASE)
    for first, second in (("record", "records"), ("step", "step_at_s")):
        if first in held and second in held:
            raise CaseError(file, second, f"{first} is there too: give one of the two")
    names = (held["record"],) if "record" in held else held.get("records")
    if names is None:
        raise CaseError(file, "record", 'it is missing: name the recorded step test, record = "step.csv"')
    records = tuple(_record(file, name) for name in names)
    case = Case(
        file=file,
        records=records,
        reading=MappingProxyType({key: value for key, value in held.items() if key in READING}),
        controller=MappingProxyType(held.get("controller", {})),
        target=MappingProxyType(held.get("target", {})),
        limits=MappingProxyType(held.get("limits", {})),
    )
    _check(case)
    return case


def _parsed(file: str) -> dict[str, Any]:
    try:
        data = Path(file).read_bytes()
    except FileNotFoundError:
        raise CaseError(file, "", "no such file") from None
    except IsADirectoryError:
        raise CaseError(file, "", "this is a folder; name a case file in it") from None
    except (OSError, ValueError) as problem:
        raise CaseError(file, "", f"cannot be read: {getattr(problem, 'strerror', None) or problem}") from None
    try:
        content = data.decode("utf-8-sig").replace("\r\n", "\n")
    except UnicodeDecodeError:
        raise CaseError(file, "", "not UTF-8 text: save it again as UTF-8") from None
    try:
        return tomllib.loads(content)
    except RecursionError:
        raise CaseError(file, "", "tables or lists too deep in one another") from None
    except ValueError as problem:  # of the syntax, or a whole number of thousands of digits
        raise _not_toml(file, content, str(problem)) from None


def _not_toml(file: str, content: str, problem: str) -> CaseError:
    match = _AT_LINE.search(problem)
    place = match[1] if match else ""
    line = content.split("\n")[int(match[2]) - 1] if match and match[2] else ""
    mend = ""
    if _DECIMAL_COMMA.search(line):
        mend = "; a number is written with a point, as 2.5"
    elif "\\" in line:
        mend = "; in a path write / or put it in single quotes"
    elif re.search(r"=\s*[^\s\"'\[{\d+-]", line):
        mend = "; a text stands in quotes"
    return CaseError(file, place, f"not valid TOML: {_AT_LINE.sub('', problem)}{mend}")


def _read(file: str, place: str, table: Mapping[str, Any], schema: Schema) -> dict[str, Any]:
    made: dict[str, Any] = {}
    for name, value in table.items():
        here = f"{place}.{name}" if place else name
        if name not in schema:
            raise CaseError(file, here, _unknown(name, place, schema))
        read = schema[name]
        if isinstance(read, Mapping):
            if not isinstance(value, dict):
                raise CaseError(file, here, f"a table is wanted, [{here}], not {found(value)}")
            made[name] = _read(file, here, value, read)
            continue
        try:
            made[name] = read(value)
        except UsageError as problem:
            raise CaseError(file, here, str(problem)) from None
    return made


def _unknown(name: str, place: str, schema: Schema) -> str:
    close = nearest(name, schema)
    if "." not in place and (close is None or close.casefold() != name.casefold()):
        homes = [key for key, inside in CASE.items() if isinstance(inside, Mapping) and name in inside]
        if name in CASE:
            return "this key belongs at the top of the file, before the first [table]"
        if homes:
            return f"this key belongs in [{homes[0]}]"
    where = f"in [{place}]" if place else "in a case"
    return f"there is no such key {where}; {hint(name, schema)}"


def _record(file: str, name: str) -> str:
    if name == "-":
        raise CaseError(file, "record", "a case names a file, not the standard input")
    if is_case(name):
        raise CaseError(file, "record", f"{name} is a case; name the recorded file")
    return str(Path(file).parent / name)


def _check(case: Case) -> None:
    """Raise CaseError where single values contradict the form, the target's bounds, or each other."""
    for place, problem in (*check_controller(case.controller), *check_target(case.target)):
        raise CaseError(case.file, place, problem)
    begin, end = case.reading.get("from_s"), case.reading.get("to_s")
    if begin is not None and end is not None and not begin < end:
        raise CaseError(case.file, "to_s", f"the window ends at {end:g} s, and begins only at {begin:g} s")
    missing = [name for name in ("step_at_s", "step_from", "step_to") if name not in case.reading]
    if 0 < len(missing) < 3:
        raise CaseError(case.file, missing[0], "it is missing: a stated step has step_at_s, step_from and step_to")
    low, high = case.limits.get("damping_ratio_min"), case.limits.get("damping_ratio_max")
    if low is not None and high is not None and not low <= high:
        raise CaseError(case.file, "limits.damping_ratio_max", f"it lies below damping_ratio_min, {low:g}")

"""Which columns are the measurement, the setpoint and the output: by name, then unit, then content."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np

from loopfit.core.arrays import Array
from loopfit.core.errors import RecordError
from loopfit.core.finding import Finding
from loopfit.record.content import distance, follows, is_constant, is_stepped, jump_share, noise_of, same_shape
from loopfit.record.table import Column
from loopfit.record.words import group_of, weight, words_of
from loopfit.record.wording import names_text

_INPUT = frozenset("input eingang entrada entree".split())
_OUTPUT = frozenset("output ausgang salida sortie".split())


@dataclass(slots=True)
class _Search:
    """The state of one search: what has a role, what is free, what was said about it."""

    source: str
    free: list[Column]
    found: dict[str, Column] = field(default_factory=dict)
    findings: list[Finding] = field(default_factory=list)

    def take(self, role: str, column: Column) -> None:
        self.found[role] = column
        self.free = [other for other in self.free if other.number != column.number]

    def say(self, code: str, text: str) -> None:
        self.findings.append(Finding(code=code, severity="note", text=text))

    def ask(self, role: str, choices: Sequence[Column]) -> RecordError:
        names = names_text([column.name for column in choices])
        return RecordError(self.source, f"cannot tell which of {names} is the {role}; say it with --{role} COL")


def assign_roles(
    source: str, columns: Sequence[Column], given: Mapping[str, Column]
) -> tuple[dict[str, Column], list[Column], list[Finding]]:
    """Return the columns by role, the numeric columns without one, and what was noticed.

    Parameters
    ----------
    columns : sequence of Column
        Numeric columns that do not tell time.
    given : mapping
        Roles that the user has settled.

    Raises
    ------
    RecordError
        If the measurement, or an input among several, cannot be told.
    """
    search = _Search(source, [column for column in columns if column.number not in {c.number for c in given.values()}])
    for role, column in given.items():
        search.take(role, column)
    named = {role: [c for c in search.free if _role_by_name(c, search.free) == (role, 2)] for role in ("measurement", "setpoint", "output")}
    weak = {role: [c for c in search.free if _role_by_name(c, search.free) == (role, 1)] for role in ("measurement", "output")}
    _measurement(search, named, weak)
    _setpoint(search, named["setpoint"])
    strong = named["output"]
    twins = [c for c in weak["output"] if any(same_shape(_values(c), _values(other)) for other in strong)]
    _output(search, [*strong, *twins] or weak["output"])
    _stepped_without_name(search, {c.number for group in (*named.values(), *weak.values()) for c in group})
    _unused_setpoint(search)
    others = search.free
    if others and "measurement" not in given and any(weight(c.name, "measurement") and not is_constant(_values(c)) for c in others):
        search.say("columns_set_aside", f"not used: {names_text([c.name for c in others])}; to use one, name it with --measurement COL")
    return search.found, others, search.findings


def _values(column: Column) -> Array:
    assert column.values is not None
    return column.values


def _role_by_name(column: Column, among: Sequence[Column]) -> tuple[str, int]:
    """Return the role that the name claims and how strongly (2, 1, 0)."""
    setpoint, output, measurement = (weight(column.name, role) for role in ("setpoint", "output", "measurement"))
    words = set(words_of(column.name))
    if words & _OUTPUT and any(set(words_of(other.name)) & _INPUT for other in among if other is not column):
        return "measurement", 2  # beside an "input", the "output" is the process's
    if column.name.strip().lower() in ("x", "y") and {"w", "x", "y"} <= {other.name.strip().lower() for other in among}:
        return ("measurement" if column.name.strip().lower() == "x" else "output"), 2  # letters of DIN 19226, from memory
    if setpoint == 2:
        return "setpoint", 2
    if output == 2:
        return "output", 2
    if measurement == 2:
        return "measurement", 2
    if setpoint == 1 and output == 1:
        return "", 0  # a command may be either: its values decide
    if output == 1 and measurement == 1:
        return ("output" if column.unit in ("%", "V", "pct") else "measurement"), 1
    if output == 1:
        return "output", 1
    return ("measurement", 1) if measurement == 1 else ("", 0)


def _measurement(search: _Search, named: Mapping[str, list[Column]], weak: Mapping[str, list[Column]]) -> None:
    if "measurement" in search.found:
        return
    free = search.free
    if not free:
        raise RecordError(search.source, "no column of numbers beside the time; name the measurement with --measurement COL")
    if len(free) == 1:
        search.take("measurement", free[0])
        return
    moving = [c for c in free if not is_constant(_values(c))]
    claims = [c for c in named["measurement"] if c in moving] or named["measurement"]
    if not claims:
        claims = [c for c in weak["measurement"] if c in moving]
    inputs = [*named["setpoint"], *named["output"], *weak["output"], *search.found.values()]
    if len(claims) == 1:
        search.take("measurement", claims[0])
        return
    if len(claims) > 1:
        search.take("measurement", _paired(search, claims, inputs))
        return
    setpoints = [search.found["setpoint"]] if "setpoint" in search.found else named["setpoint"]
    unknown = [c for c in moving if c not in named["setpoint"] and c not in named["output"] and c not in weak["output"]]
    if not unknown:
        unknown = [c for c in moving if c not in named["setpoint"] and c not in named["output"]]
    if not unknown:
        unknown = [c for c in named["output"] if c in moving]
    if len(unknown) == 1:
        search.take("measurement", unknown[0])
        search.say("measurement_left_over", f"{unknown[0].name!r} is taken as the measurement, the only column without another role")
        return
    _measurement_by_content(search, unknown, [c for c in setpoints if is_stepped(_values(c))])


def _measurement_by_content(search: _Search, unknown: Sequence[Column], setpoints: Sequence[Column]) -> None:
    """Take the column that follows a stepped one, or the only one that is not stepped."""
    if not unknown:
        raise RecordError(search.source, "no column of numbers moves, so none can be the measurement; name it with --measurement COL")
    stepped = list(setpoints) or [c for c in unknown if is_stepped(_values(c))]
    smooth = [c for c in unknown if c not in stepped]
    if len(smooth) == 1 and stepped:
        search.take("measurement", smooth[0])
        search.say("measurement_by_content", f"{smooth[0].name!r} is taken as the measurement: it moves while {names_text([c.name for c in stepped])} only steps")
        return
    if len(stepped) == 1 and len(smooth) > 1:
        ranked = sorted(smooth, key=lambda c: distance(_values(c), _values(stepped[0])))
        near, next_best = (distance(_values(c), _values(stepped[0])) for c in ranked[:2])
        if near < 0.9 and near < 0.5 * next_best:
            search.take("measurement", ranked[0])
            search.say("measurement_by_content", f"{ranked[0].name!r} is taken as the measurement: it follows {stepped[0].name!r}")
            if "setpoint" not in search.found and stepped[0] in search.free:
                search.take("setpoint", stepped[0])
                search.say("stepped_is_setpoint", f"{stepped[0].name!r} is taken as the setpoint: it only steps, and {ranked[0].name!r} follows it")
            if len(ranked) == 2 and "output" not in search.found:
                search.take("output", ranked[1])
                search.say("output_by_content", f"{ranked[1].name!r} is taken as the output, the only column left")
            return
    if not stepped and len(unknown) == 2:
        jumps = sorted(unknown, key=lambda c: jump_share(_values(c)))
        if jump_share(_values(jumps[1])) > 0.5 and jump_share(_values(jumps[0])) < 0.25:
            search.take("measurement", jumps[0])
            search.say("measurement_by_content", f"{jumps[0].name!r} is taken as the measurement: {jumps[1].name!r} jumps, it does not")
            return
    raise search.ask("measurement", unknown)


def _paired(search: _Search, claims: Sequence[Column], inputs: Sequence[Column]) -> Column:
    """Return the measurement that shares its number or tag with a moving input; a unit shared with the setpoint decides next."""
    groups = {c.number: group_of(c.name) for c in claims}
    partners = {group_of(c.name) for c in inputs if not is_constant(_values(c))} or {group_of(c.name) for c in inputs}
    matching = [c for c in claims if groups[c.number] in partners and sum(groups[o.number] == groups[c.number] for o in claims) == 1]
    if matching:
        chosen = matching[0]
        left = [c for c in claims if c is not chosen]
        search.say("paired_by_name", f"{chosen.name!r} is taken as the measurement by the number or tag it shares with an input; left aside: {names_text([c.name for c in left])}")
        return chosen
    strong = [c for c in inputs if weight(c.name, "setpoint") == 2 and c.unit is not None]
    same_unit = [c for c in claims if any(c.unit == s.unit for s in strong)]
    if len(same_unit) == 1:
        search.say("measurement_by_unit", f"{same_unit[0].name!r} is taken as the measurement: it has the unit of the setpoint")
        return same_unit[0]
    stepped = [c for c in inputs if is_stepped(_values(c)) and weight(c.name, "setpoint") == 2]
    near = [c for c in claims if len(stepped) == 1 and follows(_values(c), _values(stepped[0]))]
    if len(near) == 1:
        search.say("measurement_by_content", f"{near[0].name!r} is taken as the measurement: it follows {stepped[0].name!r}")
        return near[0]
    raise search.ask("measurement", claims)


def _setpoint(search: _Search, claims: Sequence[Column]) -> None:
    if "setpoint" in search.found:
        return
    claims = [c for c in claims if c in search.free]
    group = group_of(search.found["measurement"].name)
    own = [c for c in claims if group_of(c.name) == group]
    if len(claims) > 1 and own:
        claims = own
    elif len(claims) == 1 and not own and group and group_of(claims[0].name) and _numbers_differ(claims[0], search.found["measurement"]):
        search.say("setpoint_of_another", f"{claims[0].name!r} is not taken as the setpoint: its number is not that of the measurement")
        return
    if len(claims) > 1:
        unit = search.found["measurement"].unit
        claims = [c for c in claims if c.unit == unit] or list(claims)
        if all(np.array_equal(_values(c), _values(claims[0]), equal_nan=True) for c in claims[1:]):
            claims = claims[:1]
    if len(claims) > 1:
        moving = [c for c in claims if not is_constant(_values(c))]
        if len(moving) != 1:
            raise search.ask("setpoint", claims)
        claims = moving
    if claims:
        search.take("setpoint", claims[0])


def _numbers_differ(one: Column, other: Column) -> bool:
    ours, theirs = ({word for word in words_of(c.name) if word.isdigit()} for c in (one, other))
    return bool(ours) and bool(theirs) and not ours & theirs


def _output(search: _Search, claims: Sequence[Column]) -> None:
    if "output" in search.found:
        return
    claims = [c for c in claims if c in search.free]
    group = group_of(search.found["measurement"].name)
    own = [c for c in claims if group_of(c.name) == group]
    if len(claims) > 1 and own:
        claims = own
    if len(claims) > 1:
        first = claims[0]
        if all(same_shape(_values(first), _values(c)) for c in claims[1:]):
            with_unit = [c for c in claims if c.unit not in (None, "counts", "count", "cnt", "digits", "bits", "LSB")] or claims
            chosen = with_unit[0]
            rest = [c for c in claims if c is not chosen]
            search.say("same_signal_twice", f"{chosen.name!r} and {names_text([c.name for c in rest])} step together; {chosen.name!r} is taken as the output" + (", since it has a unit" if chosen.unit else ""))
            claims = [chosen]
    if len(claims) > 1:
        moving = [c for c in claims if not is_constant(_values(c))]
        if len(moving) == 1:
            claims = moving
        elif "setpoint" in search.found and not is_constant(_values(search.found["setpoint"])):
            search.say("output_not_told", f"which of {names_text([c.name for c in claims])} is the output is not clear; none is used (--output COL names it)")
            return
        else:
            raise search.ask("output", claims)
    if claims:
        search.take("output", claims[0])


def _stepped_without_name(search: _Search, claimed: set[int]) -> None:
    """Give an unnamed stepped column its role: the setpoint if the measurement equals it before and after, else the output."""
    measurement = search.found["measurement"]
    if "setpoint" in search.found and not is_constant(_values(search.found["setpoint"])):
        return
    if "output" in search.found and not is_constant(_values(search.found["output"])) and "setpoint" in search.found:
        return
    loose = [c for c in search.free if c.number not in claimed and (is_stepped(_values(c)) or (len(search.free) == 1 and jump_share(_values(c)) > 0.5))]
    if not loose:
        return
    equal = [c for c in loose if follows(_values(measurement), _values(c))]
    if "setpoint" not in search.found and len(equal) == 1:
        search.take("setpoint", equal[0])
        search.say("stepped_is_setpoint", f"{equal[0].name!r} is taken as the setpoint: {measurement.name!r} equals it before and after its change")
        return
    if "output" in search.found and not is_constant(_values(search.found["output"])):
        return
    if len(loose) > 1:
        raise search.ask("output", loose)
    search.found.pop("output", None)
    search.take("output", loose[0])
    search.say("stepped_is_output", f"{loose[0].name!r} is taken as the output: it steps, and {measurement.name!r} does not equal it before and after")


def _unused_setpoint(search: _Search) -> None:
    """Put aside a constant setpoint that the measurement does not start from while the output is stepped by hand."""
    setpoint, output = search.found.get("setpoint"), search.found.get("output")
    if setpoint is None or output is None or not is_constant(_values(setpoint)) or not is_stepped(_values(output)):
        return
    values = _values(search.found["measurement"])
    known = values[np.isfinite(values)]
    level = float(_values(setpoint)[0])
    edge = max(3, len(known) // 50)
    near = max(5 * noise_of(known), 0.02 * float(np.ptp(known)))
    if min(abs(float(np.median(known[:edge])) - level), abs(float(np.median(known[-edge:])) - level)) <= near:
        return
    search.found.pop("setpoint")
    search.free.append(setpoint)
    search.say("setpoint_unused", f"{setpoint.name!r} is constant at {level:g} and the measurement keeps no relation to it while {output.name!r} is stepped: it is not used as the setpoint")

"""Which columns are the measurement, the setpoint and the output: by name, then unit, then content."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np

from loopfit.core.finding import Finding
from loopfit.record.content import follows, is_constant, is_stepped, jump_share, noise_of, same_shape
from loopfit.record.measured import find_measurement
from loopfit.record.search import Search, values_of
from loopfit.record.table import Column
from loopfit.record.wording import names_text, word_set
from loopfit.record.words import group_of, weight, words_of

_INPUT = word_set("input eingang entrada entree")
_OUTPUT = word_set("output ausgang salida sortie")


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
    search = Search(source, [column for column in columns if column.number not in {c.number for c in given.values()}])
    for role, column in given.items():
        search.take(role, column)
    named = {
        role: [c for c in search.free if _role_by_name(c, search.free) == (role, 2)]
        for role in ("measurement", "setpoint", "output")
    }
    weak = {
        role: [c for c in search.free if _role_by_name(c, search.free) == (role, 1)]
        for role in ("measurement", "output")
    }
    find_measurement(search, named, weak)
    _setpoint(search, named["setpoint"])
    strong = named["output"]
    twins = [c for c in weak["output"] if any(same_shape(values_of(c), values_of(other)) for other in strong)]
    _output(search, [*strong, *twins] or weak["output"])
    _stepped_without_name(search, {c.number for group in (*named.values(), *weak.values()) for c in group})
    _unused_setpoint(search)
    others = search.free
    if (
        others
        and "measurement" not in given
        and any(weight(c.name, "measurement") and not is_constant(values_of(c)) for c in others)
    ):
        search.say(
            "columns_set_aside",
            f"not used: {names_text([c.name for c in others])}; to use one, name it with --measurement COL",
        )
    return search.found, others, search.findings


def _role_by_name(column: Column, among: Sequence[Column]) -> tuple[str, int]:
    """Return the role that the name claims and how strongly (2, 1, 0)."""
    setpoint, output, measurement = (weight(column.name, role) for role in ("setpoint", "output", "measurement"))
    words = set(words_of(column.name))
    if words & _OUTPUT and any(set(words_of(other.name)) & _INPUT for other in among if other is not column):
        return "measurement", 2  # beside an "input", the "output" is the process's
    if column.name.strip().lower() in ("x", "y") and {"w", "x", "y"} <= {other.name.strip().lower() for other in among}:
        return (
            "measurement" if column.name.strip().lower() == "x" else "output"
        ), 2  # letters of DIN 19226, from memory
    if setpoint == 2:
        return "setpoint", 2
    if output == 2:
        return "output", 2
    if measurement == 2:
        return "measurement", 2
    if (
        setpoint == 1 and output == 1
    ):  # a command may be either: its values decide, unless there is a setpoint beside it
        return ("output", 1) if any(weight(other.name, "setpoint") == 2 for other in among) else ("", 0)
    if output == 1 and measurement == 1:
        return ("output" if column.unit in ("%", "V", "pct") else "measurement"), 1
    if output == 1:
        return "output", 1
    return ("measurement", 1) if measurement == 1 else ("", 0)


def _free_claims(search: Search, claims: Sequence[Column]) -> tuple[list[Column], list[Column], str]:
    """Return the claims still free, those of them in the measurement's own group, and that group."""
    free = [c for c in claims if c in search.free]
    group = group_of(search.found["measurement"].name)
    return free, [c for c in free if group_of(c.name) == group], group


def _setpoint(search: Search, claims: Sequence[Column]) -> None:
    if "setpoint" in search.found:
        return
    claims, own, group = _free_claims(search, claims)
    if len(claims) > 1 and own:
        claims = own
    elif (
        len(claims) == 1
        and not own
        and group
        and group_of(claims[0].name)
        and _numbers_differ(claims[0], search.found["measurement"])
    ):
        search.say(
            "setpoint_of_another",
            f"{claims[0].name!r} is not taken as the setpoint: its number is not that of the measurement",
        )
        return
    if len(claims) > 1:
        unit = search.found["measurement"].unit
        claims = [c for c in claims if c.unit == unit] or list(claims)
        if all(np.array_equal(values_of(c), values_of(claims[0]), equal_nan=True) for c in claims[1:]):
            claims = claims[:1]
    if len(claims) > 1:
        moving = [c for c in claims if not is_constant(values_of(c))]
        if len(moving) != 1:
            raise search.ask("setpoint", claims)
        claims = moving
    if claims:
        search.take("setpoint", claims[0])


def _numbers_differ(one: Column, other: Column) -> bool:
    ours, theirs = ({word for word in words_of(c.name) if word.isdigit()} for c in (one, other))
    return bool(ours) and bool(theirs) and not ours & theirs


def _output(search: Search, claims: Sequence[Column]) -> None:
    if "output" in search.found:
        return
    claims, own, _ = _free_claims(search, claims)
    if len(claims) > 1 and own:
        claims = own
    if len(claims) > 1:
        first = claims[0]
        if all(same_shape(values_of(first), values_of(c)) for c in claims[1:]):
            with_unit = [
                c for c in claims if c.unit not in (None, "counts", "count", "cnt", "digits", "bits", "LSB")
            ] or claims
            chosen = with_unit[0]
            rest = [c for c in claims if c is not chosen]
            search.say(
                "same_signal_twice",
                f"{chosen.name!r} and {names_text([c.name for c in rest])} step together; {chosen.name!r} is taken "
                f"as the output" + (", since it has a unit" if chosen.unit else ""),
            )
            claims = [chosen]
    if len(claims) > 1:
        moving = [c for c in claims if not is_constant(values_of(c))]
        if len(moving) == 1:
            claims = moving
        elif "setpoint" in search.found and not is_constant(values_of(search.found["setpoint"])):
            search.say(
                "output_not_told",
                f"which of {names_text([c.name for c in claims])} is the output is not clear; none is used "
                f"(--output COL names it)",
            )
            return
        else:
            raise search.ask("output", claims)
    if claims:
        search.take("output", claims[0])


def _stepped_without_name(search: Search, claimed: set[int]) -> None:
    """Give an unnamed stepped column its role: setpoint if the measurement equals it before and after, else output."""
    measurement = search.found["measurement"]
    if "setpoint" in search.found and not is_constant(values_of(search.found["setpoint"])):
        return
    if "output" in search.found and not is_constant(values_of(search.found["output"])) and "setpoint" in search.found:
        return
    loose = [
        c
        for c in search.free
        if c.number not in claimed
        and (is_stepped(values_of(c)) or (len(search.free) == 1 and jump_share(values_of(c)) > 0.5))
    ]
    if not loose:
        return
    equal = [c for c in loose if follows(values_of(measurement), values_of(c))]
    if "setpoint" not in search.found and len(equal) == 1:
        search.take("setpoint", equal[0])
        search.say(
            "stepped_is_setpoint",
            f"{equal[0].name!r} is taken as the setpoint: {measurement.name!r} equals it before and after its change",
        )
        return
    if "output" in search.found and not is_constant(values_of(search.found["output"])):
        return
    if len(loose) > 1:
        raise search.ask("output", loose)
    search.found.pop("output", None)
    search.take("output", loose[0])
    search.say(
        "stepped_is_output",
        f"{loose[0].name!r} is taken as the output: it steps, and {measurement.name!r} does not equal it before "
        f"and after",
    )


def _unused_setpoint(search: Search) -> None:
    """Put aside a constant setpoint that the measurement does not start from while the output is stepped by hand."""
    setpoint, output = search.found.get("setpoint"), search.found.get("output")
    if setpoint is None or output is None or not is_constant(values_of(setpoint)) or not is_stepped(values_of(output)):
        return
    values = values_of(search.found["measurement"])
    known = values[np.isfinite(values)]
    level = float(values_of(setpoint)[0])
    edge = max(3, len(known) // 50)
    near = max(5 * noise_of(known), 0.02 * float(np.ptp(known)))
    if min(abs(float(np.median(known[:edge])) - level), abs(float(np.median(known[-edge:])) - level)) <= near:
        return
    search.found.pop("setpoint")
    search.free.append(setpoint)
    search.say(
        "setpoint_unused",
        f"{setpoint.name!r} is constant at {level:g} and the measurement keeps no relation to it while "
        f"{output.name!r} is stepped: it is not used as the setpoint",
    )

"""Which column is the measurement."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

from loopfit.core.errors import RecordError
from loopfit.record.content import distance, follows, is_constant, is_stepped, jump_share
from loopfit.record.search import Search, values_of
from loopfit.record.table import Column
from loopfit.record.wording import names_text
from loopfit.record.words import group_of, weight


def find_measurement(search: Search, named: Mapping[str, list[Column]], weak: Mapping[str, list[Column]]) -> None:
    """Find the measurement by name, by its partner or unit, else by content.

    Raises
    ------
    RecordError
        If it cannot be told.
    """
    if "measurement" in search.found:
        return
    free = search.free
    if not free:
        raise RecordError(
            search.source, "no column of numbers beside the time; name the measurement with --measurement COL"
        )
    if len(free) == 1:
        search.take("measurement", free[0])
        return
    moving = [c for c in free if not is_constant(values_of(c))]
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
        search.say(
            "measurement_left_over",
            f"{unknown[0].name!r} is taken as the measurement, the only column without another role",
        )
        return
    _measurement_by_content(search, unknown, [c for c in setpoints if is_stepped(values_of(c))])


def _measurement_by_content(search: Search, unknown: Sequence[Column], setpoints: Sequence[Column]) -> None:
    """Take the column that follows a stepped one, or the only one that is not stepped."""
    if not unknown:
        raise RecordError(
            search.source, "no column of numbers moves, so none can be the measurement; name it with --measurement COL"
        )
    stepped = list(setpoints) or [c for c in unknown if is_stepped(values_of(c))]
    smooth = [c for c in unknown if c not in stepped]
    if len(smooth) == 1 and stepped:
        search.take("measurement", smooth[0])
        search.say(
            "measurement_by_content",
            f"{smooth[0].name!r} is taken as the measurement: it moves while "
            f"{names_text([c.name for c in stepped])} only steps",
        )
        return
    if len(stepped) == 1 and len(smooth) > 1:
        ranked = sorted(smooth, key=lambda c: distance(values_of(c), values_of(stepped[0])))
        near, next_best = (distance(values_of(c), values_of(stepped[0])) for c in ranked[:2])
        if near < 0.9 and near < 0.5 * next_best:
            search.take("measurement", ranked[0])
            search.say(
                "measurement_by_content",
                f"{ranked[0].name!r} is taken as the measurement: it follows {stepped[0].name!r}",
            )
            if "setpoint" not in search.found and stepped[0] in search.free:
                search.take("setpoint", stepped[0])
                search.say(
                    "stepped_is_setpoint",
                    f"{stepped[0].name!r} is taken as the setpoint: it only steps, and {ranked[0].name!r} follows it",
                )
            if len(ranked) == 2 and "output" not in search.found:
                search.take("output", ranked[1])
                search.say("output_by_content", f"{ranked[1].name!r} is taken as the output, the only column left")
            return
    if not stepped and len(unknown) == 2:
        jumps = sorted(unknown, key=lambda c: jump_share(values_of(c)))
        if jump_share(values_of(jumps[1])) > 0.5 and jump_share(values_of(jumps[0])) < 0.25:
            search.take("measurement", jumps[0])
            search.say(
                "measurement_by_content",
                f"{jumps[0].name!r} is taken as the measurement: {jumps[1].name!r} jumps, it does not",
            )
            return
    raise search.ask("measurement", unknown)


def _paired(search: Search, claims: Sequence[Column], inputs: Sequence[Column]) -> Column:
    """Return the measurement that shares its number or tag with a moving input, or its unit with the setpoint."""
    groups = {c.number: group_of(c.name) for c in claims}
    partners = {group_of(c.name) for c in inputs if not is_constant(values_of(c))} or {group_of(c.name) for c in inputs}
    matching = [
        c
        for c in claims
        if groups[c.number] in partners and sum(groups[o.number] == groups[c.number] for o in claims) == 1
    ]
    if matching:
        chosen = matching[0]
        left = [c for c in claims if c is not chosen]
        search.say(
            "paired_by_name",
            f"{chosen.name!r} is taken as the measurement by the number or tag it shares with an input; left "
            f"aside: {names_text([c.name for c in left])}",
        )
        return chosen
    strong = [c for c in inputs if weight(c.name, "setpoint") == 2 and c.unit is not None]
    same_unit = [c for c in claims if any(c.unit == s.unit for s in strong)]
    if len(same_unit) == 1:
        search.say(
            "measurement_by_unit", f"{same_unit[0].name!r} is taken as the measurement: it has the unit of the setpoint"
        )
        return same_unit[0]
    stepped = [c for c in inputs if is_stepped(values_of(c)) and weight(c.name, "setpoint") == 2]
    near = [c for c in claims if len(stepped) == 1 and follows(values_of(c), values_of(stepped[0]))]
    if len(near) == 1:
        search.say(
            "measurement_by_content", f"{near[0].name!r} is taken as the measurement: it follows {stepped[0].name!r}"
        )
        return near[0]
    raise search.ask("measurement", claims)

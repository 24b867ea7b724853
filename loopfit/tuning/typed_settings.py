"""Whether the typed settings are those that were in the controller, as far as the record tells."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from loopfit.core.errors import UsageError
from loopfit.core.finding import Finding
from loopfit.identify.identified import Identified
from loopfit.identify.typed import TypedCheck, check_typed
from loopfit.loop.settings import Settings

_THINNED = 1.2
_EXPLAINED = 0.98
_ROWS = 4_000


def typed_of(identified: Identified, settings: Settings | None) -> TypedCheck | None:
    """Return what the record says of the typed settings; None where it was made in manual or none were given."""
    record = identified.record
    if settings is None or record is None or identified.how in ("given", "open step"):
        return None
    if record.setpoint is None or record.output is None:
        return None
    if settings.scan_s is not None and record.sample_interval_s > _THINNED * settings.scan_s:
        return None  # the rows between, by which the output followed, were not recorded
    # a few thousand rows about the step say as much as all of a long record
    first = int(np.argmax(np.diff(record.setpoint.values, prepend=record.setpoint.values[0]) != 0))
    rows = slice(max(first - _ROWS // 8, 0), max(first - _ROWS // 8, 0) + _ROWS)
    columns = (record.time, record.setpoint.values, record.measurement.values, record.output.values)
    try:
        time, setpoint, measurement, output = (column[rows] for column in columns)
        found = check_typed(time, setpoint, measurement, output, settings)
    except UsageError:  # uneven rows: nothing to check against
        return None
    if found.verdict == "differ" and not _makes_sense(found):
        text = "the typed settings cannot be checked: the recorded output does not follow from the recorded measurement by any controller of this form"
        return replace(found, verdict="cannot be checked", text=text)
    return found


def _makes_sense(found: TypedCheck) -> bool:
    """Tell whether what was found could be a controller: terms of one sign, and the output explained."""
    gains = found.found.gains if isinstance(found.found, Settings) else found.found
    if gains is not None and (gains.kp * gains.kd < 0 or gains.kp * gains.ki < 0):
        return False
    return found.r_squared is None or found.r_squared > _EXPLAINED


def refusal_of(typed: TypedCheck) -> str:
    """Return why nothing is proposed while the typed settings are not those that act."""
    return (
        f"{typed.text.rstrip('.')}; nothing is proposed until that is settled: type what was in the controller while the record "
        "was made (correct the entry, or give the settings of that time)"
    )


def about_typed(typed: TypedCheck | None, identified: Identified) -> list[Finding]:
    """Return what is to be said of the check."""
    if typed is not None and typed.verdict == "differ":
        return [Finding(code="typed_settings_differ", severity="warning", text=typed.text)]
    if identified.how == "through the loop" and (typed is None or typed.verdict != "agree"):
        text = (
            "The plant was fitted through the loop with the settings as typed, and the record cannot show whether those were in "
            "the controller: a wrong one makes the plant wrong by as much, with no trace in the fit. Check them on the screen."
        )
        return [Finding(code="typed_settings_unchecked", severity="warning", text=text)]
    return []

"""Whether the typed settings are those that were in the controller, as far as the record tells."""

from __future__ import annotations

from loopfit.core.errors import UsageError
from loopfit.core.finding import Finding
from loopfit.identify.identified import Identified
from loopfit.identify.typed import TypedCheck, check_typed
from loopfit.loop.settings import Settings

_THINNED = 1.2


def typed_of(identified: Identified, settings: Settings | None) -> TypedCheck | None:
    """Return what the record says of the typed settings; None where it was made in manual or none were given."""
    record = identified.record
    if settings is None or record is None or identified.how in ("given", "open step"):
        return None
    if record.setpoint is None or record.output is None:
        return None
    if settings.scan_s is not None and record.sample_interval_s > _THINNED * settings.scan_s:
        return None  # the rows between, by which the output followed, were not recorded
    try:
        return check_typed(
            record.time, record.setpoint.values, record.measurement.values, record.output.values, settings
        )
    except UsageError:  # uneven rows: nothing to check against
        return None


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

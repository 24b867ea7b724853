"""Units in headers, and what they say about a column."""

from __future__ import annotations

import re

from loopfit.record.wording import word_set

SECONDS = {
    "s": 1.0, "sec": 1.0, "secs": 1.0, "second": 1.0, "seconds": 1.0, "sek": 1.0, "sekunden": 1.0, "secondes": 1.0,
    "segundos": 1.0, "seg": 1.0, "ms": 1e-3, "msec": 1e-3, "msecs": 1e-3, "millis": 1e-3, "milliseconds": 1e-3,
    "millisecond": 1e-3, "millisekunden": 1e-3, "milisegundos": 1e-3, "millisecondes": 1e-3, "us": 1e-6, "µs": 1e-6,
    "μs": 1e-6, "usec": 1e-6, "micros": 1e-6, "microseconds": 1e-6, "ns": 1e-9, "nsec": 1e-9, "nanoseconds": 1e-9,
    "min": 60.0, "mins": 60.0, "minute": 60.0, "minutes": 60.0, "minuten": 60.0, "minutos": 60.0, "h": 3600.0,
    "hr": 3600.0, "hrs": 3600.0, "hour": 3600.0, "hours": 3600.0, "std": 3600.0, "stunden": 3600.0, "heures": 3600.0,
    "horas": 3600.0, "d": 86400.0, "day": 86400.0, "days": 86400.0, "tage": 86400.0, "jours": 86400.0, "dias": 86400.0,
}  # fmt: skip
_OTHER = word_set(
    "°C degC °F degF C F K deg degree degrees ° % pct percent bar mbar barg bara Pa hPa kPa MPa psi psig psia atm mmHg "
    "inH2O mmH2O rpm RPM 1/min U/min min-1 min^-1 tr/min r/min rev/min V mV kV uV µV A mA uA µA kA W kW MW VA kVA "
    "J kJ Hz "
    "kHz 1/s s^-1 m mm cm km um µm in ft m/s mm/s cm/s m/min km/h m/s2 m/s^2 m/s² g rad mrad rad/s mrad/s rad/s2 "
    "deg/s °/s "
    "dps l L ml l/min L/min l/h l/s lpm gpm gal/min m3 m³ m3/h m³/h Nm3/h m3/s m³/s m3/min kg/h kg/s kg/min t/h "
    "kg t lb "
    "lb/h N kN Nm N·m Nmm ohm Ω kΩ pH ppm ppb %RH %rF µS/cm mS/cm mg/l mg/L g/l counts count cnt cts inc digit "
    "digits bit "
    "bits LSB ticks -"
    " Volt Volts Ampere Amps Celsius Percent Degrees Counts volt volts celsius"
)
UNITS = _OTHER | frozenset(SECONDS) | {name.capitalize() for name in SECONDS if len(name) > 2}
_SUFFIX = word_set(
    "degC degF degc degf pct percent bar mbar kPa MPa hPa Pa psi rpm ms us mm cm mA mV rad mrad Hz kW kg counts "
    "deg celsius"
    " sec seconds millis"
)
_BRACKETS = re.compile(r"^(.*?)\s*[(\[{<]\s*([^()\[\]{}<>]{0,16}?)\s*[)\]}>]\s*$", re.DOTALL)
_BEHIND = re.compile(r"^(.*?)\s*(?:\s/\s|\s/|/\s|,\s+|;\s+|\s+in\s+|\s+en\s+|:\s+|\s-\s)\s*([^\s]{1,10})$")


def split_unit(header: str) -> tuple[str, str | None]:
    """Return a header without its unit, and the unit: "Temperature (degC)", "Druck / bar", "Zeit in s", "PV_degC"."""
    found = _BRACKETS.match(header)
    if found is not None:
        name, unit = found.group(1).strip(), found.group(2).strip()
        if not any(c.isalnum() or c in "%°" for c in unit):
            return name or header, None
        if unit in UNITS or not unit.isdigit():
            return (name or header), unit
        return header, None
    found = _BEHIND.match(header)
    if found is not None and found.group(1) and found.group(2) in UNITS and found.group(2) != "-":
        return found.group(1), found.group(2)
    name, _, unit = header.rpartition("_")
    if name and unit in _SUFFIX:
        return name, unit
    name, _, unit = header.rpartition(" ")
    if name and (unit in _SUFFIX or unit in {"%", "°C", "°F"}):
        return name, unit
    return header, None


def seconds_per(unit: str | None) -> float | None:
    """Return how many seconds the unit lasts, None when it is no unit of time."""
    return None if unit is None else SECONDS.get(unit.strip(" .").lower())


def is_unit(cell: str) -> bool:
    """Return whether a whole cell is a unit, with or without brackets."""
    text = cell.strip()
    inner = text[1:-1].strip()
    if text[:1] + text[-1:] in ("()", "[]", "{}", "<>") and not any(mark in inner for mark in "()[]{}<>"):
        return len(inner) <= 12 and not inner.isdigit()
    return text in UNITS

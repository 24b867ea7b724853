"""The time between rows that the lines above the data state: "Sample Interval,4.0e-06", "Abtastrate 100 Hz"."""

from __future__ import annotations

import math
import re
import unicodedata
from collections.abc import Sequence

from loopfit.record.units import seconds_per

# words of the trade in four languages, from common practice; written without accents
_INTERVAL = (
    r"(?:sampl(?:e|ing)|scan|log(?:ging)?|record(?:ing)?|acquisition|measur(?:ement|ing)|update)?"
    r"[ _-]*(?:interval|period)|sampl(?:e|ing)[ _-]*time|time[ _-]*(?:step|base|increment)|(?:x|t)[ _-]*incr(?:ement)?"
    r"|delta[ _-]*t|dt|(?:abtast|mess|speicher|aufzeichnungs)?[ _-]*intervall|abtast(?:zeit|periode|schritt)"
    r"|zeit(?:schritt|abstand)|intervalle(?: d'echantillonnage| de mesure)?|pas de temps|periode d'echantillonnage"
    r"|(?:intervalo|periodo|tiempo)(?: de (?:muestreo|registro|medida))?"
)
_RATE = (
    r"(?:sampl(?:e|ing)|scan|log(?:ging)?|acquisition|update)[ _-]*(?:rate|freq(?:uency)?)|samples per second|fs"
    r"|(?:abtast|mess)[ _-]*(?:rate|frequenz)|frequence d'echantillonnage|frecuencia de muestreo|tasa de muestreo"
)
_LINE = re.compile(
    rf"\W*(?:(?P<interval>{_INTERVAL})|(?P<rate>{_RATE}))\s*(?:[(\[](?P<unit>[^)\]]+)[)\]])?[\s,;:=|\"]+"
    r"(?P<number>\d+(?:[.,]\d+)?(?:e[+-]?\d+)?)[\s,;|\"]*(?P<behind>[a-zµ/0-9]*)[\s,;|\"]*",
)
_THOUSANDS = re.compile(r"[1-9]\d{0,2},\d{3}")
_PER_SECOND = {"hz": 1.0, "khz": 1e3, "mhz": 1e6, "1/s": 1.0, "/s": 1.0, "s/s": 1.0, "sa/s": 1.0, "ks/s": 1e3, "sps": 1.0,
               "samples/s": 1.0, "msa/s": 1e6, "ksa/s": 1e3, "1/min": 1.0 / 60.0, "samples/min": 1.0 / 60.0}  # fmt: skip


def interval_in(line: str) -> float | None:
    """Return the time between rows, s, that a line states; None when it states none that is clear.

    The unit decides whether a number is an interval or a rate ("Scan rate: 100 ms"), the name only without one.
    A number such as 1,000 is not clear.
    """
    text = unicodedata.normalize("NFKD", line.replace("µ", "u").replace("μ", "u"))
    text = text.encode("ascii", "ignore").decode("ascii").lower()
    found = _LINE.fullmatch(text)
    if found is None or _THOUSANDS.fullmatch(found["number"]):
        return None
    number = float(found["number"].replace(",", "."))
    unit = (found["unit"] or found["behind"]).strip()
    if unit in _PER_SECOND or (not unit and found["rate"]):
        number = 1.0 / (number * _PER_SECOND.get(unit, 1.0)) if number > 0 else 0.0
    elif unit:
        number *= seconds_per(unit) or 0.0
    return number if number > 0 and math.isfinite(number) else None


def intervals_in(lines: Sequence[str]) -> list[tuple[float, str]]:
    """Return the different intervals that lines state, s, each with the first line that states it."""
    found: list[tuple[float, str]] = []
    for line in lines:
        interval = interval_in(line)
        if interval is not None and not any(math.isclose(interval, other, rel_tol=1e-6) for other, _ in found):
            found.append((interval, line))
    return found

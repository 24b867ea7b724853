"""Words of the trade in column names: time, measurement, setpoint, output, in four languages."""

from __future__ import annotations

import re
import unicodedata
from functools import lru_cache

from loopfit.record.units import split_unit
from loopfit.record.wording import word_set

# Strong words name the role; weak words name a quantity that usually has it. From common practice of the trade.
_STRONG = {
    "time": (
        "time timestamp datetime date clock elapsed t zeit uhrzeit datum zeitstempel temps heure horodatage "
        "tiempo hora fecha marca_de_tiempo seconds secs millis micros epoch local_time utc zeitpunkt "
        "date_time instant laufzeit stunden segundos secondes ms us"
    ),
    "measurement": (
        "pv measurement measured process_value process_variable actual act ist istwert regelgroesse messwert "
        "mesure valeur_mesuree medida medicion valor_medido valor_actual variable_de_proceso "
        "variable_proceso feedback response measure y grandeur_reglee valeur_reelle controlled_variable xist "
        "isttemperatur istdrehzahl istposition reponse respuesta antwort plant_output real value_actual"
    ),
    "setpoint": (
        "sp setpoint set_point set setpt target reference ref soll sollwert fuehrungsgroesse consigne "
        "consigna referencia desired r w csp rsp lsp wsp setvalue set_value sv valor_deseado deseado "
        "valeur_de_consigne solltemperatur solldrehzahl sollposition xsoll goal vorgabe"
    ),
    "output": (
        "op out output co mv cv controller_output control_output control_signal stellgroesse stellwert "
        "stellgrad stellsignal ausgang sortie commande stell salida mando u input eingang entrada entree "
        "manipulated manipulated_variable actuator pwm duty duty_cycle control actuation stellung lzout "
        "opening ouverture apertura yout"
    ),
}
_WEAK = {
    "time": ("x n s sec h min minutes sample_time"),
    "measurement": (
        "temperature temp temperatur temperatura pressure druck pression presion level fuellstand niveau "
        "nivel flow durchfluss debit caudal speed drehzahl vitesse velocidad velocity geschwindigkeit "
        "position angle winkel weg posicion angulo rpm signal value wert valeur valor sensor probe "
        "thermocouple angular rate x ph conductivity leitfaehigkeit density dichte concentration weight "
        "gewicht displacement acceleration level_m tank humidity feuchte kopf distance height hoehe altura "
        "hauteur tt pt ft lt tc ti pi fi li pos vel omega theta gyro rotation frequency torque pt100 "
        "deviation"
    ),
    "setpoint": ("command cmd demand request reqd sollw"),
    "output": (
        "command cmd demand power leistung puissance potencia voltage spannung tension voltaje current strom "
        "courant corriente heater drive heizung heizleistung chauffage calentador valve ventil vanne valvula "
        "pump pumpe pompe bomba fan q motor throttle damper klappe steam dampf percent y control_value force "
        "kraft"
    ),
}
_CUTS = re.compile(r"[A-Z]+(?=[A-Z][a-z])|[A-Z]?[a-z]+|[A-Z]+|\d+")
_GERMAN = {"ä": "ae", "ö": "oe", "ü": "ue", "ß": "ss", "Ä": "Ae", "Ö": "Oe", "Ü": "Ue"}
_COUNTERS = word_set(
    "index idx sample samples no nr num number count counter row record id item point scan seq sequence n i # lfd "
    "messung probe "
    "numero muestra echantillon zeile ligne fila line nummer x unnamed"
)


@lru_cache(maxsize=4096)
def words_of(name: str) -> tuple[str, ...]:
    """Return the words of a name in small letters without accents; digits stand alone: "PV_1" gives "pv", "1"."""
    text = name
    for letter, spelled in _GERMAN.items():
        text = text.replace(letter, spelled)
    text = unicodedata.normalize("NFKD", text).encode("ascii", "ignore").decode("ascii")
    return tuple(word.lower() for word in _CUTS.findall(text))


def _holds(words: tuple[str, ...], listed: frozenset[str]) -> bool:
    """Return whether a listed word or run of words stands among the words; one letter must be alone but for digits."""
    letters = [word for word in words if not word.isdigit()]
    for length in (3, 2, 1):
        for start in range(len(letters) - length + 1):
            run = letters[start : start + length]
            if ("_".join(run) in listed or (length > 1 and "".join(run) in listed)) and (
                len("".join(run)) > 1 or len(letters) == 1
            ):
                return True
    return False


_STRONG_SETS = {role: frozenset(text.split()) for role, text in _STRONG.items()}
_WEAK_SETS = {role: frozenset(text.split()) for role, text in _WEAK.items()}
_ENDINGS = {
    "setpoint": ("sollwert", "setpoint"),
    "measurement": ("istwert",),
    "output": ("stellgroesse", "stellgrad", "stellwert"),
    "time": ("zeit", "timestamp"),
}
_WEAK_ENDINGS = {
    "measurement": ("temperatur", "druck", "drehzahl", "stand", "temperature", "pressure"),
    "output": ("leistung",),
}


@lru_cache(maxsize=4096)
def weight(name: str, role: str) -> int:
    """Return 2 when the name states the role, 1 when it names a quantity that usually has it, else 0."""
    words = words_of(name)
    if len(words) == 2 and words[0] in "tpxyz" and words[1].isdigit():
        return 1 if role == "measurement" else 0  # T1, P2: a quantity and the number of its sensor
    # in "PV setpoint" or "set point temperature" the word for a setpoint wins (see the callers)
    if _holds(words, _STRONG_SETS[role]) or any(
        word.endswith(_ENDINGS.get(role, ())) for word in words if _ENDINGS.get(role)
    ):
        return 2
    if _holds(words, _WEAK_SETS[role]) or any(
        word.endswith(_WEAK_ENDINGS.get(role, ())) for word in words if role in _WEAK_ENDINGS
    ):
        return 1
    return 0


def is_counter_name(name: str) -> bool:
    """Return whether the name says that the column counts rows; a column without a name may."""
    words = [word for word in words_of(name) if not word.isdigit()]
    return name.strip() in ("", "#") or (
        bool(words) and all(word in _COUNTERS or word in ("sample", "row") for word in words)
    )


def group_of(name: str) -> str:
    """Return what is left of a name without role words, single letters and unit: "Heater 1 (%)" gives "1"."""
    return " ".join(
        word for word in words_of(split_unit(name)[0]) if word.isdigit() or (len(word) > 1 and word not in _ROLE_WORDS)
    )


_ROLE_WORDS = frozenset(
    piece
    for sets in (_STRONG_SETS, _WEAK_SETS)
    for role in ("measurement", "setpoint", "output")
    for word in sets[role]
    for piece in word.split("_")
)

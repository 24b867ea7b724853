"""Roles of columns: by name in four languages, by unit, by content; and what is asked when they cannot be told."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from recordings import MEASUREMENT, OUTPUT, SETPOINT, TIME, table, write

from loopfit.core.errors import RecordError
from loopfit.record.read import read_record

VALVE = np.where(TIME < 5, 30.0, 50.0)  # an output stepped by hand
LEVEL = MEASUREMENT * 3 - 20  # what it moves
COLUMNS = {"m": MEASUREMENT, "s": SETPOINT, "o": OUTPUT, "v": VALVE, "l": LEVEL}

# header, the columns behind the time, the name of measurement, setpoint and output; as a person of the trade reads them
HEADERS = [
    ("time,u,y", "vl", "y", None, "u"),
    ("t,input,output", "vl", "output", None, "input"),
    ("t,r,y,u", "smo", "y", "r", "u"),
    ("Zeit,w,x,y", "smo", "x", "w", "y"),
    ("t,Sollwert,Istwert", "sm", "Istwert", "Sollwert", None),
    ("Zeit (s),Drehzahl,Solldrehzahl,Stellgröße (%)", "mso", "Drehzahl", "Solldrehzahl", "Stellgröße (%)"),
    (
        "Zeit (s),Temperatur Istwert,Temperatur Sollwert,Heizleistung (%)",
        "mso",
        "Temperatur Istwert",
        "Temperatur Sollwert",
        "Heizleistung (%)",
    ),
    ("Tiempo (s),Consigna,Velocidad", "sm", "Velocidad", "Consigna", None),
    ("Tiempo (s),Salida (%),Temperatura (°C)", "vl", "Temperatura (°C)", None, "Salida (%)"),
    ("Temps (s),Consigne,Mesure,Commande", "smo", "Mesure", "Consigne", "Commande"),
    ("Temps (s),Vanne (%),Débit (l/min)", "vl", "Débit (l/min)", None, "Vanne (%)"),
    ("time,Speed,Target Speed,PWM", "mso", "Speed", "Target Speed", "PWM"),
    ("Time,Tank Level,Valve %", "lv", "Tank Level", None, "Valve %"),
    ("Time,TIC101.PV,TIC101.SP,TIC101.OP", "mso", "TIC101.PV", "TIC101.SP", "TIC101.OP"),
    ("Time,FIC2/SP,FIC2/PV,FIC2/OUT", "smo", "FIC2/PV", "FIC2/SP", "FIC2/OUT"),
    ("time,Temp SP,Temp", "sm", "Temp", "Temp SP", None),
    ("t,PV,CO", "lv", "PV", None, "CO"),
    ("t,heater temperature (degC),heater (%)", "lv", "heater temperature (degC)", None, "heater (%)"),
    ("time_s,setPoint,processValue,controllerOutput", "smo", "processValue", "setPoint", "controllerOutput"),
    ("t,setpoint,output", "sm", "output", "setpoint", None),
    ("t,command,position", "sm", "position", "command", None),  # the position comes to equal the command
    ("t,command,position", "vl", "position", None, "command"),  # it does not
    ("t,a,b", "sm", "b", "a", None),
    ("t,a,b", "ls", "a", None, "b"),
    ("t,a,b,c", "smo", "b", "a", "c"),
    ("t,a,b,c", "osm", "c", "b", "a"),
    ("t,a", "m", "a", None, None),
    ("t,Temperature 2,Temperature 1,Heater 1,Heater 2", "mlvs", "Temperature 1", None, "Heater 1"),
    *(
        (",".join(["t", *(names[kind] for kind in kinds)]), kinds, names["m"], names["s"], names["o"])
        for kinds in ("mso", "smo", "osm")
        for names in (
            {"m": "Füllstand Ist (mm)", "s": "Füllstand Soll (mm)", "o": "Ventil (%)"},
            {"m": "Regelgröße", "s": "Führungsgröße", "o": "Stellgröße"},
            {"m": "Istposition", "s": "Sollposition", "o": "Stellsignal"},
            {"m": "Température mesurée (°C)", "s": "Consigne température (°C)", "o": "Puissance chauffe (%)"},
            {"m": "Grandeur réglée", "s": "Consigne", "o": "Commande"},
            {"m": "Pression", "s": "Consigne pression", "o": "Sortie régulateur"},
            {"m": "Presión (bar)", "s": "Punto de consigna (bar)", "o": "Válvula (%)"},
            {"m": "Nivel real", "s": "Nivel deseado", "o": "Salida del controlador (%)"},
            {"m": "Valor medido", "s": "Referencia", "o": "Señal de mando"},
            {"m": "belt speed measurement", "s": "belt speed setpoint", "o": "drive output"},
            {"m": "Actual Value", "s": "Set Value", "o": "Manipulated Variable"},
            {"m": "Flow (l/min)", "s": "Flow SP (l/min)", "o": "Valve position (%)"},
        )
    ),
]


@pytest.mark.parametrize(("header", "kinds", "measurement", "setpoint", "output"), HEADERS)
def test_roles(
    header: str, kinds: str, measurement: str, setpoint: str | None, output: str | None, tmp_path: Path
) -> None:
    if header.startswith("t,Temperature 2"):
        COLUMNS["s"] = np.full(len(TIME), 10.0)  # the second heater stands still
    columns = [COLUMNS[kind] for kind in kinds]
    COLUMNS["s"] = SETPOINT
    record = read_record(write(tmp_path, table(header, TIME, *columns)))
    assert record.measurement.name == measurement
    assert (record.setpoint and record.setpoint.name) == setpoint
    assert (record.output and record.output.name) == output


def test_measurement_by_the_unit_of_the_setpoint(tmp_path: Path) -> None:
    record = read_record(
        write(tmp_path, table("t,temperature (degC),pressure (bar),SP (bar)", TIME, LEVEL, MEASUREMENT, SETPOINT))
    )
    assert record.measurement.name == "pressure (bar)"
    assert [signal.name for signal in record.others] == ["temperature (degC)"]


def test_constant_setpoint_is_kept(tmp_path: Path) -> None:
    still = np.full(len(TIME), 40.0)  # where the level starts
    record = read_record(write(tmp_path, table("t,PV,SP,OP", TIME, LEVEL, still, VALVE)))
    assert record.setpoint is not None
    assert record.setpoint.name == "SP"


def test_constant_setpoint_of_another_signal_is_not_taken(tmp_path: Path) -> None:
    still = np.full(len(TIME), 23.0)
    record = read_record(write(tmp_path, table("t,Heater 1,Temperature 1,Set Point 2", TIME, VALVE, LEVEL, still)))
    assert record.setpoint is None
    assert "setpoint_of_another" in {finding.code for finding in record.findings}


AMBIGUOUS = [
    ("t,a,b", (MEASUREMENT, LEVEL), "cannot tell which of 'a', 'b' is the measurement; say it with --measurement COL"),
    ("t,PV 1,PV 2", (MEASUREMENT, LEVEL), "'PV 1', 'PV 2' is the measurement"),
    ("t,PV,SP a,SP b", (MEASUREMENT, SETPOINT, VALVE), "'SP a', 'SP b' is the setpoint; say it with --setpoint COL"),
    (
        "t,PV,OP a,OP b",
        (LEVEL, VALVE, SETPOINT * np.arange(40)),
        "'OP a', 'OP b' is the output; say it with --output COL",
    ),
]


@pytest.mark.parametrize(("header", "columns", "message"), AMBIGUOUS)
def test_what_cannot_be_told_is_asked(
    header: str, columns: tuple[np.ndarray, ...], message: str, tmp_path: Path
) -> None:
    with pytest.raises(RecordError) as caught:
        read_record(write(tmp_path, table(header, TIME, *columns)))
    assert message in str(caught.value)
    assert "\n" not in str(caught.value)


def test_columns_given_by_name_and_number(tmp_path: Path) -> None:
    path = write(tmp_path, table("t,a,b,Dup,Dup", TIME, MEASUREMENT, LEVEL, VALVE, VALVE))
    record = read_record(path, columns={"measurement": "B", "output": "4", "time": 1})
    assert (record.measurement.name, record.output and record.output.name) == ("b", "Dup")
    with pytest.raises(RecordError, match=r"2 columns are called 'Dup'; give the number instead, --output 4 or 5"):
        read_record(path, columns={"output": "Dup"})
    with pytest.raises(RecordError, match=r"no column 9; there are 't', 'a', 'b', 'Dup', 'Dup'"):
        read_record(path, columns={"measurement": 9})


def test_a_falling_temperature_called_t_is_no_time(tmp_path: Path) -> None:
    record = read_record(write(tmp_path, table("time (s),T,u", TIME, LEVEL[::-1], VALVE)))
    assert (record.time_name, record.measurement.name) == ("time (s)", "T")

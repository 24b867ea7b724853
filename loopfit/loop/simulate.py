"""Simulation of a sampled loop, one or many at once, exact for the plant between the scans."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal, get_args

import numpy as np
from numpy.typing import ArrayLike

from loopfit.core.arrays import Array, read_only
from loopfit.core.errors import UsageError
from loopfit.loop.gains import Gains
from loopfit.loop.plant import Plant
from loopfit.loop.scanning import Actuator, Course, Held, scan_many, scan_one
from loopfit.loop.state_space import StateSpace, held, state_space

AntiWindup = Literal["none", "conditional integration", "back calculation"]
_LARGEST_RUN = 50_000_000  # scans times loops
_WHOLE = 1e-9  # a dead time this close to a whole number of scans is one


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Simulated:
    """A simulated record; arrays (n,), for many loops (n, P).

    `time` (n,): instants of the scans, s. `measurement`: what the controller saw, with noise and resolution.
    `controlled`: the controlled variable itself. `output`: what the controller wrote. `setpoint` as given.
    """

    time: Array
    measurement: Array
    controlled: Array
    output: Array
    setpoint: Array


def simulate(
    plants: Plant | Sequence[Plant],
    gains: Gains | Sequence[Gains] | None = None,
    *,
    scan_s: float,
    scans: int,
    setpoint: ArrayLike | None = None,
    load: ArrayLike = 0.0,
    output: ArrayLike | None = None,
    output_limits: tuple[float, float] | None = None,
    rate_limit: float | None = None,
    deadband: float = 0.0,
    measurement_resolution: float = 0.0,
    output_resolution: float = 0.0,
    anti_windup: AntiWindup = "conditional integration",
    tracking_time_s: float | None = None,
    noise: ArrayLike | None = None,
    initial_measurement: float = 0.0,
    initial_output: float = 0.0,
    initial_setpoint: float | None = None,
    late: bool = False,
) -> Simulated:
    """Return the record of a loop that the controller scans at a fixed interval.

    At each scan the controller reads the measurement and writes the output, which is held until the next one; the
    plant is advanced exactly, whatever its dead time is in scans. Derivative and integral are backward differences.
    The loop starts at rest: the plant answers departures from `initial_measurement` and `initial_output`.

    Parameters
    ----------
    plants, gains : one or a sequence
        Sequences are of one length, or one of the two stands alone. Without gains the loop is in manual.
    scan_s : float
        Scan interval, s.
    scans : int
        Number of scans n; the first is at time 0.
    setpoint, load : number or array (n,) or (n, P)
        A number holds from the first scan on, so it is a step there. The load adds to the plant's input, before the
        dead time. Setpoint: absolute, at first and by default `initial_setpoint`.
    output : number or array (n,) or (n, P)
        The output in manual, absolute; limits and what follows act on it too.
    output_limits : (low, high)
        Of the output, absolute.
    rate_limit : float
        Largest change of the output, per second, either way.
    deadband : float
        Lost motion of the final element: its full width, output units. The element follows the output only when
        pushed, starts in the middle and holds its position on a reversal until the play is taken up.
    measurement_resolution, output_resolution : float
        The measurement that the controller reads, and the output that it writes after all limits, are rounded to
        whole multiples; 0 for none.
    anti_windup : str
        At an output or rate limit. "conditional integration": the integral keeps its value at a scan where the
        output is beyond the limit and the error would drive it further (Astrom and Hagglund, PID Controllers, 2nd
        ed. 1995, section 3.5). "back calculation": the integral is led back by (limited - wanted output) / tracking
        time (same section). "none": the integral winds up.
    tracking_time_s : float
        For back calculation; by default sqrt(Ti Td), without derivative Ti, and at least one scan.
    noise : array (n,) or (n, P)
        Added to the measurement.
    initial_measurement, initial_output, initial_setpoint : float
        Where the loop rests before the first scan; the setpoint there is the measurement unless given.
    late : bool
        True where the output reaches the final element one scan after the measurement was read.

    Raises
    ------
    UsageError
        If an argument does not make sense.
    """
    single = isinstance(plants, Plant) and (gains is None or isinstance(gains, Gains))
    plant_list, gains_list = _paired(plants, gains)
    loops = len(plant_list)
    _check_numbers(scan_s, scans, loops)
    if (output is None) == (gains_list is None):
        raise UsageError("give gains for automatic operation, or an output sequence for manual, one of the two")
    if anti_windup not in get_args(AntiWindup):
        raise UsageError(f"anti_windup is one of {', '.join(get_args(AntiWindup))}, not {anti_windup!r}")
    rest = _number("initial_measurement", initial_measurement)
    start = rest if initial_setpoint is None else _number("initial_setpoint", initial_setpoint)
    course = Course(
        setpoint=_sequence("setpoint", start if setpoint is None else setpoint, scans, loops),
        load=_sequence("load", load, scans, loops),
        noise=_sequence("noise", 0.0 if noise is None else noise, scans, loops),
        manual=None if output is None else _sequence("output", output, scans, loops),
        measurement=rest,
        output=_number("initial_output", initial_output),
        start_setpoint=start,
    )
    low, high = _limits(output_limits)
    actuator = Actuator(
        low=low,
        high=high,
        step=math.inf if rate_limit is None else _number("rate_limit", rate_limit, above=0.0) * scan_s,
        half_play=0.5 * _number("deadband", deadband, least=0.0),
        measurement_unit=_number("measurement_resolution", measurement_resolution, least=0.0),
        output_unit=_number("output_resolution", output_resolution, least=0.0),
        conditional=anti_windup == "conditional integration",
    )
    if tracking_time_s is not None:
        _number("tracking_time_s", tracking_time_s, above=0.0)
    fractions = None
    if gains_list is not None:
        tracks = anti_windup == "back calculation"
        fractions = [_tracking(one, scan_s, tracking_time_s) if tracks else 0.0 for one in gains_list]
    advance = _held(plant_list, scan_s, late)
    run = scan_one if loops == 1 else scan_many
    with np.errstate(over="ignore", invalid="ignore"):  # an unstable loop may run out of numbers
        controlled, measurement, written = run(advance, gains_list, fractions, scan_s, course, actuator)
    pick = (slice(None), 0) if single else slice(None)
    return Simulated(
        time=read_only(scan_s * np.arange(scans)),
        measurement=read_only(measurement[pick]),
        controlled=read_only(controlled[pick]),
        output=read_only(written[pick]),
        setpoint=read_only(course.setpoint[pick]),
    )


def _paired(
    plants: Plant | Sequence[Plant], gains: Gains | Sequence[Gains] | None
) -> tuple[list[Plant], list[Gains] | None]:
    plant_list = [plants] if isinstance(plants, Plant) else list(plants)
    gains_list = [gains] if isinstance(gains, Gains) else None if gains is None else list(gains)
    counts = {len(plant_list)} if gains_list is None else {len(plant_list), len(gains_list)}
    loops = max(counts)
    if min(counts) == 0 or not counts <= {1, loops}:
        raise UsageError("as many gains as plants, or one of either for all of the other")
    if len(plant_list) < loops:
        plant_list = plant_list * loops
    if gains_list is not None and len(gains_list) < loops:
        gains_list = gains_list * loops
    return plant_list, gains_list


def _held(plants: Sequence[Plant], scan_s: float, late: bool) -> Held:
    spaces: dict[Plant, StateSpace] = {one: state_space(one.numerator, one.denominator) for one in set(plants)}
    order = max(space.B.size for space in spaces.values())
    A, B, C = np.zeros((len(plants), order, order)), np.zeros((len(plants), order)), np.zeros((len(plants), order))
    direct = np.zeros(len(plants))
    for i, one in enumerate(plants):
        space = spaces[one]
        n = space.B.size
        A[i, :n, :n], B[i, :n], C[i, :n], direct[i] = space.A, space.B, space.C, space.D
    ratio = np.array([one.dead_time_s for one in plants]) / scan_s
    whole = np.floor(ratio + _WHOLE)
    part = scan_s * np.maximum(ratio - whole, 0.0)
    if not float(np.max(whole)) < _LARGEST_RUN / len(plants):
        raise UsageError("the dead time is too many scans long to simulate; take a longer scan interval")
    # during a scan the input first holds its old value for the fraction of a scan, then the newer one
    after, newer = held(A, B, scan_s - part)
    before, older = held(A, B, part)
    return Held(
        matrix=after @ before,
        older=np.einsum("pij,pj->pi", after, older),
        newer=newer,
        measured=C,
        direct=direct,
        scans=whole.astype(np.int64) + int(late),
    )


def _tracking(gains: Gains, scan_s: float, given: float | None) -> float:
    """Return how much of an excess the integral gives back at a scan, from 0 to 1."""
    if gains.ki == 0.0:
        return 0.0
    if given is None:
        product = gains.kd / gains.ki if gains.kd != 0.0 else (gains.kp / gains.ki) ** 2  # Ti Td, or Ti squared
        given = math.sqrt(abs(product))
    return scan_s / max(given, scan_s)


def _check_numbers(scan_s: float, scans: int, loops: int) -> None:
    _number("scan_s", scan_s, above=0.0)
    if isinstance(scans, bool) or not isinstance(scans, int | np.integer) or scans < 1:
        raise UsageError(f"scans is a whole number of at least 1, not {scans!r}")
    if scans * loops > _LARGEST_RUN:
        raise UsageError(f"{scans} scans of {loops} loops are too many; at most {_LARGEST_RUN} together")


def _limits(limits: tuple[float, float] | None) -> tuple[float, float]:
    if limits is None:
        return -math.inf, math.inf
    low, high = limits
    if not low < high:
        raise UsageError(f"the output limits are a low and a higher number, not {low!r} and {high!r}")
    return float(low), float(high)


def _number(name: str, value: float, *, least: float = -math.inf, above: float = -math.inf) -> float:
    if not isinstance(value, int | float | np.number) or isinstance(value, bool) or not math.isfinite(value):
        raise UsageError(f"{name} is a finite number, not {value!r}")
    if not (value >= least and value > above):
        raise UsageError(
            f"{name} is {f'at least {least:g}' if above == -math.inf else f'above {above:g}'}, not {value:g}"
        )
    return float(value)


def _sequence(name: str, values: ArrayLike, scans: int, loops: int) -> Array:
    array = np.asarray(values, dtype=np.float64)
    if array.ndim == 1:
        array = array[:, None]
    if array.ndim > 2 or (array.ndim == 2 and (array.shape[0] != scans or array.shape[1] not in (1, loops))):
        raise UsageError(
            f"{name} is a number or has one value for each of the {scans} scans; its shape is {array.shape}"
        )
    if not np.all(np.isfinite(array)):
        raise UsageError(f"{name} holds values that are not finite numbers")
    return np.broadcast_to(array, (scans, loops))

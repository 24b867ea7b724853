"""Do the settings that were typed act on the recorded output? Agree, differ and how, or cannot be checked."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np
from numpy.typing import ArrayLike

from loopfit.core.errors import UsageError
from loopfit.identify.recorded_controller import Acting, acting_controller
from loopfit.identify.typed_words import differences
from loopfit.loop.gains import Gains
from loopfit.loop.settings import Settings

_LEAST_R_SQUARED = 0.995
_ALLOWED = 0.05  # of a gain
_ALLOWED_FILTER = 0.15  # of the filter time: a tenth of the derivative time is itself a guess
_ALLOWED_WEIGHT = 0.05
_CERTAIN = 0.15  # of a gain: a wider band leaves it unchecked
_THINNED = 1.5  # rows further apart than this many scans
_THINNED_DOUBT = 0.05  # of a gain then
_NOISY_DOUBT = 0.06  # of a gain, where what is left is more than rounding
_UNLIKE_DOUBT = 0.25  # of a gain, where what is left is neither rounding nor noise
_UNFILTERED = 0.12  # scans: a derivative filter as short as this is none
_UNMOVED = 0.01  # of the output's standard deviation: an action as small as this is none

Verdict = Literal["agree", "differ", "cannot be checked"]
Standing = Literal["agrees", "differs", "unknown"]


@dataclass(frozen=True, slots=True, kw_only=True)
class TypedCheck:
    """What the recorded output says of the typed settings.

    `found`: the controller that the output shows, as Settings like the typed ones where such exist; None where the
    check could not be made. `lag_scans`: scans by which the recorded output lags what was recorded of the measurement.
    """

    verdict: Verdict
    text: str  # one sentence
    found: Settings | Gains | None = None
    r_squared: float | None = None
    lag_scans: float | None = None
    filter_s: float | None = None


def check_typed(
    time: ArrayLike, setpoint: ArrayLike, measurement: ArrayLike, output: ArrayLike, settings: Settings
) -> TypedCheck:
    """Compare the settings with those that the output of a record in automatic obeys.

    Parameters
    ----------
    time : (n,) float
        s, even; best one row a scan.
    setpoint, measurement, output : (n,) float
        As recorded; the output is what the controller wrote.
    settings : Settings
        As typed.

    Raises
    ------
    UsageError
        If the arrays are not of one length, not finite, or the rows are not even in time.

    Notes
    -----
    "differ" only where a setting is off by more than 5 % and twice its band beyond that; "agree" only where R^2 is
    above 0.995 and the gains are within 5 % and known to 15 %.
    """
    t, r, y, u = _columns(time, setpoint, measurement, output)
    typed = settings.gains
    if len(t) < 20:
        return _not_checked(f"the typed settings cannot be checked: {len(t)} rows are too few")
    acting = acting_controller(t, r, y, u, settings.output_limits, typed.filter_s)
    if isinstance(acting, str):
        return _not_checked(f"the typed settings cannot be checked: {acting}")
    every = float(np.median(np.diff(t)))
    if not acting.r_squared > _LEAST_R_SQUARED:
        thinned = settings.scan_s is not None and every > _THINNED * settings.scan_s
        why = (
            f"the record holds a row every {every:.3g} s, the controller scans every {settings.scan_s:.3g} s"
            if thinned
            else "it may have been filtered or thinned before it was stored, or something else acts on the output"
        )
        text = (
            f"the typed settings cannot be checked: no controller of this kind makes the recorded output (R^2 "
            f"{acting.r_squared:.3f}); {why}"
        )
        return _checked(acting, "cannot be checked", text)
    wary = _doubted(acting, typed, settings, every)
    if isinstance(wary, str):
        return _checked(acting, "cannot be checked", f"the typed settings cannot be checked: {wary}")
    acting = wary
    standing = _standing(acting, typed, settings)
    found = _as_settings(acting, typed, settings, standing)
    differs = [name for name, what in standing.items() if what == "differs"]
    if differs:
        text = (
            f"the recorded output does not obey the typed settings: {'; '.join(differences(settings, acting, differs))}"
        )
        if (within := _known_within(acting)) > _ALLOWED:
            text += f"; gains known to within {100.0 * within:.2g} %"
        return _checked(acting, "differ", text, found)
    unknown = [name for name in ("kp", "ki", "kd") if standing[name] == "unknown"]
    if unknown:
        what = " and ".join({"kp": "gain", "ki": "integral", "kd": "derivative"}[name] for name in unknown)
        text = f"the typed settings cannot be checked: the record leaves the {what} too uncertain"
        return _checked(acting, "cannot be checked", text, found)
    return _checked(acting, "agree", _agreement(acting, typed, standing), found)


def _columns(*columns: ArrayLike) -> list[np.ndarray]:
    arrays = [np.asarray(column, dtype=np.float64) for column in columns]
    if len({array.shape for array in arrays}) != 1 or arrays[0].ndim != 1:
        raise UsageError(
            f"time, setpoint, measurement and output are columns of one length, not {[a.shape for a in arrays]}"
        )
    if not all(np.all(np.isfinite(array)) for array in arrays):
        raise UsageError("time, setpoint, measurement and output hold values that are not finite numbers")
    steps = np.diff(arrays[0])
    if len(steps) and not float(np.ptp(steps)) <= 0.02 * float(np.median(steps)):
        raise UsageError("the rows are not even in time: the check of typed settings needs one row a scan")
    return arrays


def _checked(acting: Acting, verdict: Verdict, text: str, found: Settings | Gains | None = None) -> TypedCheck:
    return TypedCheck(
        verdict=verdict, text=text, found=found, r_squared=acting.r_squared, lag_scans=acting.lag_scans,
        filter_s=acting.values["filter_s"] if acting.derivative else None,
    )  # fmt: skip


def _not_checked(text: str) -> TypedCheck:
    return TypedCheck(verdict="cannot be checked", text=text)


def _doubted(acting: Acting, typed: Gains, settings: Settings, every: float) -> Acting | str:
    """Wider bands where something stands between controller and record, or why nothing can be said then.

    A measurement that was filtered before it was stored looks like a derivative without a filter, a filtered output
    like one of the wrong sign; rows further apart than the scans hide what a derivative did between them.
    """
    values = acting.values
    thinned = not acting.held and settings.scan_s is not None and every > _THINNED * settings.scan_s
    unlike = acting.derivative and (
        values["kd"] * values["kp"] <= 0.0 or values["filter_s"] < _UNFILTERED * acting.scan_s
    )
    if unlike and values["kd"] * typed.kd < 0.0 and values["kp"] * typed.kp < 0.0:  # the whole sign is wrong
        unlike = values["kd"] * values["kp"] <= 0.0
    typed_alike = typed.kd * typed.kp < 0.0 or 0.0 < typed.filter_s < 2.0 * _UNFILTERED * acting.scan_s
    filtered = unlike and not typed_alike
    if acting.exact and not thinned and not filtered:
        return acting
    if acting.white and not thinned and not filtered:  # noise of the recorder, as far as one can see
        doubt = {name: acting.doubt[name] + _NOISY_DOUBT * abs(values[name]) for name in ("kp", "ki", "kd")}
        doubt |= {"setpoint_weight": acting.doubt["setpoint_weight"] + 2.0 * _NOISY_DOUBT, "filter_s": math.inf}
        return replace(acting, doubt=acting.doubt | doubt)
    if acting.derivative or typed.kd != 0.0:
        if thinned:
            return f"a row every {every:.3g} s does not show the derivative of a controller that scans every {settings.scan_s:.3g} s"
        return "the measurement or the output seems to have been filtered or thinned before it was stored"
    share = _THINNED_DOUBT if acting.exact or acting.white else _UNLIKE_DOUBT
    doubt = {name: acting.doubt[name] + share * abs(values[name]) for name in ("kp", "ki")}
    return replace(acting, doubt=acting.doubt | doubt | {"setpoint_weight": math.inf})


def _standing(acting: Acting, typed: Gains, settings: Settings) -> dict[str, Standing]:
    values, doubt = acting.values, acting.doubt
    out: dict[str, Standing] = {}
    for name in ("kp", "ki", "kd"):
        want, got, band = getattr(typed, name), values[name], doubt[name]
        nothing = _UNMOVED / acting.share[name] if acting.share[name] > 0.0 else math.inf
        allowed = _ALLOWED * max(abs(want), abs(got)) if want != 0.0 else nothing
        largest = max(abs(want), abs(got))
        out[name] = _judged(
            abs(got - want), allowed, band, band <= _CERTAIN * largest or (want == 0.0 and band <= 5.0 * nothing)
        )
    out["filter_s"] = out["setpoint_weight"] = out["on_error"] = "unknown"
    if typed.kd != 0.0 and acting.derivative:
        got, band = values["filter_s"], doubt["filter_s"]
        allowed = _ALLOWED_FILTER * max(got, typed.filter_s) + 0.25 * acting.scan_s  # less than a scan is hardly seen
        out["filter_s"] = _judged(abs(got - typed.filter_s), allowed, band, band <= 2.0 * allowed)
        want = float(typed.derivative_on_error)
        out["on_error"] = _judged(abs(values["on_error"] - want), 0.4, doubt["on_error"], doubt["on_error"] < 0.3)
    if typed.kp != 0.0 and math.isfinite(doubt["setpoint_weight"]):
        off, band = abs(values["setpoint_weight"] - typed.setpoint_weight), doubt["setpoint_weight"]
        out["setpoint_weight"] = _judged(off, _ALLOWED_WEIGHT, band, band < _CERTAIN)
    if settings.scan_s is not None:
        slower, faster = (
            acting.scan_s > (1.0 + _ALLOWED) * settings.scan_s,
            acting.scan_s < (1.0 - _ALLOWED) * settings.scan_s,
        )
        # rows far apart alone may be a thinned record; a held output, or one that moves between the scans, is not
        out["scan_s"] = "differs" if (slower and acting.held) or (faster and acting.exact) else "agrees"
    return out


def _judged(off: float, allowed: float, band: float, certain: bool) -> Standing:
    if off > allowed + 2.0 * band:
        return "differs"
    return "agrees" if certain and off <= allowed + band else "unknown"


def _known_within(acting: Acting) -> float:
    """The widest relative band of the gains that act."""
    acts = [name for name in ("kp", "ki", "kd") if abs(acting.values[name]) * acting.share[name] > _UNMOVED]
    return max((acting.doubt[name] / abs(acting.values[name]) for name in acts), default=0.0)


def _agreement(acting: Acting, typed: Gains, standing: dict[str, Standing]) -> str:
    within = max(_known_within(acting), _ALLOWED)
    text = (
        f"the recorded output obeys the typed settings: gains within {100.0 * within:.2g} %, R^2 {acting.r_squared:.5f}"
    )
    open_ones = []
    if typed.kd != 0.0 and standing["filter_s"] == "unknown":
        open_ones.append("the derivative filter")
    if standing["setpoint_weight"] == "unknown":
        open_ones.append("the setpoint weight")
    if typed.kd != 0.0 and standing["on_error"] == "unknown":
        open_ones.append("whether the derivative is on the error or the measurement")
    return f"{text}; not to be seen in this record: {', '.join(open_ones)}" if open_ones else text


def _as_settings(acting: Acting, typed: Gains, settings: Settings, standing: dict[str, Standing]) -> Settings | Gains:
    """The controller found, like the typed one where it can be; what agrees or was not seen is as typed."""
    take = {name: standing[name] == "differs" for name in ("filter_s", "setpoint_weight", "on_error")}
    kd = acting.values["kd"] if acting.derivative else typed.kd if standing["kd"] == "unknown" else 0.0
    filter_s = acting.values["filter_s"] if take["filter_s"] or typed.filter_s == 0.0 else typed.filter_s
    on_error = acting.values["on_error"] > 0.5 if take["on_error"] else typed.derivative_on_error
    acts = {name: abs(acting.values[name]) * acting.share[name] > _UNMOVED for name in ("kp", "ki")}
    if not any(acts.values()) and kd == 0.0:
        return typed
    gains = Gains(
        kp=acting.values["kp"] if acts["kp"] and (typed.kp != 0.0 or standing["kp"] == "differs") else 0.0,
        ki=acting.values["ki"] if acts["ki"] and (typed.ki != 0.0 or standing["ki"] == "differs") else 0.0,
        kd=kd,
        filter_s=filter_s if kd != 0.0 else 0.0,
        setpoint_weight=acting.values["setpoint_weight"] if take["setpoint_weight"] else typed.setpoint_weight,
        derivative_on_error=on_error,
    )
    like = replace(settings, derivative_on="error" if on_error else "measurement")
    if take["setpoint_weight"] and settings.setpoint_weight is None:
        like = replace(like, setpoint_weight=1.0)
    if standing.get("scan_s") == "differs":
        like = replace(like, scan_s=acting.scan_s)
    tries = [like]
    if settings.action is not None:
        tries.append(replace(like, action="direct" if settings.action == "reverse" else "reverse"))
    for one in tries:
        try:
            return Settings.from_gains(gains, like=one)
        except UsageError:
            continue
    return gains

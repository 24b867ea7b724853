"""Which typed setting differs from the one that acts, and the mix-up that explains it, by name."""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import replace

from loopfit.core.errors import UsageError
from loopfit.identify.recorded_controller import Acting
from loopfit.loop.forms import Terms, Times, ideal_of_terms, series_of_terms, terms_of_ideal, terms_of_series
from loopfit.loop.screen import integral_unit_of, shown_integral
from loopfit.loop.settings import FILTER_SHARE, Settings
from loopfit.loop.units import PER_SECOND, SECONDS, in_unit

_CLOSE = 0.008  # of a setting: a named mix-up is closer than this, besides the bands; screens show three digits
_TIE = 2e-3  # of a setting: two names this close are both given
_UNITS = {"ms": "milliseconds", "s": "seconds", "min": "minutes", "h": "hours"}
_FACTORS = {10.0: "ten times", 0.1: "a tenth of", 100.0: "a hundred times", 0.01: "a hundredth of"}

Named = tuple[str, float]  # what explains a value and the value it predicts, or a phrase and how far off its name is


def differences(settings: Settings, acting: Acting, differs: list[str]) -> list[str]:
    """Return a phrase for each setting that differs, or one for the mix-up of form that explains several.

    Parameters
    ----------
    settings : Settings
        As typed.
    acting : Acting
        What the output obeys.
    differs : list of str
        Of kp, ki, kd, filter_s, setpoint_weight, on_error, scan_s.
    """
    phrases: list[str] = []
    left = set(differs)
    if left & {"kp", "ki", "kd"}:
        phrase, miss, weight = _whole(settings, acting)
        each = _one_by_one(settings, acting)
        worst = max((off for _, off in each), default=math.inf)
        if phrase and miss <= worst + _TIE + min(_band(acting), _CLOSE):
            phrases.append(phrase)
            if (
                math.isfinite(weight)
                and abs(acting.values["setpoint_weight"] - weight) < 0.05 + acting.doubt["setpoint_weight"]
            ):
                left.discard("setpoint_weight")
        else:
            phrases += [phrase for phrase, _ in each]
    if "kd" in differs or settings.gains.kd == 0.0:
        left.discard("on_error")
    if "on_error" in left:
        on = "measurement" if settings.derivative_on == "error" else "error"
        phrases.append(f"the derivative acts on the {on}, typed was the {settings.derivative_on}")
        if settings.form == "series":  # there the weight goes with it
            left.discard("setpoint_weight")
    if "setpoint_weight" in left:
        got = acting.values["setpoint_weight"]
        phrases.append(f"the setpoint weight that acts is {got:.3g}, not {settings.gains.setpoint_weight:.3g}")
    if "filter_s" in left and acting.derivative and not _follows(settings, acting):
        phrases.append(_filter(settings, acting))
    if "scan_s" in left and settings.scan_s is not None:
        phrases.append(f"the scan interval that acts is {acting.scan_s:.4g} s, not {settings.scan_s:.4g} s")
    return phrases or [f"its gains are kp = {acting.values['kp']:.4g}, ki = {acting.values['ki']:.4g} per s"]


def _whole(settings: Settings, acting: Acting) -> tuple[str, float, float]:
    """The mix-up of form or of two settings that explains all three gains, by how much not, and the weight it means."""
    found = []
    for name, terms, weight in _other_meanings(settings):
        scale = settings.gain_scale
        pairs = [(acting.values[k], scale * getattr(terms, k), acting.doubt[k]) for k in ("kp", "ki", "kd")]
        if max(_miss(got, want, band) for got, want, band in pairs) < _CLOSE:
            found.append((max(_miss(got, want, 0.0) for got, want, _ in pairs), name, weight))
    if not found:
        return "", math.inf, math.nan
    miss, name, weight = min(found)
    return name, miss, weight


def _miss(got: float, want: float, band: float) -> float:
    """Relative distance beyond the band."""
    largest = max(abs(got), abs(want))
    return 0.0 if largest == 0.0 else max(abs(got - want) - 2.0 * min(band, 0.1 * largest), 0.0) / largest


def _other_meanings(settings: Settings) -> list[tuple[str, Terms, float]]:
    """What the same numbers would mean in another form, or in each other's place."""
    gain, form = settings.shown_gain, settings.form
    if gain is None:
        return []
    integral = settings.integral_gain_per_s if form == "parallel" else settings.integral_time_s
    derivative = settings.derivative_gain_s if form == "parallel" else settings.derivative_time_s
    out: list[tuple[str, Terms, float]] = []

    def add(other: str, terms: Terms, weight: float = 1.0) -> None:
        out.append((other, terms, weight))

    says = f"the numbers act in the {{}} form, typed was the {form} form"
    if form != "parallel":
        times = Times(gain=gain, integral_time_s=integral, derivative_time_s=derivative, filter_s=settings.filter_s)
        if integral is not None and derivative is not None:
            if form == "ideal":
                series = terms_of_series(times)
                add(says.format("series"), series, 1.0 if settings.derivative_on == "error" else gain / series.kp)
            else:
                add(says.format("ideal"), terms_of_ideal(times))
            swapped = replace(times, integral_time_s=derivative, derivative_time_s=integral)
            name = "the integral and the derivative time are swapped"
            if form == "ideal":
                add(name, terms_of_ideal(swapped))
            else:
                terms = terms_of_series(swapped)
                add(name, terms, 1.0 if settings.derivative_on == "error" else gain / terms.kp)
        ki = 0.0 if integral is None else 1.0 / integral
        add(says.format("parallel"), Terms(kp=gain, ki=ki, kd=derivative or 0.0))
        return out
    ki, kd = integral or 0.0, derivative or 0.0
    add(says.format("ideal"), Terms(kp=gain, ki=gain * ki, kd=gain * kd))
    if ki != 0.0:
        meant = Times(gain=gain, integral_time_s=1.0 / ki, derivative_time_s=derivative, filter_s=settings.filter_s)
        series = terms_of_series(meant)
        if derivative is not None:
            add(says.format("series"), series, 1.0 if settings.derivative_on == "error" else gain / series.kp)
    by = [("with the opposite sign", -1.0), *((f"{word} what was typed", f) for f, word in _FACTORS.items())]
    size = abs(settings.gain_scale)
    if size != 1.0:
        by.append(("in engineering units, not in %/%", 1.0 / size))
    by.append(("as a proportional band, not a gain", 100.0 / gain**2))
    for word, factor in by:
        if ki or kd:
            add(f"all gains act {word}", Terms(kp=factor * gain, ki=factor * ki, kd=factor * kd))
    return out


def _band(acting: Acting) -> float:
    """The widest relative band of the gains that act."""
    return max(
        (acting.doubt[k] / abs(acting.values[k]) for k in ("kp", "ki", "kd") if acting.values[k] != 0.0), default=0.0
    )


def _one_by_one(settings: Settings, acting: Acting) -> list[Named]:
    """A phrase for each setting of the typed form that is not what acts, and how far off its name is (inf: no name)."""
    values, doubt, scale = acting.values, acting.doubt, settings.gain_scale
    kp, ki = values["kp"] / scale, values["ki"] / scale
    kd = values["kd"] / scale if acting.derivative else 0.0
    phrases: list[Named] = []
    band = {k: min(doubt[k] / abs(values[k]), 1.0) if values[k] != 0.0 else 1.0 for k in ("kp", "ki", "kd")}
    ki_acts = abs(values["ki"]) > 2.0 * doubt["ki"] and abs(values["ki"]) * acting.share["ki"] > 0.01
    kp_acts = abs(values["kp"]) > 2.0 * doubt["kp"] and abs(values["kp"]) * acting.share["kp"] > 0.01
    if not ki_acts:
        ki = 0.0
    if not kp_acts:
        kp = 0.0
    gain, integral, derivative = _in_form(settings, Terms(kp=kp, ki=ki, kd=kd, filter_s=values["filter_s"]))
    typed_gain = settings.shown_gain
    if typed_gain is not None or gain != 0.0:
        phrases += _gain(settings, gain, band["kp"])
    parallel = settings.form == "parallel"
    both = band["ki"] + (0.0 if parallel else band["kp"])
    typed = settings.integral_gain_per_s if parallel else settings.integral_time_s
    unit = integral_unit_of(settings)
    phrases += _one(
        "integral",
        typed,
        integral,
        _integral_names(settings, gain),
        both,
        unit,
        rate=unit in PER_SECOND and not parallel,
    )
    both = band["kd"] + (0.0 if parallel else band["kp"])
    typed = settings.derivative_gain_s if parallel else settings.derivative_time_s
    phrases += _one("derivative", typed, derivative, _derivative_names(settings, gain), both, settings.derivative_unit)
    return phrases


def _in_form(settings: Settings, terms: Terms) -> tuple[float, float | None, float | None]:
    """Gain, integral and derivative setting of the typed form, or of the ideal one where that cannot be."""
    if settings.form == "parallel" or terms.kp == 0.0:
        return terms.kp, terms.ki or None, terms.kd or None
    try:
        times = ideal_of_terms(terms) if settings.form == "ideal" else series_of_terms(terms)
    except UsageError:
        return terms.kp, terms.kp / terms.ki if terms.ki else None, terms.kd / terms.kp if terms.kd else None
    return times.gain, times.integral_time_s, times.derivative_time_s


def _gain(settings: Settings, got: float, band: float) -> list[Named]:
    typed = settings.shown_gain
    if typed is None:
        return [(f"a gain of {got:.4g} acts, typed was none", 0.0)]
    if abs(got - typed) <= (0.05 + 2.0 * band) * max(abs(got), abs(typed)):
        return []
    as_band = settings.proportional_band_percent is not None
    size = abs(typed)
    phrases: list[Named] = []
    if got * typed < 0.0:
        given = "the action is the other one" if settings.action is not None else "the gain has the wrong sign"
        phrases.append((f"{given}: the output moves the other way", 0.0))
    names = [
        (
            "that of a gain typed as a proportional band" if as_band else "that of a proportional band typed as a gain",
            100.0 / size,
        ),
        ("the inverse of the number", 1.0 / size),
        *((f"{word} it", factor * size) for factor, word in _FACTORS.items()),
    ]
    scale = abs(settings.gain_scale)
    if scale != 1.0:
        names.append(("that number in engineering units, not in %/%", size / scale))
        names.append(("that of %/% with the two ranges exchanged", size / scale**2))
    if abs(abs(got) - size) <= (0.05 + 2.0 * band) * max(abs(got), size):
        return phrases
    said = f"the gain that acts is {got:.4g}, not {typed:.4g}"
    named = _explained(said, abs(got), names, band, abs(got) / size)
    if math.isinf(named[1]) and settings.measurement_range is None:
        spans = f", as in %/% where the span of the output over that of the measurement is {abs(got) / size:.3g}"
        named = named[0] + spans, math.inf
    return [*phrases, named]


def _integral_names(settings: Settings, gain: float) -> Iterable[Named]:
    shown = shown_integral(settings)
    if shown is None:
        return
    unit, gain, x = integral_unit_of(settings), abs(gain), abs(shown)
    bare, rate = unit.removeprefix("/"), unit in PER_SECOND
    others = [(one, SECONDS[one]) for one in ("s", "min", "h")]
    if settings.form == "parallel":
        for one, seconds in others:
            if one != bare:
                yield f"a gain per {one}, typed as per {bare}", x / seconds
            yield f"repeats per {one}: the ideal form for the parallel form", gain * x / seconds
            yield f"an integral time in {_UNITS[one]}, typed as an integral gain", gain / (x * seconds)
            yield f"a time in {_UNITS[one]} not tied to the gain, typed as an integral gain", 1.0 / (x * seconds)
        amount = abs(settings.integral_gain_per_s or 0.0)
    else:
        for one, seconds in others:
            if rate and one != bare:
                yield f"repeats per {one}, typed as repeats per {bare}", seconds / x
            if rate:
                yield f"a time in {_UNITS[one]}, typed as repeats per {bare}", x * seconds
            else:
                if one != bare:
                    yield f"{_UNITS[one]}, typed as {_UNITS[bare]}", x * seconds
                yield f"repeats per {one}, typed as a time in {_UNITS[bare]}", seconds / x
            yield (
                f"an integral gain per {one}, typed as {'repeats' if rate else 'an integral time'}",
                gain * seconds / x,
            )
        amount = settings.integral_time_s or 0.0
        yield "not tied to the gain: the parallel form for the typed one", gain * amount
        if bare == "s" and not rate:
            yield "seconds already, converted as if from minutes", amount / 60.0
    yield from ((f"{word} it", factor * amount) for factor, word in _FACTORS.items())


def _derivative_names(settings: Settings, gain: float) -> Iterable[Named]:
    parallel = settings.form == "parallel"
    typed = settings.derivative_gain_s if parallel else settings.derivative_time_s
    if typed is None:
        return
    unit, gain, amount = settings.derivative_unit, abs(gain), abs(typed)
    if unit == "s" and not parallel:
        yield "seconds already, converted as if from minutes", amount / 60.0
    for one, seconds in SECONDS.items():
        factor = seconds / SECONDS[unit]
        if one != unit:
            yield f"{_UNITS[one]}, typed as {_UNITS[unit]}", amount * factor
        if one == "ms":
            continue
        if parallel:
            yield f"a derivative time in {_UNITS[one]}, typed as a derivative gain", gain * amount * factor
        elif gain > 0.0:
            yield f"a derivative gain in {_UNITS[one]}, typed as a derivative time", amount * factor / gain
    yield from ((f"{word} it", factor * amount) for factor, word in _FACTORS.items())


def _one(
    what: str,
    typed: float | None,
    got: float | None,
    names: Iterable[Named],
    band: float,
    unit: str,
    *,
    rate: bool = False,
) -> list[Named]:
    def shown(value: float) -> str:
        return f"{in_unit(1.0 / value if rate else value, unit):.4g} {unit}"

    if typed is None and got is None:
        return []
    if typed is None or got is None:
        if got is None:
            return [(f"the {what} does not act, typed was {shown(typed or 0.0)}", 0.0)]
        return [(f"a{'n' * (what == 'integral')} {what} of {shown(got)} acts, typed was none", 0.0)]
    if abs(got - typed) <= (0.05 + 2.0 * band) * max(abs(got), abs(typed)):
        return []
    if abs(abs(got) - abs(typed)) <= (0.05 + 2.0 * band) * max(abs(got), abs(typed)):
        return [(f"the {what} acts with the opposite sign", 0.0)]
    return [
        _explained(f"the {what} that acts is {shown(got)}, not {shown(typed)}", abs(got), names, band, abs(got / typed))
    ]


def _explained(said: str, got: float, names: Iterable[Named], band: float, ratio: float) -> Named:
    """The sentence with the name that comes closest and how far off it is, or with the factor and inf where none is near."""
    near = sorted((abs(math.log(got / value)), name) for name, value in names if value > 0.0)
    if not near or near[0][0] > _CLOSE + min(2.0 * band, 0.2):
        return f"{said}: {ratio:.3g} times", math.inf
    alike = [
        name for off, name in near if off <= near[0][0] + 2.0 * band + _TIE and off <= _CLOSE + min(2.0 * band, 0.2)
    ]
    return f"{said}: {' or '.join(alike[:3])}", near[0][0]


def _follows(settings: Settings, acting: Acting) -> bool:
    """Whether the filter is the tenth of the derivative time that stands in where none was typed."""
    values = acting.values
    if settings.derivative_filter_s is not None or values["kp"] == 0.0:
        return False
    return bool(abs(values["filter_s"] / (FILTER_SHARE * abs(values["kd"] / values["kp"])) - 1.0) < 0.25)


def _filter(settings: Settings, acting: Acting) -> str:
    got, unit = acting.values["filter_s"], settings.filter_unit
    said = f"the derivative filter that acts is {in_unit(got, unit):.4g} {unit}, not {in_unit(settings.filter_s, unit):.4g} {unit}"
    if settings.derivative_filter_s is None:
        return f"{said} (a tenth of the derivative time, since none was typed)"
    names = [
        (f"{_UNITS[one]}, typed as {_UNITS[unit]}", settings.filter_s * seconds / SECONDS[unit])
        for one, seconds in SECONDS.items()
        if one != unit
    ]
    names += [(f"{word} it", factor * settings.filter_s) for factor, word in _FACTORS.items()]
    band = min(acting.doubt["filter_s"] / got, 1.0)
    return _explained(said, got, names, band, got / settings.filter_s)[0]

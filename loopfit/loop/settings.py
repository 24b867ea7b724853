"""The settings of a controller as its screen shows them, and the gains that they mean."""

from __future__ import annotations

from dataclasses import KW_ONLY, dataclass, replace
from typing import Any

from loopfit.core.errors import UsageError
from loopfit.loop.forms import Terms, Times, ideal_of_terms, series_of_terms, terms_of_ideal, terms_of_series
from loopfit.loop.gains import Gains
from loopfit.loop.screen import entered, rounded, unit_in_form
from loopfit.loop.settings_checks import checked
from loopfit.loop.settings_words import words
from loopfit.loop.units import derivative_of, integral_of, time_of

FILTER_SHARE = 0.1  # of the derivative time, where a controller's filter was not given
_SAME = 1e-6  # relative; rounding moves the two times of a series form by up to 1e-8 where they are nearly equal
_KEPT = ("scan_s", "action", "measurement_range", "output_range", "output_limits", "derivative_unit", "filter_unit")


@dataclass(frozen=True, slots=True)
class Settings:
    """What is set in a controller; None means that a term is absent, or that the controller has no such setting.

    Parameters
    ----------
    form : {"ideal", "parallel", "series"}
        ideal: u = K (e + (1/Ti) integral of e + Td de/dt); series: K (1 + 1/(Ti s)) (1 + Td s / (Tf s + 1)); parallel:
        Kp, Ki, Kd separately.
    gain, proportional_band_percent : float
        One of the two; the band is 100 / gain in % per %. The parallel form may lack both.
    integral_time_s, derivative_time_s : float
        Of the ideal and series forms, s. Repeats per time are 1 / integral_time_s.
    integral_gain_per_s, derivative_gain_s : float
        Ki and Kd of the parallel form: gain per s, gain s.
    derivative_filter_s : float
        Time of the filter on the derivative; a tenth of the derivative time when None.
    setpoint_weight : float
        Weight of the setpoint in the proportional action. Any number, even 1, says that the controller has one.
    derivative_on : {"measurement", "error"}
        What is differentiated.
    scan_s : float
        Time between two executions, s; None for a continuous controller.
    action : {"reverse", "direct"}
        Reverse: the output falls as the measurement rises. Gains are then magnitudes. None: the gain has a sign
        of its own, positive for reverse action.
    measurement_range, output_range : (float, float)
        Both: the controller computes in % of these ranges and every gain is in % per %. None: in engineering units;
        a proportional band then takes measurement and output to be in % already. One alone is refused.
    output_limits : (float, float)
        In the unit of the output itself, whether there is a range or not.
    integral_unit, derivative_unit, filter_unit : str
        What the screen shows: "s", "min", "h", "ms"; for the integral also repeats "/s", "/min", "/h", which in the
        parallel form are gain per time. The values above are in seconds whatever the unit.

    Raises
    ------
    UsageError
        If a value is not what it should be, or two contradict each other.

    Notes
    -----
    In the series form with the derivative on the measurement the setpoint does not pass through (1 + Td s): it meets
    the gain K, not K (1 + Td/Ti), and `gains.setpoint_weight` says so.
    """

    form: str = "ideal"
    _: KW_ONLY
    gain: float | None = None
    proportional_band_percent: float | None = None
    integral_time_s: float | None = None
    integral_gain_per_s: float | None = None
    derivative_time_s: float | None = None
    derivative_gain_s: float | None = None
    derivative_filter_s: float | None = None
    setpoint_weight: float | None = None
    derivative_on: str = "measurement"
    scan_s: float | None = None
    action: str | None = None
    measurement_range: tuple[float, float] | None = None
    output_range: tuple[float, float] | None = None
    output_limits: tuple[float, float] | None = None
    integral_unit: str | None = None
    derivative_unit: str = "s"
    filter_unit: str = "s"

    def __post_init__(self) -> None:
        for name, value in checked(self).items():
            object.__setattr__(self, name, value)
        _ = self.gains  # what overflows is refused here, not later

    @classmethod
    def from_entry(
        cls,
        form: str = "ideal",
        *,
        integral: str | None = None,
        derivative: str | None = None,
        derivative_filter: str | None = None,
        scan: str | None = None,
        **others: Any,
    ) -> Settings:
        """Return the settings that were typed: "2.5min", "0.8/min", "off"; the others are those of `Settings`."""
        made: dict[str, Any] = dict(others)
        if integral is not None and (entry := integral_of(integral, form=form)) is not None:
            made["integral_unit"] = entry.unit
            if form == "parallel":
                made["integral_gain_per_s"] = entry.amount
            else:
                made["integral_time_s"] = 1.0 / entry.amount if entry.is_rate else entry.amount
        if derivative is not None and (entry := derivative_of(derivative, form=form)) is not None:
            made["derivative_unit"] = entry.unit
            made["derivative_gain_s" if form == "parallel" else "derivative_time_s"] = entry.amount
        if derivative_filter is not None and (entry := time_of(derivative_filter, "filter")) is not None:
            made["filter_unit"] = entry.unit
            made["derivative_filter_s"] = entry.amount
        if scan is not None and (entry := time_of(scan, "scan")) is not None:
            made["scan_s"] = entry.amount
        return cls(form, **made)

    @classmethod
    def from_gains(cls, gains: Gains, *, form: str | None = None, like: Settings | None = None) -> Settings:
        """Return the settings that mean these gains; `Settings.gains` of them are the same gains.

        Parameters
        ----------
        gains : Gains
            What the controller shall do.
        form : str, optional
            Form of the controller; that of `like`, else ideal, when None.
        like : Settings, optional
            The controller: its units, ranges, action, and what it has. Without it the gain is in engineering units
            with a sign, times are in s.

        Raises
        ------
        UsageError
            If the form has no such controller, a sign contradicts the action, or the controller lacks what is asked.
        """
        form = form or (like.form if like is not None else "ideal")
        kept: dict[str, Any] = {} if like is None else {name: getattr(like, name) for name in _KEPT}
        on = "error" if gains.derivative_on_error else "measurement"
        if like is not None:
            if gains.kd != 0.0 and on != like.derivative_on:
                raise UsageError(
                    f"these gains have the derivative on the {on}, the controller has it on the {like.derivative_on}"
                )
            on = like.derivative_on
            kept["integral_unit"] = unit_in_form(form, like.integral_unit)
        scale = 1.0 if like is None else like.gain_scale
        terms = Terms(kp=gains.kp / scale, ki=gains.ki / scale, kd=gains.kd / scale, filter_s=gains.filter_s)
        signed = (
            (terms.kp, terms.ki, terms.kd) if form == "parallel" else (terms.kp,)
        )  # a long filter turns kd in series
        if like is not None and like.action is not None and min(signed) < 0.0:
            raise UsageError(
                f"gains of kp = {gains.kp:.4g}, ki = {gains.ki:.4g} per s, kd = {gains.kd:.4g} s contradict "
                f"the {like.action} action of the controller"
            )
        kept["derivative_filter_s"] = None if gains.kd == 0.0 else gains.filter_s
        if form == "parallel":
            kept["integral_gain_per_s"] = _present(terms.ki)
            kept["derivative_gain_s"] = _present(terms.kd)
            gain = _present(terms.kp)
        else:
            times = _series_like(terms, like) if form == "series" else ideal_of_terms(terms)
            kept["integral_time_s"] = times.integral_time_s
            kept["derivative_time_s"] = times.derivative_time_s
            gain = times.gain
        if gain is not None and like is not None and like.proportional_band_percent is not None:
            kept["proportional_band_percent"] = 100.0 / gain
        else:
            kept["gain"] = gain
        bare = cls(form, derivative_on=on, **kept)
        weight = gains.setpoint_weight / bare.gains.setpoint_weight
        if gains.kp == 0.0:
            weight = 1.0
        if like is not None and like.setpoint_weight is None and not abs(weight - 1.0) <= _SAME:
            raise UsageError(
                f"the controller has no setpoint weight: its setpoint meets {bare.gains.setpoint_weight:.4g} of the "
                f"proportional gain, not {gains.setpoint_weight:.4g}"
            )
        has_one = gains.kp != 0.0 and (abs(weight - 1.0) > _SAME if like is None else like.setpoint_weight is not None)
        return replace(bare, setpoint_weight=weight) if has_one else bare

    @property
    def gain_scale(self) -> float:
        """Engineering gain with the sign of e = setpoint - measurement, over the gain that the controller shows."""
        scale = -1.0 if self.action == "direct" else 1.0
        if self.measurement_range is None or self.output_range is None:
            return scale
        spans = [high - low for low, high in (self.output_range, self.measurement_range)]
        return scale * spans[0] / spans[1]

    @property
    def shown_gain(self) -> float | None:
        """Gain as the controller means it, from its proportional band where it has that."""
        return self.gain if self.proportional_band_percent is None else 100.0 / self.proportional_band_percent

    @property
    def filter_s(self) -> float:
        """Time of the derivative filter, given or a tenth of the derivative time; 0 without a derivative."""
        if self.derivative_filter_s is not None:
            return self.derivative_filter_s
        if self.derivative_gain_s is not None and (gain := self.shown_gain) is not None:
            return FILTER_SHARE * self.derivative_gain_s / gain
        return 0.0 if self.derivative_time_s is None else FILTER_SHARE * self.derivative_time_s

    @property
    def gains(self) -> Gains:
        """The gains in engineering units and seconds, with the sign of e = setpoint - measurement."""
        gain, weight = self.shown_gain, 1.0 if self.setpoint_weight is None else self.setpoint_weight
        if self.form == "parallel" or gain is None:
            terms = Terms(
                kp=gain or 0.0,
                ki=self.integral_gain_per_s or 0.0,
                kd=self.derivative_gain_s or 0.0,
                filter_s=self.filter_s,
            )
        else:
            times = Times(
                gain=gain,
                integral_time_s=self.integral_time_s,
                derivative_time_s=self.derivative_time_s,
                filter_s=self.filter_s,
            )
            terms = terms_of_series(times) if self.form == "series" else terms_of_ideal(times)
            if self.derivative_on == "measurement":
                weight *= gain / terms.kp  # series: the setpoint meets K alone; else kp is K
        scale = self.gain_scale
        return Gains(
            kp=scale * terms.kp,
            ki=scale * terms.ki,
            kd=scale * terms.kd,
            filter_s=terms.filter_s,
            setpoint_weight=weight,
            derivative_on_error=self.derivative_on == "error",
        )

    def own_weight(self, gains: Gains) -> float:
        """Return the setpoint weight that a controller of this form gives these gains when it has no such setting.

        1, but in the series form with the derivative on the measurement K / kp.
        """
        if self.form != "series" or self.derivative_on == "error":
            return 1.0
        terms = Terms(kp=gains.kp, ki=gains.ki, kd=gains.kd, filter_s=gains.filter_s)
        return _series_like(terms, self).gain / gains.kp

    def rounded(self, digits: int) -> Settings:
        """Return the settings to that many significant digits, in the units of the screen."""
        return replace(self, **rounded(self, digits))

    def as_entered(self) -> dict[str, Any]:
        """Return the settings in the controller's own form and units; None for an absent term."""
        return entered(self)

    def in_words(self) -> list[str]:
        """Return what was understood, a line for each setting."""
        return words(self)

    def to_dict(self) -> dict[str, Any]:
        """Return the same controller in the ideal form: seconds, engineering units, the gain with its sign.

        Raises
        ------
        UsageError
            If it has no ideal form, as a parallel one without proportional gain.
        """
        gains = self.gains
        times = ideal_of_terms(Terms(kp=gains.kp, ki=gains.ki, kd=gains.kd, filter_s=gains.filter_s))
        return {
            "form": "ideal",
            "gain": times.gain,
            "integral_time_s": times.integral_time_s,
            "derivative_time_s": times.derivative_time_s,
            "derivative_filter_s": None if times.derivative_time_s is None else times.filter_s,
            "setpoint_weight": gains.setpoint_weight,
        }


def _present(value: float) -> float | None:
    return None if value == 0.0 else value


def _series_like(terms: Terms, like: Settings | None) -> Times:
    """The series form with its longer time where the controller has it: both choices mean the same feedback."""
    derivative_longer = (
        like is not None
        and like.form == "series"
        and like.integral_time_s is not None
        and like.derivative_time_s is not None
        and like.integral_time_s < like.derivative_time_s + like.filter_s
    )
    return series_of_terms(terms, integral_longer=not derivative_longer)

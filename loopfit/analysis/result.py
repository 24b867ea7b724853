"""What an analysis says: typed, frozen, and as plain data."""

from __future__ import annotations

from dataclasses import dataclass, fields
from typing import Any, Literal

from loopfit.analysis.advice import Determined
from loopfit.analysis.noise import Noise
from loopfit.core.finding import Finding
from loopfit.core.plain import plain, to_json
from loopfit.core.quantity import Quantity
from loopfit.fit.curve import FittedCurve, curve_of
from loopfit.fit.estimate import Fit
from loopfit.fit.figures_of import Points
from loopfit.record.record import Record

Kind = Literal["second_order", "first_order", "second_order_zero", "integrating", "dead_time"]


@dataclass(frozen=True, slots=True, kw_only=True)
class StepUsed:
    """A step: signal ("setpoint" or "output"), instant, levels, and whether the analysis used it."""

    signal: str
    time_s: float
    from_: float
    to: float
    used: bool = True

    @property
    def size(self) -> float:
        """Change of the stepped signal."""
        return self.to - self.from_


@dataclass(frozen=True, slots=True, kw_only=True)
class ObservedFigures:
    """Figures read from the record without a model; None where the record does not show one."""

    initial_value: Quantity | None = None
    final_value: Quantity | None = None
    peak_value: Quantity | None = None
    overshoot_percent: Quantity | None = None
    overshoot_over_setpoint_percent: Quantity | None = None
    peak_time_s: Quantity | None = None
    rise_time_s: Quantity | None = None
    settling_time_s: Quantity | None = None
    delay_time_s: Quantity | None = None
    decay_ratio: Quantity | None = None
    steady_state_deviation: Quantity | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Model:
    """The fitted model. `adequate` tells whether it stands for the loop, `reasons` why or why not.

    `time_constants_s` holds both lags, slowest first, where they are real; `lag_plus_dead_time_s` their sum
    (2 zeta / omega_n) plus the dead time, which a record determines even when it cannot tell the parts.
    """

    kind: Kind
    gain: Quantity | None
    damping_ratio: Quantity | None
    natural_frequency_rad_s: Quantity | None
    damped_frequency_rad_s: Quantity | None
    damped_period_s: Quantity | None
    dead_time_s: Quantity | None
    time_constants_s: tuple[Quantity, ...] | None
    lag_plus_dead_time_s: Quantity | None
    zero_s: Quantity | None
    regime: str | None
    residual_rms: float
    r_squared: float
    adequate: bool
    reasons: tuple[str, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class ResponseFigures:
    """Figures of the fitted model's response to an ideal step (for a release: to its own displacement)."""

    overshoot_percent: Quantity | None
    peak_time_s: Quantity | None
    rise_time_s: Quantity | None
    settling_time_s: Quantity | None
    delay_time_s: Quantity | None
    decay_ratio: Quantity | None
    rest_crossings: Quantity | None


@dataclass(frozen=True, slots=True, kw_only=True)
class StepFigures:
    """What one of several steps says alone; `refusal` where it says nothing."""

    step: StepUsed
    gain: Quantity | None
    damping_ratio: Quantity | None
    natural_frequency_rad_s: Quantity | None
    lag_plus_dead_time_s: Quantity | None
    dead_time_s: Quantity | None
    refusal: str | None


@dataclass(frozen=True, slots=True, kw_only=True, eq=False, repr=False)
class Analysis:
    """The result for one record. `model` is None when it was refused; the findings say why.

    `determined` says of each main figure whether the record determines it, and what record would; it is empty without
    an adequate model. `fit` and `points` are the fitted model and all models that the record allows, as the estimator has them.
    """

    record: Record
    findings: tuple[Finding, ...]
    window_s: tuple[float, float]
    noise: Noise
    step: StepUsed | None
    steps: tuple[StepUsed, ...]
    per_step: tuple[StepFigures, ...]
    observed: ObservedFigures
    model: Model | None
    response: ResponseFigures | None
    determined: tuple[Determined, ...]
    fit: Fit
    points: Points
    band_percent: float
    confidence_percent: float

    def __repr__(self) -> str:
        damping = None if self.model is None else self.model.damping_ratio
        return f"<Analysis of {self.record.source}: {self.refusal or damping or (self.model and self.model.kind)}>"

    @property
    def noise_rms(self) -> float:
        """Noise from row to row, rms, measurement units."""
        return self.noise.rms

    @property
    def refusal(self) -> str | None:
        """Why there is no model, in one line; None when there is one."""
        if self.model is not None:
            return None
        texts = [finding.text for finding in self.findings if finding.severity == "error"]
        return texts[0] if texts else "no model could be given"

    @property
    def settles_in_record(self) -> bool:
        """Whether the settling time lies within the rows used."""
        settling = None if self.response is None else self.response.settling_time_s
        begin = self.window_s[0] if self.fit.columns.input is None else float(self.fit.columns.input.times[-1])
        return settling is not None and begin + settling.value <= self.window_s[1]

    @property
    def curve(self) -> FittedCurve | None:
        """The fitted response over the rows used, with the band of all models that the record allows."""
        return None if self.model is None else curve_of(self.fit, self.points, self.window_s)

    def to_dict(self) -> dict[str, Any]:
        """Return the analysis as the JSON document's keys and plain values."""
        from loopfit.core.version import VERSION

        record = self.record
        names = {
            "time": record.time_name,
            "measurement": record.measurement.name,
            "setpoint": record.setpoint.name if record.setpoint else None,
            "output": record.output.name if record.output else None,
        }
        document = {
            "document": "loopfit analysis",
            "version": 1,
            "loopfit": VERSION,
            "record": {
                "file": record.source,
                "rows": record.rows,
                "rows_used": int(record.time.size),
                "columns": names,
                "duration_s": record.duration_s,
                "sample_interval_s": record.sample_interval_s,
                "window_s": list(self.window_s),
                "noise_rms": self.noise.rms,
                "noise_colour": self.noise.colour,
                "noise_correlation": self.noise.correlation,
                "noise_order": self.noise.order,
                "noise_rows_per_independent": self.noise.rows_per_independent,
                "resolution": self.noise.resolution,
                "findings": [
                    {
                        "code": f.code,
                        "severity": f.severity,
                        "text": f.text,
                        "at_s": None if f.at_s is None else list(f.at_s),
                    }
                    for f in self.findings
                ],
            },
            "step": None if self.step is None else _step(self.step, used=False),
            "steps": [_step(step, used=True) for step in self.steps],
            "per_step": [_fields(row) | {"step": _step(row.step, used=False)} for row in self.per_step],
            "observed": _fields(self.observed),
            "model": None if self.model is None else _fields(self.model),
            "response": None if self.response is None else _fields(self.response),
            "determined": [_fields(row) for row in self.determined],
            "band_percent": self.band_percent,
            "confidence_percent": self.confidence_percent,
        }
        out: dict[str, Any] = plain(document)
        return out

    def to_json(self) -> str:
        """Return the JSON document."""
        return to_json(self.to_dict())


def _step(step: StepUsed, *, used: bool) -> dict[str, Any]:
    out: dict[str, Any] = {"signal": step.signal, "time_s": step.time_s, "from": step.from_, "to": step.to}
    return out | {"used": step.used} if used else out


def _fields(result: ObservedFigures | Model | ResponseFigures | StepFigures | Determined) -> dict[str, Any]:
    return {field.name: getattr(result, field.name) for field in fields(result)}

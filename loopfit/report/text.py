"""An analysis as a page of text that is read in ten seconds."""

from __future__ import annotations

import math
import textwrap

from loopfit.analysis.result import Analysis, Model, ResponseFigures, StepUsed
from loopfit.core.quantity import Quantity
from loopfit.core.rounding import decimals_for, decimals_of, number
from loopfit.record.record import Signal
from loopfit.report.phrases import determined_words, noise_words

_NAME, _UNIT, _VALUE, _RANGE = 28, 12, 11, 23
_WIDTH, _LABEL = 100, 13
_ORDER = ("error", "warning", "note")
_KINDS = {
    "second_order": "second order with dead time",
    "first_order": "first order with dead time",
    "second_order_zero": "second order with a zero and dead time",
    "integrating": "integrating with a lag and dead time",
    "dead_time": "gain and dead time",
}


def page(analysis: Analysis) -> str:
    """Return the whole page, without a final newline."""
    parts = [answer(analysis), _record(analysis)]
    if analysis.model is not None or _observed_rows(analysis):
        parts.append(_table(analysis))
    if analysis.model is not None:
        parts.append(_model_line(analysis.model, release=analysis.step is None))
        if analysis.model.adequate:
            parts[-1] += "\n" + _wrapped("determined", determined_words(analysis))
    if analysis.per_step:
        parts.append(_per_step(analysis))
    if analysis.findings:
        ordered = sorted(analysis.findings, key=lambda finding: _ORDER.index(finding.severity))
        parts.append("Findings\n" + "\n".join(_wrapped(f.severity, f.text) for f in ordered))
    return "\n\n".join(parts)


def in_words(quantity: Quantity, unit: str = "") -> str:
    """Return "0.31 (0.29 to 0.33)", or "at least 0.9" where the interval is open above."""
    places = decimals_of(quantity)
    tail = f" {unit}" if unit else ""
    if math.isinf(quantity.high) and math.isinf(quantity.low):
        return f"not bounded{tail}"
    if math.isinf(quantity.high):
        return f"at least {number(quantity.low, places)}{tail}"
    return f"{number(quantity.value, places)}{tail} ({number(quantity.low, places)} to {number(quantity.high, places)})"


def answer(analysis: Analysis) -> str:
    """Return the answer in words: regime and damping, a caution if need be, overshoot and settling."""
    model, response = analysis.model, analysis.response
    if model is None:
        return f"Cannot tell: {analysis.refusal}"
    if model.damping_ratio is None:
        first = f"{_KINDS[model.kind].capitalize()}: there is no damping ratio to report."
    else:
        first = f"{_regime_words(model)}, damping ratio {in_words(model.damping_ratio)}."
    if not model.adequate:
        first += "\nTake care: this model does not explain the record well enough (reasons below)."
    second = []
    if response is not None:
        if response.overshoot_percent is not None and math.isfinite(response.overshoot_percent.value):
            second.append(_overshoot_words(response.overshoot_percent))
        if response.settling_time_s is not None and math.isfinite(response.settling_time_s.value):
            after = in_words(response.settling_time_s, "s")
            settled = "settled" if analysis.settles_in_record else "would settle, after the end of the record,"
            second.append(f"{settled} within ±{analysis.band_percent:g} % after {after}")
    text = "; ".join(second)
    return first + ("\n" + text[0].upper() + text[1:] + "." if text else "")


def _overshoot_words(overshoot: Quantity) -> str:
    if overshoot.high < 0.05:
        return "no overshoot"
    if overshoot.value < 0.05:
        return f"no overshoot, at most {number(overshoot.high, decimals_for(overshoot.high, 0.0))} %"
    return f"overshoot {in_words(overshoot, '%')}"


def _regime_words(model: Model) -> str:
    if model.regime == "cannot tell":
        return "Cannot tell the regime"
    return str(model.regime).capitalize()


def _record(analysis: Analysis) -> str:
    record = analysis.record
    used = f"{record.time.size} rows"
    if record.rows != record.time.size:
        used = f"{record.time.size} of {record.rows} rows"
    lines = [
        f"record       {'standard input' if record.source == '-' else record.source}: {used}, every "
        f"{record.sample_interval_s:.4g} s, over {record.duration_s:.5g} s"
    ]
    lines.append(
        "columns      "
        + ", ".join(
            f"{role} {signal.name!r}"
            for role, signal in (
                ("measurement", record.measurement),
                ("setpoint", record.setpoint),
                ("output", record.output),
            )
            if signal is not None
        )
    )
    if analysis.step is not None:
        lines.append(f"step         {step_words(analysis.step, stepped_signal(analysis), record.sample_interval_s)}")
    else:
        lines.append("step         none: a release, returning to rest")
    lines.append(_wrapped("noise", noise_words(analysis)))
    return "\n".join(lines)


def stepped_signal(analysis: Analysis) -> Signal | None:
    """Return the column that was stepped; None for a release or a stated step without a column."""
    if analysis.step is None:
        return None
    return analysis.record.setpoint if analysis.step.signal == "setpoint" else analysis.record.output


def step_words(step: StepUsed, signal: Signal | None, interval_s: float) -> str:
    """Return "setpoint 40 to 50 degC at 60 s", digits as the levels and the sampling deserve."""
    unit = f" {signal.unit}" if signal is not None and signal.unit else ""
    places = max(0, decimals_for(0.0, step.size))
    levels = [
        f"{value:.{min(places, 6)}f}".rstrip("0").rstrip(".") if places else f"{value:.0f}"
        for value in (step.from_, step.to)
    ]
    at = number(step.time_s, min(max(decimals_for(interval_s, 0.0), 0), 9))
    at = at.rstrip("0").rstrip(".") if "." in at else at
    return f"{step.signal} {levels[0]} to {levels[1]}{unit} at {at} s"


def _table(analysis: Analysis) -> str:
    model, response, observed = analysis.model, analysis.response, analysis.observed
    unit = analysis.record.measurement.unit or ""
    stepped = stepped_signal(analysis)
    per = f"{unit or '-'}/{stepped.unit}" if stepped is not None and stepped.unit and stepped.unit != unit else ""
    confidence = f"{analysis.confidence_percent:g} % interval"
    head = f"{'':{_NAME}}{'':{_UNIT}}{'model':>{_VALUE}}  {confidence:<{_RANGE}} record shows"
    rows = [head.rstrip()]
    if model is not None:
        lags = model.time_constants_s or ()
        rate = f"{per or '-'}/s" if model.kind == "integrating" else per
        rows += _rows(
            ("damping ratio", "", model.damping_ratio, None),
            # a first-order lag has no natural frequency worth reading
            (
                "natural frequency",
                "rad/s",
                None if model.kind == "first_order" else model.natural_frequency_rad_s,
                None,
            ),
            ("damped frequency", "rad/s", model.damped_frequency_rad_s, None),
            ("damped period", "s", model.damped_period_s, None),
            ("gain", rate, model.gain, None),
            ("dead time", "s", model.dead_time_s, None),
            *(
                (
                    (("slow time constant", "fast time constant") if len(lags) == 2 else ("time constant",))[i],
                    "s",
                    lag,
                    None,
                )
                for i, lag in enumerate(lags)
            ),
            ("time constants + dead time", "s", model.lag_plus_dead_time_s, None),
            ("zero", "s", model.zero_s, None),
        )
    rows += _rows(
        ("overshoot", "%", _of(response, "overshoot_percent"), observed.overshoot_percent),
        (
            "  over the setpoint",
            "%",
            None,
            observed.overshoot_over_setpoint_percent
            if analysis.findings and any(f.code == "standing_offset" for f in analysis.findings)
            else None,
        ),
        ("rise time", "s", _of(response, "rise_time_s"), observed.rise_time_s),
        ("delay time", "s", _of(response, "delay_time_s"), observed.delay_time_s),
        ("peak time", "s", _of(response, "peak_time_s"), observed.peak_time_s),
        (
            f"settling time (±{analysis.band_percent:g} %)",
            "s",
            _of(response, "settling_time_s"),
            observed.settling_time_s,
        ),
        ("decay ratio", "", _of(response, "decay_ratio"), observed.decay_ratio),
        ("crossings of rest", "", _of(response, "rest_crossings"), None),
        ("initial value", unit, None, observed.initial_value),
        ("final value", unit, None, observed.final_value),
        ("peak value", unit, None, observed.peak_value),
        ("steady-state deviation", unit, None, observed.steady_state_deviation),
    )
    return "\n".join(rows)


def _per_step(analysis: Analysis) -> str:
    rows = [f"{'each step alone':<28}{'damping ratio':<26}{'gain':<26}time constants + dead time, s"]
    for row in analysis.per_step:
        name = f"{row.step.time_s:>9.6g} s {_level(row.step.from_)} to {_level(row.step.to)}"
        if row.refusal is not None:
            rows.append(f"{name:<28}{row.refusal}")
            continue
        cells = ["" if q is None else in_words(q) for q in (row.damping_ratio, row.gain, row.lag_plus_dead_time_s)]
        rows.append(f"{name:<28}{cells[0]:<26}{cells[1]:<26}{cells[2]}")
    return "\n".join(rows)


def _level(value: float) -> str:
    return f"{value:.5g}"


def _observed_rows(analysis: Analysis) -> bool:
    observed = analysis.observed
    return any(getattr(observed, name) is not None for name in type(observed).__dataclass_fields__)


def _rows(*rows: tuple[str, str, Quantity | None, Quantity | None]) -> list[str]:
    out = []
    for name, unit, modelled, seen in rows:
        if modelled is None and seen is None:
            continue
        value, interval = _cells(modelled)
        out.append(f"{name:{_NAME}}{unit:{_UNIT}}{value:>{_VALUE}}  {interval:<{_RANGE}} {_seen(seen)}".rstrip())
    return out


def _cells(quantity: Quantity | None) -> tuple[str, str]:
    if quantity is None:
        return "", ""
    if quantity.value == quantity.low == quantity.high and quantity.value == round(quantity.value):
        return f"{quantity.value:.0f}", ""  # a count, or nothing at all
    places = decimals_of(quantity)
    value = number(quantity.value, places) if math.isfinite(quantity.value) else "none"
    if math.isinf(quantity.high):
        low = number(quantity.low, places) if math.isfinite(quantity.low) else "no bound"
        return value, f"{low} or more" if math.isfinite(quantity.low) else "no bound"
    return value, f"{number(quantity.low, places)} to {number(quantity.high, places)}"


def _seen(quantity: Quantity | None) -> str:
    if quantity is None:
        return ""
    value, interval = _cells(quantity)
    return f"{value} ({interval})" if interval else value


def _model_line(model: Model, *, release: bool) -> str:
    verdict = "adequate" if model.adequate else "NOT adequate"
    kind = _KINDS[model.kind].replace(" with dead time", "") if release else _KINDS[model.kind]
    first = f"{kind}; r² {model.r_squared:.4f}; {verdict}"
    return _wrapped("model", first) + "".join("\n" + _wrapped("", reason) for reason in model.reasons)


def _wrapped(label: str, text: str) -> str:
    lines = textwrap.fill(text, _WIDTH, initial_indent=f"{label:<{_LABEL}}", subsequent_indent=" " * _LABEL)
    return lines.rstrip()


def _of(response: ResponseFigures | None, name: str) -> Quantity | None:
    found: Quantity | None = None if response is None else getattr(response, name)
    return found

"""What else happened in the record: its ends, its rows, other inputs, a standing offset."""

from __future__ import annotations

import math

import numpy as np

from loopfit.analysis.result import ObservedFigures, StepUsed
from loopfit.core.finding import Finding
from loopfit.core.quantity import Quantity
from loopfit.fit.choose import change_of, clear_trend, moves_before_step
from loopfit.fit.estimate import Fit, Trace
from loopfit.record.record import Record
from loopfit.step.detect import find_steps
from loopfit.step.limits import rows_at_limit, steepest_runs
from loopfit.step.noise import resolution

_ENOUGH = 0.8  # of the change must be in the record
_DRIFT = 0.01  # of the change
_OFFSET = 0.02  # of the step
_OFFSET_LARGE = 0.05
_INPUT_CHANGES = 12  # a column with more is no other input that was stepped


def around_the_step(trace: Trace, fit: Fit, figures: dict[str, Quantity | None], noise: float) -> list[Finding]:
    """Return what the rows before the step and the end of the record do to the numbers."""
    findings = []
    end = float(trace.time[-1])
    if fit.structure.moving_start or (trace.input is not None and moves_before_step(trace, noise)):
        allowed = fit.structure.moving_start or fit.structure.drift
        findings.append(
            Finding(
                code="moving_before_step",
                severity="warning",
                at_s=(float(trace.time[0]), trace.begins),
                text="The measurement was moving before the step; "
                + (
                    "the model takes that for the tail of an earlier movement, and every figure rests on that."
                    if allowed
                    else "the model does not allow for it, and every figure carries some of that movement."
                ),
            )
        )
    if fit.structure.rungs == (2,) and _held_away(trace):
        findings.append(
            Finding(
                code="still_ramping",
                severity="warning",
                at_s=(end, end),
                text="The measurement still ramps when the record ends: it is taken as integrating, but a lag much "
                "longer than the record would look the same.",
            )
        )
    settling = figures.get("settling_time_s")
    if trace.input is None or settling is None or settling.value <= end - trace.last_change:
        return findings
    if not math.isfinite(settling.value):
        return findings
    longer = f"record at least {settling.value - (end - trace.last_change):.3g} s longer"
    reached = _reached(fit, trace)
    if reached is not None and reached < _ENOUGH:
        text = (
            f"Not settled: the record ends when {100 * reached:.0f} % of the change is done, so that gain, damping and "
            f"settling time rest on the model alone; {longer}."
        )
        findings.append(Finding(code="record_too_short", severity="warning", at_s=(end, end), text=text))
    else:
        text = f"The measurement has not settled when the record ends; {longer} to see it settle."
        findings.append(Finding(code="not_settled", severity="warning", at_s=(end, end), text=text))
    return findings


def drifting_tail(trace: Trace, fit: Fit, figures: dict[str, Quantity | None], noise: float) -> list[Finding]:
    """Name a trend among the rows after the response has settled."""
    settling = figures.get("settling_time_s")
    if trace.input is None or settling is None or not math.isfinite(settling.value) or fit.structure.drift:
        return []
    rows = trace.time >= trace.last_change + 1.2 * settling.value
    t, y = trace.time[rows], trace.values[rows]
    trend = clear_trend(t, y, noise)
    change = abs(change_of(fit, trace))
    if trend is None or change == 0 or abs(trend) < _DRIFT * change:
        return []
    return [
        Finding(
            code="drifting_tail",
            severity="warning",
            at_s=(float(t[0]), float(t[-1])),
            text=f"After it has settled the measurement still drifts by {abs(trend):.2g} ({100 * abs(trend) / change:.1f} % of the "
            "change): gain and final value carry part of it, beyond their intervals.",
        )
    ]


def apart_from_record(observed: ObservedFigures, figures: dict[str, Quantity | None]) -> list[Finding]:
    """Name figures for which model and record exclude each other."""
    names = {"overshoot_percent": "overshoot", "rise_time_s": "rise time", "delay_time_s": "delay time"}
    apart = []
    for name, words in names.items():
        seen, modelled = getattr(observed, name), figures.get(name)
        if seen is None or modelled is None:
            continue
        slack = 0.02 * abs(modelled.value) if name != "overshoot_percent" else 0.5
        if seen.low > modelled.high + slack or seen.high < modelled.low - slack:
            apart.append(words)
    if not apart:
        return []
    return [
        Finding(
            code="model_and_record_differ",
            severity="warning",
            text=f"Model and record exclude each other in {' and '.join(apart)}: believe the record's own figures there, and the "
            "model's damping only as that of an equivalent.",
        )
    ]


def _held_away(trace: Trace) -> bool:
    """Tell whether the input ends away from where it began: after a pulse an integrating plant stands still."""
    if trace.input is None:
        return False
    level = np.cumsum(trace.input.sizes)
    return bool(abs(level[-1]) > 0.02 * np.max(np.abs(level)))


def _reached(fit: Fit, trace: Trace) -> float | None:
    """Return the share of the last change that is done at the end of the record, by the model."""
    if fit.structure.rungs != (1,) or trace.input is None:
        return None
    columns, _ = fit.columns.evaluate(fit.theta[None], derivatives=False)
    level = float(np.sum(trace.input.sizes))
    last = columns[0, 0, -1] / fit.columns.samples.root_count[-1]
    return float(1.0 - (level - last) / trace.input.sizes[-1])


def about_rows(trace: Trace, fit: Fit, noise: float) -> list[Finding]:
    """Return what resolution and sampling do to the numbers."""
    findings = []
    change = abs(change_of(fit, trace))
    grid = resolution(trace.values)
    if grid > 3.0 * noise and grid > 0.01 * change:
        findings.append(
            Finding(
                code="coarse_resolution",
                severity="note",
                text=f"The measurement comes in steps of {grid:g}, {100 * grid / change:.0f} % of the change: "
                "the noise is taken as at least what that leaves unseen.",
            )
        )
    T, r = (float(value[0]) for value in fit.columns.chart.lags(fit.theta[None]))
    quickest = T * (math.sqrt(r) if r > 0.05 else 1.0)
    interval = float(np.median(np.diff(trace.time)))
    # quicker still is no more than a dead time to this record, and no sampling was asked for by an integrator's lag
    if 0.5 * interval < quickest < 2.0 * interval and fit.structure.rungs != (2,):
        findings.append(
            Finding(
                code="slow_sampling",
                severity="warning",
                text=f"A row every {interval:g} s is slow for a movement that takes about {quickest:.3g} s: "
                f"log at least every {quickest / 5:.2g} s.",
            )
        )
    return findings


def other_inputs(record: Record, trace: Trace, step: StepUsed) -> list[Finding]:
    """Name columns that step by themselves while the response runs."""
    findings = []
    begin, end = trace.begins, float(trace.time[-1])
    columns = [*record.others]
    if step.signal == "output" and record.setpoint is not None:
        columns.append(record.setpoint)
    for signal in columns:
        found = find_steps(record.time, signal.values, "output")
        if found.always_moving or found.rows.size > _INPUT_CHANGES:
            continue
        later = [s.time_s for s in found.steps if begin + 1e-9 < s.time_s <= end]
        together = any(abs(s.time_s - begin) < 1e-9 for s in found.steps)
        if later and not together:
            findings.append(
                Finding(
                    code="other_input_moved",
                    severity="warning",
                    at_s=(later[0], later[0]),
                    text=f"Another input moved in the window: {signal.name!r}, at {later[0]:g} s, while the response "
                    f"ran; what it did is counted as the step's. Cut the record before it with --to {later[0]:g}.",
                )
            )
    return findings


def output_limits(record: Record, trace: Trace, step: StepUsed) -> list[Finding]:
    """Say where the controller's output lay at a limit, or moved at its greatest slope, while the response ran."""
    if step.signal != "setpoint" or record.output is None:
        return []
    # one row before the step too: a clamp often begins with the step's own row
    first = max(int(np.searchsorted(record.time, trace.begins)) - 1, 0)
    inside = (np.arange(record.time.size) >= first) & (record.time <= trace.time[-1])
    time, output = record.time[inside], record.output.values[inside]
    clamped = rows_at_limit(output) if output.size > 1 else output[:0]
    if clamped.size:
        share = 100.0 * clamped.size / output.size
        return [
            Finding(
                code="output_clamped",
                severity="warning",
                at_s=(float(time[clamped[0]]), float(time[clamped[-1]])),
                text=f"The output lay at a limit for {clamped.size} rows ({share:.0f} % of the response, first at "
                f"{time[clamped[0]]:.6g} s): the loop was open there, and the figures are partly those of the limit, not of the "
                "settings; make a smaller step.",
            )
        ]
    runs = steepest_runs(time, output) if output.size > 1 else []
    if len(runs) > 1 or any(end - begin > 0.05 * output.size for begin, end in runs):
        begin = runs[0][0]
        return [
            Finding(
                code="output_rate_limited",
                severity="warning",
                at_s=(float(time[begin]), float(time[runs[-1][1]])),
                text=f"The output moved at one greatest slope over {sum(e - b for b, e in runs)} rows, first at "
                f"{time[begin]:.6g} s: its rate is limited, and the figures are partly those of that limit; make a smaller step.",
            )
        ]
    return []


def standing_offset(observed: ObservedFigures, model_gain: Quantity | None, step: StepUsed) -> list[Finding]:
    """Say where the measurement comes to rest away from the setpoint."""
    if step.signal != "setpoint":
        return []
    deviation = observed.steady_state_deviation
    if model_gain is not None:
        modelled = model_gain.scaled(-1.0).shifted(1.0).scaled(step.size)
        if deviation is None or modelled.high - modelled.low < deviation.high - deviation.low:
            deviation = modelled
    if deviation is None or deviation.low <= 0.0 <= deviation.high:
        return []
    share = abs(deviation.value / step.size)
    if share < _OFFSET:
        return []
    side = "below" if deviation.value > 0 else "above"
    return [
        Finding(
            code="standing_offset",
            severity="warning" if share > _OFFSET_LARGE else "note",
            text=f"A standing error or drift remains: the measurement comes to rest {abs(deviation.value):.3g} {side} "
            f"the setpoint ({100 * share:.0f} % of the step); overshoot is counted from where it comes to rest.",
        )
    ]

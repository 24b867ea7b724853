"""Several steps in one record, and whether one model serves them all."""

from __future__ import annotations

from collections.abc import Sequence

from loopfit.analysis.assess import Assessment
from loopfit.analysis.figures import capped
from loopfit.analysis.result import StepFigures, StepUsed
from loopfit.core.finding import Finding
from loopfit.core.quantity import Quantity
from loopfit.core.rounding import decimals_of, number

_COMPARED = {
    "gain": "gain",
    "damping_ratio": "damping ratio",
    "natural_frequency_rad_s": "natural frequency",
    "lag_plus_dead_time_s": "sum of time constants and dead time",
}
_TELLS = 0.8  # widest interval, as a share of its value, that counts in the comparison
_SLACK = 1.25  # dozens of comparisons at 95 % each: intervals are stretched before they are called apart


def of_each(step: StepUsed, alone: Assessment) -> StepFigures:
    """Return the row of the per-step table."""
    errors = [finding.text for finding in alone.verdict.findings if finding.severity == "error"]
    figures = {name: None if errors else alone.figures[name] for name in (*_COMPARED, "dead_time_s")}
    damping = figures["damping_ratio"]
    figures["damping_ratio"] = None if damping is None else capped(damping)
    return StepFigures(step=step, refusal=errors[0] if errors else None, **figures)


def disagreements(rows: Sequence[StepFigures]) -> list[Finding]:
    """Return a finding when the steps' own models differ by more than their intervals allow; else nothing."""
    texts = []
    for name, words in _COMPARED.items():
        pairs = [(row.step, getattr(row, name)) for row in rows if _tells(getattr(row, name))]
        values = [quantity for _, quantity in pairs]
        if len(values) < 2 or max(_stretched(q)[0] for q in values) <= min(_stretched(q)[1] for q in values):
            continue
        lowest, highest = min(values, key=lambda q: q.value), max(values, key=lambda q: q.value)
        up = [q for step, q in pairs if step.size > 0]
        down = [q for step, q in pairs if step.size < 0]
        text = f"{words} from {_short(lowest)} to {_short(highest)}"
        if up and down and (_below(up, down) or _below(down, up)):
            text += " (higher on the way down)" if _below(up, down) else " (higher on the way up)"
        texts.append(text)
    if not texts:
        return []
    return [
        Finding(
            code="depends_on_step",
            severity="warning",
            text="The answer depends on where or which way the step goes: "
            + "; ".join(texts)
            + ". The loop is not linear, "
            "or it changed; the figures are of the first step alone.",
        )
    ]


def _tells(quantity: Quantity | None) -> bool:
    """Tell whether an interval is narrow enough to speak of a value."""
    return quantity is not None and 0 < quantity.high - quantity.low < _TELLS * abs(quantity.value)


def _stretched(quantity: Quantity) -> tuple[float, float]:
    low = quantity.value - _SLACK * (quantity.value - quantity.low)
    return low, quantity.value + _SLACK * (quantity.high - quantity.value)


def _below(one: Sequence[Quantity], other: Sequence[Quantity]) -> bool:
    return max(q.value for q in one) < min(q.value for q in other)


def _short(quantity: Quantity) -> str:
    return number(quantity.value, decimals_of(quantity))

"""What the present settings forbid: a raise of the gain that their record cannot bear out, a loop made worse."""

from __future__ import annotations

from dataclasses import replace

from loopfit.core.finding import Finding
from loopfit.identify.identified import Identified
from loopfit.loop.gains import Gains
from loopfit.tuning.goal import Goal
from loopfit.tuning.result import Side
from loopfit.tuning.screen import noise_scale

_RAISE = 5.0
_WORSE = 0.02  # of damping ratio


def capped_goal(goal: Goal, identified: Identified, present: Gains | None) -> tuple[Goal, bool]:
    """Hold a raise of the gain, also at high frequencies, to fivefold where the plant comes from a record in automatic.

    Unless a bound of the gain was given. A derivative raised fortyfold on a fit that knew no lead ran away in the study.
    """
    if present is None or identified.how in ("given", "open step") or "gain" in goal.at_most or present.kp == 0.0:
        return goal, False
    noise = min(goal.noise_gain, _RAISE * noise_scale(identified.plant) * _fast(present))
    return replace(goal, noise_gain=noise, at_most={**goal.at_most, "gain": _RAISE * abs(present.kp)}), True


def raise_held(keyed: Gains, present: Gains | None, *, capped: bool) -> list[Finding]:
    """Say so where the gain was held to fivefold."""
    if not capped or present is None:
        return []
    held = 0.98 * _RAISE
    if abs(keyed.kp) < held * abs(present.kp) and _fast(keyed) < held * _fast(present):
        return []
    text = (
        f"The gain, or its high-frequency part with the derivative, is held to {_RAISE:g} times the present one: so sluggish a loop does not show what the plant does at the pace of a "
        "higher gain (a resonance, a second lag). Record again with these settings, and retune from that."
    )
    return [Finding(code="raise_capped", severity="warning", text=text)]


def _fast(gains: Gains) -> float:
    """Return the magnitude of the gain at high frequencies, as the noise limit counts it."""
    return abs(gains.kp) + (abs(gains.kd) / gains.filter_s if gains.kd else 0.0)


def better_damped(current: Side, proposed: Side) -> bool:
    """Tell whether the present loop is better damped than the proposed one."""
    now, then = current.figures.damping_ratio, proposed.figures.damping_ratio
    if not current.figures.stable or now is None:
        return False
    return then is None or then.value < now.value - _WORSE


def keep_them(current: Side, proposed: Side, obstacle: str | None) -> str:
    """Say that the present settings are the best, and what stands in the way of more."""
    shown = [
        "none" if side.figures.damping_ratio is None else f"{side.figures.damping_ratio.value:.2g}"
        for side in (current, proposed)
    ]
    return (
        f"the present settings are better damped (damping ratio {shown[0]}) than the best that was found within the limits ({shown[1]}): "
        f"keep them; in the way: {obstacle or 'the uncertainty of the plant'}"
    )

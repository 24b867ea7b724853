"""Half rule: small lags and inverse responses become dead time, the next lag is shared (Skogestad 2003)."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from loopfit.equivalents.form import Form
from loopfit.equivalents.system import RationalSystem

_CLOSE = 1.6  # a smaller lag within this ratio of a lead counts as close to it
_ROUNDS = 60  # of the effective dead time, on which the rules for leads depend
_NEARLY_REAL = 0.95  # damping ratio from which a pair counts as critically damped


@dataclass(frozen=True, slots=True, kw_only=True)
class HalfRule:
    """What the rule makes of unit gain: gain, lags (slowest first), effective dead time."""

    gain: float
    lags: tuple[float, ...]
    dead_time: float
    settled: bool = True


def half_rule(
    lags: Sequence[float],
    *,
    leads: Sequence[float] = (),
    inverse: Sequence[float] = (),
    dead_time: float = 0.0,
    order: int = 2,
    integrating: bool = False,
) -> HalfRule | None:
    """Return the model of `order` lags for real lags, leads (T s + 1) and inverse responses (-T s + 1), all T > 0.

    The largest neglected lag is shared between the smallest retained one and the dead time; smaller lags and inverse
    responses go to the dead time whole. A lead is first cancelled against a lag nearby by rules T1, T1a, T1b, T2 or T3,
    the largest lead first. These depend on the effective dead time, which is found by repetition for the first-order
    model (an integrator alone when `integrating`) and then serves every order, as in the paper's examples E6 and E13.
    None when there are more leads than lags.

    S. Skogestad, Simple analytic rules for model reduction and PID controller tuning, J. Process Control 13, 2003,
    section 2 (from memory).
    """
    falling = sorted(lags, reverse=True)
    late = dead_time + sum(inverse)
    effective, settled, gain, left = late, False, 1.0, falling
    for _ in range(_ROUNDS):
        after = _without_leads(list(falling), leads, effective)
        if after is None:
            return None
        gain, left = after
        found = late + _shared(left, 0 if integrating else 1)[1]
        settled = abs(found - effective) <= 1e-12 * (found + effective)
        if settled:
            break
        effective = found
    kept, more = _shared(left, order)
    return HalfRule(gain=gain, lags=tuple(sorted(kept, reverse=True)), dead_time=late + more, settled=settled)


def _shared(lags: list[float], order: int) -> tuple[list[float], float]:
    """Return the lags that stay, the last with half of the next one, and the dead time of the others; lags falling."""
    kept, others = lags[:order], lags[order:]
    if not kept or not others:
        return kept, sum(others)
    return [*kept[:-1], kept[-1] + 0.5 * others[0]], 0.5 * others[0] + sum(others[1:])


def _without_leads(lags: list[float], leads: Sequence[float], effective: float) -> tuple[float, list[float]] | None:
    gain = 1.0
    for lead in sorted(leads, reverse=True):
        if not lags:
            return None
        lag = _partner(lead, lags)
        lags.remove(lag)
        if lead > lag:
            gain *= lead / lag if lag >= effective else max(lead / effective, 1.0)  # T1; T1a and T1b
        elif lead >= 5.0 * effective:
            gain *= lead / lag  # T2
        else:  # T3
            reach = max(min(lag, 5.0 * effective), lead)
            gain *= reach / lag
            if reach > lead:
                lags.append(reach - lead)
                lags.sort(reverse=True)
    return gain, lags


def _partner(lead: float, lags: list[float]) -> float:
    """Return the neighbouring lag: the larger one, unless the smaller one is close."""
    larger = [lag for lag in lags if lag >= lead * (1.0 - 1e-9)]
    smaller = [lag for lag in lags if lag < lead * (1.0 - 1e-9)]
    if not larger:
        return max(smaller)
    if smaller:
        ratio = lead / max(smaller)
        if ratio < _CLOSE * (1.0 - 1e-6) and ratio < min(larger) / lead:
            return max(smaller)
    return min(larger)


def by_half_rule(system: RationalSystem, *, integrating: bool = False) -> tuple[list[Form], str | None]:
    """Return the equivalent of a stable system by the half rule, or why there is none; `integrating` when 1/s goes with it.

    The rule is for real lags. A pair of poles of damping ratio 0.95 and more counts as two equal lags; a pair of
    complex zeros, b2 s^2 + b1 s + 1, as the single lead or inverse response b1 (as in the paper's example E6).
    """
    lags, leads, inverse, notes = [], [], [], []
    for pole in system.poles[system.poles.imag >= 0]:
        if pole.imag == 0:
            lags.append(-1.0 / float(pole.real))
            continue
        if -pole.real < _NEARLY_REAL * abs(pole):
            return [], "the rule is for real lags, and the system has an oscillating pair of poles"
        lags += [float(-pole.real / abs(pole) ** 2)] * 2
        notes.append("a nearly critically damped pair was taken as two equal lags")
    for zero in system.zeros[system.zeros.imag >= 0]:
        sum_of_times = float((-1.0 / zero).real) * (1.0 if zero.imag == 0 else 2.0)
        if zero.imag != 0:
            notes.append("a pair of complex zeros was taken as one real zero of the same sum")
        if sum_of_times > 0.0:
            leads.append(sum_of_times)
        elif sum_of_times < 0.0:
            inverse.append(-sum_of_times)
    found = half_rule(lags, leads=leads, inverse=inverse, dead_time=system.dead_time_s, integrating=integrating)
    if found is None:
        return [], "the rules for zeros cancel each against a lag, and there are not enough lags"
    if not found.settled:
        notes.append("the effective dead time, on which the rules for zeros depend, does not come to one value")
    if abs(found.gain - 1.0) > 1e-9:
        notes.append("the rules for zeros keep the early part of the response and change the gain")
    lag1, lag2 = (*found.lags, 0.0, 0.0)[:2]
    form = Form(
        gain=found.gain * (system.static_gain or 0.0),
        a1=lag1 + lag2,
        a2=lag1 * lag2,
        dead_time=max(found.dead_time - system.dead_time_s, 0.0),
        note="; ".join(dict.fromkeys(notes)) or None,
    )
    return [form], None

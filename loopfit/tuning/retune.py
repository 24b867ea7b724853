"""From a record, present settings and a target to the settings to key in."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from loopfit.core.errors import UsageError
from loopfit.identify.identified import Identified
from loopfit.loop.gains import Gains
from loopfit.loop.plant import Plant
from loopfit.loop.settings import Settings
from loopfit.loop.visible import damping_with_overshoot
from loopfit.model.transfer import Transfer
from loopfit.tuning.cautions import cautions
from loopfit.tuning.entered import entered
from loopfit.tuning.forecast import forecast, step_figures
from loopfit.tuning.goal import Goal, Terms
from loopfit.tuning.present import better_damped, capped_goal, keep_them, raise_held
from loopfit.tuning.probable import Draws, Probable, probable
from loopfit.tuning.remarks import remarks
from loopfit.tuning.result import Move, Retuning, Side
from loopfit.tuning.rules import compared
from loopfit.tuning.search import Also
from loopfit.tuning.typed_settings import about_typed, refusal_of, typed_of
from loopfit.tuning.way import way

_DAMPING_WITH_SETTLING = 0.7
_WEIGHT_OVERSHOOT = 1.0  # percent: what a setpoint weight is chosen for
_BISECTIONS = 7
_RULES = {
    "simc_pi": "Skogestad PI (2003)",
    "simc_pid": "Skogestad PID (2003)",
    "lambda_pi": "lambda PI (1986)",
    "lambda_pid": "lambda PID (1986)",
    "ultimate_pi": "Ziegler-Nichols PI",
    "ultimate_pid": "Ziegler-Nichols PID",
}


def retune(
    source: Any,
    *,
    settings: Settings | None = None,
    damping_ratio: float | None = None,
    overshoot_percent: float | None = None,
    settling_s: float | None = None,
    max_sensitivity: float = 1.6,
    noise_gain: float = 20.0,
    controller: Terms | None = None,
    move: Sequence[str] | None = None,
    at_least: Mapping[str, float] | None = None,
    at_most: Mapping[str, float] | None = None,
    digits: int | None = None,
    limits: Mapping[str, float] | None = None,
    confidence_of_target_percent: float | None = 90.0,
    band_percent: float = 2.0,
    confidence_percent: float = 95.0,
    **reading: Any,
) -> Retuning:
    """Return new settings for a loop, what it will do with them, how sure that is, and the way there.

    Parameters
    ----------
    source : path, Analysis, Plant, Transfer, or a sequence of records
        A record of a step (in manual, or of the setpoint in automatic); several records are several operating points.
    settings : Settings, optional
        Present settings as the controller shows them. Without them the proposal is in ideal form, and a record made in
        automatic needs a recorded output.
    damping_ratio : float, optional
        Target, above 0 and at most 1: 1 by default, 0.7 with `settling_s`, that of the overshoot with
        `overshoot_percent`.
    overshoot_percent, settling_s : float, optional
        Targets for the setpoint step of the fitted loop.
    max_sensitivity, noise_gain : float
        Limits.
    controller : "P", "PI", "PD" or "PID", optional
        Terms; those of the present settings by default, else PI.
    move : sequence of str, optional
        "gain", "integral", "derivative": only these may change.
    at_least, at_most : mapping, optional
        Bounds on gain (magnitude), integral_time_s, derivative_time_s, ideal form, engineering units.
    digits : int, optional
        Significant digits that the screen takes.
    limits : mapping, optional
        Acceptance limits by their names (`overshoot_percent_max`, ...): said where the proposal may miss one.
    confidence_of_target_percent : float, optional
        Probability with which the true loop is to meet the target; None: the fitted plant alone.
    band_percent, confidence_percent : float
        Settling band and confidence of the intervals.
    reading : dict
        As for `analyze`: columns, interval_s, window_s, step, step_at_s, step_from, step_to.

    Raises
    ------
    UsageError, RecordError
        If arguments contradict each other, or the record cannot be used.
    """
    if settings is not None and not isinstance(settings, Settings):
        raise UsageError(f"settings is a Settings, not {type(settings).__name__}")
    goal = Goal(
        damping_ratio=_damping(damping_ratio, overshoot_percent, settling_s),
        overshoot_percent=overshoot_percent,
        settling_s=settling_s,
        max_sensitivity=max_sensitivity,
        noise_gain=noise_gain,
        terms=controller or terms_of(settings),
        move=None if move is None else frozenset(move),
        at_least=dict(at_least or {}),
        at_most=dict(at_most or {}),
        confidence=None if confidence_of_target_percent is None else confidence_of_target_percent / 100.0,
        series=settings is not None and settings.form == "series",
    )
    identified = identified_from(source, settings, confidence=confidence_percent / 100.0, reading=reading)
    return retune_identified(
        identified, goal, settings=settings, digits=digits, limits=limits, band=band_percent / 100.0,
        confidence=confidence_percent / 100.0,
    )  # fmt: skip


def identified_from(
    source: Any, settings: Settings | None, *, confidence: float, reading: Mapping[str, Any]
) -> Identified:
    """Return the plant that a source tells of."""
    if isinstance(source, Transfer):
        source = Plant.of_transfer(source)
    if isinstance(source, Plant):
        if reading:
            raise UsageError(f"{', '.join(reading)}: only a record is read; a plant was given")
        return Identified(plant=source, how="given")
    if isinstance(source, Identified):
        return source
    from loopfit.identify.protections import protected
    from loopfit.identify.source import identify_source

    return protected(identify_source(source, settings, confidence=confidence, reading=reading))


def retune_identified(
    identified: Identified,
    goal: Goal,
    *,
    settings: Settings | None = None,
    digits: int | None = None,
    limits: Mapping[str, float] | None = None,
    band: float = 0.02,
    confidence: float = 0.95,
) -> Retuning:
    """Return new settings for a plant that has been identified; see `retune`."""
    plant = identified.plant
    if identified.disc is not None:
        goal = replace(goal, disc=identified.disc)
    if identified.most_sensitivity is not None:
        goal = replace(goal, max_sensitivity=min(goal.max_sensitivity, identified.most_sensitivity))
    present = None if settings is None else settings.gains
    goal, capped = capped_goal(goal, identified, present)
    findings = list(identified.findings)
    if present is not None and present.kp * plant.gain < 0:
        raise UsageError(
            f"the settings feed back positively: a plant of gain {plant.gain:.4g} needs a gain of the same sign, "
            f"that is {'direct' if plant.gain < 0 else 'reverse'} action; check --direct/--reverse and the columns"
        )
    scan = None if settings is None else settings.scan_s
    seen = identified.draws[:_BANDS]
    look = {"scan_s": scan, "band": band, "confidence": confidence}

    def side(shown: Settings, gains: Gains, share: float | None, *, quick: bool = False) -> Side:
        figures = forecast(plant, gains, () if quick else seen, **look)  # type: ignore[arg-type]
        return Side(settings=shown, gains=gains, figures=figures, probability_of_target=share)

    also = _also(goal, scan, band)
    typed = typed_of(identified, settings)
    findings += about_typed(typed, identified)
    current = None
    if settings is not None and present is not None:
        share = (
            None if not identified.fresh else Draws(identified.fresh, scan, late=False, also=also).share(present, goal)
        )
        current = side(settings, present, share)
    if typed is not None and typed.verdict == "differ" and identified.refused is None:
        # what is shown as "now", the way back and the units to key in would all be those of another controller
        identified = replace(identified, refused=refusal_of(typed))
    if identified.refused is not None:
        return Retuning(identified=identified, goal=goal, met=False, current=current, proposed=None, moves=(), cautions=(),
                        findings=tuple(findings), band_percent=100.0 * band, refused=identified.refused,
                        typed=typed)  # fmt: skip
    found = probable(
        plant, goal, identified.draws, identified.fresh, present=present, scan_s=scan,
        coupled=settings is None or settings.form != "parallel", also=also,
    )  # fmt: skip
    designed = found.designed
    if designed.gains is None:
        return Retuning(identified=identified, goal=goal, met=False, current=current, proposed=None, moves=(), cautions=(),
                        findings=tuple(findings), band_percent=100.0 * band, obstacle=designed.obstacle, typed=typed)  # fmt: skip
    gains = designed.gains
    if settings is not None and settings.setpoint_weight is not None:
        gains = replace(gains, setpoint_weight=_weight(plant, gains, goal, scan, band))
    shown, keyed = entered(gains, settings, digits)
    share = found.probability
    if share is not None and keyed != gains:
        share = Draws(identified.fresh, scan, late=False, also=also).share(keyed, goal)
    proposed = side(shown, keyed, share)
    met = _met(found, proposed, goal)
    if not met and current is not None and better_damped(current, proposed):
        return Retuning(identified=identified, goal=goal, met=False, current=current, proposed=None, moves=(), cautions=(),
                        findings=tuple(findings), band_percent=100.0 * band,
                        obstacle=keep_them(current, proposed, designed.obstacle), typed=typed)  # fmt: skip
    findings += raise_held(keyed, present, capped=capped)
    findings += remarks(identified, goal, current, proposed, found, scan_s=scan, limits=limits or {})
    steps = way(plant, present, keyed, settings, digits, scan_s=scan, draws=seen)
    moves = tuple(Move(side=side(*step.keyed, None, quick=True), text=step.text) for step in steps.steps)
    findings += steps.findings
    return Retuning(
        identified=identified,
        goal=goal,
        met=met,
        current=current,
        proposed=proposed,
        moves=moves,
        cautions=cautions(
            plant, present, keyed, scan_s=scan, damping_ratio=goal.damping_ratio, figures=proposed.figures
        ),
        findings=tuple(findings),
        band_percent=100.0 * band,
        attainable_damping_ratio=designed.attainable_damping_ratio,
        obstacle=None if met else designed.obstacle,
        typed=typed,
        comparisons=tuple(
            (_RULES[name], side(rule, rule.gains, None, quick=True)) for name, rule in compared(plant).items()
        ),
    )


_BANDS = 50  # draws that the intervals of the figures are taken over


def _damping(damping: float | None, overshoot: float | None, settling: float | None) -> float:
    if sum(value is not None for value in (damping, overshoot, settling)) > 1 and damping is None:
        raise UsageError("give a damping ratio, an overshoot or a settling time as the target")
    if damping is not None:
        return damping
    if overshoot is not None:
        return min(damping_with_overshoot(max(overshoot, 1e-9) / 100.0), 1.0)
    return 1.0 if settling is None else _DAMPING_WITH_SETTLING


def terms_of(settings: Settings | None) -> Terms:
    """Return the terms that the present settings have; PI without settings."""
    if settings is None:
        return "PI"
    gains = settings.gains
    words: dict[tuple[bool, bool], Terms] = {
        (False, False): "P", (True, False): "PI", (False, True): "PD", (True, True): "PID",
    }  # fmt: skip
    return words[gains.ki != 0.0, gains.kd != 0.0]


def _also(goal: Goal, scan: float | None, band: float) -> Also | None:
    if goal.overshoot_percent is None and goal.settling_s is None:
        return None

    def holds(plants: Sequence[Plant], gains: Gains) -> NDArray[np.bool_]:
        figures = step_figures(plants, gains, scan_s=scan, band=band)
        if figures is None:
            return np.zeros(len(plants), dtype=bool)
        overshoot, settling = figures
        within = np.ones(len(plants), dtype=bool)
        if goal.overshoot_percent is not None:
            within &= overshoot <= goal.overshoot_percent
        return within if goal.settling_s is None else within & (settling <= goal.settling_s)

    return holds


def _weight(plant: Plant, gains: Gains, goal: Goal, scan: float | None, band: float) -> float:
    """Return the largest setpoint weight with at most 1 % setpoint overshoot (or the target's), by bisection."""
    most = _WEIGHT_OVERSHOOT if goal.overshoot_percent is None else goal.overshoot_percent

    def good(weight: float) -> bool:
        figures = step_figures([plant], replace(gains, setpoint_weight=weight), scan_s=scan, band=band)
        return figures is not None and bool(figures[0][0] <= most)

    if good(1.0):
        return 1.0
    low, high = 0.0, 1.0
    for _ in range(_BISECTIONS):
        middle = 0.5 * (low + high)
        low, high = (middle, high) if good(middle) else (low, middle)
    return round(low, 2)


def _met(found: Probable, proposed: Side, goal: Goal) -> bool:
    if not found.designed.met or not proposed.figures.stable:
        return False
    share = proposed.probability_of_target
    return share is None or goal.confidence is None or share >= goal.confidence

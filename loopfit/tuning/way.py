"""The way from the present settings to the proposed ones, as a person walks it: stages as entered, what to watch for."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from loopfit.core.errors import UsageError
from loopfit.core.finding import Finding
from loopfit.loop.gains import Gains
from loopfit.loop.plant import Plant
from loopfit.loop.settings import Settings
from loopfit.tuning.entered import entered
from loopfit.tuning.stages import Stage, stages


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Step:
    """One stage: settings as keyed in with the gains they mean, and what to do there, in words."""

    keyed: tuple[Settings, Gains]
    text: str


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Way:
    """The stages and what is to be said of them."""

    steps: tuple[Step, ...]
    findings: tuple[Finding, ...]


def way(
    plant: Plant, present: Gains | None, proposed: Gains, settings: Settings | None, digits: int | None, *,
    scan_s: float | None = None, draws: Sequence[Plant] = (),
) -> Way:  # fmt: skip
    """Return the stages to the proposed settings, rounded as the screen takes them.

    Parameters
    ----------
    plant : Plant
    present, proposed : Gains
        `present` None: unknown.
    settings : Settings, optional
        The present ones, whose form and units are kept.
    digits : int, optional
        That the screen takes.
    scan_s : float, optional
    draws : sequence of Plant
        That the record allows.
    """
    staged = stages(plant, present, proposed, scan_s=scan_s, draws=draws)
    findings = []
    if staged.dips is not None:
        findings.append(Finding(code="stage_dips", severity="warning", text=_sentence(staged.dips)))
    if staged.reason is not None:
        findings.append(Finding(code="about_the_stages", severity="note", text=_sentence(staged.reason)))
    steps = []
    for number, stage in enumerate(staged.stages):
        last = number == len(staged.stages) - 1
        try:
            keyed = entered(proposed if last else stage.gains, settings, digits)
        except UsageError:  # a stage on the way that the controller's form does not hold
            continue
        steps.append(Step(keyed=keyed, text=_text(stage)))
    return Way(steps=tuple(steps), findings=tuple(findings))


def _text(stage: Stage) -> str:
    words = []
    if stage.in_manual:
        words.append("with the loop in manual")
    words.append(stage.expect)
    words.append(stage.stop)
    if not stage.proven:
        words.append("the move to it is not proven stable in between: enter it in manual")
    return _sentence("; ".join(words))


def _sentence(text: str) -> str:
    text = text[:1].upper() + text[1:]
    return text if text.endswith(".") else text + "."

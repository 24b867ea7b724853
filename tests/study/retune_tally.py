"""Retuning the records of the study and judging the settings on the true plants."""

from __future__ import annotations

import time
from collections.abc import Callable, Iterator
from concurrent.futures import ProcessPoolExecutor, as_completed
from dataclasses import dataclass
from typing import Literal

from retune_records import Case, case_of
from retune_sweep import best_of_sweep

from loopfit.core.errors import LoopfitError
from loopfit.loop.gains import Gains
from loopfit.loop.sampled import sampled_swing
from loopfit.loop.visible import Swing
from loopfit.tuning.design import design
from loopfit.tuning.goal import Goal, Terms
from loopfit.tuning.probable import probable
from loopfit.tuning.retune import identified_from, retune

SWING, VISIBLE = 0.02, 0.65  # what "met" promises of the true loop, for critical damping and for 0.7
TARGETS: tuple[tuple[float, Terms], ...] = ((1.0, "PI"), (1.0, "PID"), (0.7, "PI"), (0.7, "PID"))
Design = Literal["90 %", "nominal"]


@dataclass(frozen=True, kw_only=True)
class Outcome:
    """One proposal. `stated`: the probability it was given; `holds`: whether the true loop meets the criterion."""

    number: int
    way: str
    plant: str
    damping: float
    terms: str
    design: Design
    met: bool
    stated: float | None
    holds: bool
    stable: bool
    visible: float
    swing: float
    seconds: float
    note: str


@dataclass(frozen=True, kw_only=True)
class Refusal:
    """A record that gave no plant, or no settings."""

    number: int
    way: str
    plant: str
    reason: str


@dataclass(frozen=True, kw_only=True)
class Swept:
    """Integral gain of the nominal design on a true plant, and of the best that a dense sweep found, 0 where none."""

    number: int
    plant: str
    damping: float
    terms: str
    met: bool
    designed: float
    swept: float
    seconds: float

    @property
    def ratio(self) -> float | None:
        """Designed over the best known; None where neither found settings that meet the target."""
        best = max(self.swept, self.designed if self.met else 0.0)
        return None if best == 0.0 else (self.designed if self.met else 0.0) / best


@dataclass(frozen=True, kw_only=True)
class Identification:
    """Seconds that a record took to become a plant with draws."""

    number: int
    way: str
    seconds: float


Item = Outcome | Refusal | Swept | Identification


def holds(swing: Swing, damping: float) -> bool:
    """Tell whether a true loop meets the criterion."""
    if not swing.stable:
        return False
    return swing.visible_swing <= SWING if damping == 1.0 else swing.visible_damping >= VISIBLE


def retuned(seed: int, number: int) -> list[Item]:
    """Return what retuning one record gave, for every target, with 90 % probability and nominal."""
    case = case_of(seed, number)
    about = {"number": number, "way": case.way, "plant": case.random.words}
    begin = time.process_time()
    try:
        identified = identified_from(case.record, case.settings, confidence=0.95, reading={})
    except LoopfitError as error:
        return [Refusal(**about, reason=str(error))]
    out: list[Item] = [Identification(number=number, way=case.way, seconds=time.process_time() - begin)]
    if identified.refused is not None:
        return [*out, Refusal(**about, reason=identified.refused)]
    for damping, terms in TARGETS[number // 4 % 2 :: 3 - 2 * (number // 4 % 2)][:2]:
        begin = time.process_time()
        found = retune(identified, settings=case.settings, damping_ratio=damping, controller=terms)
        spent = time.process_time() - begin
        if found.proposed is None:
            out.append(Refusal(**about, reason=f"{damping:g} {terms}: {found.refused}"))
        else:
            share = found.proposed.probability_of_target
            out.append(
                _judged(case, found.proposed.gains, damping, terms, "90 %", found.met, share, spent, found.obstacle)
            )
        begin = time.process_time()
        goal = Goal(damping_ratio=damping, terms=terms, confidence=None)
        nominal = probable(identified.plant, goal, identified.draws, identified.fresh, scan_s=case.scan_s)
        gains = nominal.designed.gains
        if gains is not None:
            spent = time.process_time() - begin
            met = nominal.designed.met
            out.append(_judged(case, gains, damping, terms, "nominal", met, nominal.probability, spent, None))
    return out


def _judged(
    case: Case, gains: Gains, damping: float, terms: str, how: Design, met: bool, share: float | None, seconds: float,
    obstacle: str | None,
) -> Outcome:  # fmt: skip
    swing = sampled_swing(case.random.plant, gains, case.scan_s)
    return Outcome(
        number=case.number, way=case.way, plant=case.random.words, damping=damping, terms=terms, design=how, met=met,
        stated=share, holds=holds(swing, damping), stable=swing.stable, visible=swing.visible_damping,
        swing=swing.visible_swing, seconds=seconds, note=obstacle or "",
    )  # fmt: skip


def swept(seed: int, number: int) -> list[Item]:
    """Return the nominal design of one true plant against a dense sweep, for every target."""
    case = case_of(seed, number)
    out: list[Item] = []
    for damping, terms in TARGETS:
        begin = time.process_time()
        found = design(case.random.plant, Goal(damping_ratio=damping, terms=terms))
        spent = time.process_time() - begin
        best = best_of_sweep(case.random.plant, case.random.unit_s, damping, terms, found)
        out.append(
            Swept(
                number=number, plant=case.random.words, damping=damping, terms=terms, met=found.met,
                designed=found.worth, swept=best, seconds=spent,
            )
        )  # fmt: skip
    return out


def items(
    *, seed: int, plants: int, sweeps: int, processes: int, progress: Callable[[int, int], None]
) -> Iterator[Item]:
    """Yield what every plant gave, in the order of the plants."""
    with ProcessPoolExecutor(processes) as pool:
        futures = [pool.submit(retuned, seed, number) for number in range(plants)]
        futures += [pool.submit(swept, seed, number) for number in range(sweeps)]
        for done, _ in enumerate(as_completed(futures), start=1):
            progress(done, len(futures))
        for future in futures:
            yield from future.result()

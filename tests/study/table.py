"""The table of the study, in fixed width, and what it says of the goals."""

from __future__ import annotations

import math

import numpy as np
from cells import CELLS, Cell
from tally import FIGURES, NOMINAL, WITH_BOUND, Score

HEADS = ("damping", "nat.freq", "gain", "overshoot", "rise", "settling", "dead time", "delay")
SIX = 6  # figures with a goal in every cell: the first six
RESPONSE = (3, 4, 5, 7)
CELL_GOAL, POOLED_GOAL, WRONG_GOAL, EFFICIENCY_GOAL = 0.91, (0.94, 0.97), 0.90, 1.10
_IDENTIFIABLE = 0.1  # Cramer-Rao standard deviation over the truth
_CHANCE = 1e-3

Scores = dict[int, Score]


def table(scores: Scores) -> list[str]:
    """Return all parts."""
    return [
        *_coverage(scores),
        *_misses(scores),
        *_widths(scores),
        *_efficiency(scores),
        *pooled(scores),
        *goals(scores),
    ]


def _block(title: str, heads: tuple[str, ...], scores: Scores, lines: dict[int, list[str]]) -> list[str]:
    out = ["", title, f"{'cell':<22}" + "".join(f"{head:>10}" for head in heads)]
    return out + [f"{CELLS[number].name:<22}" + "".join(f"{text:>10}" for text in lines[number]) for number in scores]


def _number(value: float, form: str) -> str:
    if math.isnan(value):
        return "-"
    return "open" if math.isinf(value) else format(value, form)


def _coverage(scores: Scores) -> list[str]:
    lines = {
        number: [*(_number(value, ".3f") for value in score.coverage)]
        + [_number(value, ".3f") for value in (score.refused, score.other_kind, score.adequate, score.at_bound)]
        for number, score in scores.items()
    }
    heads = (*HEADS, "refused", "other", "adequate", "at bound")
    title = (
        "Coverage of the 95 % intervals, of the records that give the figure. Refused: without a model; other: of another\n"
        "kind than second order; at bound: interval touches dead time 0 or the first-order limit"
    )
    return _block(title, heads, scores, lines)


def _misses(scores: Scores) -> list[str]:
    lines = {
        number: ["-" if np.isnan(a) else f"{a:.0f}/{b:.0f}" for a, b in zip(score.below, score.above, strict=True)]
        + [str(int(score.given.max())), str(score.records)]
        for number, score in scores.items()
    }
    title = "Records whose truth lies below / above the interval"
    return _block(title, (*HEADS, "given", "records"), scores, lines)


def _widths(scores: Scores) -> list[str]:
    lines = {number: [_number(value, ".4g") for value in score.width] for number, score in scores.items()}
    title = "Median width of the interval over the truth (where the truth is 0: the width, in % or s)"
    return _block(title, HEADS, scores, lines)


def _efficiency(scores: Scores) -> list[str]:
    lines, kept = {}, {}
    for number, score in scores.items():
        cell = CELLS[number]
        if cell.bound is None:
            continue
        kept[number], lines[number] = score, []
        for k, name in enumerate(WITH_BOUND):
            known = k in _identifiable(cell)
            lines[number] += [_number(cell.bound[0][name] / cell.known[name], ".5f")]
            lines[number] += [
                _number(value if known else math.nan, ".3f")
                for value in (score.efficiency[k], score.efficiency_error[k])
            ]
    heads = tuple(text for head in HEADS[:3] for text in (head, "eff.", "+-"))
    title = (
        "Cramer-Rao standard deviation over the truth; efficiency (variance / bound) with its standard error, where that\n"
        "deviation is below a tenth"
    )
    return _block(title, heads, kept, lines)


def _identifiable(cell: Cell) -> list[int]:
    """Return which of the figures with a bound the record determines."""
    if cell.bound is None:
        return []
    spreads = [cell.bound[0][name] / cell.known[name] for name in WITH_BOUND]
    return [k for k, spread in enumerate(spreads) if spread < _IDENTIFIABLE]


def _counted(cell: Cell, figure: int) -> bool:
    """Tell whether a figure of a cell has two sides: overshoot does not where the truth has none."""
    return not (figure == FIGURES.index("overshoot_percent") and cell.known["overshoot_percent"] == 0.0)


def pooled(scores: Scores) -> list[str]:
    """Return the coverage over all cells with a second-order truth, with and without an active bound."""
    lines = [
        "",
        "Pooled over the cells with a second-order truth; a bound is active where more than half the intervals touch it",
        f"{'':<22}" + "".join(f"{head:>10}" for head in (*HEADS, "first six")),
    ]
    for title, active in (("no bound active", False), ("a bound active", True)):
        shares, all_six = _pool(scores, active=active)
        lines.append(f"{title:<22}" + "".join(f"{_number(share, '.4f'):>10}" for share in (*shares, all_six)))
    return lines


def _pool(scores: Scores, *, active: bool) -> tuple[list[float], float]:
    """Return the pooled coverage of each figure, and of the first six together."""
    hits, given = np.zeros(len(FIGURES)), np.zeros(len(FIGURES))
    for number, score in scores.items():
        cell = CELLS[number]
        if cell.zeta is None or score.bound_active != active:
            continue
        for k in range(len(FIGURES)):
            if active or _counted(cell, k):
                given[k] += score.given[k]
                hits[k] += score.given[k] - score.below[k] - score.above[k]
    with np.errstate(invalid="ignore"):
        return (hits / given).tolist(), float(hits[:SIX].sum() / given[:SIX].sum())


def goals(scores: Scores) -> list[str]:
    """Return each goal and the cells that miss it."""
    low, wrong, slow = [], [], []
    for number, score in scores.items():
        cell = CELLS[number]
        goal, figures, into = (CELL_GOAL, range(SIX), low) if cell.zeta is not None else (WRONG_GOAL, RESPONSE, wrong)
        missed = [k for k in figures if score.coverage[k] < goal]
        into += _line(cell, [f"{HEADS[k]} {score.coverage[k]:.3f}{_scatter(score, k, goal)}" for k in missed])
        losses = []
        for k in _identifiable(cell):
            if not score.efficiency[k] <= EFFICIENCY_GOAL:
                doubt = score.efficiency[k] - 2.0 * score.efficiency_error[k] <= EFFICIENCY_GOAL
                losses.append(f"{HEADS[k]} {score.efficiency[k]:.2f}{'?' if doubt else ''}")
        slow += _line(cell, losses)
    shares, all_six = _pool(scores, active=False)
    outside = [f"{head} {share:.4f}" for head, share in zip((*HEADS[:SIX], "all six"), (*shares[:SIX], all_six), strict=True)
               if not POOLED_GOAL[0] <= share <= POOLED_GOAL[1]]  # fmt: skip
    lines = [
        "",
        "Goals (?: so far from the goal by chance: 1 in 1000 for a coverage, 2 standard errors for an efficiency)",
    ]
    kinds = [CELLS[number].zeta is not None for number in scores]
    if any(kinds):
        lines += [f"Coverage of the first six figures at least {CELL_GOAL:g} in every cell with a second-order truth"]
        lines += _listed(low)
    if not np.isnan(all_six):
        lines += [f"Pooled coverage {POOLED_GOAL[0]:g} to {POOLED_GOAL[1]:g} where no bound is active"]
        lines += _listed([", ".join(outside)] if outside else [])
    if not all(kinds):
        lines += [f"Coverage of the response figures at least {WRONG_GOAL:g} for a truth that is not second order"]
        lines += _listed(wrong)
    if any(_identifiable(CELLS[number]) for number in scores):
        lines += [
            f"Efficiency at most {EFFICIENCY_GOAL:.2f} where the Cramer-Rao deviation is below a tenth of the truth"
        ]
        lines += _listed(slow)
    return lines


def _line(cell: Cell, misses: list[str]) -> list[str]:
    return [f"{cell.name}: " + ", ".join(misses)] if misses else []


def _scatter(score: Score, figure: int, goal: float) -> str:
    """Return "?" where a coverage of 95 % (of the goal, for other truths) has so few hits by chance."""
    from scipy.stats import binom

    hits = score.given[figure] - score.below[figure] - score.above[figure]
    fair = NOMINAL if goal == CELL_GOAL else goal
    return "?" if binom.cdf(hits, score.given[figure], fair) > _CHANCE else ""


def _listed(misses: list[str]) -> list[str]:
    return [f"  missed  {text}" for text in misses] or ["  met"]

"""The table of the retuning study, in fixed width, and what it says of the goals."""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Sequence
from itertools import pairwise

import numpy as np
from retune_records import WAYS
from retune_tally import TARGETS, Identification, Item, Outcome, Refusal, Swept

LEAST_MET, NINETY = 0.90, (0.86, 0.96)
LEAST_MEDIAN, LEAST_RATIO = 0.97, 0.90
LEAST_SECONDS = {"nominal": 0.1, "90 %": 1.0}
_BINS = (0.0, 0.1, 0.3, 0.5, 0.7, 0.8, 0.88, 0.92, 0.95, 0.98, 1.0)
_ABOUT_NINETY = (0.88, 0.92)
_LISTED = 60
_CHANCE = 1e-3


def table(items: Sequence[Item], seed: int) -> list[str]:
    """Return all parts."""
    outcomes = [item for item in items if isinstance(item, Outcome)]
    return [
        *_kept(outcomes),
        *_bins(outcomes),
        *_designs(items),
        *_times(items),
        *_refusals(items),
        *goals(items),
        *_failures(items, seed),
    ]


def _asked(outcomes: Sequence[Outcome]) -> list[Outcome]:
    return [one for one in outcomes if one.design == "90 %"]


def _groups(outcomes: Sequence[Outcome]) -> list[tuple[str, list[Outcome]]]:
    groups = [(f"{d:g} {t}", [o for o in outcomes if (o.damping, o.terms) == (d, t)]) for d, t in TARGETS]
    ways = sorted({o.way for o in outcomes})
    groups += [(way, [o for o in outcomes if o.way == way]) for way in ways]
    kinds = sorted({kind_of(o) for o in outcomes})
    groups += [(kind, [o for o in outcomes if kind_of(o) == kind]) for kind in kinds]
    return [*groups, ("all", list(outcomes))]


def kind_of(outcome: Outcome) -> str:
    """Return the kind of the plant, the words before its figures."""
    return next(k for k in ("second order", "integrating", "first order", "with a zero") if outcome.plant.startswith(k))


def promise(outcomes: Sequence[Outcome]) -> tuple[float, float, float]:
    """Return the share that holds of those said to be met, the mean stated probability, and its standard error."""
    met = [o for o in outcomes if o.met]
    if not met:
        return math.nan, math.nan, math.nan
    stated = np.array([o.stated for o in met], dtype=float)
    return float(np.mean([o.holds for o in met])), float(stated.mean()), standard_error(stated)


def standard_error(stated: np.ndarray) -> float:
    """Return that of a share whose events have these probabilities, each counted no surer than 99.5 % (200 draws)."""
    known = np.clip(stated, 0.005, 0.995)
    return float(np.sqrt((known * (1.0 - known)).sum()) / len(known))


def _by_chance(outcomes: Sequence[Outcome]) -> bool:
    """Tell whether so few hold by chance, were the stated probabilities right (no surer than 99.5 %)."""
    from scipy.stats import binom

    met = [o for o in outcomes if o.met]
    fair = float(np.mean([min(o.stated or 0.0, 0.995) for o in met]))
    return bool(binom.cdf(sum(o.holds for o in met), len(met), fair) > _CHANCE)


def _kept(outcomes: Sequence[Outcome]) -> list[str]:
    lines = [
        "",
        "Settings for a 90 % probability, judged on the true plant. Met: loopfit says so; holds: share of those whose true",
        "loop meets the criterion (swing at most 2 % for 1, visible damping at least 0.65 for 0.7); worst: largest swing of those",
        f"{'':<28}{'retuned':>9}{'met':>7}{'holds':>9}{'stated':>9}{'st.err.':>9}{'worst %':>9}{'unstable':>10}",
    ]
    for name, some in _groups(_asked(outcomes)):
        share, stated, error = promise(some)
        worst = max((100.0 * o.swing for o in some if o.met), default=math.nan)
        unstable = sum(not o.stable for o in some)
        met = sum(o.met for o in some)
        lines.append(
            f"{name:<28}{len(some):>9}{met:>7}{share:>9.3f}{stated:>9.3f}{error:>9.3f}{worst:>9.2f}{unstable:>10}"
        )
    sure = [o for o in _asked(outcomes) if not o.met and o.stated is not None and o.stated >= LEAST_MET]
    lines.append(
        f"Said not to be met although stated 90 % or more: {len(sure)}; of these {sum(o.holds for o in sure)} hold"
    )
    return lines


def calibration(outcomes: Sequence[Outcome]) -> list[tuple[float, float, int, int, float]]:
    """Return low, high, count, how many hold and mean stated probability of each bin of it."""
    out = []
    for low, high in pairwise(_BINS):
        last = high == _BINS[-1]
        some = [o for o in outcomes if o.stated is not None and low <= o.stated and (o.stated < high or last)]
        mean = float(np.mean([o.stated for o in some])) if some else math.nan
        out.append((low, high, len(some), sum(o.holds for o in some), mean))
    return out


def _bins(outcomes: Sequence[Outcome]) -> list[str]:
    lines = [
        "",
        "Stated probability and how often it held: settings for 90 %, nominal settings, both, and of the 90 % the met",
    ]
    lines.append(f"{'stated':<14}" + "".join(f"{h:>24}" for h in ("90 %", "nominal", "both", "90 % and met")))
    ninety, nominal = _asked(outcomes), [o for o in outcomes if o.design == "nominal"]
    groups = [calibration(some) for some in (ninety, nominal, outcomes, [o for o in ninety if o.met])]
    for row in zip(*groups, strict=True):
        cells = [f"{hold}/{count} {hold / count:.3f} ({mean:.3f})" if count else "-" for _, _, count, hold, mean in row]
        lines.append(f"{row[0][0]:.2f} - {row[0][1]:.2f}   " + "".join(f"{c:>24}" for c in cells))
    return lines


def _designs(items: Sequence[Item]) -> list[str]:
    swept = [item for item in items if isinstance(item, Swept)]
    if not swept:
        return []
    lines = [
        "",
        "Integral gain of the nominal design on the true plant over the best known (design, or dense sweep with polish)",
        f"{'':<14}{'plants':>8}{'feasible':>10}{'median':>9}{'least':>9}{'< 0.90':>8}{'not found':>11}",
    ]
    for damping, terms in TARGETS:
        some = [s for s in swept if (s.damping, s.terms) == (damping, terms)]
        ratios = np.array([s.ratio for s in some if s.ratio is not None])
        if ratios.size:
            lines.append(
                f"{damping:g} {terms:<10}{len(some):>8}{ratios.size:>10}{np.median(ratios):>9.4f}{ratios.min():>9.4f}"
                f"{int((ratios < LEAST_RATIO).sum()):>8}{int((ratios == 0.0).sum()):>11}"
            )
    return lines


def _times(items: Sequence[Item]) -> list[str]:
    known = [item for item in items if isinstance(item, Identification)]
    swept = [item for item in items if isinstance(item, Swept)]
    asked = _asked([item for item in items if isinstance(item, Outcome)])
    rows = [(f"plant from {way}", [i.seconds for i in known if i.way == way]) for way in WAYS]
    rows += [(f"nominal, {d:g} {t}", [s.seconds for s in swept if (s.damping, s.terms) == (d, t)]) for d, t in TARGETS]
    rows += [
        (f"90 %, forecast, {d:g} {t}", [o.seconds for o in asked if (o.damping, o.terms) == (d, t)]) for d, t in TARGETS
    ]
    whole = {item.number: item.seconds for item in known}
    rows.append(("whole, without reading", [whole[o.number] + o.seconds for o in asked if o.number in whole]))
    lines = ["", "Processor time, s", f"{'':<40}{'n':>6}{'median':>9}{'p90':>9}{'most':>9}"]
    for name, seconds in rows:
        if seconds:
            low, high = np.quantile(seconds, [0.5, 0.9])
            lines.append(f"{name:<40}{len(seconds):>6}{low:>9.3f}{high:>9.3f}{max(seconds):>9.3f}")
    return lines


def _refusals(items: Sequence[Item]) -> list[str]:
    refused = [item for item in items if isinstance(item, Refusal)]
    counted = Counter(item.way for item in refused)
    lines = [
        "",
        f"Records or targets without settings: {len(refused)} ({', '.join(f'{w} {n}' for w, n in counted.items())})",
    ]
    return lines + [f"  {item.number} {item.plant}; {item.way}: {item.reason}" for item in refused[:_LISTED]]


def goals(items: Sequence[Item]) -> list[str]:
    """Return each goal and what misses it."""
    outcomes = [item for item in items if isinstance(item, Outcome)]
    swept = [item for item in items if isinstance(item, Swept)]
    asked = _asked(outcomes)
    lines = ["", "Goals (?: that far from the goal by chance more often than 1 in 1000)"]

    def goal(text: str, misses: list[str]) -> None:
        lines.append(text)
        lines.extend([f"  missed  {miss}" for miss in misses] or ["  met"])

    misses, low = [], []
    for name, some in _groups(asked):
        share, stated, error = promise(some)
        if not math.isnan(share):
            doubt = "?" if _by_chance(some) else ""
            misses += [f"{name}: {share:.3f}{doubt} of {stated:.3f}"] if share < stated - 2.0 * error else []
            low += [f"{name}: {share:.3f}"] if share < LEAST_MET else []
    goal("Holds on the true plant as often as stated, less two standard errors, whenever said to be met", misses)
    goal(f"Never under {LEAST_MET:.0%}", low)
    unstable = [o for o in asked if not o.stable]
    goal("None unstable", [f"{len(unstable)} of {len(asked)}"] if unstable else [])
    some = [o for o in outcomes if o.stated is not None and _ABOUT_NINETY[0] <= o.stated < _ABOUT_NINETY[1]]
    if some:
        share = float(np.mean([o.holds for o in some]))
        text = f"{share:.3f} of {len(some)}"
        goal(
            f"Of those stated {_ABOUT_NINETY[0]:.0%} to {_ABOUT_NINETY[1]:.0%}, {NINETY[0]:.0%} to {NINETY[1]:.0%} hold ({text})",
            [] if NINETY[0] <= share <= NINETY[1] else [text],
        )
    if swept:
        median, least = [], []
        for damping, terms in TARGETS:
            ratios = np.array(
                [s.ratio for s in swept if (s.damping, s.terms) == (damping, terms) and s.ratio is not None]
            )
            if ratios.size and np.median(ratios) < LEAST_MEDIAN:
                median.append(f"{damping:g} {terms}: {np.median(ratios):.4f}")
            if ratios.size and ratios.min() < LEAST_RATIO:
                least.append(f"{damping:g} {terms}: {int((ratios < LEAST_RATIO).sum())} of {ratios.size}")
        goal(f"Nominal integral gain at least {LEAST_MEDIAN:g} of the best known in the median", median)
        goal(f"And {LEAST_RATIO:g} on each plant", least)
        slow = float(np.median([s.seconds for s in swept if s.met]))
        goal(f"Nominal design under {LEAST_SECONDS['nominal']:g} s in the median, where met ({slow:.3f} s)",
             [] if slow < LEAST_SECONDS["nominal"] else [f"{slow:.3f} s"])  # fmt: skip
    took = float(np.median([o.seconds for o in asked if o.met])) if any(o.met for o in asked) else math.nan
    goal(f"Settings for 90 % with forecast and stages under {LEAST_SECONDS['90 %']:g} s in the median, where met ({took:.3f} s)",
         [] if took < LEAST_SECONDS["90 %"] else [f"{took:.3f} s"])  # fmt: skip
    return lines


def _failures(items: Sequence[Item], seed: int) -> list[str]:
    lines = [
        "",
        f"Plants behind the misses (`case_of({seed}, number)` makes the record again; figures in units of the plant)",
    ]
    bad = [
        o for o in items if isinstance(o, Outcome) and o.design == "90 %" and ((o.met and not o.holds) or not o.stable)
    ]
    for o in bad[:_LISTED]:
        said = "-" if o.stated is None else f"{o.stated:.3f}"
        lines.append(
            f"  {o.number} {o.plant}; {o.way}; {o.damping:g} {o.terms}: stated {said}, visible damping {o.visible:.3f}, "
            f"swing {100.0 * o.swing:.2f} %{'' if o.stable else ', UNSTABLE'}"
        )
    lines += [
        f"  {s.number} {s.plant}; {s.damping:g} {s.terms}: design {'met' if s.met else 'not met'} {s.designed:.5g}, "
        f"sweep {s.swept:.5g}"
        for s in items
        if isinstance(s, Swept) and s.ratio is not None and s.ratio < LEAST_RATIO
    ][:_LISTED]
    sure = [
        o
        for o in items
        if isinstance(o, Outcome) and o.design == "90 %" and not o.met and (o.stated or 0.0) >= LEAST_MET
    ]
    lines += [
        f"  {o.number} {o.plant}; {o.way}; {o.damping:g} {o.terms}: said not to be met, but stated {o.stated:.3f} "
        f"({o.note}); true swing {100.0 * o.swing:.2f} %, visible {o.visible:.3f}"
        for o in sure[:_LISTED]
    ]
    return lines

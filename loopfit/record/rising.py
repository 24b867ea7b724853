"""A clock that must rise: midnight, summer time, restarts, rows with one stamp, gaps."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from loopfit.core.arrays import Array
from loopfit.core.errors import RecordError
from loopfit.core.finding import Finding
from loopfit.record.clock import Clock
from loopfit.record.wording import count_of, lines_text

_DAY = 86400.0
SameAsBefore = Callable[[NDArray[np.int64]], NDArray[np.bool_]]
_GAP = 3.5  # times the median interval: beyond jitter, and beyond one lost row on each side


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Timeline:
    """Rising seconds of the rows in use: `rows` (n,) are their places in the table."""

    seconds: Array
    rows: NDArray[np.int64]
    findings: tuple[Finding, ...]


def rising(
    source: str,
    name: str,
    clock: Clock,
    lines: NDArray[np.int64],
    restarts: Sequence[int],
    same_as_before: SameAsBefore,
) -> Timeline:
    """Return a strictly rising clock, or say where it runs back.

    Parameters
    ----------
    clock : Clock
        Seconds (n,) without NaN.
    lines : (n,) int
        Lines of the file.
    restarts : sequence of int
        Rows before which the line of names came again.
    same_as_before : callable
        Tells of rows, by their places, which equal the row before in every signal.

    Raises
    ------
    RecordError
        If the clock runs back other than by midnight, summer time or a restart.
    """
    findings: list[Finding] = []
    seconds, of_day, weekday = clock.seconds.copy(), clock.of_day_s, clock.weekday
    rows = np.arange(len(seconds))
    if clock.kind == "date" and len(seconds) > 2 and bool(np.all(np.diff(seconds) <= 0)) and seconds[-1] < seconds[0]:
        seconds, rows = seconds[::-1] - seconds[-1], rows[::-1]
        of_day, weekday = (None if part is None else part[::-1] for part in (of_day, weekday))
        text = f"the rows of {source} stand newest first; they are read from the last to the first"
        findings.append(Finding(code="newest_first", severity="note", text=text))
    if clock.kind == "time of day":
        seconds = _over_midnight(seconds, of_day, name, findings)
    elif of_day is not None and weekday is not None:
        seconds = _summer_time(seconds, of_day, weekday, lines[rows], findings)
    seconds, rows = _longest_run(source, name, seconds, rows, lines, restarts, findings)
    seconds, rows = _one_stamp_a_row(name, seconds, rows, lines, same_as_before, findings)
    findings += spacing(name, seconds, lines[rows])
    return Timeline(seconds=seconds, rows=rows, findings=tuple(findings))


def _over_midnight(seconds: Array, of_day: Array | None, name: str, findings: list[Finding]) -> Array:
    if of_day is None:
        return seconds
    back = np.flatnonzero(
        (np.diff(seconds) < 0) & (of_day[:-1] >= 0.75 * _DAY) & (of_day[1:] <= 0.25 * _DAY) & (of_day[:-1] < _DAY)
    )
    if len(back) == 0:
        return seconds
    days = np.zeros(len(seconds))
    days[back + 1] = 1
    text = (
        f"the time of day in {name!r} passes midnight {count_of(len(back), 'time')}; the rows after it count on "
        f"into the next day"
    )
    findings.append(Finding(code="past_midnight", severity="note", text=text))
    result: Array = seconds + np.cumsum(days) * _DAY
    return result


def _summer_time(
    seconds: Array, of_day: Array, weekday: Array, lines: NDArray[np.int64], findings: list[Finding]
) -> Array:
    """Return the clock without the hour that local time gains or loses in the night of a weekend."""
    step = np.diff(seconds)
    if len(step) < 4:
        return seconds
    usual = float(np.median(step[step > 0])) if bool((step > 0).any()) else 0.0
    slack = max(3 * usual, 1.0)
    if slack > 1200:
        return seconds
    night = (of_day[:-1] < 4 * 3600) & (weekday[:-1] >= 5)
    near_hour = np.minimum(of_day[1:] % 3600, 3600 - of_day[1:] % 3600) <= slack
    back = np.flatnonzero((np.abs(step + 3600 - usual) <= slack) & near_hour & night)
    ahead = np.flatnonzero((np.abs(step - 3600 - usual) <= slack) & near_hour & night & (weekday[1:] == 6))
    if len(back) + len(ahead) != 1:
        return seconds
    change, shift = (int(back[0]), 3600.0) if len(back) else (int(ahead[0]), -3600.0)
    result: Array = seconds.copy()
    result[change + 1 :] += shift
    way = "back" if shift > 0 else "ahead"
    text = (
        f"the clock is set {way} by one hour at line {int(lines[change + 1])} (change of summer time); the hour is "
        f"taken out"
    )
    findings.append(Finding(code="summer_time", severity="note", text=text))
    return result


def _longest_run(
    source: str,
    name: str,
    seconds: Array,
    rows: NDArray[np.int64],
    lines: NDArray[np.int64],
    restarts: Sequence[int],
    findings: list[Finding],
) -> tuple[Array, NDArray[np.int64]]:
    """Return the longest part between restarts; any other step back is refused."""
    back = np.flatnonzero(np.diff(seconds) < 0)
    if len(back) == 0:
        return seconds, rows
    usual = float(np.median(np.abs(np.diff(seconds))))
    known = set(restarts)
    cuts = []
    for place in back:
        again = int(place) + 1
        begins_again = seconds[again] <= seconds[0] + 2 * usual and seconds[again] >= seconds[0] - 2 * usual
        if not (again in known or (begins_again and seconds[place] - seconds[again] > 4 * usual)):
            reason = (
                f"the clock {name!r} runs back here, from {_shown(seconds[place])} to {_shown(seconds[again])} s; "
                "mend the row, or give --interval SECONDS if the rows are evenly spaced"
            )
            raise RecordError(source, reason, row=int(lines[rows[again]]))
        cuts.append(again)
    edges = [0, *cuts, len(seconds)]
    parts = list(pairwise(edges))
    start, stop = max(parts, key=lambda part: part[1] - part[0])
    text = (
        f"the clock begins again at {lines_text([int(lines[rows[cut]]) for cut in cuts])}: the file holds "
        f"{len(parts)} recordings; "
        f"only the longest is used, lines {int(lines[rows[start]])} to {int(lines[rows[stop - 1]])}"
    )
    findings.append(Finding(code="restarted", severity="warning", text=text))
    return seconds[start:stop], rows[start:stop]


def _one_stamp_a_row(
    name: str,
    seconds: Array,
    rows: NDArray[np.int64],
    lines: NDArray[np.int64],
    same_as_before: SameAsBefore,
    findings: list[Finding],
) -> tuple[Array, NDArray[np.int64]]:
    step = np.diff(seconds)
    repeat = np.flatnonzero(step == 0) + 1
    if len(repeat) == 0:
        return seconds, rows
    if len(repeat) > 0.2 * len(seconds) and len(seconds) - len(repeat) >= 3:
        return _spread(name, seconds, findings), rows
    same = same_as_before(rows[repeat])
    keep = np.ones(len(seconds), dtype=bool)
    keep[repeat] = False
    if same.any():
        places = [int(lines[rows[index]]) for index in repeat[same]]
        text = f"{count_of(len(places), 'row')} equal to the row before left out ({lines_text(places)})"
        findings.append(Finding(code="duplicate_rows", severity="note", text=text))
    if not same.all():
        places = [int(lines[rows[index]]) for index in repeat[~same]]
        text = (
            f"{count_of(len(places), 'row')} with the stamp of the row before but other values left out "
            f"({lines_text(places)}); "
            "the first row of each stamp is used"
        )
        findings.append(Finding(code="repeated_stamps", severity="warning", text=text))
    return seconds[keep], rows[keep]


def _spread(name: str, seconds: Array, findings: list[Finding]) -> Array:
    """Return times for rows that share stamps: evenly over the record if the stamps allow it, else between stamps."""
    starts = np.concatenate([[0], np.flatnonzero(np.diff(seconds) > 0) + 1])
    stamps = seconds[starts]
    counts = np.diff(np.append(starts, len(seconds)))
    index = np.arange(len(seconds), dtype=np.float64)
    # the first and the last stamp may be shared by fewer rows: the mean interval comes from the whole ones between
    inner = slice(1, -1) if len(stamps) > 4 else slice(0, None)
    interval = float(np.ptp(stamps[inner])) / float(np.ptp(starts[inner]))
    wait = float(np.quantile(np.diff(stamps), 0.9))
    even: Array = interval * index + seconds[0]
    regular = int(np.ptp(counts[inner])) <= max(1, 0.1 * float(np.median(counts)))
    if float(np.ptp(even - seconds)) <= 1.5 * wait + interval:
        text = (
            f"{name!r} gives one stamp to "
            f"{'about ' if regular else '1 to '}{int(np.median(counts) if regular else counts.max())} rows; the rows "
            f"are taken as evenly spaced, {interval:.4g} s apart, so times are uncertain by up to {wait:.3g} s, "
            f"the same for all rows"
        )
        findings.append(
            Finding(
                code="coarse_stamps" if regular else "stamps_in_bursts",
                severity="note" if regular else "warning",
                text=text,
            )
        )
        return even
    # a stamp's rows reach until the next stamp, but not over a gap
    usual = float(np.median(np.diff(stamps) / counts[:-1]))
    ends = np.minimum(np.append(stamps[1:], np.inf), stamps + 1.5 * usual * counts)
    spread: Array = np.repeat(stamps, counts) + (index - np.repeat(starts, counts)) * np.repeat(
        (ends - stamps) / counts, counts
    )
    text = (
        f"{name!r} gives one stamp to 1 to {int(counts.max())} rows, unevenly; the rows of a stamp are spread "
        f"until the next one, "
        f"so single times may be wrong by {wait:.3g} s: dead time and fast motion are doubtful"
    )
    findings.append(Finding(code="stamps_in_bursts", severity="warning", text=text))
    return spread


def spacing(name: str, seconds: Array, lines: NDArray[np.int64], word: str = "line") -> list[Finding]:
    """Return what there is to say of gaps, or of uneven sampling when there are too many of them to be gaps.

    `lines` (n,) are the places of the rows, called `word`.
    """
    if len(seconds) < 5:
        return []
    step = np.diff(seconds)
    usual = float(np.median(step))
    missing = _missing(name, step, usual, lines, word)
    gaps = np.flatnonzero(step > _GAP * usual)
    if len(gaps) == 0:
        return missing
    if len(gaps) > 0.05 * len(step):
        text = f"the rows are unevenly spaced in time ({step.min():.3g} to {step.max():.3g} s, median {usual:.3g} s)"
        return [Finding(code="uneven_sampling", severity="note", text=text)]
    worst = int(gaps[np.argmax(step[gaps])])
    places = [int(lines[gap + 1]) for gap in gaps]
    text = (
        f"{count_of(len(gaps), 'gap')} in {name!r} (before {lines_text(places, word=word)}), the longest "
        f"{step[worst]:.4g} s against a usual {usual:.4g} s; what happened in a gap is not in the figures"
    )
    at = (float(seconds[worst]), float(seconds[worst + 1]))
    return [Finding(code="gaps", severity="warning", text=text, at_s=at), *missing]


def _missing(name: str, step: Array, usual: float, lines: NDArray[np.int64], word: str) -> list[Finding]:
    """Return a note of single rows that an otherwise even clock lacks, but for those left out already."""
    if not float(step.max()) > 1.75 * usual or float(np.quantile(np.abs(step - usual), 0.9)) > 0.05 * usual:
        return []
    apart = np.abs(np.diff(lines))
    lost = np.flatnonzero((step > 1.75 * usual) & (step <= _GAP * usual) & (apart <= np.median(apart)))
    if len(lost) == 0 or len(lost) > 0.05 * len(step):
        return []
    places = lines_text([int(lines[place + 1]) for place in lost], word=word)
    text = (
        f"rows seem to be missing before {places}: {name!r} is even but for {step[lost].max():.4g} s there instead of "
        f"{usual:.4g} s; a step in between would be seen late"
    )
    return [Finding(code="missing_rows", severity="note", text=text)]


def _shown(value: float) -> str:
    return f"{value:.10g}"

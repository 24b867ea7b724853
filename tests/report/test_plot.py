"""The picture: what is drawn is what the analysis says, no label is lost, the same bytes each time."""

from __future__ import annotations

import io
import math
import subprocess
import sys
from functools import cache
from itertools import pairwise
from pathlib import Path

import matplotlib as mpl
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.image import imread
from matplotlib.lines import Line2D
from matplotlib.text import Text
from scipy import signal

from loopfit.analysis.analyze import analyze
from loopfit.analysis.result import Analysis
from loopfit.core.errors import UsageError
from loopfit.fit.curve import curve_of
from loopfit.report.plot import figure, picture
from loopfit.report.plot_labels import spread
from loopfit.report.plot_lines import thinned, view_of
from loopfit.report.text import answer

ZETA, OMEGA, DEAD, BEGIN, CHANGE = 0.3, 0.2, 12.0, 100.0, 20.0
DAMPED = OMEGA * math.sqrt(1 - ZETA**2)
NOISE = 1e-3 * CHANGE


def swing(time: np.ndarray, zeta: float = ZETA, omega: float = OMEGA, begin: float = BEGIN) -> np.ndarray:
    """Unit step response of omega^2 / (s^2 + 2 zeta omega s + omega^2), by scipy.signal."""
    since = np.maximum(time - begin, 0.0)
    grid = np.linspace(0.0, max(float(since.max()), 1.0), 20001)
    _, value = signal.step(signal.lti([omega**2], [1, 2 * zeta * omega, omega**2]), T=grid)
    return np.asarray(np.interp(since, grid, value))


def noise(size: int, rms: float = NOISE) -> np.ndarray:
    return np.random.default_rng(7).normal(0.0, rms, size)


TIME = np.arange(400.0)
LONG = np.arange(100_000) * 0.01
SETPOINT = 50.0 + CHANGE * (TIME >= BEGIN)
MEASUREMENT = 50.0 + CHANGE * swing(TIME, begin=BEGIN + DEAD) + noise(TIME.size)
OUTPUT = 30.0 + 10.0 * (TIME >= BEGIN)
RAMP = np.clip((TIME - BEGIN + 1) / 10, 0, 1)
KEPT = np.r_[0:160, 200:400]


@cache
def kinds() -> dict[str, dict[str, np.ndarray]]:
    """Records of every kind that an analysis tells apart."""
    second = {"time": TIME, "measurement": MEASUREMENT}
    many = 50.0 + 5 * ((TIME // 100) % 2)
    return {
        "setpoint step": second | {"setpoint": SETPOINT, "output": OUTPUT + noise(TIME.size)},
        "output step": second | {"output": OUTPUT},
        "downwards": {"time": TIME, "measurement": -MEASUREMENT, "setpoint": -SETPOINT},
        "release": {"time": TIME, "measurement": 5 + 3 * (1 - swing(TIME, 0.1, begin=0.0)) + noise(TIME.size)},
        "overdamped": {"time": TIME, "measurement": 20 + swing(TIME, 1.6) + noise(TIME.size, 0.01), "output": OUTPUT},
        "first order": {
            "time": TIME,
            "measurement": 20 - np.expm1(-np.maximum(TIME - 110, 0) / 20) + noise(TIME.size, 0.01),
            "output": OUTPUT,
        },
        "integrating": {
            "time": TIME,
            "measurement": 100 + 0.2 * np.maximum(TIME - BEGIN - 20, 0) + noise(TIME.size, 0.2),
            "output": OUTPUT,
        },
        "with a zero": {
            "time": TIME,
            "measurement": 20 + swing(TIME, 0.8) - 6 * np.gradient(swing(TIME, 0.8), TIME) + noise(TIME.size, 0.005),
            "output": OUTPUT,
        },
        "unsettled": {"time": TIME[:130], "measurement": MEASUREMENT[:130], "setpoint": SETPOINT[:130]},
        "moving before": {
            "time": TIME,
            "measurement": 50 + CHANGE * swing(TIME) + 8 * (1 - swing(TIME, begin=60.0)) + noise(TIME.size),
            "output": OUTPUT,
        },
        "gradual": {
            "time": TIME,
            "measurement": 50 + CHANGE * np.mean([swing(TIME, begin=BEGIN + i) for i in range(10)], axis=0),
            "setpoint": 50 + CHANGE * RAMP,
        },
        "many steps": {
            "time": TIME,
            "measurement": 50 + 5 * sum((-1) ** k * swing(TIME, begin=100.0 * (k + 1)) for k in range(3)),
            "setpoint": many,
        },
        "gap": {"time": TIME[KEPT], "measurement": MEASUREMENT[KEPT], "setpoint": SETPOINT[KEPT]},
        "standing offset": second | {"setpoint": 50 + 1.5 * (SETPOINT - 50), "output": OUTPUT},
        "no answer": {"time": TIME, "measurement": noise(TIME.size, 1.0), "setpoint": SETPOINT, "output": OUTPUT},
        "few rows": {"time": TIME[::6], "measurement": MEASUREMENT[::6], "setpoint": SETPOINT[::6]},
        "long and noisy": {
            "time": LONG,
            "measurement": 50 + 10 * swing(LONG, 0.25, 0.15, 206.0) + noise(LONG.size, 0.8),
            "setpoint": 50.0 + 10 * (LONG >= 200),
            "output": noise(LONG.size, 1.0),
        },
    }


NAMES = tuple(kinds())


@cache
def analysed(name: str) -> Analysis:
    return analyze(**kinds()[name])


@cache
def drawn_of(name: str) -> Figure:
    return figure(analysed(name))


def line(axes: Axes, label: str) -> Line2D:
    (found,) = [drawn for drawn in axes.lines if drawn.get_label() == label]
    return found


def xy(drawn: Line2D) -> tuple[np.ndarray, np.ndarray]:
    return np.asarray(drawn.get_xdata(), dtype=float), np.asarray(drawn.get_ydata(), dtype=float)


def words(drawn: Figure) -> list[Text]:
    return [text for text in drawn.findobj(Text) if text.get_text() and text.get_visible()]


def labels(drawn: Figure) -> str:
    return "\n".join(text.get_text() for text in words(drawn))


@pytest.mark.parametrize("name", NAMES)
def test_no_label_over_another_and_none_cut(name: str) -> None:
    drawn = drawn_of(name)
    drawn.draw_without_rendering()
    page = drawn.bbox
    ticks = {id(tick) for axes in drawn.axes for axis in (axes.xaxis, axes.yaxis) for tick in axis.get_ticklabels()}
    texts = [text for text in words(drawn) if id(text) not in ticks]
    boxes = [Text.get_window_extent(text) for text in texts]  # an annotation's own extent holds its far point too
    for text, box in zip(texts, boxes, strict=True):
        assert box.x0 >= page.x0, text
        assert box.x1 <= page.x1, text
        assert box.y0 >= page.y0, text
        assert box.y1 <= page.y1, text
    for i, box in enumerate(boxes):
        for j in range(i):
            assert not box.overlaps(boxes[j]), (texts[i], texts[j])


@pytest.mark.parametrize("name", NAMES)
def test_title_is_the_answer(name: str) -> None:
    drawn = drawn_of(name)
    title = " ".join((drawn.axes[0].get_title(loc="left") + " " + labels(drawn)).split())
    for sentence in answer(analysed(name)).split("\n"):
        assert " ".join(sentence.split()) in title


@pytest.mark.parametrize("name", [name for name in NAMES if name != "no answer"])
def test_model_and_record_are_those_of_the_analysis(name: str) -> None:
    analysis = analysed(name)
    axes = drawn_of(name).axes[0]
    start, end = view_of(analysis)
    curve = curve_of(analysis.fit, analysis.points, (max(start, analysis.window_s[0]), min(end, analysis.window_s[1])))
    time, value = xy(line(axes, "model"))
    np.testing.assert_array_equal(time, curve.time)
    np.testing.assert_array_equal(value, curve.value)
    seen = (analysis.record.time >= start) & (analysis.record.time <= end)
    rows = dict(zip(analysis.record.time, analysis.record.measurement.values, strict=True))
    time, value = xy(line(axes, "record"))
    assert all(rows[t] == v for t, v in zip(time, value, strict=True) if not math.isnan(v))
    assert np.nanmax(value) >= analysis.record.measurement.values[seen].max()
    assert np.nanmin(value) <= analysis.record.measurement.values[seen].min()
    low, high = axes.get_ylim()
    assert low < analysis.record.measurement.values[seen].min()
    assert high > analysis.record.measurement.values[seen].max()
    (allowed,) = [patch for patch in axes.collections if patch.get_label() == "models the record allows"]
    corners = np.asarray(allowed.get_paths()[0].vertices)
    assert corners[:, 1].max() == curve.high.max()
    assert corners[:, 1].min() == curve.low.min()


def test_figures_stand_where_the_laws_put_them() -> None:
    """Overshoot exp(-pi zeta/sqrt(1-zeta^2)), peak at pi/omega_d (Ogata, Modern Control Engineering, 5th ed., 5-3).

    The noise is 0.1 % of the change: 0.5 % and a third of a row hold it and the drawing of the curve.
    """
    drawn = drawn_of("setpoint step")
    axes = drawn.axes[0]
    overshoot = math.exp(-math.pi * ZETA / math.sqrt(1 - ZETA**2))
    peak = BEGIN + DEAD + math.pi / DAMPED
    times, heights = xy(line(axes, "first peak"))
    np.testing.assert_allclose(times, peak, atol=0.33)
    np.testing.assert_allclose(heights, [70, 70 + overshoot * CHANGE], atol=0.005 * CHANGE)
    (label,) = [text.get_text() for text in words(drawn) if text.get_text().startswith("overshoot")]
    assert float(label.split()[1]) == pytest.approx(100 * overshoot, abs=0.5)
    dead, _ = xy(line(axes, "dead time"))
    np.testing.assert_allclose(dead, [BEGIN, BEGIN + DEAD], atol=0.33)
    _, final = xy(line(axes, "final value"))
    np.testing.assert_allclose(final, 50 + CHANGE, atol=0.005 * CHANGE)
    (strip,) = [patch for patch in axes.patches if patch.get_label() == "band"]
    assert strip.get_window_extent().height > 0
    band = strip.get_path().get_extents(strip.get_patch_transform())
    np.testing.assert_allclose([band.y0, band.y1], [70 - 0.02 * CHANGE, 70 + 0.02 * CHANGE], atol=0.005 * CHANGE)
    time = np.arange(0.0, 200.0, 0.001)
    outside = np.abs(swing(time, begin=0.0) - 1) > 0.02
    settled = BEGIN + DEAD + float(time[outside][-1])
    ends, _ = xy(line(axes, "settling time"))
    assert ends[0] - 0.5 <= settled <= ends[1] + 0.5
    assert "settled within ±2 %" in labels(drawn)
    assert "setpoint 50 to 70 at 100 s" in labels(drawn)


def test_envelope_is_that_of_the_textbook_and_touches() -> None:
    """Final ± change exp(-zeta omega t)/sqrt(1-zeta^2), Ogata as above; it touches at omega_d t = phi + k pi,
    tan phi = zeta/sqrt(1-zeta^2), where the cosine of the same equation is 1 in size.
    """
    axes = drawn_of("setpoint step").axes[0]
    model = xy(line(axes, "model"))
    time, high = xy(line(axes, "envelope"))
    _, low = xy(line(axes, "lower envelope"))
    half = CHANGE * np.exp(-ZETA * OMEGA * (time - BEGIN - DEAD)) / math.sqrt(1 - ZETA**2)
    np.testing.assert_allclose(high, 70 + half, atol=0.01 * CHANGE)
    np.testing.assert_allclose(low, 70 - half, atol=0.01 * CHANGE)
    touches = BEGIN + DEAD + (math.asin(ZETA) + math.pi * np.arange(1, 5)) / DAMPED
    value = np.interp(touches, *model)
    sides = np.where(np.arange(1, 5) % 2 == 1, np.interp(touches, time, high), np.interp(touches, time, low))
    np.testing.assert_allclose(value, sides, atol=0.01 * CHANGE)
    inside = np.interp(time, *model)
    assert (inside <= high + 1e-3 * CHANGE).all()
    assert (inside >= low - 1e-3 * CHANGE).all()


def test_release_swings_inside_its_envelope() -> None:
    """A release from rest at 3 swings within 3 exp(-zeta omega t)/sqrt(1-zeta^2) (1 minus the step response)."""
    drawn = drawn_of("release")
    time, high = xy(line(drawn.axes[0], "envelope"))
    np.testing.assert_allclose(high, 5 + 3 * np.exp(-0.1 * OMEGA * time) / math.sqrt(1 - 0.01), atol=0.03)
    assert "rest value 5.0" in labels(drawn)
    assert "dead time" not in labels(drawn)


@pytest.mark.parametrize("name", ["overdamped", "first order", "integrating", "with a zero", "no answer"])
def test_no_envelope_where_nothing_swings(name: str) -> None:
    drawn = drawn_of(name).axes[0]
    assert "envelope" not in {part.get_label() for part in drawn.lines}


def test_refused_record_is_shown_with_its_step() -> None:
    analysis = analysed("no answer")
    assert analysis.model is None
    drawn = drawn_of("no answer")
    assert {"record"} <= {drawn_line.get_label() for drawn_line in drawn.axes[0].lines}
    assert "setpoint 50 to 70 at 100 s" in labels(drawn)
    assert drawn.axes[0].get_xlim() == (0.0, 399.0)
    with pytest.raises(ValueError, match="not enough values"):
        line(drawn.axes[0], "model")


def test_findings_are_numbered_where_they_are() -> None:
    analysis = analysed("gradual")
    drawn = drawn_of("gradual")
    places = sorted((finding.at_s, finding.code) for finding in analysis.findings if finding.at_s is not None)
    assert places
    for number, (_, code) in enumerate(places, start=1):
        assert f"{number} {code.replace('_', ' ')}" in labels(drawn).replace("\u00a0", " ")
    spans = [
        xy(mark)[0].tolist() for mark in drawn.axes[0].lines if mark.get_marker() == "|" and not mark.get_clip_on()
    ]
    assert spans == [list(at) for at, _ in places]
    assert [text.get_text() for text in words(drawn) if text.get_color() == "white"] == [
        str(number) for number in range(1, len(places) + 1)
    ]


def test_output_has_its_own_panel_and_the_setpoint_only_where_it_fits() -> None:
    upper, lower = drawn_of("setpoint step").axes
    np.testing.assert_array_equal(np.unique(xy(line(upper, "setpoint"))[1]), [50.0, 70.0])
    assert lower.get_ylabel() == "output"
    upper, setpoint, _ = drawn_of("no answer").axes  # a setpoint of 50 beside a measurement of 0
    assert {"setpoint"} == {drawn.get_label() for drawn in setpoint.lines} & {"setpoint", "record"}
    assert upper.get_ylim()[1] < 10


def test_thinned_record_keeps_every_extreme() -> None:
    values = np.random.default_rng(7).normal(size=100_000)
    values[12_345], values[77_777] = 50.0, -50.0
    time = np.arange(100_000.0)
    kept_time, kept = thinned(time, values, 500)
    assert kept.size <= 4 * 500
    assert (np.diff(kept_time) > 0).all()
    assert kept_time[[0, -1]].tolist() == time[[0, -1]].tolist()
    np.testing.assert_array_equal(kept, values[kept_time.astype(int)])
    for column in range(500):
        edges = np.searchsorted(time, np.array([column, column + 1]) * (99_999 / 500))
        inside = (kept_time >= edges[0]) & (kept_time < max(edges[1], edges[0] + 1))
        assert kept[inside].max() == values[edges[0] : edges[1]].max()
        assert kept[inside].min() == values[edges[0] : edges[1]].min()


def test_thinned_record_is_parted_at_a_gap() -> None:
    time = np.concatenate([np.arange(5000.0), np.arange(9000.0, 14000.0)])
    kept_time, kept = thinned(time, np.sin(time), 500)
    (gap,) = np.flatnonzero(np.isnan(kept))
    assert kept_time[[gap - 1, gap + 1]].tolist() == [4999.0, 9000.0]


def test_short_record_is_not_thinned() -> None:
    time = np.arange(1000.0)
    assert thinned(time, time, 500)[0] is time


@given(
    st.lists(st.tuples(st.floats(0, 100), st.floats(0.5, 6)), min_size=1, max_size=8),
)
def test_spread_labels_keep_apart_and_in_order(wanted: list[tuple[float, float]]) -> None:
    centres, sizes = [c for c, _ in wanted], [s for _, s in wanted]
    out = spread(centres, sizes, 0.0, 100.0)  # at most 48 of 100: they fit
    order = sorted(range(len(out)), key=lambda i: (centres[i], i))
    for a, b in pairwise(order):
        assert out[b] - out[a] >= (sizes[a] + sizes[b]) / 2 - 0.1  # pixels, of the search that moves them apart
    for i in order:
        assert out[i] - sizes[i] / 2 >= -0.1
        assert out[i] + sizes[i] / 2 <= 100.1


@pytest.mark.parametrize("ending", [".png", ".svg", ".pdf", ".PNG"])
def test_same_bytes_twice_whatever_the_users_settings(tmp_path: Path, ending: str) -> None:
    analysis = analysed("setpoint step")
    first, second = tmp_path / f"first{ending}", tmp_path / f"second{ending}"
    picture(analysis, first)
    own = {"font.size": 20, "axes.facecolor": "black", "savefig.dpi": 30, "text.usetex": True, "svg.hashsalt": "own"}
    with mpl.rc_context(own):
        picture(analysis, second)
    assert first.read_bytes() == second.read_bytes()


def test_png_is_ten_by_six_inches_at_150_dots(tmp_path: Path) -> None:
    picture(analysed("release"), tmp_path / "a.png")
    assert imread(tmp_path / "a.png").shape[:2] == (900, 1500)


@pytest.mark.parametrize("path", ["a.jpg", "no such folder/a.png"])
def test_file_that_cannot_be_written_is_told(tmp_path: Path, path: str) -> None:
    with pytest.raises(UsageError, match=r"a\.(jpg|png)"):
        picture(analysed("release"), tmp_path / path)


HEADS = {
    "dollars": r"time (s),price $\nosuch{$ here,set $r$",
    "letters": "Zeit [s],Füllstand Behälter [mm],Sollwert [mm]",
    "no such letters": "time (s),測定値,設定値",
    "long": f"time (s),{'very long measurement ' * 6}(mm/s),setpoint (mm/s)",
    "underscore": "time_s,level_{measurement}^2,setpoint",
}


@pytest.mark.parametrize("dialect", HEADS)
def test_column_names_of_every_dialect(tmp_path: Path, dialect: str) -> None:
    text = io.StringIO()
    np.savetxt(text, np.stack([TIME, MEASUREMENT, SETPOINT], axis=1), delimiter=",", fmt="%.4f")
    path = tmp_path / "record $1.csv"
    path.write_text(HEADS[dialect] + "\n" + text.getvalue(), encoding="utf-8")
    columns = {"time": 1, "measurement": 2, "setpoint": 3}
    for ending in ("png", "svg", "pdf"):
        picture(analyze(path, columns=columns), tmp_path / f"a.{ending}")
        assert (tmp_path / f"a.{ending}").stat().st_size > 5000  # an empty page of each kind is smaller


def test_stated_step_is_drawn_as_stated() -> None:
    analysis = analyze(time=TIME[100:], measurement=MEASUREMENT[100:], step_at_s=100.0, step_from=20.0, step_to=30.0)
    lower = figure(analysis).axes[-1]
    time, value = xy(line(lower, "output"))
    assert value.tolist() == [20.0, 30.0, 30.0]
    assert time[1] == 100.0


def test_no_window_system_is_touched() -> None:
    code = "import sys, loopfit.report.plot; assert 'matplotlib.pyplot' not in sys.modules"
    subprocess.run([sys.executable, "-c", code], check=True)

"""One record, however it is written down, is analysed to the same figures."""

from __future__ import annotations

import io
import tempfile
from collections.abc import Iterator
from functools import cache
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from dialects import EXACT, ROUNDED, by_pandas, frame, stamped
from hypothesis import given, settings
from hypothesis import strategies as st
from record_kinds import KINDS, Made, levels, responses

import loopfit


@cache
def made(kind: str) -> Made:
    return KINDS[kind]()


@cache
def from_arrays(kind: str) -> loopfit.Analysis:
    return loopfit.analyze(**made(kind).columns)


def figures(analysis: loopfit.Analysis) -> dict[str, Any]:
    """Every number and word of the document that does not tell of the file or of how it was read."""
    document = analysis.to_dict()
    record = document.pop("record")
    reading = {finding.code for finding in analysis.record.findings}
    document["rows"] = record["rows_used"], record["duration_s"], record["noise_rms"]
    document["findings"] = [found for found in record["findings"] if found["code"] not in reading]
    return document


def warned(analysis: loopfit.Analysis) -> set[str]:
    return {finding.code for finding in analysis.findings if finding.severity != "note"}


@pytest.mark.parametrize("kind", KINDS)
def test_the_records_are_what_they_were_made_as(kind: str) -> None:
    analysis, record = from_arrays(kind), made(kind)
    assert warned(analysis) == set()
    model = analysis.model
    assert model is not None
    assert model.damping_ratio is not None
    assert model.natural_frequency_rad_s is not None
    # one record each, so three half-widths of the 95 % interval instead of one
    for found, truth in ((model.damping_ratio, record.zeta), (model.natural_frequency_rad_s, record.omega)):
        assert found.value == pytest.approx(truth, abs=1.5 * (found.high - found.low))
    assert len(analysis.steps) == {"several": 4, "release": 0}.get(kind, 1)


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("dialect", EXACT)
def test_same_figures_bit_for_bit(dialect: str, kind: str, tmp_path: Path) -> None:
    path = tmp_path / "record.csv"  # whatever it is: the contents decide
    path.write_bytes(EXACT[dialect](made(kind)))
    analysis = loopfit.analyze(path)
    assert figures(analysis) == figures(from_arrays(kind))
    assert warned(analysis) == set()
    rows = len(made(kind).time)
    assert analysis.record.rows == (rows * (len(made(kind).columns) - 1) if "one value" in dialect else rows)


@pytest.mark.parametrize("kind", KINDS)
def test_same_figures_from_standard_input(kind: str, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("sys.stdin", io.TextIOWrapper(io.BytesIO(EXACT["tab, polars"](made(kind)))))
    assert figures(loopfit.analyze("-")) == figures(from_arrays(kind))


@pytest.mark.parametrize("kind", KINDS)
def test_same_figures_without_a_time_column(kind: str, tmp_path: Path) -> None:
    record = made(kind)
    if kind == "irregular":
        pytest.skip("its times are not rows times an interval")
    path = tmp_path / "record.csv"
    path.write_bytes(by_pandas(frame(record).iloc[:, 1:]))
    interval = float(record.time[1])
    analysis = loopfit.analyze(path, interval_s=interval)
    assert_close(analysis, from_arrays(kind), 2.0**-50 * float(record.time[-1]))  # a product instead of a decimal


def numbers(analysis: loopfit.Analysis) -> Iterator[tuple[str, loopfit.Quantity]]:
    assert analysis.model is not None
    for name in ("gain", "damping_ratio", "natural_frequency_rad_s"):
        quantity = getattr(analysis.model, name)
        if quantity is not None:
            yield name, quantity


def assert_close(analysis: loopfit.Analysis, exact: loopfit.Analysis, error_s: float) -> None:
    """The figures differ by no more than errors of the times explain.

    Displaced times t + e act as errors e dy/dt of the measurement, and |dy/dt| is at most about omega times the
    swing: so relative errors of the figures are at most of the order of omega e, which is allowed, and a millionth
    of the interval for the point at which the search stops.
    """
    assert analysis.model is not None
    assert exact.model is not None
    omega = exact.model.natural_frequency_rad_s
    assert omega is not None
    for (name, found), (_, wanted) in zip(numbers(analysis), numbers(exact), strict=True):
        allowed = omega.value * error_s * abs(wanted.value) + 1e-6 * (wanted.high - wanted.low)
        for end in ("value", "low", "high"):
            assert getattr(found, end) == pytest.approx(getattr(wanted, end), rel=0, abs=allowed), (name, end)
    assert (analysis.step is None) == (exact.step is None)
    if analysis.step is not None and exact.step is not None:
        assert (analysis.step.from_, analysis.step.to) == (exact.step.from_, exact.step.to)
        shift = analysis.record.time[0] - exact.record.time[0]
        assert analysis.step.time_s - shift == pytest.approx(exact.step.time_s, rel=0, abs=2.0 * error_s)
    assert {f.code for f in analysis.findings if f.severity != "note"} == warned(exact)


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("dialect", ROUNDED)
def test_same_figures_within_the_resolution_of_the_times(dialect: str, kind: str, tmp_path: Path) -> None:
    write, error_s = ROUNDED[dialect]
    path = tmp_path / "record.csv"
    path.write_bytes(write(made(kind)))
    assert_close(loopfit.analyze(path), from_arrays(kind), error_s)


@pytest.mark.parametrize("kind", ["automatic", "several", "release"])
def test_same_figures_from_stamps_of_whole_seconds(kind: str, tmp_path: Path) -> None:
    """Ten, four and fifty rows share a stamp; the rows are evenly spaced, so no time is lost."""
    path = tmp_path / "record.csv"
    path.write_bytes(by_pandas(stamped(made(kind), lambda t: t.strftime("%Y-%m-%d %H:%M:%S"))))
    analysis = loopfit.analyze(path)
    assert "coarse_stamps" in {finding.code for finding in analysis.findings}
    assert_close(analysis, from_arrays(kind), 1e-12)  # the interval found is a quotient of whole seconds


@settings(max_examples=25, deadline=None)
@given(
    dialect=st.sampled_from(list(EXACT)),
    zeta=st.floats(0.1, 1.6),
    size=st.sampled_from([-40.0, -0.5, 2.0, 300.0]),
    base=st.sampled_from([0.0, 20.0, -7.5, 998.0]),
    seed=st.integers(0, 2**31),
    signal=st.sampled_from(["setpoint", "output"]),
)
def test_round_trip(dialect: str, zeta: float, size: float, base: float, seed: int, signal: str) -> None:
    time = np.round(np.arange(160) * 0.1, 1)
    noise = np.random.default_rng(seed).normal(0.0, 0.01 * abs(size), 160)
    measurement = np.round(base + responses(zeta, 1.5, [(2.0, size)], time) + noise, 3)
    level = levels(base, [(2.0, size)], time)
    record = Made(time=time, measurement=measurement, zeta=zeta, omega=1.5, **{signal: level})  # type: ignore[arg-type]
    exact = loopfit.analyze(**record.columns)
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "record.csv"
        path.write_bytes(EXACT[dialect](record))
        assert figures(loopfit.analyze(path)) == figures(exact)

"""The solver on the NIST StRD nonlinear regression sets: how many certified digits it reaches.

Source of data, starts and certified values: NIST/ITL Statistical Reference Datasets (tests/data/nist/README.md).
Digits are log relative errors, -log10|b/b_certified - 1|, the least over the parameters of a set.
"""

from __future__ import annotations

import csv
import json
from collections.abc import Callable
from dataclasses import dataclass
from functools import cache
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from loopfit.core.arrays import Array
from loopfit.fit.separable import minimise, projected_jacobian, solve_linear

DATA = Path(__file__).resolve().parents[1] / "data" / "nist"

Parts = tuple[Array, Array]  # columns (B, q, n), derivatives (B, p, m, n)


def rise(x: Array, theta: Array) -> Parts:
    """b1 (1 - exp(-b2 x)); the coordinate is b2."""
    decay = np.exp(-theta[:, :, None] * x)
    return 1.0 - decay, (x * decay)[:, :, None, :]


def decays(x: Array, theta: Array) -> Parts:
    """Sum of exponentials, each with a linear factor; the coordinates are the rates."""
    with np.errstate(over="ignore"):
        columns = np.exp(-theta[:, :, None] * x)
        members, count, n = columns.shape
        slopes = np.zeros((members, count, count, n))
        for i in range(count):
            slopes[:, i, i] = -x * columns[:, i]
    return columns, slopes


def decays_and_offset(x: Array, theta: Array) -> Parts:
    columns, slopes = decays(x, theta)
    return np.concatenate([columns, np.ones((theta.shape[0], 1, x.size))], axis=1), slopes


def ultrasonic(x: Array, theta: Array) -> Parts:
    """c exp(-b1 x) / (1 + d x), c = 1 / b2, d = b3 / b2; the coordinates are b1 and d."""
    part = 1.0 / (1.0 + theta[:, 1:] * x)
    column = np.exp(-theta[:, :1] * x) * part
    return column[:, None, :], np.stack([-x * column, -x * part * column], axis=1)[:, :, None, :]


@dataclass(frozen=True)
class Form:
    """A model: columns, coordinates of a start b, and the map from (coordinates, linear parameters) to b1, b2, ..."""

    columns: Callable[[Array, Array], Parts]
    start: Callable[[Array], list[float]]
    certified_order: Callable[[Array], Array]


RISE = Form(rise, lambda b: [b[1]], lambda v: v[[1, 0]])
OFFSET = Form(decays_and_offset, lambda b: [b[3], b[4]], lambda v: v[[4, 2, 3, 0, 1]])
THREE = Form(decays, lambda b: [b[1], b[3], b[5]], lambda v: v[[3, 0, 4, 1, 5, 2]])
ULTRASONIC = Form(ultrasonic, lambda b: [b[0], b[2] / b[1]], lambda v: np.array([v[0], 1.0 / v[2], v[1] / v[2]]))

FORMS = {
    "Misra1a": RISE,
    "BoxBOD": RISE,
    "MGH17": OFFSET,
    "Lanczos1": THREE,
    "Lanczos2": THREE,
    "Lanczos3": THREE,
    "Chwirut1": ULTRASONIC,
    "Chwirut2": ULTRASONIC,
}

# Digits after undamped last steps, measured with numpy 2.4 and OpenBLAS on x86-64, from both starts.
REACHED = {
    "Misra1a": 11.1,
    "BoxBOD": 11.0,
    "MGH17": 10.8,
    "Lanczos1": 10.5,
    "Lanczos2": 10.4,
    "Lanczos3": 10.5,
    "Chwirut1": 10.7,
    "Chwirut2": 10.9,
}
MARGIN = 0.5  # certified values have 11 digits; another order of summation moves the last


@cache
def certified() -> dict[str, Any]:
    document: dict[str, Any] = json.loads((DATA / "certified.json").read_text())
    return document


def rows(name: str) -> tuple[Array, Array]:
    with (DATA / f"{name}.csv").open() as file:
        pairs = np.array([[float(row["x"]), float(row["y"])] for row in csv.DictReader(file)])
    assert len(pairs) == certified()[name]["n"]
    return pairs[:, 0], pairs[:, 1]


def parameters(name: str, column: int) -> Array:
    return np.array([float(row[column]) for row in certified()[name]["pars"]])


def digits(found: Array, wanted: Array) -> float:
    error = np.max(np.abs(found / wanted - 1.0))
    return float(-np.log10(np.maximum(error, 1e-16)))


def solved(name: str, start: int, *, polish: bool = False) -> tuple[Array, float, Array]:
    """Return parameters, residual sum of squares and standard deviations found from a certified start."""
    form = FORMS[name]
    x, y = rows(name)
    theta = np.array([form.start(parameters(name, start))])
    count = theta.shape[1]
    found = minimise(
        lambda t: form.columns(x, t),
        y,
        theta,
        lowest=np.full(count, -np.inf),
        free=np.ones(count, dtype=bool),
        tolerance=1e-28,
        rounds=2000,
    )
    assert found.settled.all()
    theta = np.sort(found.theta) if form.columns in (decays, decays_and_offset) else found.theta
    for _ in range(200 if polish else 0):
        columns, slopes = form.columns(x, theta)
        best = solve_linear(columns, y)
        theta = theta + np.linalg.lstsq(projected_jacobian(slopes, best)[0].T, best.residual[0], rcond=None)[0]
    columns, slopes = form.columns(x, theta)
    best = solve_linear(columns, y)
    values = np.concatenate([theta[0], best.linear[0]])
    moving = slopes.shape[2]
    jacobian = np.concatenate([np.einsum("m,pmn->pn", best.linear[0, :moving], slopes[0]), columns[0]])
    variance = best.sse[0] / (y.size - values.size)
    _, triangle = np.linalg.qr(jacobian.T)
    root = np.linalg.inv(triangle)
    order = form.certified_order
    tiny = 1e-20  # complex steps give the slopes of the map to rounding
    moved = np.array([order(values + 1j * tiny * row).imag / tiny for row in np.eye(values.size)])
    spread = np.sqrt(variance * np.sum((moved.T @ root) ** 2, axis=1))
    return order(values), float(best.sse[0]), spread


@pytest.mark.parametrize("start", [1, 2])
@pytest.mark.parametrize("name", FORMS)
def test_minimum_from_certified_starts(name: str, start: int) -> None:
    """`minimise` alone ends as near the certified minimum as its sum of squares can tell.

    A residual e of values y carries rounding of eps |y|, so that its square is known to eps |y| / |e| of itself and the
    minimum to the root of that in standard deviations. Over 80 starts moved by 0.1 % the largest distance was 3 times
    that; typical digits then: Misra1a 11.1, BoxBOD 9.2, MGH17 9.3, Lanczos1 10.6, Lanczos2 10.4, Lanczos3 9.5 (least
    6.2), Chwirut1 9.8, Chwirut2 10.1.
    """
    found, sse, _ = solved(name, start)
    wanted, spread = parameters(name, 3), parameters(name, 4)
    rss = float(certified()[name]["rss"])
    blind = np.sqrt(np.finfo(float).eps * np.linalg.norm(rows(name)[1]) / np.sqrt(rss))
    assert np.all(np.abs(found - wanted) <= 10.0 * blind * spread + 1e-10 * np.abs(wanted))
    if name != "Lanczos1":  # 24 residuals of 1e-13 beside values of 2.5 are rounding
        assert digits(np.array([sse]), np.array([rss])) > 9.0


@pytest.mark.parametrize("start", [1, 2])
@pytest.mark.parametrize("name", FORMS)
def test_certified_digits_with_undamped_last_steps(name: str, start: int) -> None:
    found, _, _ = solved(name, start, polish=True)
    assert digits(found, parameters(name, 3)) > REACHED[name] - MARGIN


@pytest.mark.parametrize("start", [1, 2])
@pytest.mark.parametrize("name", [name for name in FORMS if name != "Lanczos1"])
def test_certified_standard_deviations(name: str, start: int) -> None:
    _, _, spread = solved(name, start, polish=True)
    # measured: 10.0 (Lanczos2) to 11.2
    assert digits(spread, parameters(name, 4)) > 9.5


def test_both_starts_at_once_reach_the_same_minimum() -> None:
    """Members of one batch do not disturb each other."""
    x, y = rows("BoxBOD")
    theta = np.array([[parameters("BoxBOD", start)[1]] for start in (1, 2)])
    found = minimise(
        lambda t: rise(x, t), y, theta, lowest=np.array([-np.inf]), free=np.array([True]), tolerance=1e-28, rounds=500
    )
    # bound as above: 10 sqrt(eps |y| / |e|) standard deviations of 0.105
    assert found.theta[:, 0] == pytest.approx(parameters("BoxBOD", 3)[1], rel=0, abs=6e-8)

"""Two exponentials in measured data: the overdamped release and the solver against scipy, NIST and published fits."""

from __future__ import annotations

import csv
import math
from pathlib import Path

import numpy as np
import pytest
from scipy.optimize import curve_fit

import loopfit
from loopfit.core.arrays import Array
from loopfit.fit.separable import minimise, solve_linear

DATA = Path(__file__).resolve().parents[1] / "data"
# the search in a whole analysis stops within sqrt(1e-7) standard deviations; those of the rates are up to 40 % here
OF_RATES = 1.5e-4


def table(name: str) -> dict[str, Array]:
    with (DATA / name).open() as file:
        rows = list(csv.DictReader(file))
    return {key: np.array([float(row[key]) for row in rows]) for key in rows[0]}


def person(number: int) -> tuple[Array, Array]:
    data = table("indometh.csv")
    of = data["subject"] == number
    return data["time"][of], data["concentration"][of]


def with_scipy(t: Array, y: Array) -> tuple[Array, float]:
    """Return the rates of an offset and two exponentials, fast one first, and the sum of squares; best of 16 starts."""

    def model(t: Array, c: float, a: float, k: float, b: float, m: float) -> Array:
        return c + a * np.exp(-k * t) + b * np.exp(-m * t)

    best: tuple[Array, float] | None = None
    for fast in (1.0, 2.0, 4.0, 8.0):
        for slow in (0.1, 0.3, 0.6, 0.9):
            try:
                found, _ = curve_fit(model, t, y, [0.0, 2.0, fast, 1.0, slow], maxfev=4000, xtol=1e-13, ftol=1e-13)
            except RuntimeError:  # this start does not converge
                continue
            squares = float(np.sum((y - model(t, *found)) ** 2))
            if best is None or squares < best[1]:
                best = (np.sort(found[[2, 4]])[::-1], squares)
    assert best is not None
    return best


@pytest.mark.parametrize("number", [3, 4, 6])
def test_drug_leaving_the_blood_is_an_overdamped_release(number: int) -> None:
    """Persons whose record shows two lags; with an offset free, those of 1, 2 and 5 run to a limit of the model."""
    t, y = person(number)
    rates, squares = with_scipy(t, y)
    model = loopfit.analyze(time=t, measurement=y).model
    assert model is not None
    assert [1.0 / lag.value for lag in reversed(model.time_constants_s)] == pytest.approx(rates, rel=OF_RATES)
    assert model.residual_rms == pytest.approx(math.sqrt(squares / y.size), rel=1e-6)
    zeta = float(np.sum(rates) / (2.0 * np.sqrt(np.prod(rates))))
    assert model.damping_ratio.value == pytest.approx(zeta, rel=OF_RATES)


@pytest.mark.parametrize("number", [1, 2, 5])
def test_persons_at_a_limit_of_the_model_are_fitted_no_worse_than_by_scipy(number: int) -> None:
    t, y = person(number)
    _, squares = with_scipy(t, y)
    model = loopfit.analyze(time=t, measurement=y).model
    assert model is not None
    # the least squares of person 2 lie at lags far longer than the record, which loopfit bounds at three spans
    assert model.residual_rms <= math.sqrt(squares / y.size) * (1.0 + 1e-3)
    assert model.damping_ratio.high == math.inf


def test_certified_pair_of_exponentials_is_an_overdamped_release() -> None:
    """NIST StRD MGH17 (tests/data/nist): an offset and two exponentials of opposite sign, a push that dies away."""
    data = table("nist/MGH17.csv")
    rates = np.array([1.2867534640e-02, 2.2122699662e-02])  # certified b4, b5
    model = loopfit.analyze(time=data["x"], measurement=data["y"]).model
    assert model is not None
    assert model.regime == "overdamped"
    # standard deviations of the rates are 3.5 and 4 %, times sqrt(1e-7)
    assert [1.0 / lag.value for lag in model.time_constants_s] == pytest.approx(rates, rel=1.3e-5)
    assert model.natural_frequency_rad_s.value == pytest.approx(math.sqrt(np.prod(rates)), rel=1e-5)
    assert model.damping_ratio.value == pytest.approx(np.sum(rates) / 2.0 / np.sqrt(np.prod(rates)), rel=1e-5)
    # residual standard deviation as certified, 1.3970497866e-03, with 33 rows and 5 parameters
    assert model.residual_rms * math.sqrt(33 / 28) == pytest.approx(1.3970497866e-03, rel=1e-6)


def test_published_rates_without_an_offset() -> None:
    """Person 1 of indometacin: A1 = 2.0293, log rate 0.5794, A2 = 0.192, log rate -1.7878.

    Printed in the manual of R, examples of its self-starting biexponential model; from memory.
    """
    t, y = person(1)

    def columns(theta: Array) -> tuple[Array, Array]:
        decay = np.exp(-theta[:, :, None] * t)
        slopes = np.zeros((len(theta), 2, 2, t.size))
        for i in range(2):
            slopes[:, i, i] = -t * decay[:, i]
        return decay, slopes

    found = minimise(
        columns,
        y,
        np.array([[3.0, 0.5]]),
        lowest=np.full(2, 1e-6),
        free=np.ones(2, dtype=bool),
        tolerance=1e-20,
        rounds=200,
    )
    linear = solve_linear(columns(found.theta)[0], y).linear[0]
    assert np.log(found.theta[0]) == pytest.approx([0.5794, -1.7878], rel=0, abs=0.5e-4)
    assert linear[0] == pytest.approx(2.0293, rel=0, abs=0.5e-4)
    assert linear[1] == pytest.approx(0.192, rel=0, abs=0.5e-3)


def test_published_rates_of_absorption_and_elimination() -> None:
    """Person 1 of theophylline: log rates -2.9196 out and 0.5752 in, log clearance -3.9159.

    Model dose ke ka / (cl (ka - ke)) (exp(-ke t) - exp(-ka t)). Printed in the manual of R, examples of its
    self-starting first-order compartment model; from memory.
    """
    data = table("theophylline.csv")
    t, y = data["time"], data["concentration"]

    def columns(theta: Array) -> tuple[Array, Array]:
        out, into = np.exp(-theta[:, :1] * t), np.exp(-theta[:, 1:] * t)
        return (out - into)[:, None, :], np.stack([-t * out, t * into], axis=1)[:, :, None, :]

    found = minimise(
        columns,
        y,
        np.array([[0.1, 1.0]]),
        lowest=np.full(2, 1e-6),
        free=np.ones(2, dtype=bool),
        tolerance=1e-20,
        rounds=200,
    )
    out, into = found.theta[0]
    size = solve_linear(columns(found.theta)[0], y).linear[0, 0]
    clearance = 4.02 * out * into / (size * (into - out))
    assert np.log([out, into, clearance]) == pytest.approx([-2.9196, 0.5752, -3.9159], rel=0, abs=0.5e-4)

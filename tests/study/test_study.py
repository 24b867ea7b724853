"""The study's own truths and arithmetic, on two small cells. The study itself: scripts/study."""

from __future__ import annotations

import math

import numpy as np
import pytest
from cells import CELLS, CENTRE, LOOP, OMEGA
from noises import FIVE_POINT_MEAN, autoregressive
from scipy.linalg import expm
from scipy.signal import tf2ss
from table import goals, pooled, table
from tally import FIGURES, WITH_BOUND, Outcome, outcomes, score, simulate
from truths import EqualLags, Rational, System, second_order

RECORDS = 12
NUMBERS = {cell.name: number for number, cell in enumerate(CELLS)}
# one with a bound active and another kind of model at times, one whose truth is no second order
TWO = (NUMBERS["damping 3"], NUMBERS["two lags, inverse"])
REALS = (-0.5 + 0j, -1.3 + 0j)


@pytest.fixture(scope="module")
def two() -> dict[int, Outcome]:
    return dict(outcomes(list(TWO), seed=3, records=RECORDS, processes=2, progress=lambda *_: None))


def coefficients(system: Rational) -> tuple[list[float], list[float]]:
    numerator, denominator = np.ones(1), np.ones(1)
    for zero in system.zeros:
        numerator = np.convolve(numerator, [zero, 1.0])
    for pole in system.poles:
        denominator = np.convolve(denominator, [-1.0 / pole, 1.0])
    return numerator.real.tolist(), denominator.real.tolist()


@pytest.mark.parametrize(
    ("system", "numerator", "denominator"),
    [
        (second_order(0.3, 2.0, 0.7), [4.0], [1.0, 1.2, 4.0]),
        (second_order(2.5, 2.0, 0.7), [4.0], [1.0, 10.0, 4.0]),
        (second_order(1.0, 2.0, 0.7), [4.0], [1.0, 4.0, 4.0]),
        (Rational(poles=REALS, zeros=(-0.6,), dead_time=0.7), *coefficients(Rational(poles=REALS, zeros=(-0.6,)))),
        (EqualLags(count=5, lag=0.4, dead_time=0.7), [1.0], np.poly([-2.5] * 5) / 2.5**5),
    ],
    ids=["swinging", "overdamped", "critical", "inverse", "five lags"],
)
def test_responses_against_the_matrix_exponential(system: System, numerator: object, denominator: object) -> None:
    A, B, C, D = tf2ss(numerator, denominator)
    n = A.shape[0]
    joined = np.block([[A, B], [np.zeros((1, n + 1))]])
    time = np.array([0.3, 0.7, 1.0, 2.0, 5.0, 11.0])
    exact = [float((C @ expm(joined * max(t - 0.7, 0.0))[:n, n])[0] + D[0, 0] * (t > 0.7)) for t in time]
    assert system.response(time) == pytest.approx(exact, abs=1e-9)  # partial fractions lose some digits


def test_overshoot_of_the_centre() -> None:
    """exp(-pi zeta / sqrt(1 - zeta^2)), common practice; read from points 0.0003 / omega apart."""
    assert CENTRE.known["overshoot_percent"] == pytest.approx(100.0 * math.exp(-math.pi * 0.6 / 0.8), rel=1e-6)


def test_loop_against_its_recursion() -> None:
    """The controller and the plant, scan by scan, with sensor noise in the loop."""
    scans = 300
    noise = np.random.default_rng(1).standard_normal(scans)
    a, b = (1.0 / lag for lag in LOOP.lags)
    step = expm(np.array([[-a, 0.0, a], [b, -b, 0.0], [0.0, 0.0, 0.0]]) * LOOP.scan)
    state, integral, sent, seen = np.zeros(2), 0.0, np.zeros(scans), np.zeros(scans)
    for k in range(scans):
        seen[k] = state[1] + noise[k]
        error = 1.0 - seen[k]
        integral += LOOP.proportional * LOOP.scan / LOOP.integral_time * error
        sent[k] = LOOP.proportional * error + integral
        arrived = sent[k - LOOP.delay_scans] if k >= LOOP.delay_scans else 0.0
        state = step[:2, :2] @ state + step[:2, 2] * arrived
    both = LOOP.follow(np.ones(scans)) + LOOP.disturbed(noise)
    assert both == pytest.approx(seen, abs=1e-9)


def test_autocovariances() -> None:
    """phi^k of an autoregression; (5 - k) / 5 of a mean of five: laws."""
    assert autoregressive(0.9).autocovariances(50) == pytest.approx(0.9 ** np.arange(50))
    assert FIVE_POINT_MEAN.autocovariances(7) == pytest.approx([1.0, 0.8, 0.6, 0.4, 0.2, 0.0, 0.0])
    drawn = autoregressive(0.9, white=0.5).draw(np.random.default_rng(4), 200_000)
    products = [float(np.mean(drawn[: drawn.size - k] * drawn[k:])) for k in range(3)]
    assert products == pytest.approx([1.0, 0.45, 0.405], abs=0.03)  # 3 standard errors of the slowest


@pytest.mark.parametrize("name", ["centre", "AR(1) 0.9", "uneven rows", "up, down, up"])
def test_the_efficient_estimator_is_unbiased_and_meets_the_bound(name: str) -> None:
    cell = CELLS[NUMBERS[name]]
    spreads, weights = cell.bound
    h = 1e-4
    for k, (zeta, omega, gain) in enumerate([(0.6 + h, OMEGA, 1.0), (0.6, OMEGA + h, 1.0), (0.6, OMEGA, 1.0 + h)]):
        moved = cell.change * (gain * cell.unit(second_order(zeta, omega, 0.5 / OMEGA)) - cell.unit(cell.system))
        expected = [h * (j == k) * (cell.known["gain"] if k == 2 else 1.0) for j in range(3)]
        assert weights @ moved == pytest.approx(expected, abs=0.002 * h)  # the response bends: second order in h
    rng = np.random.default_rng(5)
    noise = np.array([cell.measurement(rng) - cell.clean for _ in range(2000)])
    found = (noise @ weights.T).std(axis=0)
    assert found == pytest.approx([spreads[n] for n in WITH_BOUND], rel=0.06)  # 4 standard errors: 4 / sqrt(4000)


def test_records_are_the_same_whatever_the_processes(two: dict[int, Outcome]) -> None:
    alone = simulate(TWO[0], 3, 5, 7)
    assert np.array_equal(alone.figures, two[TWO[0]].figures[5:7], equal_nan=True)


def test_scores_counted_again(two: dict[int, Outcome]) -> None:
    for number, outcome in two.items():
        cell = CELLS[number]
        found = score(cell, outcome)
        for k, name in enumerate(FIGURES):
            if name not in cell.known:
                assert math.isnan(found.coverage[k])
                continue
            truth, rows = cell.known[name], [row for row in outcome.figures[:, k].tolist() if row[0] == row[0]]
            below = sum(truth < low for _, low, _ in rows)
            above = sum(truth > high for _, _, high in rows)
            assert (found.given[k], found.below[k], found.above[k]) == (len(rows), below, above)
            assert found.coverage[k] == pytest.approx(1.0 - (below + above) / len(rows))
            width = sorted(high - low for _, low, high in rows)[(len(rows) - 1) // 2]
            assert found.width[k] == pytest.approx(width / (abs(truth) if truth else 1.0))
        kinds = outcome.kinds.tolist()
        assert found.refused == kinds.count("refused") / RECORDS
        assert found.other_kind == sum(kind not in ("second_order", "refused") for kind in kinds) / RECORDS


def test_misses_refusals_and_efficiency_of_made_up_outcomes() -> None:
    """Three records of the centre: one hit, one miss above, one refused; the errors are the efficient ones, twice as large."""
    spread = CENTRE.bound[0]["damping_ratio"]
    figures = np.full((3, len(FIGURES), 3), np.nan)
    figures[0, 0] = 0.6 + 2 * spread, 0.5, 0.7
    figures[1, 0] = 0.6 - 2 * spread, 0.5, 0.599
    efficient = np.zeros((3, 3))
    efficient[:2, 0] = spread, -spread
    kinds, adequate = np.array(["second_order", "first_order", "refused"]), np.array([True, False, False])
    found = score(CENTRE, Outcome(figures=figures, kinds=kinds, adequate=adequate, efficient=efficient))
    assert (found.given[0], found.below[0], found.above[0], found.coverage[0]) == (2, 0, 1, 0.5)
    assert found.refused == found.other_kind == found.adequate == pytest.approx(1 / 3)
    # 1 + (8 - 2) spread^2 / spread^2: twice the variance of two points, less theirs, over the bound
    assert found.efficiency[0] == pytest.approx(7.0)
    text = "\n".join(goals({0: found}))
    assert "centre: damping 0.500" in text
    assert "centre: damping 7.00" in text


def test_table_holds_the_numbers(two: dict[int, Outcome]) -> None:
    scores = {number: score(CELLS[number], outcome) for number, outcome in two.items()}
    lines = table(scores)
    row = next(line for line in lines if line.startswith("two lags, inverse"))
    assert row.split()[3:] == ["-", "-", *_shares(scores[TWO[1]].coverage[2:6]), "-", *_shares(scores[TWO[1]].coverage[7:]),
                               *_shares([scores[TWO[1]].refused, scores[TWO[1]].other_kind, scores[TWO[1]].adequate,
                                         scores[TWO[1]].at_bound])]  # fmt: skip
    bound = next(line for line in pooled(scores) if line.startswith("a bound active"))
    gain = scores[TWO[0]].coverage[FIGURES.index("gain")]
    assert float(bound.split()[5]) == pytest.approx(gain, abs=5e-5)  # four printed digits


def _shares(values: object) -> list[str]:
    return [f"{value:.3f}" for value in np.asarray(values)]

"""Draws from a likelihood: moments against the distribution itself, ranks of the truth over many records."""

from __future__ import annotations

import math

import numpy as np
import pytest
from recorded_loops import figures
from scipy import stats
from scipy.integrate import quad

from loopfit.identify.output_to_measurement import fitted, trace_of
from loopfit.identify.posterior import Likelihood, draws_of, sampled
from loopfit.identify.through_loop import Rows, through_loop
from loopfit.loop.gains import Gains
from loopfit.loop.plant import Plant
from loopfit.loop.simulate import simulate
from loopfit.record.read import record_from_arrays

LOW, HIGH = np.array([-math.inf, -1.0, 0.0]), np.full(3, math.inf)
COUNT = 4000


def normal(mean: np.ndarray, covariance: np.ndarray) -> Likelihood:
    """A normal likelihood, scaled to 1 at its greatest value within the bounds (the mean, or the mean at the bound)."""
    inverse = np.linalg.inv(covariance)

    def log_of(theta: np.ndarray) -> np.ndarray:
        away = theta - mean
        return -0.5 * np.einsum("bi,ij,bj->b", away, inverse, away)

    return Likelihood(
        log_of=log_of, centre=mean, curvature=inverse, lowest=LOW, highest=HIGH, free=np.ones(3, dtype=bool)
    )


def test_a_normal_far_from_its_bounds() -> None:
    mean = np.array([1.0, 4.0, 9.0])
    covariance = np.array([[0.3, 0.2, 0.1], [0.2, 0.5, -0.2], [0.1, -0.2, 0.4]])
    points, effective = sampled(normal(mean, covariance), COUNT, np.random.default_rng(1))
    # four standard errors of a mean, and about as much of a covariance, of so many draws
    assert points.mean(axis=0) == pytest.approx(mean, abs=4 * math.sqrt(0.5 / COUNT))
    assert np.cov(points.T) == pytest.approx(covariance, abs=6 * 0.5 / math.sqrt(COUNT))
    assert effective > COUNT


def test_a_bound_cuts_the_normal() -> None:
    mean, sd = np.array([1.0, -0.8, 9.0]), 0.4
    points, _ = sampled(normal(mean, sd**2 * np.eye(3)), COUNT, np.random.default_rng(2))
    wanted = stats.truncnorm((-1.0 + 0.8) / sd, math.inf, loc=-0.8, scale=sd)
    assert points[:, 1].min() >= -1.0
    assert stats.kstest(points[:, 1], wanted.cdf).statistic < 1.63 / math.sqrt(COUNT) + 0.01  # 1 %, and resampling


@pytest.mark.parametrize("place", [0.0, 1.0, 1.8])
def test_a_dead_time_of_zero_takes_its_share(place: float) -> None:
    sd = 0.3
    mean = np.array([1.0, 4.0, place * sd])
    points, _ = sampled(normal(mean, sd**2 * np.eye(3)), COUNT, np.random.default_rng(3))
    # half of the prior at 0, half spread evenly over [0, reach]; reach as the module states it: mean + 2 rms of the rest
    density = stats.truncnorm(-place, math.inf, loc=mean[2], scale=sd)
    reach = density.mean() + 2.0 * math.sqrt(density.moment(2))
    spread = quad(lambda x: math.exp(-0.5 * ((x - mean[2]) / sd) ** 2), 0.0, mean[2] + 12 * sd)[0] / reach
    at_zero = math.exp(-0.5 * place**2)
    share = np.mean(points[:, 2] == 0.0)
    assert share == pytest.approx(
        at_zero / (at_zero + spread), abs=0.04
    )  # 2.5 standard errors and those of the weights


def test_no_dead_time_of_zero_where_the_record_excludes_it() -> None:
    points, _ = sampled(normal(np.array([1.0, 4.0, 1.0]), 0.3**2 * np.eye(3)), 500, np.random.default_rng(4))
    assert np.all(points[:, 2] > 0.0)


def test_a_bent_likelihood() -> None:
    """A ridge, far from its curvature at the peak (Haario et al. 1999): x normal, y normal around x^2."""

    def log_of(theta: np.ndarray) -> np.ndarray:
        return (
            -0.5 * theta[:, 0] ** 2 - 0.5 * ((theta[:, 1] - theta[:, 0] ** 2) / 0.5) ** 2 - 0.5 * (theta[:, 2] - 9) ** 2
        )

    bent = Likelihood(
        log_of=log_of,
        centre=np.array([0.0, 0.0, 9.0]),
        curvature=np.diag([1.0, 4.0, 1.0]),
        lowest=np.array([-math.inf, -math.inf, 0.0]),
        highest=HIGH,
        free=np.ones(3, dtype=bool),
    )
    points, _ = sampled(bent, COUNT, np.random.default_rng(5))
    assert points[:, 0].mean() == pytest.approx(0.0, abs=0.1)
    assert points[:, 0].std() == pytest.approx(1.0, abs=0.1)
    assert points[:, 1].mean() == pytest.approx(1.0, abs=0.15)


def ranks(seed: int, records: int, *, through: bool, noise: float = 0.01) -> np.ndarray:
    """Share of the draws below the truth, for damping ratio, gain and dead time, over records of random loops."""
    rng = np.random.default_rng(seed)
    scan, rows = 0.08, 300
    out = []
    for _ in range(records):
        zeta, dead = math.exp(rng.uniform(math.log(0.3), math.log(1.5))), rng.uniform(0.15, 1.5)
        plant = Plant(gain=1.0, damping_ratio=zeta, natural_frequency_rad_s=1.0, dead_time_s=dead)
        gains = Gains(kp=0.4 / (0.5 + dead), ki=0.25 / (0.8 + dead))
        setpoint = np.where(np.arange(rows) < 40, 0.0, 1.0)
        run = simulate(plant, gains, scan_s=scan, scans=rows, setpoint=setpoint, noise=noise * rng.normal(size=rows))
        if through:
            seen = Rows(
                values=run.measurement,
                setpoint=setpoint,
                each=1,
                scan_s=scan,
                gains=gains,
                output_limits=None,
                initial_output=0.0,
                initial_measurement=0.0,
                initial_setpoint=0.0,
            )
            draws = through_loop(seen, 1.0, noise_floor=0.0).draws(100, rng)
        else:
            record = record_from_arrays(
                time=run.time,
                measurement=run.measurement,
                setpoint=setpoint,
                output=run.output,
                interval_s=None,
                window_s=None,
            )
            draws = draws_of(fitted(trace_of(record, 40 * scan)), 100, rng)
        values = np.array([figures(draw) for draw in draws])[:, [1, 0, 3]]
        truth = np.array([zeta, 1.0, dead])
        out.append((values < truth).mean(axis=0) + 0.5 * (values == truth).mean(axis=0))
    return np.array(out)


def check(found: np.ndarray) -> None:
    n = found.shape[0]
    for column in found.T:
        # Kolmogorov-Smirnov at 1 %, and half a draw in a hundred
        assert stats.kstest(column, "uniform").statistic < 1.63 / math.sqrt(n) + 0.005
        covered = np.mean((column > 0.025) & (column < 0.975))
        assert (
            covered > 0.95 - 3.0 * math.sqrt(0.95 * 0.05 / n) - 0.02
        )  # three standard errors; 100 draws tell a tail to .02


def test_ranks_of_the_truth() -> None:
    check(ranks(71, 60, through=False))


@pytest.mark.study
@pytest.mark.parametrize("noise", [0.01, 0.03])
@pytest.mark.parametrize("through", [False, True])
def test_ranks_of_the_truth_in_many_records(through: bool, noise: float) -> None:
    found = ranks(72, 300, through=through, noise=noise)
    for column in found.T:
        assert np.mean((column > 0.025) & (column < 0.975)) > 0.90
        assert 0.72 < np.mean((column > 0.1) & (column < 0.9)) < 0.90

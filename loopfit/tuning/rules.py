"""Published tuning rules, for comparison only: none of them guarantees a damping ratio."""

from __future__ import annotations

import math

from loopfit.core.errors import UsageError
from loopfit.loop.gains import Gains
from loopfit.loop.margins import margins_of
from loopfit.loop.open_loop import open_loop
from loopfit.loop.plant import Plant
from loopfit.loop.settings import Settings

_SKOGESTAD = (
    "Skogestad, Simple analytic rules for model reduction and PID controller tuning, J. Process Control 13, 2003"
)
_RIVERA = "Rivera, Morari and Skogestad, Internal model control: PID controller design, Ind. Eng. Chem. Proc. Des. Dev. 25, 1986"
SOURCES = {
    "simc_pi": _SKOGESTAD,
    "simc_pid": _SKOGESTAD,
    "lambda_pi": f"Dahlin, Designing and tuning digital controllers, Instruments and Control Systems 41(6), 1968; {_RIVERA}",
    "lambda_pid": _RIVERA,
    "ultimate_pi": "Ziegler and Nichols, Optimum settings for automatic controllers, Trans. ASME 64, 1942",
    "ultimate_pid": "Ziegler and Nichols, Optimum settings for automatic controllers, Trans. ASME 64, 1942",
}
_TINY_GAIN = 1e-9


def simc_pi(
    gain: float, lag_s: float, dead_time_s: float, *, closed_loop_s: float | None = None, integrating: bool = False
) -> Settings:
    """Return the PI settings of Skogestad (2003): Kc = T / (k (tc + th)), Ti = min(T, 4 (tc + th)).

    Parameters
    ----------
    gain : float
        Of the plant; per second where it integrates.
    lag_s : float
        Its one lag, s; of an integrating plant without a meaning.
    dead_time_s : float
        Above 0 unless `closed_loop_s` is.
    closed_loop_s : float, optional
        Wanted closed-loop time tc, s; the dead time when None, as the author recommends.
    integrating : bool
        gain / s: Kc = 1 / (k (tc + th)), Ti = 4 (tc + th).
    """
    span = _span(dead_time_s, closed_loop_s)
    if integrating:
        return Settings(gain=1.0 / (gain * span), integral_time_s=4.0 * span)
    return Settings(gain=_lag(lag_s) / (gain * span), integral_time_s=min(lag_s, 4.0 * span))


def simc_pid(
    gain: float, lags_s: tuple[float, float], dead_time_s: float, *, closed_loop_s: float | None = None,
    integrating: bool = False,
) -> Settings:  # fmt: skip
    """Return the PID settings of Skogestad (2003), series form: as `simc_pi` for the larger lag, Td = the smaller.

    Arguments as for `simc_pi`; for an integrating plant the one of the two lags that is not 0 is its lag.
    """
    slow, fast = max(lags_s), _lag(max(lags_s) if integrating else min(lags_s))
    plain = simc_pi(gain, slow, dead_time_s, closed_loop_s=closed_loop_s, integrating=integrating)
    return Settings("series", gain=plain.gain, integral_time_s=plain.integral_time_s, derivative_time_s=fast)


def simc_double_integrating(gain: float, dead_time_s: float, *, closed_loop_s: float | None = None) -> Settings:
    """Return the PID settings of Skogestad (2003) for gain / s^2, series form: Kc = 1 / (4 k (tc + th)^2), Ti = Td = 4 (tc + th)."""
    span = _span(dead_time_s, closed_loop_s)
    return Settings("series", gain=0.25 / (gain * span**2), integral_time_s=4.0 * span, derivative_time_s=4.0 * span)


def lambda_pi(gain: float, lag_s: float, dead_time_s: float, closed_loop_s: float) -> Settings:
    """Return the PI settings that cancel the lag: Kc = T / (k (tc + th)), Ti = T; Dahlin (1968), Rivera et al. (1986)."""
    return Settings(gain=_lag(lag_s) / (gain * _span(dead_time_s, closed_loop_s)), integral_time_s=lag_s)


def lambda_pi_integrating(gain: float, dead_time_s: float, closed_loop_s: float) -> Settings:
    """Return the PI settings for gain / s: Kc = (2 tc + th) / (k (tc + th)^2), Ti = 2 tc + th.

    Chien and Fruehauf, Consider IMC tuning to improve controller performance, Chem. Eng. Progress 86, 1990. The closed
    loop is critically damped only while exp(-th s) is as good as 1 - th s.
    """
    span = _span(dead_time_s, closed_loop_s)
    integral = closed_loop_s + span
    return Settings(gain=integral / (gain * span**2), integral_time_s=integral)


def lambda_pid(
    gain: float, damping_ratio: float, natural_frequency_rad_s: float, dead_time_s: float, closed_loop_s: float
) -> Settings:
    """Return the PID settings that cancel a second-order plant, ideal form; Rivera et al. (1986).

    With t = 1 / wn: Ti = 2 zeta t, Td = t / (2 zeta), Kc = Ti / (k (tc + th)). Two lags are zeta = (T1 + T2) /
    (2 sqrt(T1 T2)), which gives Ti = T1 + T2, Td = T1 T2 / (T1 + T2). Below zeta = 1 no series form exists.
    """
    if not damping_ratio > 0.0:
        raise UsageError(f"the rule is for a plant with damping, not a damping ratio of {damping_ratio:g}")
    integral = 2.0 * damping_ratio / natural_frequency_rad_s
    return Settings(
        gain=integral / (gain * _span(dead_time_s, closed_loop_s)),
        integral_time_s=integral,
        derivative_time_s=0.5 / (damping_ratio * natural_frequency_rad_s),
    )


def ultimate_p(ultimate_gain: float) -> Settings:
    """Return the P settings of Ziegler and Nichols (1942): half the ultimate gain."""
    return Settings(gain=0.5 * ultimate_gain)


def ultimate_pi(ultimate_gain: float, ultimate_period_s: float) -> Settings:
    """Return the PI settings of Ziegler and Nichols (1942): 0.45 Ku, Pu / 1.2."""
    return Settings(gain=0.45 * ultimate_gain, integral_time_s=ultimate_period_s / 1.2)


def ultimate_pid(ultimate_gain: float, ultimate_period_s: float) -> Settings:
    """Return the PID settings of Ziegler and Nichols (1942): 0.6 Ku, Pu / 2, Pu / 8; ideal form."""
    return Settings(
        gain=0.6 * ultimate_gain, integral_time_s=0.5 * ultimate_period_s, derivative_time_s=0.125 * ultimate_period_s
    )


def ultimate_of(plant: Plant) -> tuple[float, float] | None:
    """Return the ultimate gain, with its sign, and period, s, of a stable or integrating plant; None where it has none."""
    tiny = Gains(kp=_TINY_GAIN / plant.gain)
    margins = margins_of(plant, tiny)
    factor = margins.gain_margin
    if not margins.stable or factor is None or not math.isfinite(factor):
        return None
    loop = open_loop(plant, tiny)
    finite = [w for w in margins.phase_crossovers_rad_s if 0.0 < w < math.inf]
    at = min(finite, key=lambda w: abs(factor * abs(loop.at(w)[0]) - 1.0), default=0.0)
    if at == 0.0:
        return None
    return tiny.kp * factor, 2.0 * math.pi / at


def compared(plant: Plant) -> dict[str, Settings]:
    """Return the settings of every rule that is defined for the plant, keys as in `SOURCES`.

    The closed-loop time is the dead time in the rules of Skogestad, the larger of lag and dead time in the
    lambda rules, three times the dead time where the plant integrates.
    """
    out: dict[str, Settings] = {}
    k, th, lags = plant.gain, plant.dead_time_s, plant.time_constants_s
    if plant.rational is None and not plant.zero_s:
        if lags is not None and th > 0.0:
            slow = tuple(sorted(lags, reverse=True))
            if plant.integrating and len(slow) <= 1:
                # a lag beside an integration counts as dead time, as in Skogestad's examples E6 and E8
                out["simc_pi"] = simc_pi(k, 0.0, th + sum(slow), integrating=True)
                out["lambda_pi"] = lambda_pi_integrating(k, th + sum(slow), 3.0 * (th + sum(slow)))
                if slow:
                    out["simc_pid"] = simc_pid(k, (slow[0], 0.0), th, integrating=True)
            elif not plant.integrating and 1 <= len(slow) <= 2:
                # the half rule: half of the second lag to the first, half to the dead time
                half = 0.5 * sum(slow[1:])
                out["simc_pi"] = simc_pi(k, slow[0] + half, th + half)
                out["lambda_pi"] = lambda_pi(k, slow[0] + half, th + half, max(slow[0] + half, th + half))
                if len(slow) == 2:
                    out["simc_pid"] = simc_pid(k, (slow[0], slow[1]), th)
        zeta, wn = plant.damping_ratio, plant.natural_frequency_rad_s
        if lags is not None and len(lags) == 2 and not plant.integrating:
            zeta, wn = sum(lags) / (2.0 * math.sqrt(lags[0] * lags[1])), 1.0 / math.sqrt(lags[0] * lags[1])
        if zeta is not None and wn is not None and zeta > 0.0 and not plant.integrating:
            out["lambda_pid"] = lambda_pid(k, zeta, wn, th, max(1.0 / wn, th))
    ultimate = ultimate_of(plant)
    if ultimate is not None:
        out["ultimate_pi"], out["ultimate_pid"] = ultimate_pi(*ultimate), ultimate_pid(*ultimate)
    return out


def _lag(lag_s: float) -> float:
    if not (math.isfinite(lag_s) and lag_s > 0.0):
        raise UsageError(f"the rule is for a plant with a lag above 0 s, not {lag_s:g}")
    return lag_s


def _span(dead_time_s: float, closed_loop_s: float | None) -> float:
    """Return closed-loop time + dead time."""
    span = dead_time_s + (dead_time_s if closed_loop_s is None else closed_loop_s)
    if not (math.isfinite(span) and span > 0.0 and dead_time_s >= 0.0):
        raise UsageError("the rule needs a dead time or a wanted closed-loop time above 0 s")
    return span

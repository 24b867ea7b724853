"""The loop as a controller with a scan interval runs it: exact roots, and the continuous loop that stands in for it."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np

from loopfit.core.errors import UsageError
from loopfit.loop.certificate import certified_roots
from loopfit.loop.gains import Gains
from loopfit.loop.plant import Plant
from loopfit.loop.roots import Array, Complex, characteristic, first_roots
from loopfit.loop.state_space import exponential
from loopfit.loop.visible import Swing, course_of, swing_from_modes, unstable_swing

_NOTICEABLE = 0.05  # scan interval over dead time + lag
_LARGE = 0.1  # from here on some loops were unstable that were designed without regard to the scan
_LONG = 60  # scans of dead time above which roots come by Newton's method from the continuous stand-in
_DEAD = 1e-7  # |z| below which a root is gone after one scan
_NEAR_MULTIPLE, _APART = 1e-3, 1e-7  # roots so close, relative, are parted by so much of the plant's gain for residues


@dataclass(frozen=True, slots=True, kw_only=True)
class ScanEffect:
    """Whether the scan interval matters to a loop."""

    word: str  # small, noticeable or large
    sentence: str
    share: float  # scan interval over dead time + lag


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Pulse:
    """Plant from one scan to the next: x' = step x + early u[k-m] + late u[k-m-1], y = row x + direct u[k-m-1]."""

    step: Array  # (n, n)
    early: Array  # (n,)
    late: Array  # (n,)
    whole: Array  # (n,) early + late without dead time: the answer to a load held over one scan
    row: Array  # (n,)
    direct: float
    scans: int  # m


def sampled_roots(plant: Plant, gains: Gains, scan_s: float, *, late: bool = False) -> Complex:
    """Return the roots of the sampled loop in z, largest first; all of them unless the dead time is above 60 scans.

    Parameters
    ----------
    plant, gains : Plant, Gains
        The loop; the output is held between scans.
    scan_s : float
        Scan interval, s.
    late : bool
        The output is written one scan after it was computed.

    Notes
    -----
    The plant with held input and any dead time is exact (Astrom & Wittenmark, Computer-Controlled Systems, 3rd ed.,
    1997, section 2.3). Controller by backward differences: I[k] = I[k-1] + ki h e[k],
    D[k] = (Tf D[k-1] - kd (y[k] - y[k-1])) / (Tf + h). A root z decays as s = ln z / h does.
    """
    pulse = _pulse(plant, _checked(scan_s), late=late)
    if pulse.scans > _LONG:
        return _long_roots(plant, gains, pulse, scan_s, late=late)[0]
    out = np.linalg.eigvals(_matrices(pulse, gains, scan_s)[0]).astype(complex)
    return out[np.argsort(-np.abs(out), kind="stable")]


def sampled_swing(plant: Plant, gains: Gains, scan_s: float, *, late: bool = False) -> Swing:
    """Return the swing of the sampled loop after a load, as `swing_of` for the continuous one; peak at a scan.

    Arguments as for `sampled_roots`.
    """
    pulse = _pulse(plant, _checked(scan_s), late=late)
    if pulse.scans > _LONG:
        z, complete = _long_roots(plant, gains, pulse, scan_s, late=late)
        z = z[z.imag >= 0.0]
        residue = _long_residues(pulse, gains, scan_s, z)
    else:
        (z, residue), complete = _modes(pulse, gains, scan_s), True
    if not len(z):
        return swing_from_modes(z, z, 0.0, 0.0, scan_s, felt=0.0, complete=complete)
    order = np.argsort(-np.abs(z), kind="stable")
    z, residue = z[order], residue[order]
    s = np.asarray(np.log(z), dtype=complex)
    if not s[0].real < -1e-12:
        return unstable_swing(np.asarray(s / scan_s, dtype=complex), complete=complete)
    residue = residue / (z - 1.0) if gains.ki != 0.0 else residue / (z * scan_s)
    residue = np.where((z.imag == 0.0) & (z.real < 0.0), 0.5 * residue, residue)  # alternating, and alone
    twice = np.where(s.imag > 0.0, 2.0, 1.0) * residue
    time, peak = 0.0, 0.0
    if pulse.scans > _LONG:  # not all modes are known: the plant itself until it feels the controller
        early = _open_course(pulse, gains, scan_s)
        time, peak = float(early.argmax()), float(early.max())
    at, height = _peak_scan(s, twice, pulse.scans + 1 if pulse.scans > _LONG else 1)
    if height > peak:
        time, peak = at, height
    felt = max(time, plant.dead_time_s / scan_s)
    return swing_from_modes(s, residue * scan_s, time, peak * scan_s, scan_s, felt=felt, complete=complete)


def with_scan(plant: Plant, gains: Gains, scan_s: float, *, late: bool = False) -> tuple[Plant, Gains]:
    """Return the continuous loop that stands in for the sampled one: half a scan more dead time and derivative filter.

    With `late`, one scan more of dead time besides. Damping ratios then differ by .008 (median of 150 loops) where a
    scan is a tenth of the dominant root's time, against .019 where the scan is left out.
    """
    _checked(scan_s)
    dead_time = plant.dead_time_s + (1.5 if late else 0.5) * scan_s
    rational = None if plant.rational is None else replace(plant.rational, dead_time_s=dead_time)
    filter_s = gains.filter_s + 0.5 * scan_s if gains.kd != 0.0 else gains.filter_s
    return replace(plant, dead_time_s=dead_time, rational=rational), replace(gains, filter_s=filter_s)


def scan_matters(plant: Plant, gains: Gains, scan_s: float) -> ScanEffect:
    """Return whether a scan interval is small beside the dead time and lag of a plant, in a word and a sentence.

    Lag: the slowest time of the plant besides integration; where it has none and no dead time either, the time in which
    the proportional (else the integral) action alone brings the loop to rest.
    """
    _checked(scan_s)
    poles = np.abs(np.roots(plant.denominator))
    poles = poles[poles > 0.0]
    span = plant.dead_time_s + (1.0 / float(poles.min()) if len(poles) else 0.0)
    if span == 0.0:
        rate = abs(plant.gain) * (abs(gains.kp) or abs(gains.ki))
        span = 1.0 / rate if rate > 0.0 else scan_s
    share = scan_s / span
    said = f"the scan interval is {100 * share:.2g} % of dead time and lag together"
    if not share > _NOTICEABLE:
        return ScanEffect(word="small", sentence=f"{said}: too little to matter", share=share)
    if not share > _LARGE:
        return ScanEffect(
            word="noticeable", sentence=f"{said}: it costs damping, like half of it in dead time", share=share
        )
    return ScanEffect(
        word="large", sentence=f"{said}: only the roots of the sampled loop tell its damping", share=share
    )


def _checked(scan_s: float) -> float:
    if not (math.isfinite(scan_s) and scan_s > 0.0):
        raise UsageError(f"a scan interval is a number above 0 s, not {scan_s!r}")
    return scan_s


def _pulse(plant: Plant, scan_s: float, *, late: bool) -> _Pulse:
    numerator, denominator = np.array(plant.numerator), np.array(plant.denominator)
    order = len(denominator) - 1
    a = denominator / denominator[0] * scan_s ** np.arange(order + 1)  # time in scans
    b = np.zeros(order + 1)
    b[order + 1 - len(numerator) :] = numerator / denominator[0]
    b *= scan_s ** np.arange(order + 1)
    direct = float(b[0])
    held = np.zeros((order + 1, order + 1))  # x and a held input
    if order:
        held[0, :order] = -a[1:]
        held[0, order] = 1.0
        held[range(1, order), range(order - 1)] = 1.0
    delay = plant.dead_time_s / scan_s
    scans = math.floor(delay + 1e-9)
    part = max(0.0, delay - scans)
    whole, rest, start = exponential(held), exponential(held * (1.0 - part)), exponential(held * part)
    return _Pulse(
        step=whole[:order, :order],
        early=rest[:order, order],
        late=rest[:order, :order] @ start[:order, order],
        whole=whole[:order, order],
        row=b[1:] - direct * a[1:],
        direct=direct,
        scans=scans + int(late),
    )


def _peak_scan(s: Complex, twice: Complex, first: int) -> tuple[float, float]:
    """Scan and height of the largest deviation from scan `first` on, of modes exp(s k)."""
    later = np.geomspace(1.0, max(2.0, 5.0 / -float(s[0].real)), 300).astype(int)
    at = first + np.unique(np.concatenate((np.arange(100), later)))
    course = np.abs((twice @ np.exp(s[:, None] * at)).real)
    top = int(course.argmax())
    if 0 < top < len(at) - 1 and at[top + 1] - at[top - 1] > 2:
        at = np.arange(at[top - 1], at[top + 1] + 1)
        course = np.abs((twice @ np.exp(s[:, None] * at)).real)
        top = int(course.argmax())
    return float(at[top]), float(course[top])


def _open_course(pulse: _Pulse, gains: Gains, scan_s: float) -> Array:
    n = len(pulse.row)
    held = np.eye(n + 1)
    held[:n, :n], held[:n, n] = pulse.step, pulse.whole
    row = np.append(pulse.row, pulse.direct)
    if gains.ki == 0.0:  # an impulse: the load of one scan over its length
        held[n, n] = 0.0
        row = row / scan_s
    return np.abs(course_of(held, np.eye(n + 1, 1, -n), row, pulse.scans + 1))


def _matrices(pulse: _Pulse, gains: Gains, scan_s: float) -> tuple[Array, Array, Array]:
    """Matrix, load column and measurement row of the state x, u[k-1..k-m-1], I, D, y[k-1] without I or D where unused."""
    n, m = len(pulse.row), pulse.scans
    first = n + m + 1
    integral, derivative = int(gains.ki != 0.0), 2 * int(gains.kd != 0.0)
    size = first + integral + derivative
    unit = np.eye(size + 1)  # the last column: a load at the plant's input, held over the scan
    y = np.zeros(size + 1)
    y[:n], y[first - 1], y[size] = pulse.row, pulse.direct, pulse.direct
    out = np.zeros((size, size + 1))
    u = -gains.kp * y
    if integral:
        out[first] = unit[first] - gains.ki * scan_s * y
        u = u + out[first]
    if derivative:
        at = first + integral
        out[at] = (gains.filter_s * unit[at] - gains.kd * (y - unit[at + 1])) / (gains.filter_s + scan_s)
        out[at + 1] = y
        u = u + out[at]
    out[:n, :n] = pulse.step
    out[:n, size] = pulse.whole
    out[:n] += np.outer(pulse.late, unit[first - 1]) + np.outer(pulse.early, u if m == 0 else unit[first - 2])
    out[n] = u
    out[range(n + 1, first), range(n, first - 1)] = 1.0
    return out[:, :size], out[:, size], y[:size]


def _modes(pulse: _Pulse, gains: Gains, scan_s: float) -> tuple[Complex, Complex]:
    """Roots with imaginary part at least 0 and residues of the answer, y[k] = sum of residue z^(k-1), to a pulse load."""
    from scipy.linalg import eig

    for apart in (1.0, 1.0 + _APART):
        shifted = replace(pulse, early=pulse.early * apart, late=pulse.late * apart)
        matrix, load, row = _matrices(shifted, gains, scan_s)
        found: tuple[Complex, Complex, Complex] = eig(matrix, left=True, right=True)  # type: ignore[assignment]
        z, left, right = found
        kept = (z.imag >= 0.0) & (np.abs(z) > _DEAD)
        z, left, right = z[kept], left[:, kept].conj(), right[:, kept]
        norm = np.sum(left * right, axis=0)
        if not _multiple(np.log(z)):
            break
    return z, (row @ right) * (load @ left) / np.where(norm == 0.0, np.finfo(float).tiny ** 0.5, norm)


def _multiple(s: Complex) -> bool:
    both = np.concatenate((s, s[s.imag > 0.0].conj()))
    gap = np.abs(both[:, None] - both) + np.diag(np.full(len(both), math.inf))
    return bool((gap < _NEAR_MULTIPLE * np.abs(both)).any())


def _long_roots(plant: Plant, gains: Gains, pulse: _Pulse, scan_s: float, *, late: bool) -> tuple[Complex, bool]:
    """Roots near those of the stand-in, and whether each of those led to one, all different.

    Aberth's simultaneous iteration (1973): Newton's with all roots repelling each other, so that a pair of the stand-in
    can become two real roots; the turn of the starts breaks the symmetry that would keep it from that.
    """
    stand_in = certified_roots(characteristic(*with_scan(plant, gains, scan_s, late=late)))
    start = first_roots(stand_in.upper, 2 * len(stand_in.upper)) * (scan_s * (1.0 + 1e-3j))
    s = start
    with np.errstate(all="ignore"):
        for _ in range(20):
            value, slope = _loop_slope(pulse, gains, scan_s, s)
            newton = value / slope
            gap = s[:, None] - s
            np.fill_diagonal(gap, math.inf)
            step = newton / (1.0 - newton * (1.0 / gap).sum(axis=1))
            s = s - step
    kept = (np.abs(step) < 1e-6 * np.abs(s)) & (np.abs(s - start) < 0.5 * np.abs(start))
    s = s[kept]
    s = np.where(np.abs(s.imag) < 1e-8 * np.abs(s), s.real, s)
    s = s[s.imag >= 0.0]
    s = s[np.argsort(-s.real, kind="stable")]
    return np.exp(first_roots(s, 2 * len(s))), stand_in.complete and bool(kept[: len(stand_in.roots)].all())


def _long_residues(pulse: _Pulse, gains: Gains, scan_s: float, z: Complex) -> Complex:
    _, slope = _loop_slope(pulse, gains, scan_s, np.log(z))
    own, load = _raised(pulse, z, np.outer(np.ones(len(z)), pulse.whole))
    _, below = _control(gains, scan_s, z)
    return (load + pulse.direct * own) * below * z**2 / slope  # y[k] = residue z^(k-1); slope in s, z times that in z


def _loop_slope(pulse: _Pulse, gains: Gains, scan_s: float, s: Complex) -> tuple[Complex, Complex]:
    """Characteristic function of the sampled loop at s per scan and its slope by central differences."""
    step = 1e-5 * np.abs(s) + 1e-12
    low, mid, high = (_loop_value(pulse, gains, scan_s, x) for x in (s - step, s, s + step))
    return mid, (high - low) / (2.0 * step)


def _loop_value(pulse: _Pulse, gains: Gains, scan_s: float, s: Complex) -> Complex:
    """1 + K G times the denominators of both, so that it has no poles: a root may lie next to one of the plant's."""
    z = np.asarray(np.exp(s), dtype=complex)
    own, answer = _raised(pulse, z, pulse.early + np.multiply.outer(1.0 / z, pulse.late))
    above, below = _control(gains, scan_s, z)
    return np.asarray(own * below + above * (answer + pulse.direct * own / z) * np.exp(-pulse.scans * s), dtype=complex)


def _control(gains: Gains, scan_s: float, z: Complex) -> tuple[Complex, Complex]:
    """Numerator and denominator of the controller, as the factors that it has."""
    above, below = gains.kp * np.ones_like(z), np.ones_like(z)
    if gains.ki != 0.0:
        above, below = above * (z - 1.0) + gains.ki * scan_s * z, z - 1.0
    if gains.kd != 0.0:
        lag = (gains.filter_s + scan_s) * z - gains.filter_s
        above, below = above * lag + gains.kd * (z - 1.0) * below, below * lag
    return above, below


def _raised(pulse: _Pulse, z: Complex, columns: Array | Complex) -> tuple[Complex, Complex]:
    """det(z - step), and row adj(z - step) column as what a rank-one change adds to it; z (m,), columns (m, n)."""
    matrix = z[:, None, None] * np.eye(len(pulse.row)) - pulse.step
    own = np.linalg.det(matrix)
    return own, np.linalg.det(matrix + columns[:, :, None] * pulse.row) - own

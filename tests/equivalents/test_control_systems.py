"""python-control systems in and out: values as python-control itself evaluates them."""

from __future__ import annotations

import copy
import math

import control
import numpy as np
import pytest

import loopfit
from loopfit.core.errors import RecordError, UsageError
from loopfit.equivalents.interchange import from_control, to_control, transfer_of_equivalent
from loopfit.equivalents.result import Equivalent
from loopfit.model.transfer import transfer_of

POINTS = np.array([0.3j, 1.7j, 0.4 + 0.2j, 5.0j, 2.0 + 0j])


def random_states(order: int, seed: int, *, direct: bool = False) -> control.StateSpace:
    """A state space with poles within the unit disc about -1, by a random change of basis."""
    rng = np.random.default_rng(seed)
    A = rng.normal(size=(order, order)) / math.sqrt(order) * 0.7 - np.eye(order)
    return control.ss(A, rng.normal(size=(order, 1)), rng.normal(size=(1, order)), float(direct))


@pytest.mark.parametrize("seed", range(8))
@pytest.mark.parametrize("direct", [False, True])
def test_state_space_has_the_value_that_the_library_gives(seed: int, direct: bool) -> None:
    """Order at most 6, well conditioned: 1e-9 leaves six digits for the rounding of coefficients."""
    system = random_states(1 + seed % 6, seed, direct=direct)
    transfer = from_control(system)
    np.testing.assert_allclose(transfer(POINTS), [system(s) for s in POINTS], rtol=1e-9)
    assert len(transfer.numerator) == len(transfer.denominator) - (0 if direct else 1)


@pytest.mark.parametrize("seed", range(6))
def test_rounding_makes_no_zeros(seed: int) -> None:
    """1/((s+1)(s+2)(s+3)(s+4)) in a random basis has no zeros, although C B is some 1e-16 and not 0."""
    basis = np.linalg.qr(np.random.default_rng(seed).normal(size=(4, 4)))[0]
    A = np.zeros((4, 4))
    A[0], A[1:, :3] = -np.poly([-1, -2, -3, -4])[1:], np.eye(3)
    B, C = np.eye(4)[:, :1], np.eye(4)[3:]
    transfer = from_control(control.ss(basis @ A @ basis.T, basis @ B, C @ basis.T, 0))
    assert len(transfer.numerator) == 1
    np.testing.assert_allclose(transfer(POINTS), 1 / np.polyval(np.poly([-1, -2, -3, -4]), POINTS), rtol=1e-9)


@pytest.mark.parametrize("kind", [control.tf, lambda *a: control.ss(control.tf(*a))])
def test_nothing_of_the_system_is_changed(kind: object) -> None:
    system = kind([2.0, 3.0], [1.0, 2.0, 3.0, 4.0])  # type: ignore[operator]
    system.name = "heater"
    before, value = copy.deepcopy(system), system(0.3j)
    from_control(system)
    loopfit.equivalent(system)
    assert system.name == "heater"
    assert repr(system) == repr(before)  # names, signals and coefficients
    assert system(0.3j) == value


def test_there_and_back() -> None:
    for top, bottom in (([2.0], [3.0, 4.0, 1.0]), ([1.0, 2.0], [1.0, 0.4, 1.0, 0.0]), ([1.0, 5.0], [1.0, 2.0])):
        transfer = transfer_of(top, bottom)
        system = to_control(transfer)
        np.testing.assert_allclose([system(s) for s in POINTS], transfer(POINTS), rtol=1e-13)
        assert from_control(system) == transfer
    assert from_control(control.tf([1.0], [1.0, 1.0]), dead_time_s=2.0).dead_time_s == 2.0


@pytest.mark.parametrize("order", [1, 2, 3])
def test_dead_time_by_pade(order: int) -> None:
    """Error of the diagonal approximant to exp: (n!)^2 / ((2n)! (2n+1)!) |x|^(2n+1) to leading order (from memory:
    Baker & Graves-Morris, Pade Approximants); a tenth more for what follows at |x| = 0.5.
    """
    transfer = transfer_of([2.0], [3.0, 4.0, 1.0], 2.5)
    s = 0.2j
    exact = complex(transfer(np.array([s]))[0])
    bound = (
        math.factorial(order) ** 2 / math.factorial(2 * order) / math.factorial(2 * order + 1) * 0.5 ** (2 * order + 1)
    )
    error = abs(to_control(transfer, pade_order=order)(s) / exact - 1)
    assert 0.5 * bound < error < 1.1 * bound


@pytest.mark.parametrize("order", [None, 0, 1.5, True])
def test_dead_time_is_not_dropped_in_silence(order: int | None) -> None:
    with pytest.raises(UsageError, match=r"dead time of 1 s|at least 1"):
        to_control(transfer_of([1.0], [1.0, 1.0], 1.0), pade_order=order)


def test_equivalent_as_a_system() -> None:
    pair = Equivalent(method="m", gain=2.0, damping_ratio=0.5, natural_frequency_rad_s=3.0, dead_time_s=0.0, zero_s=0.2)
    s = 0.7 + 1.1j
    assert to_control(pair)(s) == pytest.approx(2 * (0.2 * s + 1) * 9 / (s * s + 3 * s + 9), rel=1e-12)
    lag = Equivalent(method="m", gain=2.0, dead_time_s=1.0, time_constants_s=(4.0,))
    assert transfer_of_equivalent(lag) == transfer_of([2.0], [4.0, 1.0], 1.0)
    assert transfer_of_equivalent(lag, integrating=True) == transfer_of([2.0], [4.0, 1.0, 0.0], 1.0)
    with pytest.raises(UsageError, match="repeated poles"):
        to_control(Equivalent(method="m", reason="repeated poles"))


def test_chosen_equivalent_of_an_integrating_system_integrates() -> None:
    result = loopfit.equivalent("3/(s*(s+1)*(2*s+1))")
    s = 0.4j
    assert to_control(result)(s) == pytest.approx(3 / (s * (s + 1) * (2 * s + 1)), rel=1e-12)
    with pytest.raises(UsageError, match="no method"):
        to_control(loopfit.equivalent("s/(s+1)^2"))


REFUSED = {
    "discrete": (lambda: control.tf([1], [1, 0.5], 0.1), "discrete"),
    "discrete, dt True": (lambda: control.tf([1], [1, 0.5], True), "discrete"),
    "several": (lambda: control.ss(-np.eye(2), np.eye(2), np.eye(2), np.zeros((2, 2))), "2 inputs and 2 outputs"),
    "frequency response": (lambda: control.frd([1.0, 0.5], [1.0, 2.0]), "frequency response data"),
    "nonlinear": (
        lambda: control.nlsys(lambda _t, x, _u, _p: -x, None, inputs=1, outputs=1, states=1),
        "no linear system",
    ),
}


@pytest.mark.parametrize("name", REFUSED)
def test_refused_in_words(name: str) -> None:
    make, words = REFUSED[name]
    with pytest.raises(UsageError, match=words):
        from_control(make())
    with pytest.raises(UsageError, match=words):
        loopfit.equivalent(make())


def test_improper_and_zero() -> None:
    with pytest.raises(RecordError, match="differentiates"):
        from_control(control.tf([1, 0, 0], [1, 1]))
    with pytest.raises(RecordError, match="zero"):
        from_control(control.ss([[-1.0]], [[0.0]], [[1.0]], [[0.0]]))


def test_one_public_way_for_whatever_has_a_transfer_function() -> None:
    """1/((2 s + 1)(s + 1)) by hand, from each kind."""
    s = np.array([0.3j, 1.0 + 2.0j])
    expected = 3.0 / ((2 * s + 1) * (s + 1))
    found = loopfit.equivalent("3/((2*s+1)*(s+1))")
    assert found.best is not None
    plant = loopfit.Plant(gain=3.0, time_constants_s=(2.0, 1.0))
    for kind in (found, found.best, plant, transfer_of([3.0], [2.0, 3.0, 1.0])):
        assert loopfit.to_control(kind)(s) == pytest.approx(expected, rel=1e-12)
    late = loopfit.Plant(gain=3.0, time_constants_s=(2.0, 1.0), dead_time_s=0.4)
    with pytest.raises(UsageError, match="pade_order"):
        loopfit.to_control(late)
    # a Pade approximation of third order is off by about (0.4 |s|)^7 / 100800 (from memory): below 1e-6 here
    approximate = loopfit.to_control(late, pade_order=3)(s)
    assert approximate == pytest.approx(expected * np.exp(-0.4 * s), rel=1e-5)


def test_what_has_no_transfer_function_is_told() -> None:
    with pytest.raises(UsageError, match="str has no transfer function"):
        loopfit.to_control("1/s")  # type: ignore[arg-type]

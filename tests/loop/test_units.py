"""What a person types for times, rates and gains, and the trade's conversions of them."""

from __future__ import annotations

import pickle

import pytest
from hypothesis import given
from hypothesis import strategies as st

from loopfit.core.errors import UsageError
from loopfit.loop.settings import Settings
from loopfit.loop.units import PER_SECOND, SECONDS, derivative_of, from_unit, in_unit, integral_of, time_of

TIMES = [
    ("2.5min", 150.0), ("2.5 min", 150.0), ("0.5 s", 0.5), ("7", 7.0), ("1e2", 100.0), (".5h", 1800.0), ("+3 sec", 3.0),
    ("500ms", 0.5), ("2 Minutes", 120.0), ("1.E1MIN", 600.0),
]  # fmt: skip
RATES = [
    ("0.8/min", 0.8 / 60), ("0.01/s", 0.01), ("0.8 1/min", 0.8 / 60), ("0.8 repeats/min", 0.8 / 60),
    ("0.8 repeats per minute", 0.8 / 60), ("3 per h", 3 / 3600), ("2rep/s", 2.0),
]  # fmt: skip


@pytest.mark.parametrize(("text", "seconds"), TIMES)
def test_times(text: str, seconds: float) -> None:
    for read in (time_of, integral_of, derivative_of):
        entry = read(text)
        assert entry is not None
        assert not entry.is_rate
        assert entry.amount == pytest.approx(seconds, rel=1e-15), "60 s a minute, 60 min an hour"


@pytest.mark.parametrize(("text", "per_second"), RATES)
def test_rates(text: str, per_second: float) -> None:
    for form in ("ideal", "series", "parallel"):
        entry = integral_of(text, form=form)
        assert entry is not None
        assert entry.is_rate
        assert entry.amount == pytest.approx(per_second, rel=1e-15)


@pytest.mark.parametrize("text", ["off", "OFF", " Off "])
def test_off_is_no_term(text: str) -> None:
    assert time_of(text) is None
    assert integral_of(text, form="parallel") is None
    assert derivative_of(text, form="parallel") is None


def test_a_plain_number_follows_the_form() -> None:
    in_parallel, in_ideal = integral_of("0.02", form="parallel"), integral_of("0.02")
    assert in_parallel is not None
    assert in_ideal is not None
    assert (in_parallel.unit, in_ideal.unit) == ("/s", "s")
    assert derivative_of("0.5min", form="parallel") == derivative_of("0.5 min")


BAD_TIMES = [
    ("nan", "not 'nan'"), ("inf", "not 'inf'"), ("-inf", "not '-inf'"), ("", "not ''"), ("min", "not 'min'"),
    ("0", "above 0, not 0: write off"), ("0min", "above 0, not 0"), ("-2min", "above 0, not -2"),
    ("1e999", "finite number, not inf"), ("1e308h", "finite number, not inf"),
    ("2,5min", "not '2,5min'"), ("2.5.1min", "not '2.5.1min'"), ("5 m", "'m' is not known; known are ms, s, min, h for"),
    ("5 fortnights", "'fortnights' is not known"), ("5 %", "'%' is not known"), ("5min 30s", "'min 30s' is not known"),
    ("5/ms", "'/ms' is not known"), ("5/", "'/' is not known"), ("٣", "not '٣'"), ("1_0", "'_0' is not known"),
]  # fmt: skip


@pytest.mark.parametrize(("text", "words"), BAD_TIMES)
def test_no_time(text: str, words: str) -> None:
    for read in (time_of, integral_of, derivative_of):
        with pytest.raises(UsageError) as caught:
            read(text, "derivative")
        assert words in str(caught.value)
        assert str(caught.value).startswith("derivative ")
        assert "\n" not in str(caught.value)
        assert str(pickle.loads(pickle.dumps(caught.value))) == str(caught.value)


def test_a_rate_is_no_derivative_and_a_time_no_parallel_integral() -> None:
    for form in ("ideal", "parallel"):
        with pytest.raises(UsageError, match=r"not a rate such as '0.8/min'"):
            derivative_of("0.8/min", form=form)
    with pytest.raises(UsageError, match=r"of the parallel form is a gain per time such as 2.5/min, not a time"):
        integral_of("2.5min", form="parallel")
    with pytest.raises(UsageError, match="not 0: write off"):
        integral_of("0", form="parallel")
    with pytest.raises(UsageError, match="a text such as"):
        time_of(2.5)  # type: ignore[arg-type]


@given(amount=st.floats(1e-9, 1e9), unit=st.sampled_from([*SECONDS, *PER_SECOND]))
def test_units_there_and_back(amount: float, unit: str) -> None:
    assert from_unit(in_unit(amount, unit), unit) == pytest.approx(amount, rel=1e-15)


IDENTITY = "identity: band = 100 / gain in % per % (IEC 60050-351: proportional band), from memory"


@pytest.mark.parametrize(("band", "gain"), [(40.0, 2.5), (250.0, 0.4)])
def test_proportional_band(band: float, gain: float) -> None:
    settings = Settings(proportional_band_percent=band)
    assert settings.gains.kp == pytest.approx(gain, rel=1e-15), IDENTITY
    back = Settings.from_gains(Settings(gain=gain).gains, like=settings)
    assert back.proportional_band_percent == pytest.approx(band, rel=1e-15), IDENTITY
    assert "to be in % already" in " ".join(settings.in_words())


def test_gain_over_the_spans() -> None:
    settings = Settings(gain=2.0, measurement_range=(0, 400), output_range=(0, 100), integral_time_s=10.0)
    # gain 2 %/% on a 0-400 degree transmitter and a 0-100 % valve = 0.5 % per degree: identity
    assert settings.gains.kp == 0.5
    assert settings.gains.ki == pytest.approx(0.05, rel=1e-15)
    wide = Settings(proportional_band_percent=50.0, measurement_range=(0, 400), output_range=(0, 100))
    assert wide.gains.kp == 0.5
    assert Settings.from_gains(wide.gains, like=settings).gain == 2.0


def test_repeats() -> None:
    settings = Settings.from_entry(gain=2.0, integral="5min", derivative="0.5min")
    # integral time 5 min = 0.2 repeats per min = 300 s; Ki 0.4 per min, Td 30 s, Kd 60 s at gain 2: identity
    assert settings.integral_time_s == 300.0
    assert settings.derivative_time_s == 30.0
    repeats = Settings.from_entry(gain=2.0, integral="0.2/min", derivative="0.5min")
    assert repeats.integral_time_s == pytest.approx(300.0, rel=1e-15)
    assert repeats.as_entered()["integral_repeats_per_min"] == 0.2
    parallel = Settings.from_gains(
        repeats.gains, like=Settings.from_entry("parallel", gain=1.0, integral="1/min", derivative="1")
    )
    assert parallel.as_entered()["integral_gain_per_min"] == pytest.approx(0.4, rel=1e-12)
    assert parallel.derivative_gain_s == pytest.approx(60.0, rel=1e-15)

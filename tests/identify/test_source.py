"""What may be given for a plant: files, records, analyses, plants, and several of one kind."""

from __future__ import annotations

from dataclasses import replace

import pytest
from recorded_loops import PLANTS, automatic, record_of

from loopfit.core.errors import UsageError
from loopfit.identify.identified import Identified
from loopfit.identify.source import identify_source
from loopfit.loop.plant import Plant
from loopfit.model.transfer import transfer_of
from loopfit.record.record import Record


def of(source: object, **reading: object) -> Identified:
    return identify_source(source, None, confidence=0.95, reading=reading)


def test_plants_are_operating_points() -> None:
    plants = [PLANTS["two lags"], PLANTS["one lag"]]
    found = of(plants)
    assert (found.how, found.plant) == ("given", plants[0])
    assert found.draws == found.fresh == tuple(plants)


def test_a_transfer_among_plants() -> None:
    found = of([PLANTS["two lags"], transfer_of([3.0], [5.0, 1.0], 1.0)])
    assert [plant.gain for plant in found.draws] == [2.0, 3.0]


def test_one_plant_has_no_draws() -> None:
    for source in (PLANTS["one lag"], [PLANTS["one lag"]]):
        assert of(source).plant == PLANTS["one lag"]
        assert of(source).draws == ()


def test_plants_that_no_controller_serves() -> None:
    with pytest.raises(UsageError, match="both signs"):
        of([Plant(gain=1.0), Plant(gain=-1.0)])


def test_plants_and_records_are_not_mixed() -> None:
    with pytest.raises(UsageError, match="not both"):
        of([PLANTS["two lags"], record_of(automatic("two lags", seed=71))])


def test_a_plant_is_not_read() -> None:
    with pytest.raises(UsageError, match="only a record is read"):
        of([PLANTS["two lags"]], interval_s=1.0)


def test_what_is_no_source() -> None:
    with pytest.raises(UsageError, match="not float"):
        of(1.5)


def named(role: str, name: str, unit: str | None, seed: int) -> Record:
    record = record_of(automatic("two lags", seed=seed))
    signal = getattr(record, role)
    return replace(record, **{role: replace(signal, name=name, unit=unit)})


@pytest.mark.parametrize("role", ["measurement", "output"])
@pytest.mark.parametrize(
    ("one", "other"),
    [
        (("value", "degC"), ("value", "bar")),
        (("temperature", None), ("pressure", None)),
        (("TIC101.PV", None), ("TIC205.PV", None)),
    ],
)
def test_records_of_different_loops(role: str, one: tuple[str, str | None], other: tuple[str, str | None]) -> None:
    with pytest.raises(UsageError, match="not of one loop") as caught:
        of([named(role, *one, seed=72), named(role, *other, seed=73)])
    text = str(caught.value)
    assert "\n" not in text
    assert all(word in text for word in (*one, *other) if word is not None)


@pytest.mark.parametrize(
    ("one", "other"),
    [
        (("temperature", "degC"), ("temperature", None)),
        (("PV", None), ("temperature", None)),
        (("temp 1", None), ("Temperature", None)),
        (("TIC101.PV", "bar"), ("TIC101_PV", "bar")),
    ],
)
def test_records_that_can_be_of_one_loop(one: tuple[str, str | None], other: tuple[str, str | None]) -> None:
    found = of([named("measurement", *one, seed=72), named("measurement", *other, seed=73)])
    assert "records_agree" in [finding.code for finding in found.findings]

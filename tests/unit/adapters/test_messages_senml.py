"""SenML packs (RFC 8428) as readings."""

from __future__ import annotations

import json
from dataclasses import dataclass

import pytest

from platewatch.adapters.messages import Decoded, Reason, Routes

S = 1_000_000
NOW = 1_772_352_000 * S  # 2026-03-01T08:00:00Z


@dataclass(frozen=True)
class Senml:
    topic: str = "gw/pack"
    means: str = "readings"
    payload: str = "senml"
    value: str = ""
    time: str = ""
    time_unit: str = ""


def pack(*records: dict[str, object], entry: Senml | None = None, unit: str = "degC") -> Decoded:
    routes = Routes(
        "p1",
        {"T1": unit, "T2": "mV"},
        {"Z1": 1.0, "Z2": 100.0},
        ["surround/ambient"],
        unit,
        [entry or Senml()],
    )
    return routes.decode("gw/pack", json.dumps(records).encode(), NOW)


def test_base_values_hold_for_the_records_that_follow() -> None:
    """The worked example of RFC 8428 section 5.1.3 (from memory), with our names:
    base name, base time and base unit; times of records are added to the base time."""
    found = pack(
        {"bn": "sensor/", "bt": NOW / S - 10, "bu": "Cel", "n": "T1", "v": 120.1},
        {"n": "T1", "t": 5, "v": 120.2},
        {"bn": "plates/p1/", "n": "surround/ambient", "v": 22.0},
    )
    assert [(r.channel, r.at_us - NOW, r.value) for r in found.readings] == [
        ("sensor/T1", -10 * S, 120.1),
        ("sensor/T1", -5 * S, 120.2),
        ("surround/ambient", -10 * S, 22.0),
    ]


def test_times_below_two_to_the_28_are_relative_to_arrival() -> None:
    """RFC 8428 section 4.5.3: -5 is five seconds ago, none is now, 2**28 is in 1978."""
    found = pack({"n": "sensor/T1", "v": 1, "t": -5}, {"n": "surround/ambient", "v": 2})
    assert [r.at_us - NOW for r in found.readings] == [-5 * S, 0]
    ahead = pack({"n": "sensor/T1", "v": 1, "t": 5})
    assert ahead.refusals[0].reason is Reason.FUTURE
    assert pack({"n": "sensor/T1", "v": 1, "t": 2**28}).refusals[0].reason is Reason.BAD_TIME


@pytest.mark.parametrize(
    ("channel", "unit", "value", "expected"),
    [
        ("sensor/T1", "Cel", 120.0, 120.0),
        ("sensor/T1", "K", 393.15, 120.0),
        ("zone/Z1/duty", "/", 0.45, 0.45),
        ("zone/Z1/duty", "%", 45.0, 0.45),
        ("zone/Z2/duty", "/", 0.45, 45.0),
        ("zone/Z2/duty", "%", 45.0, 45.0),
    ],
)
def test_units_become_that_of_the_channel(
    channel: str, unit: str, value: float, expected: float
) -> None:
    """Cel and K to degrees Celsius (0 degC = 273.15 K), / and % to the declared duty scale."""
    (reading,) = pack({"n": channel, "u": unit, "v": value}).readings
    assert reading.value == pytest.approx(expected, abs=1e-12)


def test_a_fahrenheit_plate_gets_fahrenheit() -> None:
    """212 degF is 100 degC."""
    (reading,) = pack({"n": "sensor/T1", "u": "Cel", "v": 100.0}, unit="degF").readings
    assert reading.value == pytest.approx(212.0, abs=1e-12)


@pytest.mark.parametrize(
    ("record", "expected"),
    [
        ({"n": "sensor/T1", "u": "W", "v": 1}, Reason.WRONG_UNIT),
        ({"n": "zone/Z1/duty", "u": "Cel", "v": 1}, Reason.WRONG_UNIT),
        ({"n": "sensor/T9", "v": 1}, Reason.UNKNOWN_CHANNEL),
        ({"n": "sensor/T1", "vs": "hot"}, Reason.NOT_A_NUMBER),
        ({"n": "sensor/T1", "vb": True}, Reason.NOT_A_NUMBER),
        ({"n": "sensor/T1", "s": 7.0}, Reason.NOT_A_NUMBER),
        ({"n": "sensor/T1", "v": "1"}, Reason.NOT_A_NUMBER),
        ({"n": "sensor/T1", "v": 1, "bver": 11}, Reason.NOT_JSON),
        ({"n": "sensor/T1", "v": 1, "scale_": 10}, Reason.NOT_JSON),
        ({"n": "sensor/T1", "u": "K", "v": -1}, Reason.OUT_OF_RANGE),
    ],
)
def test_a_record_that_is_not_understood_is_refused(
    record: dict[str, object], expected: Reason
) -> None:
    """Wrong unit, no number, newer version, members that must be understood (section 4.4)."""
    found = pack(record)
    assert not found.readings
    assert found.refusals[0].reason is expected


def test_a_base_value_is_added() -> None:
    """RFC 8428 section 4.1: bv is added to the v of the records that follow; alone it is
    no value, so a record without v is not one of 100 degC."""
    found = pack({"bn": "sensor/", "bv": 100.0}, {"n": "T1", "v": 20.0}, {"n": "T1", "t": -1})
    assert [r.value for r in found.readings] == [120.0]
    assert [r.reason for r in found.refusals] == [Reason.NOT_A_NUMBER]


def test_a_text_record_does_not_cost_the_numbers_beside_it() -> None:
    """Gateways put their firmware name into the same pack."""
    found = pack({"n": "firmware", "vs": "1.2"}, {"n": "sensor/T1", "v": 120.0})
    assert [r.value for r in found.readings] == [120.0]
    assert [r.channel for r in found.refusals] == ["firmware"]


def test_a_topic_of_one_channel_takes_the_record_that_is_named() -> None:
    """A device that sends its own names is mapped by the record's full name."""
    entry = Senml(means="sensor/T1", value="urn:dev:ow:10e2/temp")
    found = pack(
        {"bn": "urn:dev:ow:10e2/", "n": "temp", "u": "Cel", "v": 23.1},
        {"n": "volt", "u": "V", "v": 3.3},
        entry=entry,
    )
    assert [(r.channel, r.value) for r in found.readings] == [("sensor/T1", 23.1)]
    gone = pack({"n": "other", "v": 1}, entry=entry)
    assert gone.refusals[0].reason is Reason.NO_VALUE

"""What the bus says, as readings, batch events and refusals."""

from __future__ import annotations

from dataclasses import dataclass

import pytest

from platewatch import units
from platewatch.adapters.messages import Decoded, Reason, Routes
from platewatch.errors import SettingsError
from platewatch.types import Flag

NOW = units.from_iso("2026-03-01T08:00:00Z")
S = 1_000_000


@dataclass(frozen=True)
class Channel:
    topic: str
    means: str
    payload: str = "number"
    value: str = ""
    time: str = ""
    time_unit: str = ""


def routes(*maps: Channel, unit: str = "degC") -> Routes:
    return Routes(
        "p1",
        {"T1": "degC", "T2": "mV", "T3": "degF"},
        {"Z1": 1.0, "Z2": 100.0},
        ["surround/ambient"],
        unit,
        maps,
    )


def on(channel: str, payload: bytes | str, *maps: Channel, **how: bool) -> Decoded:
    body = payload if isinstance(payload, bytes) else payload.encode()
    return routes(*maps).decode(f"plates/p1/{channel}", body, NOW, **how)


def reason(found: Decoded) -> Reason:
    assert not found.readings
    assert not found.events
    (refusal,) = found.refusals
    return refusal.reason


def test_a_bare_number_is_stamped_with_its_arrival() -> None:
    """A payload without a time has arrival as its time."""
    (reading,) = on("sensor/T1", "121.3").readings
    assert (reading.at_us, reading.channel, reading.value) == (NOW, "sensor/T1", 121.3)
    assert (reading.seen_us, reading.flags) == (NOW, Flag.NONE)


@pytest.mark.parametrize(
    "payload",
    [
        "NaN",
        "Infinity",
        "-Infinity",
        "1e999",
        "true",
        "null",
        '"121.3"',
        "",
        "12,5",
        "0x10",
        "[121.3]",
        '{"v": 1}',
        "1 2",
        "9" * 400,
        "[" * 100_000,
        b"\xff\xfe",
        b"\x00",
        b"12\x00",
    ],
)
def test_what_is_no_number_is_refused_with_an_excerpt(payload: bytes | str) -> None:
    """NaN, infinities, text, true, deep JSON and bytes that are no UTF-8 are no temperature."""
    found = on("sensor/T1", payload)
    assert reason(found) in (Reason.NOT_A_NUMBER, Reason.TOO_LARGE)
    assert found.refusals[0].channel == "sensor/T1"
    assert len(found.refusals[0].excerpt) < 300


def test_a_message_beyond_the_size_limit_is_not_looked_at() -> None:
    """Inputs are hostile: 64 KiB a message, no more."""
    assert on("sensor/T1", b" " * 65_535 + b"1").readings
    assert reason(on("sensor/T1", b" " * 65_536 + b"1")) is Reason.TOO_LARGE


@pytest.mark.parametrize(
    ("channel", "value", "good"),
    [
        ("sensor/T1", -273.15, True),
        ("sensor/T1", -273.16, False),
        ("sensor/T1", 3000.1, False),
        ("sensor/T2", 120.0, False),
        ("zone/Z1/duty", 0.45, True),
        ("zone/Z1/duty", 45, False),
        ("zone/Z2/duty", 45, True),
        ("zone/Z1/duty", -0.1, False),
        ("zone/Z1/setpoint", 120, True),
    ],
)
def test_a_value_that_its_channel_cannot_have_is_refused(
    channel: str, value: float, good: bool
) -> None:
    """A duty of 45 on a 0..1 channel is a wrong scale; nothing is below absolute zero."""
    found = on(channel, str(value))
    assert bool(found.readings) is good
    if not good:
        kept = found.refusals[0].reading
        assert found.refusals[0].reason is Reason.OUT_OF_RANGE
        assert kept is not None
        assert (kept.value, kept.flags) == (value, Flag.REFUSED)


def test_an_unknown_channel_names_the_one_that_was_meant() -> None:
    """The operator of the gateway learns what to correct."""
    found = on("sensor/T99", "1")
    assert reason(found) is Reason.UNKNOWN_CHANNEL
    assert found.refusals[0].detail.startswith("sensor/T99; did you mean sensor/T")
    assert reason(routes().decode("elsewhere/x", b"1", NOW)) is Reason.UNKNOWN_TOPIC


def test_one_message_brings_many_channels_and_keeps_the_good_ones() -> None:
    """A wrong member of a flat message does not cost the others; null is a missing value."""
    found = on(
        "readings",
        '{"at": "2026-03-01T08:59:58.5+01:00", "sensor/T1": 121.3, "zone/Z1/duty": 0.4,'
        ' "sensor/T2": "open", "sensor/T3": null, "sensor/T8": 3}',
    )
    assert [(r.channel, r.value, NOW - r.at_us) for r in found.readings] == [
        ("sensor/T1", 121.3, 1_500_000),
        ("zone/Z1/duty", 0.4, 1_500_000),
    ]
    assert [r.reason for r in found.refusals] == [Reason.NOT_A_NUMBER, Reason.UNKNOWN_CHANNEL]


@pytest.mark.parametrize("value", ["true", '"121"', "[1]", "{}", "1e999"])
def test_a_member_that_is_no_number_is_never_taken_for_one(value: str) -> None:
    """A gateway that sends true for an open input must not be read as 1 degC."""
    found = on("readings", f'{{"sensor/T1": {value}}}')
    assert reason(found) in (Reason.NOT_A_NUMBER, Reason.NOT_JSON)


@pytest.mark.parametrize(
    "member",
    ['"at": "2026-03-01T08:00:00Z"', f'"at_ms": {NOW // 1000}', f'"at_us": {NOW}'],
)
def test_the_time_of_a_flat_message_is_exact_in_each_of_its_forms(member: str) -> None:
    """ISO 8601 with an offset, or integer ms or us under a name that says so."""
    (reading,) = on("readings", f'{{{member}, "sensor/T1": 1}}').readings
    assert reading.at_us == NOW


@pytest.mark.parametrize(
    "member",
    [
        '"at": "2026-03-01T08:00:00"',
        '"at": "yesterday"',
        f'"at": {NOW}',
        '"at_us": "1"',
        '"at_ms": true',
        f'"at_us": {NOW // 1_000_000}',
        f'"at_us": {NOW}, "at_ms": {NOW // 1000}',
        '"at": null',
    ],
)
def test_a_time_is_never_guessed(member: str) -> None:
    """No offset, text for a number, the wrong unit or two times: the message is refused."""
    found = on("readings", f'{{{member}, "sensor/T1": 1}}')
    assert reason(found) is Reason.BAD_TIME


def test_a_stamp_well_ahead_of_this_machine_is_refused() -> None:
    """A source clock in the future would close the ticks of all the others."""
    body = '{"at_us": %d, "sensor/T1": 1}'
    assert on("readings", body % (NOW + 120 * S)).readings
    assert reason(on("readings", body % (NOW + 120 * S + 1))) is Reason.FUTURE


def test_a_retained_value_is_last_known_and_never_live() -> None:
    """Retained values look live in many tools; here they carry the flag and are not used."""
    (reading,) = on("sensor/T1", "121.3", retain=True).readings
    assert reading.flags == Flag.RETAINED
    assert not reading.usable


def test_a_redelivery_is_doubtful_only_without_a_source_time() -> None:
    """With a source time the natural key (at_us, channel) makes redelivery harmless."""
    (bare,) = on("sensor/T1", "121.3", dup=True).readings
    (timed,) = on("readings", f'{{"at_us": {NOW}, "sensor/T1": 1}}', dup=True).readings
    assert bare.flags == Flag.MAYBE_DUPLICATE
    assert timed.flags == Flag.NONE


def test_a_plants_own_topic_and_json_layout_are_mapped() -> None:
    """[[channel]]: key paths and the unit of time as declared; it replaces the default topic."""
    entry = Channel("shop/line3/te-101", "sensor/T1", "json", "data.0.v", "ts", "ms")
    found = routes(entry)
    body = b'{"ts": %d, "data": [{"v": 99.5}]}' % (NOW // 1000 - 250)
    (reading,) = found.decode("shop/line3/te-101", body, NOW).readings
    assert (reading.channel, reading.value, NOW - reading.at_us) == ("sensor/T1", 99.5, 250_000)
    assert found.topics == ("plates/p1/#", "shop/line3/te-101")
    assert reason(found.decode("plates/p1/sensor/T1", b"1", NOW)) is Reason.MAPPED
    flat = found.decode("plates/p1/readings", b'{"sensor/T1": 1}', NOW)
    assert reason(flat) is Reason.MAPPED


@pytest.mark.parametrize(
    ("body", "expected"),
    [
        ('{"ts": 1, "data": []}', Reason.BAD_TIME),
        ('{"data": [{"v": 1}]}', Reason.NO_VALUE),
        (f'{{"ts": {NOW // 1000}, "data": [{{}}]}}', Reason.NO_VALUE),
        (f'{{"ts": {NOW // 1000}, "data": [{{"v": "1"}}]}}', Reason.NOT_A_NUMBER),
        (f'{{"ts": {NOW // 1000}, "data": [{{"v": NaN}}]}}', Reason.NOT_JSON),
        ("[" * 60_000, Reason.NOT_JSON),
        ("7", Reason.NO_VALUE),
    ],
)
def test_a_json_message_without_what_was_declared_is_refused(body: str, expected: Reason) -> None:
    """Each mistake has its own reason, so that the counters tell what to repair."""
    entry = Channel("x", "sensor/T1", "json", "data.0.v", "ts", "ms")
    assert reason(routes(entry).decode("x", body.encode(), NOW)) is expected


@pytest.mark.parametrize(("unit", "stamp"), [("s", 1772352000.25), ("ms", 1772352000250)])
def test_seconds_and_milliseconds_give_the_same_microsecond(unit: str, stamp: float) -> None:
    """Times are integer microseconds UTC inside, whatever the gateway counts in."""
    entry = Channel("x", "sensor/T1", "json", "v", "t", unit)
    (reading,) = routes(entry).decode("x", f'{{"v": 1, "t": {stamp}}}'.encode(), NOW + S).readings
    assert reading.at_us == NOW + 250_000


def test_a_map_to_a_channel_that_the_plate_has_not_is_a_settings_mistake() -> None:
    """Found at the start, with the name that was meant."""
    with pytest.raises(SettingsError, match=r"sensor/T11.*did you mean sensor/T1\?"):
        routes(Channel("x", "sensor/T11"))
    with pytest.raises(SettingsError, match="wildcards"):
        routes(Channel("x/+", "sensor/T1"))


def test_a_load_put_on_becomes_a_batch_event() -> None:
    """Start, step, load put on or taken off; the object is kept as received."""
    body = '{"at":"2026-03-01T07:59:00Z","event":"load-on","zone":"Z1","mass_kg":14.7}'
    (event,) = on("batch", body).events
    assert (event.at_us, event.event, event.detail) == (NOW - 60 * S, "load-on", body)
    (event,) = on("readings", f'{{"at_us": {NOW - S}, "batch": {{"event": "end"}}}}').events
    assert (event.at_us, event.event) == (NOW - S, "end")


@pytest.mark.parametrize(
    ("body", "how", "expected"),
    [
        ('{"event": "explode"}', False, Reason.BAD_EVENT),
        ('{"event": "load-on", "zone": "Z9"}', False, Reason.BAD_EVENT),
        ('{"event": "load-on", "x_mm": "left"}', False, Reason.NOT_A_NUMBER),
        ('"load-on"', False, Reason.NOT_JSON),
        ('{"event": "end", "at": "2026-03-01T09:00:00Z"}', False, Reason.FUTURE),
        ('{"event": "end"}', True, Reason.STALE_EVENT),
    ],
)
def test_a_batch_event_that_cannot_be_trusted_is_refused(
    body: str, how: bool, expected: Reason
) -> None:
    """An old event that the broker kept would be taken for a load put on now."""
    assert reason(on("batch", body, retain=how)) is expected


def test_each_channel_has_the_unit_that_its_values_come_in() -> None:
    """reading.value is as received; the `channel` table says in which unit."""
    assert routes(unit="degF").units == {
        "sensor/T1": "degC",
        "sensor/T2": "mV",
        "sensor/T3": "degF",
        "zone/Z1/duty": "1",
        "zone/Z1/setpoint": "degF",
        "zone/Z2/duty": "%",
        "zone/Z2/setpoint": "degF",
        "surround/ambient": "degF",
    }

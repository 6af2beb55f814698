"""Hostile messages: nothing stops the decoding, and no wrong value gets through it.

PLATEWATCH_HOSTILE=10000000 runs the long form; without it 100,000 messages are made.
"""

from __future__ import annotations

import os
from dataclasses import dataclass

import pytest

from platewatch.adapters.messages import Decoded, Reason, Routes
from platewatch.adapters.messages_pace import TopicPace
from platewatch.types import Flag
from tests.contract import second_reading as second
from tests.contract.hostile_messages import Enemy
from tests.contract.second_reading import NOW

MESSAGES = int(os.environ.get("PLATEWATCH_HOSTILE", "100000"))
S = 1_000_000


@dataclass(frozen=True)
class Channel:
    topic: str
    means: str
    payload: str
    value: str = ""
    time: str = ""
    time_unit: str = ""


JSON = Channel("x/json", "surround/a", "json", "data.v", "ts", "ms")
PACK = Channel("x/senml", "readings", "senml")


def routes(*maps: Channel, pace: TopicPace | None = None) -> Routes:
    endless = pace or TopicPace(burst=float("inf"))
    plate = {"T1": "degC", "T2": "K"}, {"Z1": 1.0}, ["surround/a"], "degC"
    return Routes("p", *plate, maps, pace=endless)


ROUTES = {
    "number": routes(),
    "flat": routes(),
    "json": routes(JSON),
    "senml": routes(PACK),
}
TOPIC = {
    "number": "plates/p/sensor/T1",
    "flat": "plates/p/readings",
    "json": "x/json",
    "senml": "x/senml",
}
SECOND = {
    "number": lambda payload: second.of_number(payload, "sensor/T1"),
    "flat": second.of_flat,
    "json": lambda payload: second.of_json(payload, "surround/a"),
    "senml": second.of_senml,
}


def decode(shape: str, payload: bytes | str, **how: bool) -> Decoded:
    body = payload if isinstance(payload, bytes) else payload.encode()
    return ROUTES[shape].decode(TOPIC[shape], body, NOW, **how)


@pytest.mark.timeout(20 + MESSAGES // 500)
@pytest.mark.parametrize("shape", TOPIC)
def test_what_is_accepted_is_what_a_second_strict_reader_finds(shape: str) -> None:
    """No crash and no wrong value: same channels, bits and stamps by two decoders; and
    what is not used is refused with a reason in one line that fits a log."""
    enemy, accepted = Enemy(seed=20260301), 0
    for _ in range(MESSAGES // len(TOPIC)):
        payload = enemy.payload(shape)
        found = decode(shape, payload)
        got = {(r.channel, r.value, r.at_us) for r in found.readings}
        if got != SECOND[shape](payload):
            pytest.fail(f"{payload[:300]!r}: took {got}, not {SECOND[shape](payload)}")
        accepted += bool(got)
        for refusal in found.refusals:
            text = str(refusal)
            assert text.isprintable(), text
            assert len(text) < 900
    assert 0.05 < accepted / (MESSAGES // len(TOPIC)) < 0.95  # both sides were tried


DEEP = "[" * 17 + "]" * 17
T1 = '"n":"sensor/T1"'

# What is sent, in which shape, and why it is refused.
REFUSED: dict[str, tuple[str, bytes | str, Reason]] = {
    "NaN": ("number", "NaN", Reason.NOT_A_NUMBER),
    "NaN in an object": ("flat", '{"sensor/T1":NaN}', Reason.NOT_JSON),
    "infinity": ("number", "-Infinity", Reason.NOT_A_NUMBER),
    "more than a double": ("number", "1e999", Reason.NOT_A_NUMBER),
    "more than a double in an object": ("flat", '{"sensor/T1":1e999}', Reason.NOT_JSON),
    "more than a double as an integer": (
        "flat",
        '{"sensor/T1":1' + "0" * 309 + "}",
        Reason.NOT_A_NUMBER,
    ),
    "five thousand digits": ("number", "9" * 5000, Reason.NOT_A_NUMBER),
    "five thousand digits as a time": (
        "flat",
        '{"at_us":' + "9" * 5000 + ',"sensor/T1":1}',
        Reason.NOT_JSON,
    ),
    "true for an open input": ("number", "true", Reason.NOT_A_NUMBER),
    "true in an object": ("flat", '{"sensor/T1":true}', Reason.NOT_A_NUMBER),
    "true as a time": ("flat", '{"at_us":true,"sensor/T1":1}', Reason.BAD_TIME),
    "a number as text": ("number", '"121.3"', Reason.NOT_A_NUMBER),
    "a number in a list": ("flat", '{"sensor/T1":[121.3]}', Reason.NOT_A_NUMBER),
    "seventeen levels": ("flat", '{"sensor/T1":1,"x":' + DEEP[1:-1] + "}", Reason.NOT_JSON),
    "thirty thousand levels": ("json", "[" * 30_000, Reason.NOT_JSON),
    "invalid UTF-8": ("flat", b'{"sensor/T1":1,"x":"\xff"}', Reason.NOT_JSON),
    "overlong UTF-8": ("flat", b'{"sensor/T1":1,"x":"\xc0\xaf"}', Reason.NOT_JSON),
    "half a surrogate pair": ("flat", '{"sensor/T1":1,"x":"\\ud800"}', Reason.NOT_JSON),
    "UTF-16": ("number", "121.3".encode("utf-16"), Reason.NOT_A_NUMBER),
    "byte order mark": ("number", b"\xef\xbb\xbf121.3", Reason.NOT_A_NUMBER),
    "byte order mark before an object": ("flat", b'\xef\xbb\xbf{"sensor/T1":1}', Reason.NOT_JSON),
    "NUL after the number": ("number", b"121.3\x00", Reason.NOT_A_NUMBER),
    "NUL in a name": ("flat", b'{"sensor/T1\x00":1}', Reason.NOT_JSON),
    "escaped NUL in a name": ("flat", '{"sensor/T1\\u0000":1}', Reason.UNKNOWN_CHANNEL),
    "a name twice": ("flat", '{"sensor/T1":20,"sensor/T1":900}', Reason.DOUBLED),
    "a name twice, once escaped": (
        "flat",
        '{"sensor/T1":20,"sensor\\u002fT1":900}',
        Reason.DOUBLED,
    ),
    "a name twice behind an escaped colon": (
        "flat",
        '{"sensor/T1":20,"sensor/T1":900,"x":"\\u003a"}',
        Reason.DOUBLED,
    ),
    "two times": ("flat", f'{{"at_us":{NOW},"at_us":{NOW - S},"sensor/T1":1}}', Reason.DOUBLED),
    "a value twice at a key path": (
        "json",
        f'{{"ts":{NOW // 1000},"data":{{"v":1,"v":2}}}}',
        Reason.DOUBLED,
    ),
    "a value twice in a record": ("senml", f'[{{{T1},"v":20,"v":900}}]', Reason.DOUBLED),
    "trailing garbage": ("number", "121.3 x", Reason.NOT_A_NUMBER),
    "two numbers": ("number", "121.3 122.4", Reason.NOT_A_NUMBER),
    "two objects": ("flat", '{"sensor/T1":1}{"sensor/T1":2}', Reason.NOT_JSON),
    "leading zero": ("number", "0121.3", Reason.NOT_A_NUMBER),
    "leading plus": ("number", "+121.3", Reason.NOT_A_NUMBER),
    "comma as point": ("number", "121,3", Reason.NOT_A_NUMBER),
    "hexadecimal": ("number", "0x79", Reason.NOT_A_NUMBER),
    "underscore": ("number", "1_2", Reason.NOT_A_NUMBER),
    "digits of another script": ("number", "\uff11\uff12\uff11", Reason.NOT_A_NUMBER),
    "nothing": ("number", "", Reason.NOT_A_NUMBER),
    "below absolute zero": ("number", "-273.16", Reason.OUT_OF_RANGE),
    "a huge integer": ("number", str(2**63), Reason.OUT_OF_RANGE),
    "64 KiB and a byte": ("number", " " * 65_536 + "1", Reason.TOO_LARGE),
    "a stamp in the wrong unit": ("flat", f'{{"at_ms":{NOW},"sensor/T1":1}}', Reason.BAD_TIME),
    "a stamp of the future": (
        "flat",
        f'{{"at_us":{NOW + 120 * S + 1},"sensor/T1":1}}',
        Reason.FUTURE,
    ),
    "base value that overflows": ("senml", f'[{{{T1},"bv":1e308,"v":1e308}}]', Reason.NOT_A_NUMBER),
    "base value out of range": ("senml", f'[{{{T1},"bv":3000,"v":1}}]', Reason.OUT_OF_RANGE),
    "base value alone": ("senml", f'[{{{T1},"bv":120}}]', Reason.NOT_A_NUMBER),
    "one second below 2**28 ahead": (
        "senml",
        f'[{{{T1},"v":1,"t":{2**28 - 1}}}]',
        Reason.FUTURE,
    ),
    "2**28 is in 1978": ("senml", f'[{{{T1},"v":1,"t":{2**28}}}]', Reason.BAD_TIME),
    "base time and time to 2**28": (
        "senml",
        f'[{{{T1},"v":1,"bt":{2**27},"t":{2**27}}}]',
        Reason.BAD_TIME,
    ),
    "times that cancel to the past millennium": (
        "senml",
        f'[{{{T1},"v":1,"bt":1e300,"t":-1e300,"bv":1}},{{{T1},"v":1,"t":-1e12}}]',
        Reason.BAD_TIME,
    ),
    "times that overflow": ("senml", f'[{{{T1},"v":1,"bt":1e308,"t":1e308}}]', Reason.BAD_TIME),
    "base name of another plate": (
        "senml",
        '[{"bn":"plates/q/","n":"sensor/T1","v":1}]',
        Reason.UNKNOWN_CHANNEL,
    ),
    "base name that climbs": (
        "senml",
        '[{"bn":"plates/p/../q/","n":"sensor/T1","v":1}]',
        Reason.UNKNOWN_CHANNEL,
    ),
    "base name said again": (
        "senml",
        '[{"bn":"plates/p/plates/p/","n":"sensor/T1","v":1}]',
        Reason.UNKNOWN_CHANNEL,
    ),
    "a member that must be understood": ("senml", f'[{{{T1},"v":1,"x_":1}}]', Reason.NOT_JSON),
    "the same, escaped": ("senml", f'[{{{T1},"v":1,"x\\u005f":1}}]', Reason.NOT_JSON),
}


@pytest.mark.parametrize("trick", REFUSED)
def test_a_known_trick_is_refused_with_its_reason(trick: str) -> None:
    """Inputs are hostile; the reason tells the person at the gateway what to repair."""
    shape, payload, reason = REFUSED[trick]
    found = decode(shape, payload)
    accepted = [r for r in found.readings if (r.channel, r.value) != ("sensor/T1", 2.0)]
    assert not accepted
    assert not found.events
    assert reason in [refusal.reason for refusal in found.refusals]
    assert all(refusal.detail and str(refusal).isprintable() for refusal in found.refusals)


ODD_BUT_RIGHT: dict[str, tuple[str, str, float, int]] = {
    "negative zero": ("number", "-0", 0.0, 0),
    "capital exponent with a sign": ("number", "1.205E+2", 120.5, 0),
    "less than the smallest double": ("number", "1e-400", 0.0, 0),
    "forty digits": ("number", "120.5" + "0" * 40, 120.5, 0),
    "white space around": ("number", " \t\r\n121.3 \n", 121.3, 0),
    "sixteen levels": ("flat", '{"sensor/T1":1,"x":' + DEEP[2:-2] + "}", 1.0, 0),
    "colons in names and texts": ("flat", '{"sensor/T1":1,"a:b":"c:d"}', 1.0, 0),
    "an escaped name": ("flat", '{"sensor\\u002fT1":1}', 1.0, 0),
    "base value and its value": ("senml", f'[{{{T1},"bv":100,"v":20.5}}]', 120.5, 0),
    "relative base time": ("senml", f'[{{{T1},"v":1,"bt":-4,"t":-1}}]', 1.0, -5 * S),
    "absolute base time": (
        "senml",
        f'[{{{T1},"v":1,"bt":{NOW // S},"t":-1}}]',
        1.0,
        -S,
    ),
    "a full name joined from two parts": (
        "senml",
        '[{"bn":"plates/p","n":"/sensor/T1","v":1}]',
        1.0,
        0,
    ),
}


@pytest.mark.parametrize("form", ODD_BUT_RIGHT)
def test_a_form_that_is_odd_but_right_gives_its_exact_value(form: str) -> None:
    """RFC 8259 and RFC 8428 allow these; refusing them would lose a measurement."""
    shape, payload, value, after_us = ODD_BUT_RIGHT[form]
    (reading,) = decode(shape, payload).readings
    assert (reading.channel, reading.value) == ("sensor/T1", value)
    assert reading.at_us - NOW == after_us


def test_of_two_records_for_one_instant_the_first_counts() -> None:
    """As in the record, whose key is stamp and channel; the second is told."""
    found = decode("senml", f'[{{{T1},"v":20}},{{{T1},"v":900}}]')
    assert [r.value for r in found.readings] == [20.0]
    assert [r.reason for r in found.refusals] == [Reason.DOUBLED]


def test_a_relative_time_delivered_again_is_doubtful() -> None:
    """Five seconds before arrival is another instant at the second arrival, so the natural
    key does not catch it; at an absolute time it does."""
    (relative,) = decode("senml", f'[{{{T1},"v":1,"t":-5}}]', dup=True).readings
    (absolute,) = decode("senml", f'[{{{T1},"v":1,"bt":{NOW // S - 5}}}]', dup=True).readings
    assert relative.flags == Flag.MAYBE_DUPLICATE
    assert absolute.flags == Flag.NONE


def test_a_value_that_is_no_number_is_not_kept_in_the_record_either() -> None:
    """Refused readings are stored with a flag, but an overflow is no reading."""
    (refusal,) = decode("senml", f'[{{{T1},"bv":1e308,"v":1e308}}]').refusals
    assert refusal.reading is None


@pytest.mark.parametrize("key", ["mass_kg", "width_mm", "height_mm"])
def test_a_load_of_less_than_nothing_is_no_load(key: str) -> None:
    """A negative mass or size would be believed by the estimator."""
    body = f'{{"event":"load-on","zone":"Z1","{key}":-1}}'.encode()
    found = ROUTES["flat"].decode("plates/p/batch", body, NOW)
    assert not found.events
    assert [r.reason for r in found.refusals] == [Reason.BAD_EVENT]


def test_a_forged_name_cannot_write_lines_of_its_own_into_the_log() -> None:
    """Line ends, terminal codes and endless names in a topic or a name are made harmless."""
    forged = "sensor/x\n2026-03-01 08:00:00 warning table-1: ALARM HIGH\x1b[2J" + "y" * 60_000
    topic = ROUTES["number"].decode(f"plates/p/{forged}", b"1", NOW)
    name = decode("senml", '[{"n":"a\\nb\\u001b[2J","v":1}]')
    for refusal in (*topic.refusals, *name.refusals):
        assert refusal.reason is Reason.UNKNOWN_CHANNEL
        assert str(refusal).isprintable()
        assert len(str(refusal)) < 900


def test_a_message_of_thousands_of_strange_names_is_dealt_with_quickly() -> None:
    """A suggestion is looked up for a mistake of a person, not for each of a flood: its
    names, not their number, would cost 0.1 ms each; five messages within a second."""
    import time

    own = routes()
    body = "{" + ",".join(f'"sensor/U{i}":1' for i in range(3500)) + "}"
    started = time.process_time()
    for _ in range(5):
        assert len(own.decode(TOPIC["flat"], body.encode(), NOW).refusals) == 3500
    assert time.process_time() - started < 1.0


def test_a_runaway_source_is_held_to_a_rate() -> None:
    """A thousand messages a second on one topic: after the burst, a hundred a second are
    used; the rest is refused with its reason, and other topics are not touched."""
    own = routes(pace=TopicPace(most_a_second=100, burst=500))
    used = [own.decode(TOPIC["number"], b"120.5", NOW + 1000 * i) for i in range(5000)]
    refused = [refusal for found in used for refusal in found.refusals]
    assert sum(bool(found.readings) for found in used) == pytest.approx(500 + 500, abs=2)
    assert {refusal.reason for refusal in refused} == {Reason.TOO_OFTEN}
    assert own.decode("plates/p/sensor/T2", b"393", NOW + 5 * S).readings


def test_the_backlog_of_an_outage_passes_whole() -> None:
    """A day of 2 s messages that arrives within a second is no flood: its stamps tell of a
    day.  Live messages between it do not count as a flood either."""
    own = routes(pace=TopicPace(most_a_second=100, burst=500))
    used = 0
    for i in range(43_200):
        stamp = NOW - 86_400 * S + 2 * S * i if i % 3 else NOW
        body = b'{"at_us":%d,"sensor/T1":120.5}' % stamp
        used += bool(own.decode(TOPIC["flat"], body, NOW + i * 20).readings)
    assert used == 43_200

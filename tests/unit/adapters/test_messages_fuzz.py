"""No bytes stop the decoding, and no wrong value gets through it."""

from __future__ import annotations

import json
import math
from dataclasses import dataclass

import pytest
from hypothesis import given
from hypothesis import strategies as st

from platewatch import units
from platewatch.adapters.messages import Decoded, Routes
from platewatch.adapters.messages_send import encode

NOW = units.from_iso("2026-03-01T08:00:00Z")


@dataclass(frozen=True)
class Channel:
    topic: str
    means: str
    payload: str
    value: str = ""
    time: str = ""
    time_unit: str = ""


MAPS = (
    Channel("x/json", "sensor/T1", "json", "data.0.v", "ts", "ms"),
    Channel("x/iso", "sensor/T1", "json", "v", "at", "iso"),
    Channel("x/flat", "readings", "flat"),
    Channel("x/senml", "readings", "senml"),
    Channel("x/one", "sensor/T2", "senml", "a"),
)
ROUTES = Routes("p", {"T1": "degC", "T2": "K"}, {"Z1": 1.0}, ["surround/a"], "degC", MAPS)
TOPICS = st.sampled_from(
    [m.topic for m in MAPS]
    + [f"plates/p/{c}" for c in (*ROUTES.units, "batch", "readings", "other")]
)

KEYS = """at at_us at_ms v ts data n bn bt bv u t vs event batch bver zone x_
    sensor/T1 sensor/T2 zone/Z1/duty surround/a"""
names = st.sampled_from(KEYS.split())
leaves = st.one_of(
    st.none(),
    st.booleans(),
    st.integers(-(2**70), 2**70),
    st.integers(NOW // 1000 - 10, NOW // 1000 + 10),
    st.floats(),
    st.text(max_size=8),
    st.sampled_from([1e308, -1e308, 1.5e12, -1e15, 10**400, -(10**30)]),
    st.sampled_from(["2026-03-01T07:00:00Z", "9999-12-31T23:59:59-23:59", "load-on", "Cel", "K"]),
)
trees = st.recursive(
    leaves,
    lambda inner: st.lists(inner, max_size=4) | st.dictionaries(names, inner, max_size=6),
    max_leaves=12,
)


extremes = st.sampled_from([0, -1, 2**28, 10**400, -(10**400), 1e308, -1e308, 1e12, -1e12, 9e15])


def check(found: Decoded) -> None:
    """Whatever came out can be used as it is."""
    for reading in found.readings:
        assert math.isfinite(reading.value)
        assert units.plausible(reading.value, ROUTES.units[reading.channel])
        assert reading.at_us <= NOW + 120_000_000
        assert reading.seen_us == NOW
    for event in found.events:
        assert json.loads(event.detail)["event"] == event.event
    for refusal in found.refusals:
        assert refusal.detail
        assert len(refusal.excerpt) < 400
        assert "\n" not in str(refusal)


@given(TOPICS, st.binary(max_size=200), st.booleans(), st.booleans())
def test_any_bytes_are_a_value_or_a_refusal(
    topic: str, payload: bytes, retain: bool, dup: bool
) -> None:
    """Inputs are hostile: the network thread and the daemon survive all of them."""
    found = ROUTES.decode(topic, payload, NOW, retain=retain, dup=dup)
    check(found)
    assert found.readings or found.events or found.refusals or payload.strip() in (b"{}", b"[]")


@given(TOPICS, trees)
def test_any_json_is_a_value_or_a_refusal(topic: str, tree: object) -> None:
    """Also what is valid JSON, with our own key names in the wrong places."""
    check(ROUTES.decode(topic, json.dumps(tree).encode(), NOW))


@given(extremes, extremes, extremes)
def test_no_stamp_or_value_is_too_extreme_to_be_refused(a: float, b: float, c: float) -> None:
    """Stamps and numbers at the ends of what JSON can write."""
    for topic, body in (
        ("x/json", {"ts": a, "data": [{"v": b}]}),
        ("x/flat", {"at_us": a, "surround/a": b, "zone/Z1/duty": c}),
        ("x/flat", {"at_ms": a, "batch": {"event": "end", "mass_kg": b}}),
        ("x/senml", [{"bt": a, "t": b, "n": "surround/a", "v": c, "bv": b}]),
        ("x/senml", [{"t": a, "n": "sensor/T2", "u": "Cel", "v": c}]),
        ("plates/p/surround/a", b),
    ):
        check(ROUTES.decode(topic, json.dumps(body).encode(), NOW))


@given(st.floats(-273.15, 3000.0), st.integers(NOW - 10**12, NOW))
def test_what_is_encoded_decodes_to_the_same_value(value: float, at_us: int) -> None:
    """Message encode and decode is the identity, to the last bit and the microsecond."""
    body = encode({"at_us": at_us, "surround/a": value})
    (reading,) = ROUTES.decode("x/flat", body, NOW).readings
    assert (reading.at_us, reading.value) == (at_us, value)


@pytest.mark.parametrize("depth", [10, 1_000, 30_000])
@pytest.mark.parametrize("topic", ["x/json", "x/flat", "x/senml", "plates/p/batch"])
def test_depth_alone_stops_nothing(topic: str, depth: int) -> None:
    """Nesting is limited by refusal, not by a crash."""
    for opening, closing in (("[", "]"), ('{"data":', "}")):
        body = opening * depth + "1" + closing * depth
        found = ROUTES.decode(topic, body.encode(), NOW)
        assert not found.readings
        assert found.refusals

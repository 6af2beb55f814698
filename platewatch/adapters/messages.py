"""Bus messages: what a topic means, and its bytes as readings, events or refusals."""

from __future__ import annotations

import difflib
import math
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, replace
from typing import Any, Protocol

from platewatch import units
from platewatch.adapters import messages_decode as decoding
from platewatch.adapters.messages_decode import Reason, Sample, Unreadable, Unusable
from platewatch.adapters.messages_pace import TopicPace
from platewatch.adapters.messages_units import channel_units, in_unit
from platewatch.errors import SettingsError
from platewatch.types import BatchEvent, Flag, Reading

__all__ = [
    "Decoded",
    "Mapped",
    "Reason",
    "Refusal",
    "Route",
    "Routes",
    "channel_units",
]

LARGEST_PAYLOAD = 65_536  # bytes
FUTURE_US = 120_000_000  # how far a source clock may be ahead of ours
FURTHEST_KEPT_US = 400 * 86_400_000_000  # a stamp beyond it is no time, so no row
EXCERPT, LONGEST_NAME, LONGEST_DETAIL = 60, 120, 240  # characters told of each
MOST_HINTS = 500  # misspelt names that are looked up; more is no mistake of a person

READINGS, BATCH = "readings", "batch"
EVENTS = ("start", "step", "load-on", "load-off", "end")


@dataclass(frozen=True, slots=True)
class Refusal:
    """Something that was received and not used.

    detail: one sentence with the remedy where there is one
    reading: where a number was understood, to be stored with its flag
    """

    topic: str
    channel: str
    reason: Reason
    detail: str
    excerpt: str
    reading: Reading | None = None

    def __str__(self) -> str:
        place = f"{self.topic} ({self.channel})" if self.channel else self.topic
        return f"{place}: {self.reason}: {self.detail}; received {self.excerpt}"


@dataclass(frozen=True, slots=True)
class Decoded:
    """What one message held."""

    readings: tuple[Reading, ...] = ()
    events: tuple[BatchEvent, ...] = ()
    refusals: tuple[Refusal, ...] = ()


class Mapped(Protocol):
    """One [[channel]] entry: what a plant's own topic carries."""

    @property
    def topic(self) -> str: ...
    @property
    def means(self) -> str: ...
    @property
    def payload(self) -> str: ...
    @property
    def value(self) -> str: ...
    @property
    def time(self) -> str: ...
    @property
    def time_unit(self) -> str: ...


@dataclass(frozen=True, slots=True)
class Route:
    """What one topic carries.  means: a channel, "readings" (many) or "batch"."""

    topic: str
    means: str
    payload: str = "number"
    value: str = ""
    time: str = ""
    time_unit: str = ""


@dataclass(frozen=True, slots=True)
class _Arrived:
    route: Route
    payload: bytes
    seen_us: int
    retain: bool
    dup: bool


class Routes:
    """Every topic of one plate and what may come on it.

    sensors: name -> signal (degC, degF, K, mV, ohm, mA);  zones: name -> the duty that
    means "all of the time" (1 or 100);  surrounds: channel names such as
    "surround/ambient";  unit: temperature unit of the plate;  maps: its [[channel]]s,
    each replaces the default topic of what it means.

    Values stay in the channel's own unit (`units`); only SenML, which names its unit,
    is converted to it: Cel and K to the channel's temperature unit, / and % to its
    duty scale.  Raises SettingsError where a map names no channel of this plate.
    """

    def __init__(
        self,
        plate: str,
        sensors: Mapping[str, str],
        zones: Mapping[str, float],
        surrounds: Iterable[str] = (),
        unit: str = "degC",
        maps: Iterable[Mapped] = (),
        *,
        largest: int = LARGEST_PAYLOAD,
        future_us: int = FUTURE_US,
        pace: TopicPace | None = None,
    ) -> None:
        self.plate = plate
        self.units = channel_units(sensors, zones, surrounds, unit)
        self._root = f"plates/{plate}/"
        self._zones = frozenset(zones)
        self._largest, self._future_us = largest, future_us
        self._pace = pace or TopicPace()
        self._hints: dict[str, str] = {}
        self._routes: dict[str, Route] = {}
        self._moved: dict[str, str] = {}  # what is mapped -> its topic
        for entry in maps:
            self._map(entry)
        self._add_defaults()

    @property
    def topics(self) -> tuple[str, ...]:
        """What to subscribe to: the plate's own tree and the mapped topics outside it."""
        outside = (topic for topic in self._routes if not topic.startswith(self._root))
        return (self._root + "#", *sorted(outside))

    def decode(
        self, topic: str, payload: bytes, seen_us: int, *, retain: bool = False, dup: bool = False
    ) -> Decoded:
        """What one message says.  Never raises for anything that was received.

        Readings without a source time are stamped `seen_us`; one that the broker
        delivers again (`dup`) is then MAYBE_DUPLICATE.  `retain` makes RETAINED.
        """
        route = self._routes.get(topic)
        arrived = _Arrived(route or Route(topic, ""), payload, seen_us, retain, dup)
        try:
            if len(payload) > self._largest:
                size = f"{len(payload)} bytes, at most {self._largest} are read"
                raise Unreadable(Reason.TOO_LARGE, size)
            if route is None:
                raise self._unknown_topic(topic)
            found = self._read(arrived)
            self._hold_to_pace(arrived, found)
            return found
        except Unreadable as error:
            return Decoded(refusals=(_refusal(arrived, error),))

    def _hold_to_pace(self, arrived: _Arrived, found: Decoded) -> None:
        at_us = max((r.at_us for r in found.readings), default=arrived.seen_us)
        if not self._pace.allows(arrived.route.topic, arrived.seen_us, at_us):
            most = self._pace.most_a_second
            told = f"more than {most:g} a second for a while; let the source send less often"
            raise Unreadable(Reason.TOO_OFTEN, told)

    def _map(self, entry: Mapped) -> None:
        if any(mark in entry.topic for mark in "+#") or not entry.topic:
            raise SettingsError(f"channel topic {entry.topic!r}: name one topic, no wildcards")
        many = entry.payload in ("flat", "senml") and entry.means in ("", READINGS)
        if not many and entry.means != BATCH and entry.means not in self.units:
            raise SettingsError(
                f"channel topic {entry.topic!r} means {entry.means!r}, which this plate "
                f"has not{self._did_you_mean(entry.means)}"
            )
        means = READINGS if many else entry.means
        self._routes[entry.topic] = Route(
            entry.topic, means, entry.payload, entry.value, entry.time, entry.time_unit or ""
        )
        self._moved[means] = entry.topic

    def _add_defaults(self) -> None:
        for channel in (*self.units, READINGS, BATCH):
            topic = self._root + channel
            if channel not in self._moved and topic not in self._routes:
                shape = "number" if channel in self.units else "flat"
                self._routes[topic] = Route(topic, channel, shape)

    def _read(self, arrived: _Arrived) -> Decoded:
        route = arrived.route
        if route.means == BATCH:
            return Decoded(events=(self._event(arrived),))
        match route.payload:
            case "number":
                value = decoding.read_number(arrived.payload)
                samples: Iterable[Sample] = (Sample(route.means, value, None),)
            case "json":
                found = decoding.read_json(
                    arrived.payload, route.value, route.time, route.time_unit
                )
                samples = (Sample(route.means, found.value, found.at_us),)
            case "flat":
                return self._read_flat(arrived)
            case _:
                return self._read_senml(arrived)
        return self._judge_all(arrived, samples)

    def _read_flat(self, arrived: _Arrived) -> Decoded:
        route = arrived.route
        at_us, members = decoding.read_flat(arrived.payload, route.time, route.time_unit)
        if route.means != READINGS:
            members = {route.means: decoding.at_path(members, route.value or route.means)}
        samples, refusals, events = [], [], []
        for name, value in members.items():
            try:
                if name == BATCH and route.means == READINGS:
                    events.append(self._event_from(arrived, value, at_us))
                else:
                    self._unit_of(name)
                    samples.append(Sample(name, decoding.number_of(value, name), at_us))
            except Unreadable as error:
                refusals.append(_refusal(arrived, error, name))
        judged = self._judge_all(arrived, samples)
        return Decoded(judged.readings, tuple(events), (*judged.refusals, *refusals))

    def _read_senml(self, arrived: _Arrived) -> Decoded:
        """The records of a pack under channel names.

        A topic of one channel takes the records that `value` names, or else all.
        """
        route = arrived.route
        samples, refusals = [], []
        for found in decoding.read_senml(arrived.payload, arrived.seen_us):
            if route.means == READINGS:
                channel = found.name.removeprefix(self._root)
            elif route.value in ("", found.name):
                channel = route.means
            else:
                continue
            if isinstance(found, Unusable):
                refusals.append(_refusal(arrived, found.error, channel))
            else:
                samples.append(replace(found, name=channel))
        if not samples and not refusals and route.value:
            raise Unreadable(Reason.NO_VALUE, f"no record {route.value!r} in the pack")
        judged = self._judge_all(arrived, samples)
        return Decoded(judged.readings, (), (*judged.refusals, *refusals))

    def _judge_all(self, arrived: _Arrived, samples: Iterable[Sample]) -> Decoded:
        readings: dict[tuple[int, str], Reading] = {}
        refusals = []
        for sample in samples:
            try:
                reading = self._reading(arrived, sample)
                self._judge(arrived, sample, reading)
                key = (reading.at_us, reading.channel)
                if key in readings:
                    raise Unreadable(Reason.DOUBLED, f"a second value {reading.value:g}")
                readings[key] = reading
            except Unreadable as error:
                kept = _kept(reading, arrived, error.reason) if error.reason in _KEPT else None
                refusals.append(_refusal(arrived, error, sample.name, kept))
        return Decoded(tuple(readings.values()), (), tuple(refusals))

    def _reading(self, arrived: _Arrived, sample: Sample) -> Reading:
        unit = self._unit_of(sample.name)
        flags = Flag.RETAINED if arrived.retain else Flag.NONE
        if arrived.dup and (sample.at_us is None or sample.by_arrival):
            flags |= Flag.MAYBE_DUPLICATE
        return Reading(
            at_us=arrived.seen_us if sample.at_us is None else sample.at_us,
            channel=sample.name,
            value=in_unit(sample, unit) if sample.unit else sample.value,
            seen_us=arrived.seen_us,
            flags=flags,
        )

    def _unit_of(self, channel: str) -> str:
        try:
            return self.units[channel]
        except KeyError:
            hint = self._did_you_mean(channel)
            raise Unreadable(Reason.UNKNOWN_CHANNEL, f"{channel}{hint}") from None

    def _judge(self, arrived: _Arrived, sample: Sample, reading: Reading) -> None:
        unit = self.units[reading.channel]
        moved = self._moved.get(reading.channel)
        if moved is not None and moved != arrived.route.topic and arrived.route.means == READINGS:
            raise Unreadable(Reason.MAPPED, f"{reading.channel} is declared to come on {moved}")
        if reading.at_us > arrived.seen_us + self._future_us:
            ahead = (reading.at_us - arrived.seen_us) / 1e6
            raise Unreadable(
                Reason.FUTURE, f"{ahead:.0f} s ahead of this machine; set the clock of the source"
            )
        if not math.isfinite(reading.value):
            raise Unreadable(Reason.NOT_A_NUMBER, "its parts add up to more than a number holds")
        if not units.plausible(reading.value, unit):
            low, high = units.PLAUSIBLE[unit]
            raise Unreadable(
                Reason.OUT_OF_RANGE,
                f"{reading.value:g} in a channel of unit {unit} ({low:g} to {high:g})",
            )

    def _event(self, arrived: _Arrived) -> BatchEvent:
        found = decoding.read_object(arrived.payload)
        route = arrived.route
        at_us = None
        if route.time:
            at_us = decoding.time_us(decoding.at_path(found, route.time), route.time_unit)
        return self._event_from(arrived, found, at_us)

    def _event_from(self, arrived: _Arrived, found: Any, at_us: int | None) -> BatchEvent:
        """A batch event; its own "at" counts before that of the message around it."""
        if arrived.retain:
            raise Unreadable(Reason.STALE_EVENT, "the broker kept it; not taken as happening now")
        if not isinstance(found, dict) or found.get("event") not in EVENTS:
            raise Unreadable(Reason.BAD_EVENT, f'needs "event", one of {", ".join(EVENTS)}')
        zone = found.get("zone")
        if zone is not None and zone not in self._zones:
            raise Unreadable(Reason.BAD_EVENT, f"zone {zone!r} is not of this plate")
        for key in ("x_mm", "y_mm", "width_mm", "height_mm", "mass_kg"):
            given = 0.0 if found.get(key) is None else decoding.number_of(found[key], key)
            if given < 0 and key not in ("x_mm", "y_mm"):
                raise Unreadable(Reason.BAD_EVENT, f"{key} is negative")
        if "at" in found:
            at_us = decoding.time_us(found["at"], "iso")
        if at_us is not None and at_us > arrived.seen_us + self._future_us:
            raise Unreadable(Reason.FUTURE, "set the clock of the source")
        detail = decoding.json_text(found)
        return BatchEvent(arrived.seen_us if at_us is None else at_us, found["event"], detail)

    def _unknown_topic(self, topic: str) -> Unreadable:
        channel = topic.removeprefix(self._root)
        if channel in self._moved:
            where = self._moved[channel]
            return Unreadable(Reason.MAPPED, f"{channel} is declared to come on {where}")
        reason = Reason.UNKNOWN_CHANNEL if channel != topic else Reason.UNKNOWN_TOPIC
        return Unreadable(reason, f"{channel}{self._did_you_mean(channel)}")

    def _did_you_mean(self, name: str) -> str:
        if len(name) > LONGEST_NAME or (name not in self._hints and self._all_hints_given()):
            return ""
        if name not in self._hints:
            close = difflib.get_close_matches(name, [*self.units, READINGS, BATCH], 1, 0.6)
            self._hints[name] = f"; did you mean {close[0]}?" if close else ""
        return self._hints[name]

    def _all_hints_given(self) -> bool:
        return len(self._hints) >= MOST_HINTS


_KEPT = {Reason.OUT_OF_RANGE: Flag.REFUSED, Reason.FUTURE: Flag.REFUSED | Flag.FUTURE}


def _kept(reading: Reading, arrived: _Arrived, reason: Reason) -> Reading | None:
    """The row of a refused reading; none where its stamp is beyond all sense."""
    if reading.at_us > arrived.seen_us + FURTHEST_KEPT_US:
        return None
    return replace(reading, flags=reading.flags | _KEPT[reason])


def _refusal(
    arrived: _Arrived, error: Unreadable, channel: str = "", kept: Reading | None = None
) -> Refusal:
    head = arrived.payload[:EXCERPT].decode("utf-8", "replace")
    excerpt = repr(head) + ("…" if len(arrived.payload) > EXCERPT else "")
    if not channel and arrived.route.means not in (READINGS, BATCH):
        channel = arrived.route.means
    return Refusal(
        _told(arrived.route.topic, LONGEST_NAME),
        _told(channel, LONGEST_NAME),
        error.reason,
        _told(error.detail, LONGEST_DETAIL),
        excerpt,
        kept,
    )


def _told(text: str, longest: int) -> str:
    """In one line that nobody can forge: no line ends, no terminal codes, no endless names."""
    short = text if len(text) <= longest else text[: longest - 1] + "…"
    return short if short.isprintable() else repr(short)[1:-1]

"""Bus messages: what a topic means, and its bytes as readings, events or refusals."""

from __future__ import annotations

import difflib
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, replace
from typing import Any, Protocol

from platewatch import units
from platewatch.adapters import messages_decode as decoding
from platewatch.adapters.messages_decode import Reason, Sample, Unreadable, Unusable
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
EXCERPT = 60

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
    ) -> None:
        self.plate = plate
        self.units = channel_units(sensors, zones, surrounds, unit)
        self._root = f"plates/{plate}/"
        self._zones = frozenset(zones)
        self._largest, self._future_us = largest, future_us
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
            return self._read(arrived)
        except Unreadable as error:
            return Decoded(refusals=(_refusal(arrived, error),))

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
                samples.append(Sample(channel, found.value, found.at_us, found.unit))
        if not samples and not refusals and route.value:
            raise Unreadable(Reason.NO_VALUE, f"no record {route.value!r} in the pack")
        judged = self._judge_all(arrived, samples)
        return Decoded(judged.readings, (), (*judged.refusals, *refusals))

    def _judge_all(self, arrived: _Arrived, samples: Iterable[Sample]) -> Decoded:
        readings, refusals = [], []
        for sample in samples:
            try:
                reading = self._reading(arrived, sample)
                self._judge(arrived, sample, reading)
                readings.append(reading)
            except Unreadable as error:
                kept = _kept(reading, arrived, error.reason) if error.reason in _KEPT else None
                refusals.append(_refusal(arrived, error, sample.name, kept))
        return Decoded(tuple(readings), (), tuple(refusals))

    def _reading(self, arrived: _Arrived, sample: Sample) -> Reading:
        unit = self._unit_of(sample.name)
        flags = Flag.RETAINED if arrived.retain else Flag.NONE
        if sample.at_us is None and arrived.dup:
            flags |= Flag.MAYBE_DUPLICATE
        return Reading(
            at_us=arrived.seen_us if sample.at_us is None else sample.at_us,
            channel=sample.name,
            value=_in_unit(sample, unit) if sample.unit else sample.value,
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
            if found.get(key) is not None:
                decoding.number_of(found[key], key)
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
        close = difflib.get_close_matches(name, [*self.units, READINGS, BATCH], 1, 0.6)
        return f"; did you mean {close[0]}?" if close else ""


def channel_units(
    sensors: Mapping[str, str],
    zones: Mapping[str, float],
    surrounds: Iterable[str],
    unit: str,
) -> dict[str, str]:
    """Every channel of a plate and its unit, as the `channel` table stores it."""
    found = {f"sensor/{name}": signal for name, signal in sensors.items()}
    for name, full in zones.items():
        found[f"zone/{name}/duty"] = "1" if full == 1 else "%"
        found[f"zone/{name}/setpoint"] = unit
    found.update(dict.fromkeys(surrounds, unit))
    return found


_TEMPERATURES = frozenset(str(unit) for unit in units.TemperatureUnit)
_DUTY_OF = {"/": 1.0, "%": 0.01}


def _in_unit(sample: Sample, unit: str) -> float:
    """A SenML value in the unit of its channel."""
    if unit in _TEMPERATURES and sample.unit in ("Cel", "K"):
        given = units.TemperatureUnit("degC" if sample.unit == "Cel" else "K")
        if given == unit:
            return sample.value
        celsius = units.to_degC(sample.value, given)
        return units.from_degC(celsius, units.TemperatureUnit(unit))
    if unit in ("1", "%") and sample.unit in _DUTY_OF:
        if (unit == "%") == (sample.unit == "%"):
            return sample.value
        return sample.value * 100 if unit == "%" else sample.value / 100
    if unit == "mV" and sample.unit == "V":
        return sample.value * 1000
    if (unit, sample.unit) == ("ohm", "Ohm"):
        return sample.value
    if (unit, sample.unit) == ("mA", "A"):
        return sample.value * 1000
    raise Unreadable(
        Reason.WRONG_UNIT, f"{sample.name} is in {unit}, the record says {sample.unit!r}"
    )


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
    return Refusal(arrived.route.topic, channel, error.reason, error.detail, excerpt, kept)

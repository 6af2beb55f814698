"""The tables about recipes, alarm limits, the bus, the store and the screen."""

from __future__ import annotations

import zoneinfo
from collections.abc import Iterator
from typing import Annotated

from pydantic import Field

from platewatch.adapters.settings_schema import (
    Entry,
    Mistake,
    OneOf,
    Rule,
    Temperature,
    TopicName,
    Within,
)
from platewatch.monitor.limits import LimitKind, Priority
from platewatch.monitor.recipe import Do

PAYLOADS = ("number", "json", "flat", "senml")
TIME_UNITS = ("iso", "s", "ms", "us")

_STEP_KEYS: dict[str, tuple[tuple[str, ...], tuple[str, ...]]] = {  # needed, further
    Do.RAMP: (("to", "rate_per_min"), ()),
    Do.WAIT: (("within",), ("longest_min",)),
    Do.SOAK: (("minutes",), ("spread_limit",)),
    Do.COOL: (("to",), ()),
}
_RECORD = ("cause", "consequence", "response", "time_to_respond_min")
_PLAIN_PASSWORD = (
    "a secret does not belong into this file",
    "put it alone into a file only the service can read and name that file in secret_file",
)


class StepEntry(Entry):
    do: Annotated[str, OneOf(tuple(Do))]
    to: Annotated[float | None, Temperature()] = None
    rate_per_min: Annotated[
        float | None, Within(0, 1000, "give degrees per minute, above 0", above=True)
    ] = None
    minutes: Annotated[float | None, Within(0, 1e5, "give minutes, above 0", above=True)] = None
    within: Annotated[float | None, Within(0, 1000, "give degrees, above 0", above=True)] = None
    longest_min: Annotated[float | None, Within(0, 1e5, "give minutes, above 0", above=True)] = None
    spread_limit: Annotated[float | None, Within(0, 1000, "give degrees, above 0", above=True)] = (
        None
    )

    def mistakes(self) -> Iterator[Mistake]:
        if self.do not in _STEP_KEYS:
            return
        needed, further = _STEP_KEYS[self.do]
        for key in needed:
            if getattr(self, key) is None:
                yield Mistake((key,), f"is missing for a {self.do} step", f"add {key} = ...")
        for key in sorted(self.model_fields_set - {"do", *needed, *further}):
            yield Mistake(
                (key,),
                f"says nothing about a {self.do} step",
                f"use {', '.join((*needed, *further))}",
            )


class RecipeEntry(Entry):
    name: Annotated[str, TopicName()]
    steps: list[StepEntry]

    def mistakes(self) -> Iterator[Mistake]:
        if not self.steps:
            yield Mistake(("steps",), "the recipe has no steps", "add at least one ramp or soak")


class AlarmLimitEntry(Entry):
    name: Annotated[str, TopicName()]
    kind: Annotated[str, OneOf(tuple(LimitKind))]
    value: float
    priority: Annotated[str | None, OneOf(tuple(Priority))] = None
    deadband: Annotated[float | None, Within(0, 500, "give degrees, 0 or more")] = None
    zone: str = ""
    sensor: str = ""
    steps: Annotated[list[str], OneOf(tuple(Do))] = Field(default_factory=list)
    record_only: bool = False
    enabled: bool = True
    cause: str = ""
    consequence: str = ""
    response: str = ""
    time_to_respond_min: Annotated[
        float | None, Within(0, 1e4, "give minutes, above 0", above=True)
    ] = None
    on_delay_s: Annotated[float | None, Within(0, 60, "give at most 60 s")] = None
    off_delay_s: Annotated[float | None, Within(0, 3600, "give seconds, 0 or more")] = None

    def mistakes(self) -> Iterator[Mistake]:
        if self.enabled and not self.record_only:
            yield from self._record_mistakes()
        yield from self._delay_mistakes()
        if self.sensor and self.kind != LimitKind.SENSOR:
            yield Mistake(
                ("sensor",), f"says nothing about a {self.kind} limit", 'use kind = "sensor"'
            )
        if self.kind in (LimitKind.SPREAD, LimitKind.READY) and self.value <= 0:
            yield Mistake(
                ("value",),
                f"{self.value:g} is not above 0",
                "give degrees of difference" if self.kind == LimitKind.SPREAD else "give minutes",
            )

    def _record_mistakes(self) -> Iterator[Mistake]:
        missing = [key for key in _RECORD if not getattr(self, key)]
        if missing:
            yield Mistake(
                (),
                f"an alarm limit without {', '.join(missing)} cannot be enabled",
                "add what the plant decided, or write record_only = true or enabled = false",
            )
        if self.priority is None:
            yield Mistake(("priority",), "is missing", 'add priority = "high", "medium" or "low"')

    def _delay_mistakes(self) -> Iterator[Mistake]:
        on, off, respond = self.on_delay_s, self.off_delay_s, self.time_to_respond_min
        if on is not None and respond is not None and on > 0.1 * 60 * respond > 0:
            yield Mistake(
                ("on_delay_s",),
                f"{on:g} s is more than a tenth of the time to respond",
                f"give at most {6 * respond:g} s",
            )
        if on is not None and off is not None and off < 2 * on:
            yield Mistake(
                ("off_delay_s",), f"{off:g} s is below twice on_delay_s", f"give {2 * on:g} or more"
            )


class EstimatorEntry(Entry):
    tick_s: Annotated[float, Within(0, 600, "give seconds, above 0 (usual: 2)", above=True)] = 2.0
    late_s: Annotated[float, Within(0, 600, "give seconds, 0 or more (usual: 2)")] = 2.0


class ForecastEntry(Entry):
    horizon_min: Annotated[
        float, Within(0, 240, "give minutes, above 0 and at most 240", above=True)
    ] = 15.0
    step_s: Annotated[float, Within(0, 600, "give seconds, above 0", above=True)] = 10.0
    every_s: Annotated[float, Within(0, 600, "give seconds, above 0", above=True)] = 5.0

    def mistakes(self) -> Iterator[Mistake]:
        if self.step_s > 60 * self.horizon_min > 0:
            yield Mistake(
                ("step_s",),
                f"a step of {self.step_s:g} s is longer than the horizon",
                "give a step of about a hundredth of the horizon",
            )


class CausesEntry(Entry):
    off: list[str] = Field(default_factory=list)
    prior: dict[str, float] = Field(default_factory=dict)


class BusEntry(Entry):
    enabled: bool = True
    host: str = "127.0.0.1"
    port: int | None = None
    user: str = ""
    secret_file: str = ""
    ca_file: str = ""
    client_name: str = ""
    publish: bool = False
    keepalive_s: Annotated[int, Within(5, 3600, "give whole seconds, 5 to 3600")] = 30
    password: str = ""  # known only to be refused

    def mistakes(self) -> Iterator[Mistake]:
        if "password" in self.model_fields_set:
            yield Mistake(("password",), *_PLAIN_PASSWORD)
        if self.port is not None and not 1 <= self.port <= 65_535:
            yield Mistake(
                ("port",), f"{self.port} is no port", "give 1 to 65535 (1883, with TLS 8883)"
            )
        if not self.host.strip() or "://" in self.host:
            yield Mistake(
                ("host",), f"{self.host!r} is no host name", 'write "broker.example" or an address'
            )
        if self.secret_file and not self.user:
            yield Mistake(("user",), "is missing beside secret_file", "name the account")


class TopicFilterFree(Rule):
    """One topic, no filter."""

    def mistake(self, value: object, unit: object) -> tuple[str, str] | None:
        topic = str(value)
        if "+" in topic or "#" in topic:
            return f"{topic!r} holds a wildcard", "write one [[channel]] for each topic"
        if not topic or topic.startswith("/") or topic.endswith("/") or "//" in topic:
            return f"{topic!r} has an empty level", "write the topic as the plant publishes it"
        if topic.startswith("$"):
            return f"{topic!r} belongs to the broker", "choose a topic of the plant"
        return None


class ChannelEntry(Entry):
    topic: Annotated[str, TopicFilterFree()]
    means: str
    payload: Annotated[str, OneOf(PAYLOADS)] = "number"
    value: str = ""
    time: str = ""
    time_unit: Annotated[str | None, OneOf(TIME_UNITS)] = None

    def mistakes(self) -> Iterator[Mistake]:
        if self.payload == "number":
            for key in sorted(self.model_fields_set & {"value", "time", "time_unit"}):
                yield Mistake(
                    (key,), "a bare number has no keys", 'write payload = "json" or leave it out'
                )
            return
        if self.payload == "json" and not self.value:
            yield Mistake(
                ("value",), "is missing for a JSON payload", 'add the key path, as in "data.v"'
            )
        if self.time and self.time_unit is None:
            yield Mistake(
                ("time_unit",),
                "is missing: the unit of a time is asked, never guessed",
                'add time_unit = "iso", "s", "ms" or "us"',
            )
        if self.time_unit is not None and not self.time:
            yield Mistake(("time",), "is missing beside time_unit", "name the key of the time")


class StoreEntry(Entry):
    url: str = ""
    keep_days: Annotated[int, Within(1, 40_000, "give whole days, 1 or more")] = 400
    keep_readings_days: Annotated[int, Within(1, 40_000, "give whole days, 1 or more")] = 90

    def mistakes(self) -> Iterator[Mistake]:
        scheme, separator, rest = self.url.partition("://")
        if not self.url:
            return
        if not separator or not scheme.startswith(("sqlite", "postgresql")):
            yield Mistake(
                ("url",),
                f"{self.url!r} is no database platewatch knows",
                'write "sqlite:///plate.sqlite" or "postgresql://user@host/name"',
            )
        elif "@" in rest and ":" in rest.rsplit("@", 1)[0]:
            yield Mistake(
                ("url",), "holds a password in clear", "leave it out and use a password file"
            )


class ScreenEntry(Entry):
    address: str = "127.0.0.1:8470"
    timezone: str = "UTC"

    def mistakes(self) -> Iterator[Mistake]:
        host, _, port = self.address.rpartition(":")
        if not host or not port.isdecimal() or not 1 <= int(port) <= 65_535:
            yield Mistake(
                ("address",),
                f"{self.address!r} is not host:port",
                'write "127.0.0.1:8470"; a port lies between 1 and 65535',
            )
        try:
            zoneinfo.ZoneInfo(self.timezone)
        except (zoneinfo.ZoneInfoNotFoundError, ValueError, OSError):
            yield Mistake(
                ("timezone",),
                f"{self.timezone!r} is no known time zone",
                'write a name such as "Europe/Vienna" or "UTC"',
            )

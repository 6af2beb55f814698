"""What must fit together across the tables of a description, places apart."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterator
from typing import Any

from platewatch.adapters import settings_schema_plate as plate_tables
from platewatch.adapters import settings_schema_run as run_tables
from platewatch.adapters.settings_convert import cause_name
from platewatch.adapters.settings_draft import Draft
from platewatch.adapters.settings_lines import Where
from platewatch.adapters.settings_schema import (
    Mistake,
    Temperature,
    TopicName,
    suggest,
    value_mistakes,
)
from platewatch.adapters.settings_schema_sensor import SensorEntry
from platewatch.monitor.limits import LimitKind
from platewatch.monitor.options import CAUSE_NAMES
from platewatch.monitor.recipe import Do
from platewatch.thermal.materials import BUILT_IN

NAMED = ("material", "contact", "zone", "sensor", "recipe", "alarm_limit")
ROLES = ("viewer", "operator", "technician", "engineer", "administrator")


def mistakes(read: Draft) -> Iterator[Mistake]:
    """Everything wrong with values, names and what they refer to."""
    for where, entry in read.entries:
        for mistake in value_mistakes(entry, read.unit):
            yield mistake.below(where)
    yield from _twice(read)
    yield from _materials(read)
    yield from _loops(read)
    yield from _limits(read)
    yield from _channels(read)
    yield from _causes(read)
    yield from _people(read)


def _twice(read: Draft) -> Iterator[Mistake]:
    for section in NAMED:
        counts = Counter(read.names(section))
        seen: set[str] = set()
        for position, item in _items(read, section):
            name = item.get("name")
            if isinstance(name, str) and counts[name] > 1:
                if name in seen:
                    yield Mistake(
                        (section, position, "name"),
                        f"{name!r} is the name of two {section.replace('_', ' ')}s",
                        "give each its own",
                    )
                seen.add(name)


def _items(read: Draft, section: str) -> Iterator[tuple[int, dict[str, Any]]]:
    items = read.data.get(section)
    for position, item in enumerate(items if isinstance(items, list) else ()):
        if isinstance(item, dict):
            yield position, item


def _materials(read: Draft) -> Iterator[Mistake]:
    known = [*BUILT_IN, *read.names("material")]
    for where, name in _named_materials(read):
        if name not in known:
            otherwise = f"describe it by [[material]], or use one of {', '.join(sorted(BUILT_IN))}"
            yield Mistake(where, f"there is no material {name!r}", suggest(name, known, otherwise))
    yield from _emissivities(read)


def _named_materials(read: Draft) -> Iterator[tuple[Where, str]]:
    for where, plate in read.of(plate_tables.PlateEntry):
        yield (*where, "material"), plate.material
    for where, layer in read.of(plate_tables.LayerEntry):
        yield (*where, "material"), layer.material
    for where, inset in read.of(plate_tables.InsetEntry):
        if inset.material is not None:
            yield (*where, "material"), inset.material


def _emissivities(read: Draft) -> Iterator[Mistake]:
    """A face with a correlation radiates: with its own emissivity, else the material's."""
    plate, surface = read.one(plate_tables.PlateEntry), read.one(plate_tables.SurfaceEntry)
    if plate is None or surface is None:
        return
    own = {entry.name: entry for _, entry in read.of(plate_tables.MaterialEntry)}
    unknown = plate.material in own and own[plate.material].emissivity is None
    for side, face in (("top", surface.top), ("bottom", surface.bottom)):
        if unknown and face.correlation is not None and face.emissivity is None:
            yield Mistake(
                ("surface", side, "emissivity"),
                "is missing: the face radiates and its material names none",
                "add emissivity = ... here or to the material",
            )


def _loops(read: Draft) -> Iterator[Mistake]:
    known = read.names("sensor")
    sensors = {entry.name: (where, entry) for where, entry in read.of(SensorEntry)}
    for where, zone in read.of(plate_tables.ZoneEntry):
        if zone.loop is None:
            continue
        name = zone.loop.sensor
        if name not in known:
            otherwise = f"known are {', '.join(known) or 'none'}"
            yield Mistake(
                (*where, "loop", "sensor"),
                f"there is no sensor {name!r}",
                suggest(name, known, otherwise),
            )
        elif name in sensors and sensors[name][1].role == "monitor":
            yield Mistake(
                (*sensors[name][0], "role"),
                f"sensor {name} controls zone {zone.name} but its role says monitor",
                'write role = "control", or correct the loop of the zone',
            )


def _limits(read: Draft) -> Iterator[Mistake]:
    for where, limit in read.of(run_tables.AlarmLimitEntry):
        yield from _limit_value(read, where, limit)
        for key, section in (("zone", "zone"), ("sensor", "sensor")):
            name, known = getattr(limit, key), read.names(section)
            if name and name not in known:
                otherwise = f"known are {', '.join(known) or 'none'}"
                yield Mistake(
                    (*where, key), f"there is no {key} {name!r}", suggest(name, known, otherwise)
                )


def _limit_value(read: Draft, where: Where, limit: run_tables.AlarmLimitEntry) -> Iterator[Mistake]:
    upper = limit.kind in (LimitKind.PEAK, LimitKind.SENSOR)
    if not upper and limit.kind != LimitKind.LOW:
        return
    for mistake in _no_temperature(read, limit):
        yield mistake.below(where)
    if set(limit.steps) == {Do.COOL}:
        return
    for _, recipe in read.of(run_tables.RecipeEntry):
        points = [s.to for s in recipe.steps if s.do == Do.RAMP and s.to is not None]
        if points and (limit.value <= max(points) if upper else limit.value >= max(points)):
            side, move = ("above", "raise") if upper else ("below", "lower")
            yield Mistake(
                (*where, "value"),
                f"{limit.value:g} does not lie {side} the set-point {max(points):g} "
                f"of recipe {recipe.name}",
                f"{move} the alarm limit or correct the recipe",
            )


def _no_temperature(read: Draft, limit: run_tables.AlarmLimitEntry) -> Iterator[Mistake]:
    if found := Temperature().mistake(limit.value, read.unit):
        yield Mistake(("value",), *found)


def _channels(read: Draft) -> Iterator[Mistake]:
    topics: dict[tuple[str, str], str] = {}
    meanings: set[str] = set()
    for where, channel in read.of(run_tables.ChannelEntry):
        yield from (mistake.below(where) for mistake in _meaning(read, channel))
        value = (channel.topic, channel.value)
        if value in topics:
            yield Mistake(
                (*where, "topic"),
                f"{channel.topic!r} already means {topics[value]}",
                "keep one, or name another value of the same payload",
            )
        elif channel.means in meanings and channel.means not in ("readings", "batch"):
            yield Mistake(
                (*where, "means"), f"{channel.means} comes from two topics", "keep one of them"
            )
        topics[value] = channel.means
        meanings.add(channel.means)


def _meaning(read: Draft, channel: run_tables.ChannelEntry) -> Iterator[Mistake]:
    whole = ("readings", "batch")
    means = channel.means
    if means == "readings" and channel.payload not in ("flat", "senml"):
        yield Mistake(
            ("payload",),
            f"a message with many readings cannot be a {channel.payload} payload",
            'write payload = "flat" or "senml"',
        )
    if means in whole or _is_surround(means):
        return
    known = [f"sensor/{name}" for name in read.names("sensor")]
    for name in read.names("zone"):
        known += [f"zone/{name}/duty", f"zone/{name}/setpoint"]
    if means not in known:
        otherwise = "write sensor/<sensor>, zone/<zone>/duty, zone/<zone>/setpoint, surround/<name>"
        yield Mistake(
            ("means",),
            f"{means!r} is no channel of this plate",
            suggest(means, (*known, *whole), otherwise),
        )


def _is_surround(means: str) -> bool:
    head, _, name = means.partition("/")
    return head == "surround" and bool(name) and not set(name) & set("/+#")


def _causes(read: Draft) -> Iterator[Mistake]:
    for where, causes in read.of(run_tables.CausesEntry):
        for position, word in enumerate(causes.off):
            yield from _cause((*where, "off", position), word)
        for word, rate in causes.prior.items():
            yield from _cause((*where, "prior", word), word)
            if not 0 <= rate <= 100:
                yield Mistake(
                    (*where, "prior", word),
                    f"{rate:g} is no rate per plate-day",
                    "give 0 to 100; 0.05 is once in 20 days",
                )


def _cause(where: Where, word: str) -> Iterator[Mistake]:
    if cause_name(word) not in CAUSE_NAMES:
        otherwise = f"known are {', '.join(CAUSE_NAMES)}"
        yield Mistake(where, f"there is no cause {word!r}", suggest(word, CAUSE_NAMES, otherwise))


def _people(read: Draft) -> Iterator[Mistake]:
    people = read.data.get("people", {})
    for name, role in people.items() if isinstance(people, dict) else ():
        if role not in ROLES:
            otherwise = f"write one of {', '.join(ROLES)}"
            yield Mistake(
                ("people", name), f"{role!r} is no role", suggest(str(role), ROLES, otherwise)
            )
        elif TopicName().mistake(name, read.unit):
            yield Mistake(
                ("people", name), f"{name!r} is no name to sign with", "use letters and digits"
            )

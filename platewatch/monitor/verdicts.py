"""What the causes say about heaters and thermocouples, in the operator's words.

Built-in texts say what to look at, never how to operate switchgear or a control loop.
"""

from __future__ import annotations

from collections.abc import Sequence

from platewatch.monitor.alarms import Condition, Verdict
from platewatch.monitor.causes.catalogue import Cause
from platewatch.monitor.conditions import Words, likelihood
from platewatch.monitor.limits import Priority
from platewatch.monitor.outlook import Prospect
from platewatch.thermal.plate import Role

SURE = 0.9  # "very likely": a zone or a thermocouple is named in an alarm of its own
UNSURE = 0.5
LEAST_SHARE = 0.15  # of the zone's watts
ON_DELAY_US = 10_000_000
OFF_DELAY_US = 60_000_000
SENSOR_CAUSES = frozenset(
    {
        Cause.SENSOR_STEP,
        Cause.SENSOR_DRIFT,
        Cause.SENSOR_LOOSE,
        Cause.SENSOR_STUCK,
        Cause.SENSOR_REVERSED,
        Cause.SENSOR_WRONG_TYPE,
    }
)


def sentence(words: Words, prospect: Prospect) -> str:
    """One cause: what it is, how likely, how much, what to look at."""
    view = prospect.view
    if view is None:
        return f"No fault seen ({likelihood(prospect.probability)}, {prospect.probability:.0%})."
    parts = " and ".join(_part(words, prospect, cause, subject) for cause, subject in view.parts)
    chance = f"{likelihood(prospect.probability)}, {prospect.probability:.0%}"
    look = " ".join(_look_at(words, cause, subject) for cause, subject in view.parts)
    return f"Likely cause: {parts} ({chance}). Look at {look}."


def _part(words: Words, prospect: Prospect, cause: Cause, subject: str) -> str:
    view = prospect.view
    assert view is not None
    watts = f"about {abs(view.watts):.0f} W"
    place = f"x {view.x_m * 1e3:.0f} mm, y {view.y_m * 1e3:.0f} mm"
    match cause:
        case Cause.ZONE_STAYS_ON:
            return f"zone {subject} is drawing {watts} more than called for"
        case Cause.ZONE_NOT_HEATING:
            return f"zone {subject} is giving {watts} less than called for"
        case Cause.COLD_LOAD:
            return f"something cold on zone {subject} near {place}, taking {watts}"
        case Cause.UNKNOWN_HEAT:
            return f"unknown heat on zone {subject} near {place}, {watts}"
        case Cause.LOSS_CHANGED:
            return f"the plate loses {'less' if view.watts > 0 else 'more'} heat ({subject})"
        case Cause.SENSOR_STUCK:
            return f"the reading of {subject} stands still"
        case Cause.SENSOR_NOISY:
            return f"the reading of {subject} jumps about"
        case Cause.SENSOR_REVERSED:
            return f"{subject} falls where the plate warms (wires reversed)"
        case Cause.JUNCTION_BLOCK:
            return f"all thermocouples of block {subject} are shifted"
        case _:
            return f"{subject} reads wrong ({cause.value})"


def _look_at(words: Words, cause: Cause, subject: str) -> str:
    plate = words.plate
    zone = next((z for z in plate.zones if z.name == subject), None)
    sensor = next((s for s in plate.sensors if s.name == subject), None)
    at = zone.where if zone is not None else sensor.where if sensor is not None else ""
    where = f" ({at})" if at else ""
    match cause:
        case Cause.ZONE_STAYS_ON:
            return f"the contactor or switch of zone {subject}{where}"
        case Cause.ZONE_NOT_HEATING:
            return f"the heater, fuse and contactor of zone {subject}{where}"
        case Cause.COLD_LOAD | Cause.UNKNOWN_HEAT:
            return "what lies on the plate there"
        case Cause.LOSS_CHANGED:
            return "fans, doors, draught and insulation"
        case Cause.JUNCTION_BLOCK:
            return f"the terminal block {subject} and what warms or cools it"
        case _:
            return f"junction, terminal and cable of {subject}{where}"


def explanation(words: Words, prospects: Sequence[Prospect]) -> str:
    """The causes that count, most probable first; an open pair is said to be open."""
    named = [p for p in prospects if p.view is not None and p.probability >= 0.1]
    if not named:
        return ""
    first = sentence(words, named[0])
    others = [f"{_short(p)} ({likelihood(p.probability)}, {p.probability:.0%})" for p in named[1:3]]
    if not others:
        return first
    return f"{first} Or: {'; '.join(others)}: not yet to be told apart."


def _short(prospect: Prospect) -> str:
    view = prospect.view
    assert view is not None
    return " and ".join(f"{cause.value}, {subject}" for cause, subject in view.parts)


def question(words: Words, prospects: Sequence[Prospect]) -> str:
    """The one question that tells a load from a loose thermocouple, while both are open."""
    load = next((p for p in prospects if _is_only(p, {Cause.COLD_LOAD})), None)
    loose = next(
        (p for p in prospects if _is_only(p, {Cause.SENSOR_LOOSE, Cause.SENSOR_DRIFT})), None
    )
    if load is None or loose is None or load.view is None:
        return ""
    if min(load.probability, loose.probability) < 0.05:
        return ""
    return f"Was something put on zone {load.view.subject}?"


def _is_only(prospect: Prospect, causes: set[Cause]) -> bool:
    view = prospect.view
    return view is not None and len(view.parts) == 1 and view.cause in causes


def chance_of(prospects: Sequence[Prospect], causes: frozenset[Cause], subject: str) -> float:
    """Probability that one of these causes holds for a zone or thermocouple."""
    return sum(
        p.probability
        for p in prospects
        if p.view is not None and any(c in causes and s == subject for c, s in p.view.parts)
    )


def zone_alarms(
    words: Words, prospects: Sequence[Prospect], standing: frozenset[tuple[str, str]]
) -> list[Condition]:
    """`zone-not-heating` and `zone-stays-on`, by zone."""
    found = []
    for alarm, cause in (
        ("zone-not-heating", Cause.ZONE_NOT_HEATING),
        ("zone-stays-on", Cause.ZONE_STAYS_ON),
    ):
        for zone in words.plate.zones:
            p = chance_of(prospects, frozenset({cause}), zone.name)
            if p < UNSURE and (alarm, zone.name) not in standing:
                continue
            best = next(
                (q for q in prospects if q.view and (cause, zone.name) in q.view.parts), None
            )
            watts = abs(best.view.watts) if best is not None and best.view is not None else 0.0
            enough = watts >= LEAST_SHARE * zone.watts
            verdict = Verdict.ON if p >= SURE and enough else Verdict.BETWEEN
            if p < UNSURE:
                verdict = Verdict.OFF
            found.append(_zone_alarm(words, alarm, zone.name, verdict, best, watts))
    return found


def _zone_alarm(
    words: Words, alarm: str, zone: str, verdict: Verdict, best: Prospect | None, watts: float
) -> Condition:
    stays_on = alarm == "zone-stays-on"
    text = sentence(words, best) if best is not None else ""
    if stays_on:
        text = f"{text} Keep clear of the plate. Follow the site's over-temperature procedure."
    return Condition(
        alarm=alarm,
        subject=zone,
        verdict=verdict,
        priority=Priority.HIGH if stays_on else Priority.MEDIUM,
        place=f"zone {zone}",
        message=text,
        value=watts,
        cause="" if best is None else best.name,
        on_delay_us=ON_DELAY_US,
        off_delay_us=OFF_DELAY_US,
        latch=stays_on,
    )


def sensor_alarms(
    words: Words, prospects: Sequence[Prospect], standing: frozenset[tuple[str, str]]
) -> list[Condition]:
    """`sensor-bad`: a control thermocouple that very likely gives no valid signal.

    Not while a load could explain its readings: then the question is open.
    """
    found = []
    for sensor in words.plate.sensors:
        if sensor.role is not Role.CONTROL:
            continue
        p = chance_of(prospects, SENSOR_CAUSES, sensor.name)
        key = ("sensor-bad", sensor.name)
        if p < UNSURE and key not in standing:
            continue
        best = next(
            (
                q
                for q in prospects
                if q.view and any(s == sensor.name and c in SENSOR_CAUSES for c, s in q.view.parts)
            ),
            None,
        )
        verdict = Verdict.ON if p >= SURE else Verdict.OFF if p < UNSURE else Verdict.BETWEEN
        text = sentence(words, best) if best is not None else ""
        found.append(
            Condition(
                alarm="sensor-bad",
                subject=sensor.name,
                verdict=verdict,
                priority=Priority.HIGH,
                place=f"{sensor.name}, x {sensor.x_m * 1e3:.0f} mm, y {sensor.y_m * 1e3:.0f} mm",
                message=f"{text} It controls a heater: the loop follows its wrong reading.",
                cause="" if best is None else best.name,
                on_delay_us=ON_DELAY_US,
                off_delay_us=OFF_DELAY_US,
            )
        )
    return found

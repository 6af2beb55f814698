"""What the alarms ask: is it too hot, will it be, can we see at all.

Each function turns an estimate into `Condition`s, with the words an operator reads.
"""

from __future__ import annotations

from dataclasses import dataclass

from platewatch.monitor.alarms import Condition, Verdict
from platewatch.monitor.limits import AlarmLimit, LimitKind, Priority
from platewatch.thermal.plate import Plate
from platewatch.units import TemperatureUnit, difference_from_K, from_degC

COMING_ON = 0.5  # probability of passing within the horizon
COMING_OFF = COMING_ON / 2
COMING_ON_AVERAGED = 0.2
COMING_OFF_AVERAGED = COMING_ON_AVERAGED / 2
UPPER = 0.975
LONGEST_ON_DELAY_S = 10.0
SHORTEST_OFF_DELAY_S = 30.0
TOO_SHORT_S = 180.0
BLIND_AFTER_S = 10.0
BLIND_AFTER_SAMPLES = 3
BLIND_AFTER_UNKNOWN_S = 180.0
TOO_SHORT_TEXT = (
    "Too short to rely on a person: follow the site's over-temperature procedure now; "
    "platewatch switches nothing."
)


@dataclass(frozen=True)
class Words:
    """Turns figures into the operator's words and unit."""

    plate: Plate
    unit: TemperatureUnit

    def degrees(self, value_degC: float) -> str:
        sign = "K" if self.unit is TemperatureUnit.K else "°" + self.unit[-1]
        return f"{from_degC(value_degC, self.unit):.0f} {sign}"

    def difference(self, value_K: float) -> str:
        sign = "°F" if self.unit is TemperatureUnit.DEGF else "K"
        return f"{difference_from_K(value_K, self.unit):.1f} {sign}"

    def place(self, zone: str, x_mm: float, y_mm: float) -> str:
        where = next((z.where for z in self.plate.zones if z.name == zone), "")
        near = f"zone {zone}" if zone else "the plate"
        position = f"{near}, x {x_mm:.0f} mm, y {y_mm:.0f} mm"
        return f"{position} ({where})" if where else position

    def minutes(self, seconds: float) -> str:
        if seconds < 90:
            return f"{seconds:.0f} s"
        return f"{seconds / 60:.0f} min"


@dataclass(frozen=True)
class Estimate:
    """One alarm limit against the present and the coming peak of its region."""

    limit: AlarmLimit
    now_degC: float
    now_low_degC: float
    now_high_degC: float
    now_judged_degC: float  # the quantile that is held against the limit
    now_place: str
    ahead_degC: float
    ahead_low_degC: float
    ahead_high_degC: float
    ahead_place: str
    p_over: float
    to_limit_s: tuple[float | None, float | None, float | None]
    settled: bool
    p_averaged: float | None = None  # over all causes; else p_over is the only one
    cause: str = "none"
    explanation: str = ""


def delays_us(limit: AlarmLimit) -> tuple[int, int]:
    """On-delay: at most 10 s and a tenth of the time to respond; off-delay at least twice it."""
    longest = LONGEST_ON_DELAY_S
    if limit.time_to_respond_min is not None:
        longest = min(longest, 6.0 * limit.time_to_respond_min)
    on = longest if limit.on_delay_s is None else min(limit.on_delay_s, longest)
    off = SHORTEST_OFF_DELAY_S if limit.off_delay_s is None else limit.off_delay_s
    return round(on * 1e6), round(max(off, 2 * on) * 1e6)


def peak_coming(words: Words, estimate: Estimate) -> Condition:
    """Will the limit be passed within the horizon?"""
    limit, p = estimate.limit, estimate.p_over
    averaged = p if estimate.p_averaged is None else estimate.p_averaged
    on = COMING_ON_AVERAGED if estimate.settled else COMING_ON
    off = COMING_OFF_AVERAGED if estimate.settled else COMING_OFF
    verdict = Verdict.BETWEEN
    if p >= COMING_ON or averaged >= on:
        verdict = Verdict.ON
    elif p < COMING_OFF and averaged < off:
        verdict = Verdict.OFF
    early, median, late = estimate.to_limit_s
    soon = median is not None and median < TOO_SHORT_S
    text = (
        f"Peak of {words.degrees(estimate.ahead_degC)} is coming "
        f"(inferred; 95 % band {words.degrees(estimate.ahead_low_degC)} to "
        f"{words.degrees(estimate.ahead_high_degC)}) at {estimate.ahead_place}. "
        f"Alarm limit {limit.name} {words.degrees(limit.value)}: "
        f"{likelihood(p)} ({p:.0%}) to be passed{_when(words, early, median, late)}. "
        f"{_explained(estimate)}{_ask(limit)}"
    )
    if soon:
        text = f"{text} {TOO_SHORT_TEXT}"
    respond_s = 60.0 * (limit.time_to_respond_min or 0.0)
    urgent = median is not None and median < max(respond_s, TOO_SHORT_S)
    on_us, off_us = delays_us(limit)
    return Condition(
        alarm="peak-coming",
        subject=limit.name,
        verdict=verdict,
        priority=Priority.HIGH if urgent else limit.priority,
        place=estimate.ahead_place,
        message=text,
        value=estimate.ahead_degC,
        limit_value=limit.value,
        cause=estimate.cause,
        on_delay_us=on_us,
        off_delay_us=off_us,
    )


def _explained(estimate: Estimate) -> str:
    return f"{estimate.explanation} " if estimate.explanation else ""


def likelihood(p: float) -> str:
    """Words for a probability, as the design fixes them."""
    for least, word in ((0.90, "very likely"), (0.66, "likely"), (0.10, "possible")):
        if p >= least:
            return word
    return "not to be ruled out"


def _when(words: Words, early: float | None, median: float | None, late: float | None) -> str:
    if median is None:
        return " within the horizon"
    if median <= 0:
        return " already"
    first = words.minutes(early if early is not None else 0.0)
    last = words.minutes(late) if late is not None else "beyond the horizon"
    return f" in about {words.minutes(median)} (between {first} and {last})"


def _ask(limit: AlarmLimit) -> str:
    """What the plant's own record says to do; else only what to look at."""
    if limit.response:
        return f"Response on record: {limit.response}."
    return "Look at the zones' set-points, duties and loads there."


def peak_now(words: Words, estimate: Estimate) -> Condition:
    """Is the limit passed now, as far as the upper band tells?"""
    limit = estimate.limit
    judged = estimate.now_judged_degC
    if judged > limit.value:
        verdict = Verdict.ON
    else:
        verdict = Verdict.OFF if judged < limit.value - limit.deadband else Verdict.BETWEEN
    on_us, off_us = delays_us(limit)
    text = (
        f"The hottest place may be over alarm limit {limit.name} {words.degrees(limit.value)} now: "
        f"{words.degrees(estimate.now_degC)} (inferred; 95 % band "
        f"{words.degrees(estimate.now_low_degC)} to {words.degrees(estimate.now_high_degC)}) "
        f"at {estimate.now_place}. {_explained(estimate)}{_ask(limit)} {TOO_SHORT_TEXT}"
    )
    return Condition(
        alarm="peak-now",
        subject=limit.name,
        verdict=verdict,
        priority=Priority.HIGH,
        place=estimate.now_place,
        message=text,
        value=estimate.now_degC,
        limit_value=limit.value,
        on_delay_us=on_us,
        off_delay_us=off_us,
    )


def sensor_over(words: Words, limit: AlarmLimit, sensor: str, reading_degC: float) -> Condition:
    """A raw reading against its limit: nothing that is suspected of the sensor changes it."""
    where = words.plate.sensor(sensor)
    if reading_degC > limit.value:
        verdict = Verdict.ON
    else:
        verdict = Verdict.OFF if reading_degC < limit.value - limit.deadband else Verdict.BETWEEN
    place = f"{sensor}, x {where.x_m * 1e3:.0f} mm, y {where.y_m * 1e3:.0f} mm"
    if where.where:
        place = f"{place} ({where.where})"
    on_us, off_us = delays_us(limit)
    return Condition(
        alarm="peak-now",
        subject=sensor,
        verdict=verdict,
        priority=Priority.HIGH,
        place=place,
        message=(
            f"{sensor} reads {words.degrees(reading_degC)} (measured), over alarm limit "
            f"{limit.name} {words.degrees(limit.value)}, at {place}. {_ask(limit)} {TOO_SHORT_TEXT}"
        ),
        value=reading_degC,
        limit_value=limit.value,
        on_delay_us=on_us,
        off_delay_us=off_us,
    )


def blind_after_us(interval_us: int) -> int:
    """Three sample times, or 10 s where samples come faster than that.

    interval_us: 0 where it is not known yet; then samples may be a minute apart.
    """
    if interval_us <= 0:
        return round(BLIND_AFTER_UNKNOWN_S * 1e6)
    return max(round(BLIND_AFTER_S * 1e6), BLIND_AFTER_SAMPLES * interval_us)


def picture_blind(words: Words, silent_us: int, after_us: int, near_limit: bool) -> Condition:
    """Has no thermocouple been heard for too long?"""
    blind = silent_us >= after_us
    return Condition(
        alarm="picture-blind",
        subject="plate",
        verdict=Verdict.ON if blind else Verdict.OFF,
        priority=Priority.HIGH if near_limit else Priority.MEDIUM,
        place="the whole plate",
        message=(
            f"Blind for {silent_us / 1e6:.0f} s: no usable reading of any thermocouple. "
            "The last picture is not the present one. Look at the gateway, its network and "
            "the plant's own instruments."
        ),
        value=silent_us / 1e6,
    )


def enabled(limits: tuple[AlarmLimit, ...], kind: LimitKind) -> tuple[AlarmLimit, ...]:
    """The limits of a kind that are in force."""
    return tuple(limit for limit in limits if limit.enabled and limit.kind is kind)


def sensor_limits(limits: tuple[AlarmLimit, ...]) -> tuple[AlarmLimit, ...]:
    """Limits on raw readings; where none is described, the lowest peak limit serves."""
    described = enabled(limits, LimitKind.SENSOR)
    alarming = [limit for limit in enabled(limits, LimitKind.PEAK) if not limit.record_only]
    if described or not alarming:
        return described
    return (min(alarming, key=lambda limit: limit.value),)

"""What an operator reads, and when a condition holds."""

import re
from dataclasses import replace

import pytest
from watched_plate import PRODUCT, plate

from platewatch.monitor import conditions as ask
from platewatch.monitor.alarms import Verdict
from platewatch.monitor.conditions import TOO_SHORT_TEXT, Estimate, Words
from platewatch.monitor.limits import LimitKind, Priority
from platewatch.units import TemperatureUnit

WORDS = Words(plate(), TemperatureUnit.DEGC)
FAHRENHEIT = Words(plate(), TemperatureUnit.DEGF)
KELVIN = Words(plate(), TemperatureUnit.K)


def estimate(**changes):
    usual = Estimate(
        limit=PRODUCT,
        now_degC=128.0,
        now_low_degC=127.0,
        now_high_degC=129.0,
        now_judged_degC=129.0,
        now_place=WORDS.place("L", 85.0, 95.0),
        ahead_degC=139.0,
        ahead_low_degC=136.0,
        ahead_high_degC=142.0,
        ahead_place=WORDS.place("R", 305.0, 95.0),
        p_over=0.97,
        to_limit_s=(240.0, 420.0, 600.0),
        settled=True,
    )
    return replace(usual, **changes)


def test_a_coming_peak_says_place_value_band_limit_and_minutes():
    """Zone, position, where to find it; peak with its band; how likely, how soon."""
    text = ask.peak_coming(WORDS, estimate()).message
    for part in (
        "zone R, x 305 mm, y 95 mm (breaker R1)",
        "139 °C",
        "95 % band 136 °C to 142 °C",
        "inferred",
        "Alarm limit product 135 °C",
        "very likely (97%)",
        "in about 7 min (between 4 min and 10 min)",
    ):
        assert part in text


def test_a_present_peak_says_place_value_and_band():
    """The hottest place now, marked as inferred."""
    hot = estimate(now_degC=136.0, now_low_degC=134.6, now_high_degC=137.4, now_judged_degC=137.4)
    found = ask.peak_now(WORDS, hot)
    assert found.verdict is Verdict.ON
    for part in ("zone L, x 85 mm, y 95 mm (breaker L1)", "136 °C", "135 °C to 137 °C", "inferred"):
        assert part in found.message


def test_a_reading_over_the_limit_says_that_it_is_measured():
    """A raw reading is no estimate."""
    found = ask.sensor_over(WORDS, PRODUCT, "B", 136.2)
    assert found.verdict is Verdict.ON
    assert found.subject == "B"
    assert "B reads 136 °C (measured)" in found.message
    assert "x 300 mm, y 100 mm" in found.message


@pytest.mark.parametrize(("median_s", "too_short"), [(179.0, True), (180.0, False), (None, False)])
def test_under_three_minutes_the_message_sends_to_the_sites_own_procedure(median_s, too_short):
    """Too short to rely on a person; platewatch switches nothing."""
    found = ask.peak_coming(WORDS, estimate(to_limit_s=(100.0, median_s, None)))
    assert (TOO_SHORT_TEXT in found.message) is too_short
    assert "follow the site's over-temperature procedure now" in TOO_SHORT_TEXT
    assert "platewatch switches nothing" in TOO_SHORT_TEXT


def test_what_to_do_comes_from_the_plants_own_record():
    """Without one, the text says what to look at, never what to switch."""
    own = replace(PRODUCT, response="reduce heat by procedure 7")
    assert "procedure 7" in ask.peak_coming(WORDS, estimate(limit=own)).message
    built_in = ask.peak_coming(WORDS, estimate()).message
    assert "Look at" in built_in
    assert not re.search(r"\b(switch off|turn off|open the|reduce|lower)\b", built_in)


def test_a_limit_that_leaves_less_time_than_a_person_needs_is_urgent():
    """Five minutes to respond, four left: high, whatever the limit's own priority."""
    assert ask.peak_coming(WORDS, estimate()).priority == Priority.MEDIUM
    soon = estimate(to_limit_s=(100.0, 240.0, 400.0))
    assert ask.peak_coming(WORDS, soon).priority == Priority.HIGH


@pytest.mark.parametrize(
    ("p", "settled", "verdict"),
    [
        (0.20, True, Verdict.ON),
        (0.15, True, Verdict.BETWEEN),
        (0.09, True, Verdict.OFF),
        (0.30, False, Verdict.BETWEEN),
        (0.50, False, Verdict.ON),
        (0.24, False, Verdict.OFF),
    ],
)
def test_a_coming_peak_is_judged_by_its_probability_and_clears_below_half(p, settled, verdict):
    """0.2 averaged once the picture has settled, 0.5 before; each clears below its half."""
    assert ask.peak_coming(WORDS, estimate(p_over=p, settled=settled)).verdict is verdict


@pytest.mark.parametrize(
    ("judged", "verdict"),
    [(135.1, Verdict.ON), (134.9, Verdict.BETWEEN), (133.1, Verdict.BETWEEN), (132.9, Verdict.OFF)],
)
def test_a_present_peak_is_judged_by_its_upper_band_through_the_deadband(judged, verdict):
    """Limit 135 degC, deadband 2 K."""
    assert ask.peak_now(WORDS, estimate(now_judged_degC=judged)).verdict is verdict


@pytest.mark.parametrize(
    ("reading", "verdict"),
    [(135.1, Verdict.ON), (133.5, Verdict.BETWEEN), (132.9, Verdict.OFF)],
)
def test_a_reading_is_judged_through_the_deadband(reading, verdict):
    """Limit 135 degC, deadband 2 K."""
    assert ask.sensor_over(WORDS, PRODUCT, "A", reading).verdict is verdict


def test_a_peak_that_is_over_already_says_so():
    """No minutes where there are none."""
    text = ask.peak_coming(WORDS, estimate(to_limit_s=(0.0, 0.0, 0.0))).message
    assert "to be passed already" in text
    text = ask.peak_coming(WORDS, estimate(to_limit_s=(None, None, None), p_over=0.3)).message
    assert "possible (30%) to be passed within the horizon" in text


@pytest.mark.parametrize(
    ("p", "word"), [(0.9, "very likely"), (0.66, "likely"), (0.1, "possible"), (0.05, "not to be")]
)
def test_a_probability_has_its_fixed_word(p, word):
    """Very likely from 90 %, likely from 66 %, possible from 10 %."""
    text = ask.peak_coming(WORDS, estimate(p_over=p)).message
    assert f": {word}" in text


def test_a_plate_described_in_fahrenheit_speaks_fahrenheit():
    """135 degC is 275 degF."""
    text = ask.peak_coming(FAHRENHEIT, estimate()).message
    assert "Alarm limit product 275 °F" in text
    assert "°C" not in text


def test_a_difference_is_converted_as_a_difference():
    """10 K are 18 degF, never 50 degF."""
    assert FAHRENHEIT.difference(10.0) == "18.0 °F"
    assert WORDS.difference(10.0) == "10.0 K"
    assert KELVIN.difference(10.0) == "10.0 K"


def test_kelvin_has_no_degree_sign():
    """135 degC are 408 K."""
    text = ask.peak_coming(KELVIN, estimate()).message + ask.peak_now(KELVIN, estimate()).message
    assert "408 K" in text
    assert "°" not in text


@pytest.mark.parametrize(
    ("respond_min", "on_s", "off_s", "expected"),
    [
        (5.0, None, None, (10.0, 30.0)),
        (1.0, None, None, (6.0, 30.0)),
        (None, None, None, (10.0, 30.0)),
        (5.0, 60.0, None, (10.0, 30.0)),
        (5.0, 4.0, 5.0, (4.0, 8.0)),
        (5.0, 4.0, 90.0, (4.0, 90.0)),
    ],
)
def test_delays_are_short_against_the_time_to_respond(respond_min, on_s, off_s, expected):
    """On-delay at most 10 s and a tenth of the time to respond; off-delay at least twice it."""
    limit = replace(PRODUCT, time_to_respond_min=respond_min, on_delay_s=on_s, off_delay_s=off_s)
    assert ask.delays_us(limit) == tuple(round(s * 1e6) for s in expected)


@pytest.mark.parametrize(
    ("interval_s", "after_s"), [(0.1, 10.0), (2.0, 10.0), (5.0, 15.0), (60.0, 180.0), (0.0, 180.0)]
)
def test_blindness_waits_for_three_samples_or_ten_seconds(interval_s, after_s):
    """Where the sample time is not known yet, a minute apart is still possible."""
    assert ask.blind_after_us(round(interval_s * 1e6)) == round(after_s * 1e6)


def test_blindness_says_how_long_and_where_to_look():
    """Not a word of the plate being too hot: nobody knows."""
    found = ask.picture_blind(WORDS, 12_000_000, 10_000_000, near_limit=False)
    assert found.verdict is Verdict.ON
    assert "Blind for 12 s" in found.message
    assert "gateway" in found.message
    assert found.priority == Priority.MEDIUM
    near = ask.picture_blind(WORDS, 12_000_000, 10_000_000, near_limit=True)
    assert near.priority == Priority.HIGH


def test_raw_readings_are_held_against_the_lowest_peak_limit_by_default():
    """On without being asked for; a described sensor limit takes its place."""
    other = replace(PRODUCT, name="plate", value=150.0)
    recorded = replace(PRODUCT, name="record", value=120.0, record_only=True)
    off = replace(PRODUCT, name="off", value=100.0, enabled=False)
    assert ask.sensor_limits((other, PRODUCT, recorded, off)) == (PRODUCT,)
    own = replace(PRODUCT, name="raw", kind=LimitKind.SENSOR, value=140.0)
    assert ask.sensor_limits((other, PRODUCT, own)) == (own,)
    assert ask.sensor_limits((recorded,)) == ()


def test_a_place_outside_every_zone_is_still_named():
    """A plate without zones has a position."""
    assert WORDS.place("", 10.0, 20.0) == "the plate, x 10 mm, y 20 mm"

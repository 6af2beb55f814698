"""From the readings of a tick to what the estimator takes in."""

from dataclasses import replace

import numpy as np
import pytest
from watched_plate import ROOM, T0, TICK_US, plate, quiet

from platewatch.monitor.inputs import nothing_heard, take_in
from platewatch.monitor.thermocouple import emf_mV
from platewatch.types import Flag, Reading, Tick
from platewatch.units import TemperatureUnit

DEGC = TemperatureUnit.DEGC
AT = T0 + TICK_US


def reading(channel, value, before_us=0, flags=Flag.NONE):
    return Reading(AT - before_us, channel, value, AT, flags)


def taken(readings, q=None, heard=None, unit=DEGC, dt_us=TICK_US):
    q = q or quiet()
    ordered = tuple(sorted(readings, key=lambda r: (r.at_us, r.channel)))
    return take_in(q, heard or nothing_heard(q), Tick(AT, dt_us, ordered), unit)


def test_several_readings_in_a_tick_are_averaged():
    """Three in a tick: one value, counted three times."""
    _, seen = taken(
        [
            reading("sensor/A", v, us)
            for v, us in ((99.0, 900_000), (101.0, 500_000), (103.0, 100_000))
        ]
    )
    assert seen.sensors == (0,)
    assert seen.degC == pytest.approx([101.0])
    assert seen.count.tolist() == [3.0]
    assert seen.share == pytest.approx([1 - 0.5 / 2])


@pytest.mark.parametrize(("before_us", "share"), [(0, 1.0), (500_000, 0.75), (1_999_999, 0.0)])
def test_a_reading_keeps_its_place_in_the_tick(before_us, share):
    """0 at the start of the tick, 1 at its end."""
    _, seen = taken([reading("sensor/B", 100.0, before_us)])
    assert seen.sensors == (1,)
    assert seen.share == pytest.approx([share], abs=1e-6)


def test_what_was_not_read_is_not_taken_in():
    """No reading: no row, and the last one is remembered as old."""
    heard, seen = taken([])
    assert seen.sensors == ()
    assert np.isnan(heard.degC).all()
    assert heard.sensor_us == (0, 0, 0)


@pytest.mark.parametrize("flag", [Flag.LATE, Flag.REFUSED, Flag.RETAINED, Flag.MAYBE_DUPLICATE])
def test_a_refused_reading_is_not_used(flag):
    """Late, refused, retained, perhaps doubled: recorded, never used."""
    q = quiet()
    names = ("sensor/A", "zone/L/duty", "zone/L/setpoint", ROOM)
    heard, seen = taken([reading(n, 0.7, 0, flag) for n in names])
    assert seen.sensors == ()
    assert np.isnan(heard.duty).all()
    assert np.isnan(heard.set_point).all()
    assert heard.around == pytest.approx(q.around_default)


def test_a_reading_from_an_outage_is_used_in_its_own_tick():
    """Backlog is late to arrive, not wrong."""
    _, seen = taken([reading("sensor/A", 100.0, 0, Flag.BACKLOG)])
    assert seen.degC == pytest.approx([100.0])


def test_a_duty_that_changes_inside_a_tick_is_weighted_by_its_time():
    """0.2 for 1.5 s, then 0.6 for 0.5 s, of 500 W: 150 W on average, 300 W at the end."""
    heard, _ = taken([reading("zone/L/duty", 0.2)])
    heard, seen = take_in(
        quiet(),
        heard,
        Tick(AT + TICK_US, TICK_US, (Reading(AT + 1_500_000, "zone/L/duty", 0.6, AT),)),
        DEGC,
    )
    assert seen.called_W[0] == pytest.approx((0.2 * 1.5 + 0.6 * 0.5) / 2 * 500)
    assert seen.called_end_W[0] == pytest.approx(300.0)
    assert heard.duty[0] == pytest.approx(0.6)


def test_a_duty_holds_until_the_next_one():
    """Nothing new: the last duty goes on."""
    heard, _ = taken([reading("zone/L/duty", 0.4)])
    _, seen = taken([], heard=heard)
    assert seen.called_W[0] == pytest.approx(200.0)


def test_heat_is_uncertain_until_every_duty_was_heard():
    """One zone's duty alone does not tell the other's."""
    heard, seen = taken([reading("zone/L/duty", 0.4)])
    assert not seen.duty_heard
    _, seen = taken([reading("zone/R/duty", 0.4)], heard=heard)
    assert seen.duty_heard


def test_a_duty_in_percent_is_scaled_by_the_description():
    """45 of 100 is 0.45 of the zone's 500 W."""
    q = quiet()
    per_cent = replace(
        q, plate=replace(q.plate, zones=tuple(replace(z, duty_full=100.0) for z in q.plate.zones))
    )
    _, seen = taken([reading("zone/L/duty", 45.0)], per_cent)
    assert seen.called_end_W[0] == pytest.approx(225.0)


@pytest.mark.parametrize("duty", [-0.1, 1.05, 45.0])
def test_a_duty_out_of_its_scale_is_not_taken_for_heat(duty):
    """The last good duty holds; 45 on a scale of 0 to 1 is a wrong scale, not a heater."""
    heard, _ = taken([reading("zone/L/duty", 0.4)])
    heard, seen = taken([reading("zone/L/duty", duty)], heard=heard)
    assert seen.called_end_W[0] == pytest.approx(200.0)


def test_a_duty_a_rounding_beyond_full_scale_is_full():
    """1.01 of 1 is rounding."""
    _, seen = taken([reading("zone/L/duty", 1.01)])
    assert seen.called_end_W[0] == pytest.approx(500.0)


def in_millivolts():
    q = quiet()
    A = replace(q.plate.sensors[0], signal="mV", cold_junction="surround/cabinet")
    return replace(q, plate=replace(q.plate, sensors=(A, *q.plate.sensors[1:])))


def test_a_voltage_is_read_with_the_temperature_of_its_terminals():
    """Type K at 120 degC, terminals at 30 degC: emf(120) - emf(30) (IEC 60584-1)."""
    voltage = float(emf_mV("K", 120.0) - emf_mV("K", 30.0))
    said = [reading("sensor/A", voltage), reading("surround/cabinet", 30.0)]
    _, seen = taken(said, in_millivolts())
    assert seen.degC == pytest.approx([120.0], abs=0.01)


def test_a_voltage_without_its_terminals_gives_no_temperature():
    """The reason is remembered, and no reading is made up."""
    heard, seen = taken([reading("sensor/A", 3.7)], in_millivolts())
    assert seen.sensors == ()
    assert "cold junction" in heard.raw_trouble[0]


def test_the_temperature_of_the_terminals_holds_until_the_next_one():
    """The cabinet speaks once a minute, the thermocouple every two seconds."""
    voltage = float(emf_mV("K", 120.0) - emf_mV("K", 30.0))
    q = in_millivolts()
    heard, _ = taken([reading("surround/cabinet", 30.0)], q)
    _, seen = taken([reading("sensor/A", voltage)], q, heard)
    assert seen.degC == pytest.approx([120.0], abs=0.01)


def test_a_value_that_is_no_temperature_is_remembered_with_its_reason():
    """3000 degC is outside type K."""
    heard, seen = taken([reading("sensor/A", 2900.0)])
    assert seen.sensors == ()
    assert "outside element K" in heard.raw_trouble[0]
    heard, _ = taken([reading("sensor/A", 100.0)], heard=heard)
    assert heard.raw_trouble[0] == ""


def test_surroundings_and_set_points_come_in_the_plates_own_unit():
    """77 degF are 25 degC; 248 degF are 120 degC."""
    heard, seen = taken(
        [reading(ROOM, 77.0), reading("zone/L/setpoint", 248.0)], unit=TemperatureUnit.DEGF
    )
    assert seen.around[quiet().around_names.index(ROOM)] == pytest.approx(25.0)
    assert heard.set_point[0] == pytest.approx(120.0)


def ramp(rate_K_s, seconds, every_s=2.0):
    """Set-points of a ramp, tick by tick."""
    heard = nothing_heard(quiet())
    for k in range(round(seconds / every_s)):
        at = T0 + round(k * every_s * 1e6)
        said = Reading(at, "zone/L/setpoint", 60.0 + rate_K_s * k * every_s, at)
        heard, _ = take_in(quiet(), heard, Tick(at, TICK_US, (said,)), DEGC)
    return heard


@pytest.mark.parametrize("every_s", [0.1, 2.0, 10.0])
def test_the_slope_of_a_set_point_is_that_of_its_last_minute(every_s):
    """3 K/min, whatever the sample time; of points no older than a minute."""
    heard = ramp(0.05, 120.0, every_s)
    assert heard.set_point_slope[0] == pytest.approx(0.05)
    assert heard.set_points[0][-1][0] - heard.set_points[0][0][0] <= 60_000_000
    assert len(heard.set_points[0]) <= 70  # about one a second


def test_a_set_point_heard_for_a_moment_has_no_slope_yet():
    """Twenty seconds are needed to tell a ramp from a step."""
    assert ramp(0.05, 18.0).set_point_slope[0] == 0.0
    assert ramp(0.05, 30.0).set_point_slope[0] == pytest.approx(0.05)


def intervals(stamps_s):
    heard = nothing_heard(quiet())
    for s in stamps_s:
        at = T0 + round(s * 1e6)
        said = Reading(at, "sensor/A", 100.0, at)
        heard, _ = take_in(quiet(), heard, Tick(at, TICK_US, (said,)), DEGC)
    return heard.interval_us[0] / 1e6


def test_the_sample_time_is_learnt_from_the_readings():
    """Every 5 s."""
    assert intervals(np.arange(20) * 5.0) == pytest.approx(5.0)


def test_an_outage_is_not_taken_for_a_sample_time():
    """After an hour of silence the next blindness is still found within seconds."""
    stamps = np.concatenate((np.arange(20) * 2.0, 3600 + np.arange(2) * 2.0))
    assert intervals(stamps) < 2.5


def test_a_plate_that_is_read_more_slowly_from_now_on_is_believed():
    """From 2 s to 10 s: within 40 samples the sample time is 10 s to a tenth."""
    stamps = np.concatenate((np.arange(20) * 2.0, 40 + np.arange(40) * 10.0))
    assert intervals(stamps) == pytest.approx(10.0, rel=0.1)


def test_a_channel_that_the_plate_does_not_have_is_ignored():
    """Another plate's sensor on the same bus."""
    _, seen = taken([reading("sensor/T99", 100.0), reading("zone/X/duty", 0.5)])
    assert seen.sensors == ()
    assert plate().sensors[0].name == "A"

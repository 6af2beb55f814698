"""Each fault does to the simulated plant what its name says."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from platewatch.thermal.plate import Rectangle
from sim_sensors.faults import (
    Fault,
    HeatSpot,
    LoadPutOn,
    Loose,
    LossesChanged,
    Noisy,
    Offset,
    Open,
    Reversed,
    Slow,
    Stuck,
    Swapped,
    WrongScale,
    ZoneNotHeating,
    ZoneStaysOn,
)
from sim_sensors.simulation import Plant, Sample, Simulation
from sim_sensors.truth import AS_DESCRIBED, Load

SOAK_S = 1600.0
MOULD = Load(Rectangle(0.05, 0.05, 0.1, 0.1), mass_kg=2.0)


@pytest.fixture
def soaked(small_plant: Plant) -> Simulation:
    """The small plate in its soak at 90 degC."""
    return _run_to(_start(small_plant), SOAK_S)[0]


def _start(plant: Plant, *faults: Fault) -> Simulation:
    return Simulation(plant, faults, seed=3, spacing_m=0.025, model_error=AS_DESCRIBED)


def _run_to(simulation: Simulation, end_s: float) -> tuple[Simulation, list[Sample]]:
    samples = []
    while simulation.at_s < end_s:
        samples.append(simulation.step())
    return simulation, samples


def _after(soaked: Simulation, fault: Fault, seconds: float) -> list[Sample]:
    twin = soaked.copy()
    twin.add(fault)
    return _run_to(twin, SOAK_S + seconds)[1]


def _values(samples: list[Sample], channel: str) -> np.ndarray:
    return np.array([sample.readings[channel] for sample in samples])


def test_loops_hold_the_set_point_in_the_soak(soaked: Simulation) -> None:
    """PI control leaves no lasting error: within three standard errors of the noise, plus
    half a quantum."""
    samples = _run_to(soaked.copy(), SOAK_S + 300.0)[1]
    for name in ("sensor/A", "sensor/B"):
        assert _values(samples, name).mean() == pytest.approx(90.0, abs=0.1)


def test_a_copy_goes_its_own_way_and_leaves_the_first_alone(soaked: Simulation) -> None:
    """Scoring programs start many incidents from one soak."""
    twin = soaked.copy()
    before = soaked.truth.field.copy()
    twin.add(ZoneStaysOn(at_s=SOAK_S, zone="L"))
    _run_to(twin, SOAK_S + 60.0)
    assert np.array_equal(soaked.truth.field, before)
    one, two = (_run_to(soaked.copy(), SOAK_S + 20.0)[1] for _ in range(2))
    assert [s.readings for s in one] == [s.readings for s in two]


def test_a_zone_that_stays_on_draws_all_its_watts(soaked: Simulation) -> None:
    """Whatever is called for, 400 W arrive after a few heater lags."""
    last = _after(soaked, ZoneStaysOn(at_s=SOAK_S, zone="L"), 120.0)[-1]
    assert last.truth.watts["L"] == pytest.approx(400.0, abs=0.1)
    assert last.readings["zone/L/duty"] < 0.2
    assert last.truth.peak_degC > 91.0


def test_a_zone_that_does_not_heat_draws_nothing_however_much_is_called_for(
    soaked: Simulation,
) -> None:
    """The command rises, the watts die out with the heater lag."""
    samples = _after(soaked, ZoneNotHeating(at_s=SOAK_S, zone="R"), 300.0)
    assert samples[-1].truth.watts["R"] == pytest.approx(0.0, abs=0.01)
    assert samples[-1].readings["zone/R/duty"] > samples[0].readings["zone/R/duty"] + 0.1


def test_a_cold_load_cools_the_place_under_it_and_takes_up_the_heat(soaked: Simulation) -> None:
    """Nothing on the bus says so unless it is announced."""
    twin = soaked.copy()
    twin.add(LoadPutOn(at_s=SOAK_S, load=MOULD))
    samples = _run_to(twin, SOAK_S + 240.0)[1]
    assert _values(samples, "sensor/A").min() < 80.0
    assert 20.0 < twin.truth.load_degC[0] < twin.truth.peak()[0]
    assert not any(sample.events for sample in samples)


def test_an_announced_load_tells_where_it_lies_and_when_it_is_gone(soaked: Simulation) -> None:
    """Lower left corner and size in mm, as rectangles are described."""
    fault = LoadPutOn(at_s=SOAK_S, load=MOULD, announced=True, zone="L", off_s=SOAK_S + 40.0)
    samples = _after(soaked, fault, 60.0)
    (on,), (off,) = (s.events for s in samples if s.events)
    assert (on["event"], on["x_mm"], on["width_mm"], on["mass_kg"]) == ("load-on", 50, 100, 2)
    assert off["event"] == "load-off"


def test_a_loose_sensor_shows_its_part_of_the_rise_and_late(soaked: Simulation) -> None:
    """22 + 0.8 (T - 22) in the end; after one lag 63 % of the way there."""
    samples = _after(soaked, Loose(at_s=SOAK_S, sensor="C", slow_s=90.0), 600.0)
    reading, healthy = _values(samples, "sensor/C"), _healthy(soaked, 600.0)
    final = 22.0 + 0.8 * (healthy[-1] - 22.0)
    assert reading[-1] == pytest.approx(final, abs=0.6)
    assert reading[44] == pytest.approx(healthy[0] + 0.632 * (final - healthy[0]), abs=0.6)


def _healthy(soaked: Simulation, seconds: float) -> np.ndarray:
    return _values(_run_to(soaked.copy(), SOAK_S + seconds)[1], "sensor/C")


def test_a_reversed_sensor_shows_the_rise_as_a_fall(small_plant: Plant) -> None:
    """T_cj - (T - T_cj) from a cold start: C reads below the room while the plate warms."""
    samples = _run_to(_start(small_plant, Reversed(at_s=0.0, sensor="C")), 300.0)[1]
    twin = _run_to(_start(small_plant), 300.0)[1]
    mirrored = 2 * 22.0 - _values(twin, "sensor/C")
    assert _values(samples, "sensor/C") == pytest.approx(mirrored, abs=1.2)  # noise, twice
    assert samples[-1].readings["sensor/C"] < 0.0


@pytest.mark.parametrize(
    ("fault", "expected"),
    [
        (Offset(at_s=SOAK_S, sensor="C", shift_K=-3.0), -3.0),
        (Offset(at_s=SOAK_S, sensor="C", K_per_h=-60.0), -1.85),
        (WrongScale(at_s=SOAK_S, sensor="C", factor=1.1), 0.1 * 68.0),
        (Slow(at_s=SOAK_S, sensor="C", slow_s=60.0), 0.0),
    ],
)
def test_an_instrument_fault_shifts_the_reading_by_what_it_says(
    soaked: Simulation, fault: Fault, expected: float
) -> None:
    """Seen over the last 20 s of two minutes (111 s on average), the same noise on both sides."""
    change = _values(_after(soaked, fault, 120.0), "sensor/C") - _healthy(soaked, 120.0)
    assert change[-10:].mean() == pytest.approx(expected, abs=0.2)


def test_a_stuck_sensor_does_not_move_at_all(soaked: Simulation) -> None:
    """Not even by its noise."""
    reading = _values(_after(soaked, Stuck(at_s=SOAK_S, sensor="C"), 60.0), "sensor/C")
    assert set(reading) == {reading[0]}
    assert reading[0] == pytest.approx(_healthy(soaked, 10.0).mean(), abs=0.5)


def test_an_open_sensor_sends_nothing(soaked: Simulation) -> None:
    """No number at all; never a zero."""
    assert np.isnan(_values(_after(soaked, Open(at_s=SOAK_S, sensor="C"), 10.0), "sensor/C")).all()


def test_a_noisy_sensor_scatters_as_many_times_wider_as_stated(soaked: Simulation) -> None:
    """Same random numbers, ten times their size; rounding adds at most half a quantum."""
    noisy = _values(_after(soaked, Noisy(at_s=SOAK_S, sensor="C"), 400.0), "sensor/C")
    assert noisy.std() == pytest.approx(1.0, rel=0.2)


def test_swapped_sensors_show_each_others_readings(small_plant: Plant) -> None:
    """Unequal places, so that the exchange is seen."""
    quiet = tuple(replace(sensor, noise_K=0.0) for sensor in small_plant.plate.sensors)
    plant = replace(small_plant, plate=replace(small_plant.plate, sensors=quiet))
    plain = _run_to(_start(plant), 100.0)[0]
    crossed = plain.copy()
    crossed.add(
        Offset(at_s=100.0, sensor="C", shift_K=5.0), Swapped(at_s=100.0, first="B", second="C")
    )
    straight, exchanged = plain.step().readings, crossed.step().readings
    assert exchanged["sensor/B"] == pytest.approx(straight["sensor/C"] + 5.0)
    assert exchanged["sensor/C"] == pytest.approx(straight["sensor/B"])


def test_a_draught_and_a_foreign_heat_spot_change_the_plate_itself(soaked: Simulation) -> None:
    """More heat is called for in the draught; the spot warms its own place."""
    calm = _after(soaked, LossesChanged(at_s=SOAK_S, factor=1.0), 400.0)
    windy = _after(soaked, LossesChanged(at_s=SOAK_S, factor=3.0), 400.0)
    assert sum(windy[-1].truth.watts.values()) > 1.3 * sum(calm[-1].truth.watts.values())
    spot = HeatSpot(at_s=SOAK_S, x_m=0.35, y_m=0.15, width_m=0.05, watts=100.0)
    hot = _after(soaked, spot, 120.0)[-1].truth
    assert (hot.peak_x_m, hot.peak_y_m) == pytest.approx((0.35, 0.15), abs=0.03)

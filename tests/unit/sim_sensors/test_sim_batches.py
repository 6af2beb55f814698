"""The demonstration batches, for the demo plate and for any other."""

from __future__ import annotations

import pytest

from platewatch.errors import SettingsError
from platewatch.thermal.plate import Plate
from sim_sensors.batches import ALIASES, BATCHES, batch
from sim_sensors.faults import LoadPutOn, Loose, Reversed, ZoneStaysOn
from sim_sensors.simulation import Plant, simulate


def test_every_batch_fits_a_plate_with_fewer_zones(small_plate: Plate) -> None:
    """Zone and sensor are counted round; the load stays inside its zone."""
    for name in BATCHES:
        for fault in batch(name, small_plate).faults:
            if isinstance(fault, LoadPutOn):
                assert fault.load.footprint.width_m <= 0.2
                assert fault.load.footprint.x_m >= 0.2


def test_numbers_are_names_too(small_plate: Plate) -> None:
    """The batches of the demonstration are known by both."""
    assert {batch(number, small_plate).name for number in ALIASES} == set(BATCHES)


def test_a_batch_takes_other_places_times_and_sizes(small_plate: Plate) -> None:
    """For scoring programs: where, when, how large."""
    (stuck,) = batch("zone-stays-on", small_plate, incident_s=100.0, zone="R").faults
    assert isinstance(stuck, ZoneStaysOn)
    assert (stuck.at_s, stuck.zone) == (100.0, "R")
    (put,) = batch("cold-load", small_plate, x_m=0.1, y_m=0.1, width_m=0.1, mass_kg=3.0).faults
    assert isinstance(put, LoadPutOn)
    assert put.load.footprint.x_m == pytest.approx(0.05)
    assert put.load.mass_kg == 3.0
    (loose,) = batch("5", small_plate, sensor="C", part=0.7).faults
    assert isinstance(loose, Loose)
    assert (loose.sensor, loose.part) == ("C", 0.7)


def test_a_reversed_sensor_is_reversed_from_the_start(small_plate: Plate) -> None:
    """After maintenance, before the heat-up."""
    (fault,) = batch("7", small_plate).faults
    assert isinstance(fault, Reversed)
    assert fault.at_s == 0.0


@pytest.mark.parametrize(
    ("name", "changes", "says"),
    [
        ("hot-load", {}, "no batch 'hot-load'; choose one of clean"),
        ("cold-load", {"zone": "Z9"}, "no zone 'Z9': L, R"),
        ("loose-sensor", {"sensor": "T9"}, "no sensor 'T9': A, B, C"),
        ("clean", {"weight": 3}, "no setting weight"),
    ],
)
def test_a_wrong_wish_is_answered_with_what_there_is(
    small_plate: Plate, name: str, changes: dict[str, object], says: str
) -> None:
    """One line with the choices."""
    with pytest.raises(SettingsError, match=says):
        batch(name, small_plate, **changes)


def test_the_same_seed_gives_the_same_numbers_and_another_seed_other_ones(
    small_plant: Plant,
) -> None:
    """Bit for bit."""
    first, again, other = (
        [s.readings for s in simulate(small_plant, "clean", seed=seed, until_s=60.0)]
        for seed in (7, 7, 8)
    )
    assert first == again
    assert first != other


def test_a_batch_tells_its_start_and_its_steps(small_plant: Plant) -> None:
    """One event each, and none that gives the incident away."""
    samples = simulate(small_plant, "zone-stays-on", until_s=900.0)
    events = [(s.at_s, e["event"], e.get("step")) for s in samples for e in s.events]
    assert events == [(2.0, "start", "ramp"), (680.0, "step", "soak")]

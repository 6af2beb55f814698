"""What a surface loses, whatever its temperature."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from platewatch.thermal import losses

degC = st.floats(-50.0, 600.0)
length_m = st.floats(0.02, 1.0)


@given(degC, degC, length_m)
def test_a_plate_colder_than_the_room_is_a_hot_one_upside_down(plate, room, length):
    """Air sinking from a cold face looking up moves as air rising below a hot one."""
    up = losses.natural_up(plate, room, length)
    assert up == pytest.approx(losses.natural_down(room, plate, length), rel=1e-12) or plate == room


def test_a_plate_as_warm_as_the_room_loses_nothing():
    """No division by zero and no warning at the temperature of the room."""
    plate = np.array([22.0, 22.0])
    assert losses.natural_up(plate, 22.0, 0.2).tolist() == [0.0, 0.0]
    assert losses.natural_down(plate, 22.0, 0.2).tolist() == [0.0, 0.0]
    assert losses.radiation_flux(0.8, plate, 22.0).tolist() == [0.0, 0.0]
    assert np.isfinite(losses.vertical(plate, 22.0, 0.2)).all()


@given(length_m, st.floats(0.0, 40.0))
def test_a_hotter_plate_always_loses_more(length, room):
    """The published jump at Ra = 1e7 leaves no power without a steady temperature."""
    plate = np.linspace(room - 30.0, 500.0, 4000)
    for face in (losses.natural_up, losses.natural_down, losses.vertical):
        flux = face(plate, room, length) * (plate - room)
        assert (np.diff(flux) > 0.0).all()


def test_the_flow_over_a_plate_facing_up_changes_without_a_jump():
    """Newton's method needs it: no step of 0.01 K changes the coefficient by 0.1 %."""
    plate = np.arange(23.0, 60.0, 0.01)
    Ra = losses.rayleigh(plate, 20.0, 0.24)
    assert Ra[0] < 0.7e7 < 1.5e7 < Ra[-1]
    h = losses.natural_up(plate, 20.0, 0.24)
    assert np.abs(np.diff(np.log(h))).max() < 1e-3


def test_away_from_the_transition_the_coefficient_is_the_published_one():
    """The smoothed step reaches no further than a factor sqrt 2 from Ra = 1e7."""
    plate = np.array([21.0, 24.0, 40.0, 150.0])
    Ra = losses.rayleigh(plate, 20.0, 0.24)
    assert (np.abs(np.log2(Ra / 1e7)) > 0.5).all()
    k = losses.air((plate + 20.0) / 2 + 273.15).k
    expected = losses.nusselt_up(Ra) * k / 0.24
    assert losses.natural_up(plate, 20.0, 0.24) == pytest.approx(expected)


def test_faster_air_takes_more_heat():
    """Forced convection grows with speed through the laminar-turbulent transition."""
    speed = np.linspace(0.5, 40.0, 60)
    h = [float(losses.forced(v, 120.0, 20.0, 0.6)) for v in speed]
    assert (np.diff(h) > 0.0).all()


@given(st.floats(0.01, 1.0), degC)
def test_the_slope_of_radiation_is_its_derivative(emissivity, plate):
    """Central difference over 0.2 K; its own error is 4 sigma T (0.1 K)^2."""
    above = losses.radiation_flux(emissivity, plate + 0.1, 20.0)
    below = losses.radiation_flux(emissivity, plate - 0.1, 20.0)
    slope = losses.radiation_slope(emissivity, plate)
    assert slope == pytest.approx((above - below) / 0.2, rel=1e-5)


def test_a_field_keeps_its_shape():
    """One call serves all cells of a plate."""
    field = np.linspace(20.0, 200.0, 12).reshape(3, 4)
    assert losses.natural_up(field, 22.0, 0.1).shape == (3, 4)
    assert losses.forced(2.0, field, 22.0, 0.1).shape == (3, 4)

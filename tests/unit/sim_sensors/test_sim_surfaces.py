"""What a face of the simulated plate loses, against published figures."""

from __future__ import annotations

import numpy as np
import pytest
from ht.conv_free_immersed import Nu_horizontal_plate_McAdams
from ht.radiation import q_rad

from sim_sensors.surfaces import air, forced_convection, natural_convection, radiation

# Air at 1 atm: CoolProp 8.0, T (K), nu (m2/s), k (W/mK)
AIR = [(300.0, 1.575e-5, 0.02638), (400.0, 2.621e-5, 0.03345), (500.0, 3.839e-5, 0.03994)]
# 0.40 x 0.30 m in air of 25 degC, CoolProp air: surface degC, h up, h down (W/m2K)
HORIZONTAL = [(60.0, 6.194, 3.097), (100.0, 7.351, 3.675), (200.0, 8.695, 4.347)]


@pytest.mark.parametrize(("T_K", "nu", "k"), AIR)
def test_air_has_the_properties_of_the_tables(T_K: float, nu: float, k: float) -> None:
    """Sutherland's law is good to about 2 % between 300 and 500 K."""
    got_nu, got_k = air(np.array([T_K]))
    assert got_nu[0] == pytest.approx(nu, rel=0.02)
    assert got_k[0] == pytest.approx(k, rel=0.02)


@pytest.mark.parametrize(("surface", "up", "down"), HORIZONTAL)
def test_a_warm_face_sheds_heat_as_mcadams_says(surface: float, up: float, down: float) -> None:
    """Within 2 %, the spread of the property tables."""
    degC = np.array([surface])
    length = 0.4 * 0.3 / 1.4
    assert natural_convection(degC, 25.0, length, True)[0] == pytest.approx(up, rel=0.02)
    assert natural_convection(degC, 25.0, length, False)[0] == pytest.approx(down, rel=0.02)


def test_a_large_hot_face_is_turbulent() -> None:
    """Above Ra = 1e7 the cube-root law, where the size of the plate drops out."""
    hot = np.array([140.0])
    small, large = (natural_convection(hot, 22.0, L, True)[0] for L in (0.24, 0.48))
    assert large == pytest.approx(small, rel=1e-12)
    nu, k = air(np.array([354.15]))
    alpha = k * 354.15 * 287.05 / (101_325.0 * 1008.0)
    grashof = 9.80665 / 354.15 * 118.0 * 0.24**3 / nu**2
    outside = Nu_horizontal_plate_McAdams(float((nu / alpha)[0]), float(grashof[0])) * k[0] / 0.24
    assert small == pytest.approx(outside, rel=1e-6)


def test_a_cold_face_up_behaves_like_a_warm_face_down() -> None:
    """Colder than the room, the upper face keeps its air."""
    up = natural_convection(np.array([10.0]), 30.0, 0.1, True)
    down = natural_convection(np.array([30.0]), 10.0, 0.1, False)
    assert up == pytest.approx(down, rel=1e-9)


def test_radiation_follows_the_fourth_power() -> None:
    """Against an outside function whose constant differs by 1e-6."""
    got = radiation(np.array([200.0]), 25.0, 0.8)[0]
    assert got == pytest.approx(q_rad(0.8, 473.15, 298.15), rel=1e-5)


def test_a_stream_cools_by_the_flat_plate_laws() -> None:
    """Laminar: 0.664 Re^1/2 Pr^1/3 (Incropera sec. 7.2, from memory); Pr of air 0.70 to 0.71."""
    degC, speed, length = np.array([60.0]), 2.0, 0.3
    nu, k = air(np.array([315.65]))
    reynolds = speed * length / nu[0]
    expected = 0.664 * np.sqrt(reynolds) * 0.705 ** (1 / 3) * k[0] / length
    assert forced_convection(degC, 25.0, length, speed)[0] == pytest.approx(expected, rel=0.01)

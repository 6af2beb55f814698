"""Surface losses against published correlations, worked examples and a second library."""

import numpy as np
import pytest
from ht.conv_external import Nu_horizontal_plate_laminar_Baehr
from ht.conv_free_immersed import Nu_horizontal_plate_McAdams, Nu_vertical_plate_Churchill
from ht.radiation import q_rad
from scipy.integrate import quad
from scipy.optimize import brentq

from platewatch.thermal import losses

# Incropera & DeWitt sec. 9.6, McAdams 1954, Lloyd & Moran 1974, Churchill & Chu 1975 (from
# memory); evaluated at Pr = 0.7 by an independent script, equal to `ht` to four decimals.
NUSSELT = [
    # Ra, facing up, facing down, vertical
    (1e4, 5.4000, 2.7000, 5.4253),
    (1e5, 9.6027, 4.8014, 9.1985),
    (1e6, 17.0763, 8.5381, 16.5304),
    (1e7, 30.3664, 15.1832, 31.1562),
    (1e8, 69.6238, 27.0000, 60.9492),
    (1e9, 150.0000, 48.0135, 122.6151),
]
FOUR_DECIMALS = 5e-5


@pytest.mark.parametrize(("Ra", "up", "down", "vertical"), NUSSELT)
def test_natural_convection_gives_the_published_nusselt_numbers(Ra, up, down, vertical):
    """At Ra = 1e7 the 0.54 branch still holds."""
    assert losses.nusselt_up(Ra) == pytest.approx(up, abs=FOUR_DECIMALS)
    assert losses.nusselt_down(Ra) == pytest.approx(down, abs=FOUR_DECIMALS)
    assert losses.nusselt_vertical(Ra, 0.7) == pytest.approx(vertical, abs=FOUR_DECIMALS)


@pytest.mark.parametrize("Ra", np.logspace(5.1, 9.9, 25))
@pytest.mark.parametrize("Pr", [0.68, 0.72])
def test_natural_convection_agrees_with_an_independent_library(Ra, Pr):
    """Second route: `ht` 1.2.0."""
    Gr = Ra / Pr
    assert losses.nusselt_up(Ra) == pytest.approx(Nu_horizontal_plate_McAdams(Pr, Gr, True))
    assert losses.nusselt_down(Ra) == pytest.approx(Nu_horizontal_plate_McAdams(Pr, Gr, False))
    assert losses.nusselt_vertical(Ra, Pr) == pytest.approx(Nu_vertical_plate_Churchill(Pr, Gr))


def test_the_fire_screen_of_the_textbook_loses_1060_W_by_air_and_2355_W_by_radiation():
    """Incropera Example 9.2 (from memory): 0.71 x 1.02 m, 232 degC in 23 degC; 0.5 %."""
    area = 0.71 * 1.02
    h = losses.vertical(232.0, 23.0, 0.71)
    assert losses.rayleigh(232.0, 23.0, 0.71) == pytest.approx(1.813e9, rel=0.01)
    assert losses.nusselt_vertical(1.8125e9, 0.690) == pytest.approx(147.11, rel=0.005)
    assert h == pytest.approx(7.003, rel=0.005)
    assert h * area * 209.0 == pytest.approx(1060.0, rel=0.005)
    assert losses.radiation_flux(1.0, 232.0, 23.0) * area == pytest.approx(2355.0, rel=0.005)


# A plate of 0.40 x 0.30 m in air of 25 degC, air properties of CoolProp 8.0, evaluated by
# an independent script: degC, h up, h down, h of radiation for emissivity 0.1 and 0.8.
SMALL_PLATE_LENGTH_M = 0.12 / 1.4
SMALL_PLATE = [
    (60.0, 6.194, 3.097, 0.716, 5.724),
    (100.0, 7.351, 3.675, 0.868, 6.947),
    (200.0, 8.695, 4.347, 1.368, 10.943),
    (400.0, 9.777, 4.888, 2.985, 23.882),
]
PROPERTY_TABLES_DIFFER = 0.02


@pytest.mark.parametrize(("degC", "up", "down", "grey", "dark"), SMALL_PLATE)
def test_a_small_plate_has_the_loss_coefficients_of_other_air_tables(degC, up, down, grey, dark):
    """Within 2 %, which is how far published air properties differ."""
    rise = degC - 25.0
    tolerance = PROPERTY_TABLES_DIFFER
    assert losses.natural_up(degC, 25.0, SMALL_PLATE_LENGTH_M) == pytest.approx(up, rel=tolerance)
    assert losses.natural_down(degC, 25.0, SMALL_PLATE_LENGTH_M) == pytest.approx(
        down, rel=tolerance
    )
    for emissivity, expected in ((0.1, grey), (0.8, dark)):
        flux = losses.radiation_flux(emissivity, degC, 25.0)
        assert flux / rise == pytest.approx(expected, abs=6e-4)  # three decimals


@pytest.mark.parametrize(("emissivity", "expected_degC"), [(0.8, 160.265), (0.1, 265.163)])
def test_500_W_bring_the_small_plate_to_the_temperature_of_other_air_tables(
    emissivity, expected_degC
):
    """Steady lumped plate, both faces losing heat; the rise within 2 %."""

    def surplus(degC):
        h = losses.natural_up(degC, 25.0, SMALL_PLATE_LENGTH_M)
        h = h + losses.natural_down(degC, 25.0, SMALL_PLATE_LENGTH_M)
        flux = h * (degC - 25.0) + 2 * losses.radiation_flux(emissivity, degC, 25.0)
        return 500.0 - 0.12 * float(flux)

    rise = brentq(surplus, 30.0, 600.0) - 25.0
    assert rise == pytest.approx(expected_degC - 25.0, rel=PROPERTY_TABLES_DIFFER)


@pytest.mark.parametrize(
    ("kelvin", "nu", "k"),
    [
        (300, 1.575e-5, 0.02638),
        (350, 2.069e-5, 0.03000),
        (400, 2.613e-5, 0.03345),
        (500, 3.839e-5, 0.03994),
    ],
)
def test_air_is_that_of_an_equation_of_state(kelvin, nu, k):
    """CoolProp 8.0 at 1 atm, within 2 %."""
    gas = losses.air(np.array([float(kelvin)]))
    assert gas.nu == pytest.approx([nu], rel=PROPERTY_TABLES_DIFFER)
    assert gas.k == pytest.approx([k], rel=PROPERTY_TABLES_DIFFER)


@pytest.mark.parametrize(
    ("kelvin", "nu", "k", "Pr"),
    [
        (300, 15.89e-6, 0.0263, 0.707),
        (350, 20.92e-6, 0.0300, 0.700),
        (400, 26.41e-6, 0.0338, 0.690),
        (500, 38.79e-6, 0.0407, 0.684),
    ],
)
def test_air_is_that_of_the_textbook_table(kelvin, nu, k, Pr):
    """Incropera Table A.4, from memory; exact at tabulated temperatures."""
    gas = losses.air(np.array([float(kelvin)]))
    assert (gas.nu[0], gas.k[0], gas.Pr[0]) == pytest.approx((nu, k, Pr))


def test_laminar_flow_along_the_plate_agrees_with_an_independent_library():
    """Second route: `ht` 1.2.0, Baehr & Stephan; the constants are rounded to 0.664."""
    for Re in (1e4, 1e5, 4.9e5):
        expected = Nu_horizontal_plate_laminar_Baehr(Re, 0.7)
        assert losses.nusselt_forced(Re, 0.7) == pytest.approx(expected, rel=0.005)


@pytest.mark.parametrize("Re", [3e5, 5e5, 1e6, 5e6])
def test_flow_along_the_plate_is_the_average_of_the_local_coefficients(Re):
    """Incropera ch. 7 (from memory): 0.332 Re_x^(1/2) to 5e5, then 0.0296 Re_x^(4/5)."""
    turn = min(5e5, Re)
    laminar, _ = quad(lambda Re_x: 0.332 * Re_x**0.5 / Re_x, 0.0, turn)
    turbulent, _ = quad(lambda Re_x: 0.0296 * Re_x**0.8 / Re_x, turn, Re)
    expected = (laminar + turbulent) * np.cbrt(0.7)
    assert losses.nusselt_forced(Re, 0.7) == pytest.approx(expected, rel=0.002)  # 871 is rounded


def test_radiation_agrees_with_an_independent_library():
    """Second route: `ht` 1.2.0, whose Stefan-Boltzmann constant is an older one."""
    flux = losses.radiation_flux(0.8, 200.0, 25.0)
    assert flux == pytest.approx(1915.050988, abs=1e-6)  # CODATA 2018
    assert flux == pytest.approx(q_rad(0.8, 473.15, 298.15), rel=1e-5)

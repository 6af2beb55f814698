"""Thermocouple reference functions against published values and an independent library."""

import numpy as np
import pytest
import thermocouple_its90

from platewatch.monitor import thermocouple

# NIST Monograph 175 (Burns et al. 1993) / SRD 60 / IEC 60584-1:2013.  The type T table and
# the coefficient page were seen in part, other three-decimal values are from memory; all
# six-decimal values were computed by an independent script.
EMF_mV = {
    "K": {-200: -5.891404, -100: -3.553631, 25: 1.000242, 100: 4.096230, 200: 8.138473,
          300: 12.208566, 400: 16.397142, 1000: 41.275606, 1372: 54.886364},
    "J": {-200: -7.890483, -100: -4.632524, 25: 1.277288, 100: 5.268916, 200: 10.778746,
          300: 16.327206, 400: 21.848065, 760: 42.918641, 1200: 69.553180},
    "T": {-200: -5.602961, -100: -3.378582, 25: 0.991977, 100: 4.278519, 200: 9.288102,
          300: 14.861928, 400: 20.871970},
    "N": {-200: -3.990376, -100: -2.406811, 25: 0.658646, 100: 2.774124, 200: 5.913415,
          300: 9.341152, 400: 12.973686, 1300: 47.512772},
    "E": {-200: -8.824581, -100: -5.237184, 25: 1.495112, 100: 6.318930, 200: 13.421296,
          300: 21.036238, 400: 28.945964, 1000: 76.372826},
    "S": {-50: -0.235555, 25: 0.142598, 100: 0.645913, 200: 1.440783, 300: 2.323042,
          400: 3.259357, 1000: 9.587098},
}  # fmt: skip


@pytest.mark.parametrize("letter", EMF_mV)
def test_the_voltage_is_that_of_the_reference_tables(letter):
    """Within 1e-6 mV, half the last digit included."""
    degC, expected = np.array(list(EMF_mV[letter].items())).T
    assert thermocouple.emf_mV(letter, degC) == pytest.approx(expected, abs=1e-6)


# The same sources, inverted by an independent script.
TEMPERATURE_degC = [
    ("K", 5.000, 121.9566),
    ("K", 10.000, 246.2295),
    ("K", 20.000, 484.8813),
    ("J", 16.000, 294.0901),
    ("J", 20.000, 366.4866),
    ("T", -3.000, -87.0077),
    ("T", 5.000, 115.2436),
    ("N", 10.000, 318.5039),
    ("E", 20.000, 286.6655),
    ("S", 2.000, 264.2342),
    ("B", 0.500, 321.9400),
]


@pytest.mark.parametrize(("letter", "mV", "degC"), TEMPERATURE_degC)
def test_a_voltage_gives_the_tabulated_temperature(letter, mV, degC):
    """Within 0.001 degC of the exact inverse."""
    assert thermocouple.temperature_degC(letter, mV) == pytest.approx(degC, abs=0.001)


@pytest.mark.parametrize(
    ("letter", "mV", "terminals", "degC", "wrong"),
    [
        ("K", 7.138, 25.0, 199.99422, 199.940),
        ("K", 10.000, 23.5, 269.23383, 269.7295),
        ("J", 15.050, 31.2, 305.81588, 308.1444),
    ],
)
def test_at_the_cold_junction_voltages_add_and_temperatures_do_not(
    letter, mV, terminals, degC, wrong
):
    """NIST Monograph 175, from memory; values by an independent script."""
    answer = thermocouple.temperature_degC(letter, mV, terminals)
    added = thermocouple.temperature_degC(letter, mV) + terminals
    assert answer == pytest.approx(degC, abs=0.001)
    assert added == pytest.approx(wrong, abs=0.001)


@pytest.mark.parametrize(
    ("letter", "uV_K"),
    [
        ("K", {25: 40.518, 200: 39.965, 400: 42.240}),
        ("J", {25: 51.752, 200: 55.506, 400: 55.152}),
        ("T", {25: 40.682, 200: 53.150}),
        ("N", {25: 26.782, 200: 32.991, 400: 37.125}),
        ("E", {25: 60.952, 200: 74.030, 400: 80.056}),
        ("S", {25: 5.991, 200: 8.460, 400: 9.568}),
    ],
)
def test_the_sensitivity_is_the_tabulated_seebeck_coefficient(letter, uV_K):
    """The same sources, three decimals of a microvolt per kelvin."""
    degC, expected = np.array(list(uV_K.items())).T
    assert thermocouple.seebeck_uV_K(letter, degC) == pytest.approx(expected, abs=6e-4)


@pytest.mark.parametrize("letter", thermocouple.TYPES)
def test_voltages_agree_with_an_independent_library_over_the_whole_range(letter):
    """Second route: thermocouple-its90 1.0.2."""
    other = thermocouple_its90.get(letter)
    assert thermocouple.range_degC(letter) == other.range
    degC = np.linspace(*other.range, 700)
    expected = [other.emf(float(t)) for t in degC]
    slopes = [1e3 * other.seebeck(float(t)) for t in degC]
    assert thermocouple.emf_mV(letter, degC) == pytest.approx(expected, abs=1e-6)
    assert thermocouple.seebeck_uV_K(letter, degC) == pytest.approx(slopes, abs=1e-6)


@pytest.mark.parametrize("letter", thermocouple.TYPES)
@pytest.mark.parametrize("terminals", [0.0, 31.7])
def test_temperatures_agree_with_an_independent_library_over_the_whole_range(letter, terminals):
    """Second route: thermocouple-its90 1.0.2, cold junction included; 0.001 degC."""
    other = thermocouple_its90.get(letter)
    low, high = other.invertible_emf_range
    at_terminals = other.emf(terminals)
    mV = np.linspace(low - at_terminals + 1e-9, high - at_terminals - 1e-9, 500)
    expected = [other.temperature(float(e), reference=terminals) for e in mV]
    answer = thermocouple.temperature_degC(letter, mV, terminals)
    assert answer == pytest.approx(expected, abs=0.001)


@pytest.mark.parametrize(
    ("wire", "shown"),
    [
        ("K", {"K": 120.0, "J": 98.7, "T": 113.4}),
        ("J", {"K": 148.6, "J": 120.0, "T": 137.4}),
        ("T", {"K": 127.8, "J": 104.5, "T": 120.0}),
    ],
)
def test_an_instrument_set_to_the_wrong_type_shows_the_known_wrong_temperature(wire, shown):
    """A good junction at 120 degC, terminals at 25 degC (Monograph 175, one decimal)."""
    for set_as, degC in shown.items():
        assert thermocouple.read_as(wire, set_as, 120.0, 25.0) == pytest.approx(degC, abs=0.051)


@pytest.mark.parametrize(
    ("wire", "set_as", "shown"),
    [("K", "J", 142.9), ("K", "T", 162.4), ("J", "K", 231.2), ("T", "K", 202.7)],
)
def test_the_wrong_type_errs_more_on_a_hotter_plate(wire, set_as, shown):
    """A good junction at 180 degC, terminals at 25 degC (Monograph 175, one decimal)."""
    assert thermocouple.read_as(wire, set_as, 180.0, 25.0) == pytest.approx(shown, abs=0.051)


def test_type_k_wire_on_a_type_t_instrument_hides_inside_the_tolerance_of_a_cool_plate():
    """At 80 degC the error is 2.2 K, less than a class 2 sensor may have anyway."""
    error = thermocouple.read_as("K", "T", 80.0, 25.0) - 80.0
    assert abs(error) == pytest.approx(2.2, abs=0.051)

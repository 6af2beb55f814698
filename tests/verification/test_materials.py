"""Built-in materials against the handbook values they claim."""

import pytest

from platewatch.thermal.materials import BUILT_IN


def at(name, kelvin):
    material = BUILT_IN[name]
    degC = kelvin - 273.15
    return float(material.k.at(degC)), material.rho, float(material.cp.at(degC))


@pytest.mark.parametrize(
    ("name", "alpha"),
    [
        ("aluminium-pure", 97.1e-6),
        ("aluminium-2024", 73.0e-6),
        ("aluminium-cast-195", 68.2e-6),
        ("copper", 117e-6),
        ("brass", 33.9e-6),
        ("stainless-316", 3.48e-6),
        ("alumina", 11.9e-6),
    ],
)
def test_k_rho_and_cp_give_the_tabulated_diffusivity(name, alpha):
    """Incropera Tables A.1 and A.2, column alpha at 300 K, within 0.5 %."""
    k, rho, cp = at(name, 300.0)
    assert k / (rho * cp) == pytest.approx(alpha, rel=0.005)


@pytest.mark.parametrize(
    ("name", "rho", "cp", "k"),
    [
        ("aluminium-pure", 2702, 903, (237, 240, 231)),
        ("aluminium-2024", 2770, 875, (177, 186, 186)),
        ("aluminium-cast-195", 2790, 883, (168, 174, 185)),
        ("copper", 8933, 385, (401, 393, 379)),
        ("brass", 8530, 380, (110, 137, 149)),
        ("mild-steel", 7854, 434, (60.5, 56.7, 48.0)),
        ("stainless-304", 7900, 477, (14.9, 16.6, 19.8)),
        ("stainless-316", 8238, 468, (13.4, 15.2, 18.3)),
        ("alumina", 3970, 765, (36.0, 26.4, 15.8)),
    ],
)
def test_the_conductivity_follows_the_handbook_at_300_400_and_600_K(name, rho, cp, k):
    """Incropera Table A.1 (A.2 alumina); mild steel and 304 from memory."""
    assert at(name, 300.0)[1:] == pytest.approx((rho, cp))
    assert [at(name, T)[0] for T in (300.0, 400.0, 600.0)] == pytest.approx(list(k), abs=0.01)


@pytest.mark.parametrize(
    ("name", "k", "cp"), [("aluminium-6061", 155.319, 953.86), ("stainless-304", 15.309, 469.45)]
)
def test_the_low_temperature_fits_of_nist_agree_as_far_as_batches_of_metal_do(name, k, cp):
    """NIST cryogenic fits at 300 K (coefficients from memory); 10 % is the material spread."""
    ours_k, _, ours_cp = at(name, 300.0)
    assert ours_k == pytest.approx(k, rel=0.10)
    assert ours_cp == pytest.approx(cp, rel=0.10)


def test_plain_alloys_carry_their_handbook_values():
    """ASM (from memory) for 6061 and 5083; grey iron within the quoted spread."""
    assert at("aluminium-6061", 300.0) == (167.0, 2700.0, 896.0)
    assert at("aluminium-5083", 300.0) == (117.0, 2660.0, 900.0)
    k, rho, cp = at("grey-cast-iron", 300.0)
    assert 46.0 <= k <= 55.0
    assert 7150.0 <= rho <= 7200.0
    assert 460.0 <= cp <= 540.0


@pytest.mark.parametrize(
    ("name", "low", "high"),
    [
        ("aluminium-pure", 0.04, 0.06),
        ("stainless-304", 0.22, 0.67),
        ("stainless-316", 0.22, 0.67),
        ("copper", 0.03, 0.8),
        ("alumina", 0.69, 0.69),
    ],
)
def test_the_emissivity_is_one_of_the_tabulated_surfaces(name, low, high):
    """Incropera Table A.11, from memory."""
    assert low <= BUILT_IN[name].emissivity <= high


@pytest.mark.parametrize("name", BUILT_IN)
def test_every_material_says_where_its_figures_come_from(name):
    """A property without a source cannot be audited."""
    material = BUILT_IN[name]
    assert material.name == name
    assert any(word in material.source for word in ("Table A.", "ASM", "memory"))
    assert 0.0 < material.emissivity < 1.0
    assert list(material.k.degC) == sorted(material.k.degC)
    assert min(material.k.value) > 0.0
    assert min(material.cp.value) > 0.0

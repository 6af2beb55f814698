"""Plate materials that need no description of their own, each with its source.

Conductivity and heat capacity are linear between the tabulated temperatures and
constant beyond them.  "Table A.1" and "A.2" are those of Incropera & DeWitt,
Fundamentals of Heat and Mass Transfer, 7th ed.; emissivities follow its Table A.11
(from memory) for the surface named, which is only a first guess for a worn plate.
"""

from __future__ import annotations

from platewatch.thermal.plate import Material, Table

_ZERO_DEGC_K = 273.15
Rows = tuple[tuple[float, float], ...]  # (temperature K, value)


def _table(rows: float | Rows) -> Table:
    if isinstance(rows, float):
        return Table.constant(rows)
    kelvin, values = zip(*rows, strict=True)
    return Table(tuple(round(T - _ZERO_DEGC_K, 2) for T in kelvin), values)


def _material(
    name: str, k: float | Rows, rho: float, cp: float | Rows, emissivity: float, source: str
) -> Material:
    return Material(name, _table(k), rho, _table(cp), emissivity, source)


_ALL = (
    _material(
        "aluminium-pure",
        k=((300, 237.0), (400, 240.0), (600, 231.0), (800, 218.0)),
        rho=2702.0,
        cp=((300, 903.0), (400, 949.0), (600, 1033.0), (800, 1146.0)),
        emissivity=0.05,
        source="Table A.1 p. 983; k above 600 K and cp above 300 K from memory; polished: 0.05",
    ),
    _material(
        "aluminium-2024",
        k=((300, 177.0), (400, 186.0), (600, 186.0)),
        rho=2770.0,
        cp=((300, 875.0), (400, 925.0), (600, 1042.0)),
        emissivity=0.09,
        source="Alloy 2024-T6, Table A.1 p. 983; cp above 300 K from memory; "
        "mill finish: 0.09, common practice",
    ),
    _material(
        "aluminium-6061",
        k=167.0,
        rho=2700.0,
        cp=896.0,
        emissivity=0.09,
        source="6061-T6, ASM handbook values at 25 degC, from memory; mill finish: 0.09, "
        "common practice",
    ),
    _material(
        "aluminium-5083",
        k=117.0,
        rho=2660.0,
        cp=900.0,
        emissivity=0.09,
        source="5083, ASM handbook values at 25 degC, from memory; mill finish: 0.09, "
        "common practice",
    ),
    _material(
        "aluminium-cast-195",
        k=((300, 168.0), (400, 174.0), (600, 185.0)),
        rho=2790.0,
        cp=883.0,
        emissivity=0.09,
        source="Alloy 195 cast, Table A.1 p. 983 (cp at 300 K); mill finish: 0.09, common practice",
    ),
    _material(
        "mild-steel",
        k=((300, 60.5), (400, 56.7), (600, 48.0), (800, 39.2), (1000, 30.0)),
        rho=7854.0,
        cp=((300, 434.0), (400, 487.0), (600, 559.0), (800, 685.0), (1000, 1169.0)),
        emissivity=0.80,
        source="Plain carbon steel, Table A.1, from memory; oxidised sheet: 0.80, common practice",
    ),
    _material(
        "stainless-304",
        k=((300, 14.9), (400, 16.6), (600, 19.8), (800, 22.6), (1000, 25.4)),
        rho=7900.0,
        cp=((300, 477.0), (400, 515.0), (600, 557.0), (800, 582.0), (1000, 611.0)),
        emissivity=0.22,
        source="AISI 304, Table A.1, from memory; cleaned: 0.22 (0.33 lightly, 0.67 highly "
        "oxidised)",
    ),
    _material(
        "stainless-316",
        k=((300, 13.4), (400, 15.2), (600, 18.3), (800, 21.3), (1000, 24.2)),
        rho=8238.0,
        cp=((300, 468.0), (400, 504.0), (600, 550.0), (800, 576.0), (1000, 602.0)),
        emissivity=0.22,
        source="AISI 316, Table A.1; k above 600 K and cp above 300 K from memory; cleaned: 0.22",
    ),
    _material(
        "grey-cast-iron",
        k=50.0,
        rho=7200.0,
        cp=500.0,
        emissivity=0.70,
        source="Middle of 46-55 W/mK and 460-540 J/kgK, upper end of 7150-7200 kg/m3, from "
        "memory; oxidised: 0.70, common practice",
    ),
    _material(
        "copper",
        k=((300, 401.0), (400, 393.0), (600, 379.0), (800, 366.0)),
        rho=8933.0,
        cp=((300, 385.0), (400, 397.0), (600, 417.0), (800, 433.0)),
        emissivity=0.03,
        source="Pure copper, Table A.1; k above 600 K and cp above 300 K from memory; polished: "
        "0.03 (0.5-0.8 oxidised)",
    ),
    _material(
        "brass",
        k=((300, 110.0), (400, 137.0), (600, 149.0)),
        rho=8530.0,
        cp=((300, 380.0), (400, 395.0), (600, 425.0)),
        emissivity=0.22,
        source="Cartridge brass (70 % Cu, 30 % Zn), Table A.1; cp above 300 K from memory; "
        "dull: 0.22, common practice",
    ),
    _material(
        "alumina",
        k=((300, 36.0), (400, 26.4), (600, 15.8), (800, 10.4), (1000, 7.85)),
        rho=3970.0,
        cp=((300, 765.0), (400, 940.0), (600, 1110.0), (800, 1180.0), (1000, 1225.0)),
        emissivity=0.69,
        source="Polycrystalline aluminium oxide, Table A.2; k above 600 K and cp above 300 K "
        "from memory; 0.69 at 600 K",
    ),
)

BUILT_IN: dict[str, Material] = {material.name: material for material in _ALL}

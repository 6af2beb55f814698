"""Seeded mistakes: each is found, with its line, its key and what to do about it."""

from __future__ import annotations

import re
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st
from settings_example import EXAMPLE

from platewatch.adapters.settings import load
from platewatch.errors import SettingsError


def sentences(path: Path, text: str) -> list[str]:
    """What `load` finds wrong with a text, one sentence each."""
    path.write_text(text, encoding="utf-8")
    with pytest.raises(SettingsError) as caught:
        load(path)
    return str(caught.value).splitlines()


def line_of(text: str, fragment: str) -> int:
    """Line, from 1, of a fragment that stands in the text once."""
    assert text.count(fragment) == 1, f"{fragment!r} stands {text.count(fragment)} times"
    return text.count("\n", 0, text.index(fragment)) + 1


S1 = "x_mm = 130\ny_mm = 150\nelement"
S4 = 'x_mm = 60\ny_mm = 60\nelement = "J"'
HOLE = 'holes = [{ shape = "circle", x_mm = 250, y_mm = 30, diameter_mm = 20 }]'
OUTLINE = 'outline = { shape = "rectangle", width_mm = 500, height_mm = 300 }'
ZA = "x_mm = 20, y_mm = 20, width_mm = 220, height_mm = 260"
CLAMP = "x_mm = 0\ny_mm = 150\nw_per_k"
S3 = 'element = "pt100"\nsignal = "mA"\nspan = [0, 400]\ntolerance_class = "B"'

# (what is written right, what stands there instead, what stands on the reported line (a missing
# key has the line of its table), key, remedy)
SEEDED = [
    # places
    (S4, S4.replace("60", "812", 1), "x_mm = 812", "sensor[4].x_mm: 812", "outline"),
    (S4, S4.replace("y_mm = 60", "y_mm = 300.5"), "y_mm = 300.5", "sensor[4].y_mm", "(0..300)"),
    (
        S4,
        S4.replace("x_mm = 60\ny_mm = 60", "x_mm = 60\ny_mm = 420"),
        "y_mm = 420",
        "sensor[4].y_mm",
        "x and y look swapped",
    ),
    (S4, S4.replace("60\ny_mm = 60", "250\ny_mm = 34"), "x_mm = 250\n", "lies in hole 1", "place"),
    (S4, S4.replace("60\ny_mm = 60", "130\ny_mm = 150.5"), "x_mm = 130\ny_mm = 150.5", "S1 and S4",
     "bore"),
    (ZA, ZA.replace("x_mm = 20", "x_mm = -40"), "x_mm = -40", "zone[1].shape", "outline"),
    (ZA, ZA.replace("220", "300"), 'x_mm = 260, y_mm = 160', "zone[2].shape[2]", "two"),
    (ZA, ZA.replace("height_mm = 260", "hight_mm = 260"), "hight_mm", "hight_mm",
     "did you mean 'height_mm'?"),
    (ZA, "x_mm = 245, y_mm = 25, width_mm = 10, height_mm = 10", "x_mm = 245", "zone[1].shape",
     "shape"),
    (HOLE, HOLE.replace("y_mm = 30", "y_mm = 5"), "y_mm = 5,", "plate.holes[1]", "notch"),
    (HOLE, HOLE.replace("x_mm = 250", "x_mm = 900"), "x_mm = 900", "plate.holes[1]", "place"),
    (HOLE, HOLE.replace("x_mm = 250, ", ""), "holes = ", "plate.holes[1].x_mm: is missing", "add"),
    (CLAMP, CLAMP.replace("x_mm = 0", "x_mm = -30"), "x_mm = -30", "clamp[1].x_mm", "clamp"),
    (
        OUTLINE,
        'outline = { shape = "polygon", points_mm = [[0, 0], [500, 300], [500, 0], [0, 300]] }',
        "outline = ",
        "plate.outline: the polygon crosses",
        "in order",
    ),
    (OUTLINE, OUTLINE.replace(", height_mm = 300", ""), "outline = ", "plate.outline.height_mm",
     "add height_mm"),
    (OUTLINE, OUTLINE.replace("rectangle", "square"), "outline = ", "plate.outline.shape",
     "rectangle, circle, polygon"),
    ('side = "x-max"', "segment = 2", "segment = 2", "edge[2].segment", "side"),
    ('side = "x-max"', 'side = "left"', 'side = "left"', "edge[2].side", "x-min"),
    ("x_mm = 230, y_mm = 130", "x_mm = 480, y_mm = 130", "x_mm = 480, y_mm = 130",
     "inset[1].shape", "outline"),
    ("x_mm = 130, y_mm = 150, dia", "x_mm = 930, y_mm = 150, dia", "x_mm = 930",
     "contact[1].shape: load tool", "place"),
    ("cell_mm = 10", "cell_mm = 0.8", "cell_mm = 0.8", "plate.cell_mm", "larger"),
    ("cell_mm = 10", "cell_mm = 40", "cell_mm = 40", "plate.cell_mm", "at most 30"),
    ("working_margin_mm = 20", "working_margin_mm = 160", "working_margin_mm = 160",
     "plate.working_margin_mm", "less than half"),
    # numbers
    ("thickness_mm = 12\n", "thickness_mm = 15000\n", "thickness_mm = 15000",
     "plate.thickness_mm: 15000", "millimetres"),
    ("thickness_mm = 12\n", "thickness_mm = -12\n", "thickness_mm = -12", "plate.thickness_mm",
     "above 0"),
    ("thickness_mm = 12\n", "", "[plate]", "plate.thickness_mm: is missing", "add thickness_mm"),
    ("watts = 650.0", "watts = -650.0", "watts = -650.0", "zone[1].watts", "watts"),
    ("watts = 650.0", 'watts = "650"', 'watts = "650"', "zone[1].watts: '650'", "without quotes"),
    ("watts = 650.0", "watts = 650_000.0", "watts = 650_000", "zone[1].watts", "correct the watts"),
    ("watts = 650.0", "watts = nan", "watts = nan", "zone[1].watts: nan", "real value"),
    ("lag_s = 5\n", "lag_s = -5\n", "lag_s = -5", "sensor[1].lag_s", "0 or more"),
    ("emissivity = 0.65", "emissivity = 65", "emissivity = 65", "material[1].emissivity",
     "between 0 and 1"),
    ("rho = 7200.0", "rho = 7.2e6", "rho = 7.2e6", "material[1].rho", "kg/m3"),
    ("[20, 50.0], [220, 46.0]", "[220, 46.0], [20, 50.0]", "k = [[220", "material[1].k", "sort"),
    ("[20, 50.0], [220, 46.0]", "[20, 50.0], [220]", "k = [[20", "material[1].k", "write"),
    ("tick_s = 1.0", "tick_s = 0", "tick_s = 0", "estimator.tick_s", "above 0"),
    ("horizon_min = 12", "horizon_min = 0", "horizon_min = 0", "forecast.horizon_min", "above 0"),
    ("horizon_min = 12", "horizon_min = 900", "horizon_min = 900", "forecast.horizon_min", "240"),
    ("port = 8883", "port = 88830", "port = 88830", "bus.port", "65535"),
    ("deadband = 2.5", "deadband = -2.5", "deadband = -2.5", "alarm_limit[1].deadband", "0 or"),
    ("low = 0.1, high = 0.9", "low = 0.9, high = 0.1", "low = 0.9", "zone[1].loop.low", "high"),
    ("low = 0.1, high = 0.9", "low = 0, high = 90", "high = 90", "zone[1].loop.high", "0..1"),
    ("ambient = 24.0", "ambient = -300.0", "ambient = -300", "surface.bottom.ambient", "degC"),
    ("rate_per_min = 6.0", "rate_per_min = -6.0", "rate_per_min", "recipe[1].steps[1].rate_per_min",
     "above 0"),
    # names and what they refer to
    ('sensor = "S1", gain', 'sensor = "s1", gain', 'sensor = "s1"', "zone[1].loop.sensor",
     "did you mean 'S1'?"),
    ('name = "S4"', 'name = "S3"', 'name = "S3"\nx_mm = 60', "sensor[4].name: 'S3'", "its own"),
    ('name = "Zb"', 'name = "Za"', 'name = "Za"\nshape = [', "zone[2].name", "its own"),
    ('name = "bench"', 'name = "hall/bench"', 'name = "hall/bench"', "plate.name", "letters"),
    ('name = "S4"', 'name = "S+"', 'name = "S+"', "sensor[4].name", "letters"),
    ('unit = "degC"', 'unit = "celsius"', 'unit = "celsius"', "plate.unit", "degC, degF, K"),
    ('material = "own-iron"', 'material = "own-irn"', 'material = "own-irn"', "plate.material",
     "did you mean 'own-iron'?"),
    ('material = "copper"', 'material = "unobtainium"', "unobtainium", "inset[1].material",
     "[[material]]"),
    ('zone = "Za"', 'zone = "Zc"', 'zone = "Zc"', "alarm_limit[2].zone", "known are Za, Zb"),
    ('role = "control"\njunction', 'role = "safety"\njunction', 'role = "safety"',
     "sensor[1].role: platewatch is no safety function", "limiter"),
    ('role = "control"\njunction', 'role = "monitor"\njunction', 'role = "monitor"',
     "sensor[1].role: sensor S1 controls zone Za", "control"),
    ('ambient = "surround/ambient"', 'ambient = "sensor/S1"', 'ambient = "sensor/S1"',
     "surface.top.ambient", "surround/ambient"),
    # surfaces, zones, signals
    ("coefficient = 3.0", 'coefficient = 3.0\ncorrelation = "natural-down"', "coefficient = 3.0",
     "surface.bottom.coefficient", "keep one"),
    ("coefficient = 3.0\n", "", "[surface.bottom]", "surface.bottom: says neither", "coefficient"),
    ('"natural-up"', '"natrual-up"', "natrual", "surface.top.correlation",
     "did you mean 'natural-up'?"),
    ('"natural-up"', '"forced"', "[surface.top]", "surface.top.speed_m_s", "air speed"),
    ('temperature = "surround/frame"\n', "", '[[edge]]\nkind = "held"', "edge[2].temperature",
     "add"),
    ('duty = "0..1"\n', "", '[[zone]]\nname = "Za"', "zone[1].duty", "0..100"),
    ('duty = "0..1"\n', 'duty = "0-1"\n', 'duty = "0-1"', "zone[1].duty", "did you mean"),
    ("duty_exponent = 1.5\n", "", '[[zone]]\nname = "Zb"', "zone[2].duty_exponent", "power"),
    ("span = [0, 400]\n", "", '[[sensor]]\nname = "S3"', "sensor[3].span", "at 4 mA"),
    ("span = [0, 400]\n", "span = [400, 0]\n", "span = [400, 0]", "sensor[3].span", "correct"),
    (S3, 'element = "pt100"\nsignal = "mV"', 'signal = "mV"\n\n', "sensor[3].signal", "ohm"),
    (S3, 'element = "K"\nsignal = "ohm"', 'signal = "ohm"', "sensor[3].signal", "mV"),
    ("cold_junction = 31.0\n", "", '[[sensor]]\nname = "S4"', "sensor[4].cold_junction",
     "surround/cabinet"),
    ('element = "J"\n', "", '[[sensor]]\nname = "S4"', "sensor[4].element", "add"),
    ('element = "K"\nsignal = "degC"', 'element = "k"\nsignal = "degC"', 'element = "k"',
     "sensor[1].element", "did you mean 'K'?"),
    ('element = "K"\nsignal = "degC"', 'element = "K"\nsignal = "degc"', 'signal = "degc"',
     "sensor[1].signal", "did you mean 'degC'?"),
    ("due_on = 2027-01-15", "due_on = 2025-01-15", "due_on = 2025-01-15", "sensor[1].due_on",
     "dates"),
    # alarm limits, recipes
    ("value = 162.0", "value = 139.0", "value = 139.0", "alarm_limit[1].value",
     "raise the alarm limit"),
    ("value = 120.0", "value = 150.0", "value = 150.0", "alarm_limit[2].value", "lower"),
    ('response = "lower the set-point"\n', "", '[[alarm_limit]]\nname = "resin"',
     "alarm_limit[1]: an alarm limit without response", "record_only"),
    ("on_delay_s = 5", "on_delay_s = 50", "on_delay_s = 50", "alarm_limit[1].on_delay_s", "36 s"),
    ("off_delay_s = 20", "off_delay_s = 6", "off_delay_s = 6", "alarm_limit[1].off_delay_s", "10"),
    ('kind = "low"', 'kind = "lowest"', 'kind = "lowest"', "alarm_limit[2].kind", "did you mean"),
    ("minutes = 45", "minuts = 45", "minuts = 45", "recipe[1].steps[3].minuts",
     "did you mean 'minutes'?"),
    ('"soak", minutes = 45', '"soak", minutes = 45, to = 150', "to = 150", "recipe[1].steps[3].to",
     "minutes"),
    # bus, causes, screen, people
    ('time_unit = "ms"\n', "", '[[channel]]\ntopic = "line1/te-7"', "channel[1].time_unit",
     "never guessed"),
    ('means = "sensor/S1"', 'means = "sensor/S11"', "sensor/S11", "channel[1].means",
     "did you mean 'sensor/S1'?"),
    ('topic = "line1/all"', 'topic = "line1/#"', "line1/#", "channel[2].topic", "each topic"),
    ('payload = "senml"', 'payload = "xml"', "xml", "channel[2].payload", "senml"),
    ('user = "watcher"', 'user = "watcher"\npassword = "s3"', "password", "bus.password: a secret",
     "secret_file"),
    ("sqlite:///bench.sqlite", "postgresql://w:s3@db/bench", "postgresql://", "store.url",
     "password file"),
    ('"swapped pair"', '"swaped pair"', "swaped", "causes.off[1]", "did you mean 'swapped pair'?"),
    ('"cold load" = 0.02', '"cold load" = -1', "cold load", 'causes.prior."cold load"', "rate"),
    ("Europe/Madrid", "Europe/Madird", "Madird", "screen.timezone", "Europe/Vienna"),
    ("127.0.0.1:8500", "8500", '"8500"', "screen.address", "127.0.0.1:8470"),
    ('Q = "engineer"', 'Q = "boss"', '"boss"', "people.Q", "viewer"),
    # tables
    ("[forecast]", "[forcast]", "[forcast]", "forcast: no such section", "did you mean 'forecast'"),
    ("[[contact]]", "[contact]", "[contact]", "contact: several", "[[contact]]"),
    ("noise = 0.3", "nosie = 0.3", "nosie", "sensor[1].nosie", "did you mean 'noise'?"),
]  # fmt: skip


@pytest.mark.parametrize(
    ("right", "wrong", "at", "key", "remedy"), SEEDED, ids=[row[3].split(":")[0] for row in SEEDED]
)
def test_a_seeded_mistake_is_named_with_line_key_and_remedy(
    tmp_path: Path, right: str, wrong: str, at: str, key: str, remedy: str
) -> None:
    """check finds every seeded mistake, in plain text, with its line number."""
    assert EXAMPLE.count(right) == 1, "the edit must be unambiguous"
    text = EXAMPLE.replace(right, wrong)
    path = tmp_path / "plate.toml"
    found = sentences(path, text)
    fitting = [sentence for sentence in found if f": {key}" in sentence or key in sentence]
    assert fitting, found
    assert f"{path}:{line_of(text, at)}: " in fitting[0]
    assert remedy in fitting[0]
    assert ";" in fitting[0]


def test_at_least_forty_kinds_of_mistake_are_seeded() -> None:
    """Every row of the table above seeds another edit."""
    assert len({(right, wrong) for right, wrong, *_ in SEEDED}) == len(SEEDED) >= 40


def test_a_single_mistake_gives_a_single_sentence(tmp_path: Path) -> None:
    """One wrong value is not reported under several names."""
    assert len(sentences(tmp_path / "p.toml", EXAMPLE.replace("watts = 650.0", "watts = 0"))) == 1


def test_a_misspelt_needed_key_is_not_also_called_missing(tmp_path: Path) -> None:
    """The did-you-mean is enough; a second sentence about the same word confuses."""
    text = EXAMPLE.replace("thickness_mm = 12\n", "thicknes_mm = 12\n")
    (sentence,) = sentences(tmp_path / "p.toml", text)
    assert "did you mean 'thickness_mm'?" in sentence


def test_a_misspelt_duty_is_not_also_called_missing(tmp_path: Path) -> None:
    """`dutty = "0..1"` once gave two lines: no such key, and the scale is asked."""
    first = EXAMPLE.index("\nduty = ")
    text = EXAMPLE[:first] + EXAMPLE[first:].replace("\nduty = ", "\ndutty = ", 1)
    (sentence,) = sentences(tmp_path / "p.toml", text)
    assert "did you mean 'duty'?" in sentence


def test_all_mistakes_come_at_once_in_the_order_of_the_file(tmp_path: Path) -> None:
    """A person corrects a file in one round, not in ten."""
    text = EXAMPLE
    edits = {
        "cell_mm = 10": "cell_mm = 0.5",
        "emissivity = 0.65": "emissivity = 6.5",
        "watts = 650.0": "watts = -650.0",
        'sensor = "S1", gain': 'sensor = "S9", gain',
        "noise = 0.3": "nosie = 0.3",
        "lag_s = 5\n": "lag_s = -5\n",
        S4: S4.replace("60", "612", 1),
        "value = 162.0": "value = 100.0",
        'time_unit = "ms"\n': "",
        "Europe/Madrid": "Europe/Madird",
    }
    for right, wrong in edits.items():
        text = text.replace(right, wrong)
    found = sentences(tmp_path / "p.toml", text)
    lines = [int(sentence.split(":")[1]) for sentence in found]
    assert len(found) == len(edits)
    assert lines == sorted(lines)


def test_a_wrong_key_does_not_hide_a_wrong_place_in_the_same_table(tmp_path: Path) -> None:
    """A sensor with a misspelt key is still checked against the outline."""
    text = EXAMPLE.replace(S4, S4.replace("60", "812", 1) + "\nlagg_s = 3")
    found = sentences(tmp_path / "p.toml", text)
    assert [s.split(": ")[1] for s in found] == ["sensor[4].x_mm", "sensor[4].lagg_s"]


@pytest.mark.parametrize(
    ("right", "wrong", "key"),
    [
        ("thickness_mm = 12\n", "thicknes_mm = 12\n", "plate.thicknes_mm"),
        ("thickness_mm = 12\n", "", "plate.thickness_mm"),
        ('material = "own-iron"', "material = 3", "plate.material"),
        ("watts = 650.0", 'watts = "650"', "zone[1].watts"),
    ],
)
def test_an_unreadable_needed_value_does_not_hide_what_depends_on_the_rest(
    tmp_path: Path, right: str, wrong: str, key: str
) -> None:
    """The outline still judges the sensors and the loops still name theirs."""
    text = EXAMPLE.replace(right, wrong).replace(S4, S4.replace("60", "812", 1))
    text = text.replace('sensor = "S1", gain', 'sensor = "S9", gain')
    found = {s.split(": ")[1] for s in sentences(tmp_path / "p.toml", text)}
    assert found == {key, "zone[1].loop.sensor", "sensor[4].x_mm"}


def test_a_control_sensor_with_exchanged_coordinates_is_found_inside_the_plate(
    tmp_path: Path,
) -> None:
    """x and y swapped may still lie on the plate, in the zone of another loop."""
    text = EXAMPLE.replace("x_mm = 370\ny_mm = 80", "x_mm = 80\ny_mm = 270")
    text = text.replace(ZA, "x_mm = 20, y_mm = 20, width_mm = 220, height_mm = 275")
    (sentence,) = sentences(tmp_path / "p.toml", text)
    assert "sensor S2 controls zone Zb but lies in Za" in sentence
    assert "swapped" in sentence


@pytest.mark.parametrize(
    ("edge", "expected"),
    [("segment = 5", "there is no segment 5; give 1 to 4"), ("segment = 0", "no segment 0")],
)
def test_a_rim_segment_that_the_polygon_lacks_is_named(
    tmp_path: Path, edge: str, expected: str
) -> None:
    """Segment N runs from corner N to the next, counted from 1."""
    polygon = 'outline = { shape = "polygon", points_mm = [[0,0], [500,0], [500,300], [0,300]] }'
    text = EXAMPLE.replace(OUTLINE, polygon).replace('side = "x-max"', edge)
    (sentence,) = sentences(tmp_path / "p.toml", text)
    assert expected in sentence


@pytest.mark.parametrize(
    ("element", "wrong", "right"),
    [
        ("K", "4", "3"),
        ("J", "3", "2"),
        ("T", "A", "3"),
        ("R", "3", "1"),
        ("S", "3", "2"),
        ("B", "1", "3"),
        ("pt100", "1", "AA"),
        ("N", "B", "2"),
    ],
)
def test_a_tolerance_class_that_the_standard_lacks_is_refused(
    tmp_path: Path, element: str, wrong: str, right: str
) -> None:
    """IEC 60584-1 has no class 3 for J, R, S and no class 1 for B; IEC 60751 has letters."""
    old = 'element = "K"\nsignal = "degC"\ntolerance_class = "2"'
    path = tmp_path / "p.toml"
    new = f'element = "{element}"\nsignal = "degC"\ntolerance_class = "{right}"'
    path.write_text(EXAMPLE.replace(old, new))
    load(path)
    new = new.replace(f'tolerance_class = "{right}"', f'tolerance_class = "{wrong}"')
    (sentence,) = sentences(path, EXAMPLE.replace(old, new))
    assert f"knows no class {wrong} for {element}" in sentence


def test_a_whole_table_missing_is_one_sentence(tmp_path: Path) -> None:
    """An empty file says what a description needs, without a traceback."""
    found = sentences(tmp_path / "p.toml", "")
    assert [s.split(": ", 2)[1] for s in found] == ["plate", "sensor", "surface", "zone"]


RUBBISH = (
    *('""', '"x"', "-1", "0", "1e300", "nan", "true", "2026-01-01"),
    *("[]", "{}", "[1, 2]", "{ a = 1 }", '["a"]', "[{}]", "[[1, 2], [3, 4]]"),
    *('{ shape = "polygon", points_mm = [[1e300, 0], [0, 1e300], [1, 1]] }',),
)


@given(
    edits=st.lists(
        st.tuples(st.integers(0, EXAMPLE.count("\n") - 1), st.sampled_from((None, *RUBBISH))),
        min_size=1,
        max_size=4,
    )
)
def test_rubbish_in_any_line_never_ends_in_a_traceback(
    tmp_path_factory: pytest.TempPathFactory, edits: list[tuple[int, str | None]]
) -> None:
    """Whatever a line is replaced by: either it is valid, or it is named with its line."""
    lines: list[str] = EXAMPLE.splitlines()
    for number, rubbish in edits:
        key = re.match(r"([\w\"-]+ = ).", lines[number])
        lines[number] = f"{key.group(1)}{rubbish}" if rubbish and key else ""
    path = tmp_path_factory.mktemp("rubbish") / "plate.toml"
    path.write_text("\n".join(lines))
    try:
        load(path)
    except SettingsError as error:
        for sentence in str(error).splitlines():
            assert re.fullmatch(rf"{re.escape(str(path))}:\d+: .+; .+", sentence)

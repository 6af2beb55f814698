"""A description is read with the meaning of its keys, in SI and degrees Celsius."""

from __future__ import annotations

import hashlib
import os
import re
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st
from settings_example import EXAMPLE

from platewatch.adapters.settings import Description, Payload, PersonRole, TimeUnit, load
from platewatch.errors import SettingsError
from platewatch.monitor.limits import LimitKind, Priority
from platewatch.thermal import plate as p
from platewatch.units import TemperatureUnit

CONFIG = Path(__file__).parents[3] / "config"


def read(tmp_path: Path, text: str) -> Description:
    path = tmp_path / "plate.toml"
    path.write_text(text, encoding="utf-8")
    return load(path)


@pytest.fixture
def example(tmp_path: Path) -> Description:
    return read(tmp_path, EXAMPLE)


def test_the_plate_and_its_material_are_in_si(example: Description) -> None:
    """Lengths in mm become metres; a table keeps its temperatures."""
    plate = example.plate
    assert plate.outline == p.Rectangle(0.0, 0.0, 0.5, 0.3)
    assert plate.holes == (p.Circle(0.25, 0.03, 0.02),)
    assert (plate.thickness_m, plate.cell_m, plate.working_margin_m) == (0.012, 0.01, 0.02)
    assert plate.material.k == p.Table((20.0, 220.0), (50.0, 46.0))
    assert plate.material.cp == p.Table.constant(510.0)
    assert plate.material.emissivity == 0.65
    assert plate.uncertain == p.Uncertain(k=0.06, cp=0.02, losses=0.2, power=0.08, emissivity=0.25)
    assert plate.reference_degC == 140.0


def test_the_losses_keep_their_meaning(example: Description) -> None:
    """A coefficient is the whole loss, a correlation convection only; ambients are
    numbers or channels."""
    plate = example.plate
    assert plate.top == p.Surface("surround/ambient", correlation=p.Correlation.NATURAL_UP)
    assert plate.bottom == p.Surface(24.0, coefficient=3.0)
    assert plate.edges == (
        p.Edge(p.EdgeKind.CONVECTIVE, coefficient=9.0),
        p.Edge(p.EdgeKind.HELD, held="surround/frame", side=p.Side.X_MAX),
    )
    assert plate.clamps == (p.Clamp(0.0, 0.15, 0.4),)
    assert plate.contacts == (p.Contact("tool", p.Circle(0.13, 0.15, 0.1), 350.0, 4100.0),)
    assert [layer.thickness_m for layer in plate.layers] == [0.0015]
    assert plate.insets[0].thickness_m == 0.014


def test_the_zones_carry_heater_duty_and_loop(example: Description) -> None:
    """The full scale of a duty and the law from duty to power are as declared."""
    first, second = example.plate.zones
    assert first.shapes == (p.Rectangle(0.02, 0.02, 0.22, 0.26),)
    assert (first.watts, first.lag_s, first.duty_full) == (650.0, 22.0, 1.0)
    assert first.duty_law is p.DutyLaw.BURST
    assert first.loop == p.Loop("S1", 0.05, 450.0, low=0.1, high=0.9)
    assert len(second.shapes) == 2
    assert (second.duty_full, second.duty_exponent) == (100.0, 1.5)
    assert second.loop == p.Loop("S2", 0.04, 400.0, 5.0, p.LoopForm.SERIES)


def test_the_sensors_carry_signal_class_and_calibration(example: Description) -> None:
    """Every key of a sensor arrives in its field."""
    s1, s2, s3, s4 = example.plate.sensors
    assert s1 == p.Sensor(
        name="S1",
        x_m=0.13,
        y_m=0.15,
        element="K",
        signal="degC",
        tolerance_class="2",
        lag_s=5.0,
        noise_K=0.3,
        quantum_K=0.2,
        junction_block="J2",
        correction_K=0.4,
        calibrated_on="2026-01-15",
        due_on="2027-01-15",
        certificate="c-8",
        role=p.Role.CONTROL,
        where="terminal 4",
    )
    assert (s2.signal, s2.cold_junction) == ("mV", "surround/cabinet")
    assert s3.span_degC == (0.0, 400.0)
    assert s4.cold_junction == 31.0


def test_a_sensor_that_a_loop_names_controls_even_if_nobody_wrote_the_role(
    tmp_path: Path,
) -> None:
    """The role is monitor only where no loop depends on the sensor."""
    text = EXAMPLE.replace('role = "control"\n', "")
    roles = [sensor.role for sensor in read(tmp_path, text).plate.sensors]
    assert roles == [p.Role.CONTROL, p.Role.CONTROL, p.Role.MONITOR, p.Role.MONITOR]


def test_recipe_limits_and_options_are_in_seconds_and_kelvin(example: Description) -> None:
    """Minutes become seconds, degrees per minute kelvin per second."""
    ramp, wait, soak, cool = example.recipes[0].steps
    assert (ramp.to_degC, ramp.rate_K_per_s) == (140.0, pytest.approx(0.1))
    assert (wait.within_K, wait.longest_s) == (3.0, 1200.0)
    assert (soak.duration_s, soak.spread_limit_K) == (2700.0, 8.0)
    assert cool.to_degC == 50.0
    resin, cold = example.alarm_limits
    assert (resin.kind, resin.value, resin.deadband) == (LimitKind.PEAK, 162.0, 2.5)
    assert (resin.priority, resin.time_to_respond_min) == (Priority.MEDIUM, 6.0)
    assert (resin.on_delay_s, resin.off_delay_s) == (5.0, 20.0)
    assert (cold.zone, cold.steps, cold.record_only) == ("Za", ("soak",), True)
    assert (example.estimator.tick_us, example.estimator.late_us) == (1_000_000, 3_000_000)
    assert (example.forecast.horizon_s, example.forecast.step_s) == (720.0, 5.0)
    assert example.causes.off == ("swapped pair",)
    assert example.causes.prior == (("cold load", 0.02), ("sensor loose", 0.01))


def test_bus_store_screen_and_people_are_as_written(example: Description) -> None:
    """What the daemon needs to connect, and who may do what."""
    bus = example.bus
    assert (bus.host, bus.port, bus.user) == ("broker.example", 8883, "watcher")
    assert (bus.client_name, bus.publish, bus.keepalive_s) == ("bench-pc", True, 20)
    first, second = example.channels
    assert (first.topic, first.means, first.payload) == ("line1/te-7", "sensor/S1", Payload.JSON)
    assert (first.value, first.time, first.time_unit) == ("data.v", "data.t", TimeUnit.MS)
    assert second.payload is Payload.SENML
    assert example.store.url == "sqlite:///bench.sqlite"
    assert example.screen.timezone == "Europe/Madrid"
    assert [(q.name, q.role) for q in example.people] == [
        ("early shift", PersonRole.OPERATOR),
        ("Q", PersonRole.ENGINEER),
    ]


def test_the_digest_is_that_of_the_bytes_of_the_file(example: Description) -> None:
    """A record names the description it was made with."""
    assert example.sha256 == hashlib.sha256(EXAMPLE.encode()).hexdigest()


IN_DEGF = {
    'unit = "degC"': 'unit = "degF"',
    "[[20, 50.0], [220, 46.0]]": "[[68, 50.0], [428, 46.0]]",
    "ambient = 24.0": "ambient = 75.2",
    "span = [0, 400]": "span = [32, 752]",
    "noise = 0.3": "noise = 0.54",
    "quantum = 0.2": "quantum = 0.36",
    "correction = 0.4": "correction = 0.72",
    "cold_junction = 31.0": "cold_junction = 87.8",
    "value = 162.0": "value = 323.6",
    "value = 120.0": "value = 248.0",
    "deadband = 2.5": "deadband = 4.5",
    "to = 140.0, rate_per_min = 6.0": "to = 284.0, rate_per_min = 10.8",
    "within = 3.0": "within = 5.4",
    "spread_limit = 8.0": "spread_limit = 14.4",
    "to = 50.0": "to = 122.0",
}
IN_KELVIN = {
    'unit = "degC"': 'unit = "K"',
    "[[20, 50.0], [220, 46.0]]": "[[293.15, 50.0], [493.15, 46.0]]",
    "ambient = 24.0": "ambient = 297.15",
    "span = [0, 400]": "span = [273.15, 673.15]",
    "cold_junction = 31.0": "cold_junction = 304.15",
    "value = 162.0": "value = 435.15",
    "value = 120.0": "value = 393.15",
    "to = 140.0": "to = 413.15",
    "to = 50.0": "to = 323.15",
}


@pytest.mark.parametrize("edits", [IN_DEGF, IN_KELVIN], ids=["degF", "K"])
def test_the_same_plate_in_another_unit_is_the_same_plate(
    tmp_path: Path, example: Description, edits: dict[str, str]
) -> None:
    """Temperatures convert as temperatures, differences as differences; the gain stays
    duty per kelvin, W/m2K stay SI."""
    text = EXAMPLE
    for old, new in edits.items():
        assert old in text
        text = text.replace(old, new)
    other = read(tmp_path, text)
    assert other.unit == TemperatureUnit(edits['unit = "degC"'].split('"')[1])
    assert numbers(other.plate) == pytest.approx(numbers(example.plate), abs=1e-9)
    assert numbers(other.recipes) == pytest.approx(numbers(example.recipes), abs=1e-9)
    assert numbers(other.alarm_limits) == pytest.approx(numbers(example.alarm_limits), abs=1e-9)


def numbers(value: object) -> list[float]:
    """Every number in nested dataclasses, in order."""
    return [float(n) for n in re.findall(r"(?<![\w.])-?\d+\.?\d*(?:e-?\d+)?(?![\w.])", repr(value))]


@pytest.mark.parametrize("path", sorted(CONFIG.glob("*.toml")), ids=lambda path: path.stem)
def test_every_description_in_config_is_valid(path: Path) -> None:
    """What we ship is what we accept."""
    description = load(path)
    assert description.plate.zones
    assert description.plate.sensors
    assert "invented" in path.read_text(encoding="utf-8").split("[plate]")[0]


def test_the_demo_table_is_the_plate_of_the_demo() -> None:
    """Six zones of 390 mm, 10 mm between neighbours, nine thermocouples, limits 135 and 150."""
    demo = load(CONFIG / "demo-table.toml")
    plate = demo.plate
    assert plate.name == "table-1"
    assert sum(zone.watts for zone in plate.zones) == pytest.approx(6600.0)
    assert [p.geometry(z.shapes[0]).area for z in plate.zones] == pytest.approx([0.39**2] * 6)
    assert [s.x_m for s in plate.sensors] == [0.2, 0.6, 1.0, 0.2, 0.6, 1.0, 0.4, 0.8, 1.14]
    assert [s.y_m for s in plate.sensors] == [0.2, 0.2, 0.2, 0.6, 0.6, 0.6, 0.4, 0.4, 0.4]
    assert {zone.loop.sensor: zone.name for zone in plate.zones if zone.loop} == {
        f"T{n}": f"Z{n}" for n in range(1, 7)
    }
    assert [(limit.value, limit.record_only) for limit in demo.alarm_limits] == [
        (135.0, False),
        (150.0, True),
    ]
    assert plate.reference_degC == 120.0


def test_a_round_plate_without_a_centre_touches_both_axes(tmp_path: Path) -> None:
    """x and y stay positive on a circle, too."""
    text = """
[plate]
name = "disc"
outline = { shape = "circle", diameter_mm = 300 }
thickness_mm = 18
material = "grey-cast-iron"
[surface.top]
coefficient = 12
ambient = 20
[surface.bottom]
coefficient = 12
ambient = 20
[[zone]]
name = "z"
shape = { shape = "circle", x_mm = 150, y_mm = 150, diameter_mm = 200 }
watts = 800
duty = "0..1"
[[sensor]]
name = "c"
x_mm = 150
y_mm = 150
"""
    disc = read(tmp_path, text)
    assert disc.plate.outline == p.Circle(0.15, 0.15, 0.3)
    assert disc.plate.reference_degC is None
    assert disc.store.url == "sqlite:///disc.sqlite"
    with pytest.raises(SettingsError, match="lies outside the outline"):
        read(tmp_path, text.replace("x_mm = 150\ny_mm = 150", "x_mm = 10\ny_mm = 10"))


# What is wrong with the file itself.


def refusal(path: Path) -> str:
    with pytest.raises(SettingsError) as caught:
        load(path)
    text = str(caught.value)
    assert "\n" not in text
    return text


def test_a_missing_file_is_one_clear_line(tmp_path: Path) -> None:
    """No traceback for a misspelt file name."""
    assert "there is no such file" in refusal(tmp_path / "nowhere.toml")


def test_a_folder_is_one_clear_line(tmp_path: Path) -> None:
    """A folder given instead of the file in it."""
    assert "this is a folder" in refusal(tmp_path)


def test_a_file_without_read_rights_is_one_clear_line(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """The service account may lack the right to read."""

    def refuse(self: Path) -> bytes:
        raise PermissionError(13, os.strerror(13), str(self))

    path = tmp_path / "plate.toml"
    monkeypatch.setattr(Path, "read_bytes", refuse)
    assert "may not read the file" in refusal(path)


def test_a_file_in_another_encoding_names_the_line(tmp_path: Path) -> None:
    """A degree sign saved by an old editor is not UTF-8."""
    path = tmp_path / "plate.toml"
    path.write_bytes(b'[plate]\nname = "a"\nposition_note = "120 \xb0C"\n')
    assert f"{path}:3: the file is not UTF-8" in refusal(path)


def test_a_byte_order_mark_does_no_harm(tmp_path: Path) -> None:
    """Some editors put one in front of UTF-8."""
    path = tmp_path / "plate.toml"
    path.write_bytes(b"\xef\xbb\xbf" + EXAMPLE.encode())
    assert load(path).plate.name == "bench"


@pytest.mark.parametrize(
    ("right", "wrong", "line", "remedy"),
    [
        ("thickness_mm = 12\n", "thickness_mm = 12,5\n", "thickness_mm = 12,5", "12.5"),
        ("thickness_mm = 12\n", "thickness_mm 12\n", "thickness_mm 12", "key = value"),
        ('name = "S3"', "name = S3", "name = S3", "text in quotes"),
        ("cell_mm = 10\n", "cell_mm = 10\ncell_mm = 12\n", "cell_mm = 12", "second time"),
        ("[uncertain]", "[uncertain", "[uncertain", "brackets closed"),
    ],
)
def test_text_that_is_no_toml_names_the_line(
    tmp_path: Path, right: str, wrong: str, line: str, remedy: str
) -> None:
    """A syntax mistake is one line with its number and what to write instead."""
    text = EXAMPLE.replace(right, wrong)
    path = tmp_path / "plate.toml"
    path.write_text(text)
    number = text.count("\n", 0, text.index(line)) + 1
    sentence = refusal(path)
    assert f"{path}:{number}: not valid TOML" in sentence
    assert remedy in sentence


def test_an_unclosed_text_at_the_end_names_the_last_line(tmp_path: Path) -> None:
    """A bracket that is never closed is noticed at the end of the file."""
    path = tmp_path / "plate.toml"
    path.write_text("[plate]\nholes = [\n  1,\n")
    assert refusal(path).startswith(f"{path}:3: not valid TOML")


def test_brackets_nested_without_end_are_one_clear_line(tmp_path: Path) -> None:
    """Rubbish does not end in a traceback."""
    path = tmp_path / "plate.toml"
    path.write_text("a = " + "[" * 100_000)
    assert "nested too deeply" in refusal(path)


positive = st.floats(min_value=0.01, max_value=1.0)


@given(
    width=st.floats(80, 3000),
    height=st.floats(80, 3000),
    thickness=st.floats(1, 40),
    watts=st.floats(10, 2000),
    share=st.tuples(positive, positive),
    gain=positive,
    limit=st.floats(141, 400),
    emissivity=st.floats(0, 1),
)
def test_any_sensible_plate_loads_with_its_numbers(
    tmp_path_factory: pytest.TempPathFactory,
    width: float,
    height: float,
    thickness: float,
    watts: float,
    share: tuple[float, float],
    gain: float,
    limit: float,
    emissivity: float,
) -> None:
    """No valid description is refused, and every number arrives as written."""
    x, y = width * share[0], height * share[1]
    text = f"""
[plate]
name = "any"
outline = {{ shape = "rectangle", width_mm = {width!r}, height_mm = {height!r} }}
thickness_mm = {thickness!r}
material = "mild-steel"
[surface.top]
correlation = "natural-up"
emissivity = {emissivity!r}
ambient = "surround/hall"
[surface.bottom]
coefficient = 2
ambient = 20
[[zone]]
name = "z"
shape = {{ shape = "rectangle", x_mm = 0, y_mm = 0, width_mm = {width!r}, height_mm = {height!r} }}
watts = {watts!r}
duty = "0..1"
loop = {{ sensor = "s", gain = {gain!r} }}
[[sensor]]
name = "s"
x_mm = {x!r}
y_mm = {y!r}
[[recipe]]
name = "r"
steps = [{{ do = "ramp", to = 140, rate_per_min = 3 }}]
[[alarm_limit]]
name = "l"
kind = "peak"
value = {limit!r}
record_only = true
"""
    description = read(tmp_path_factory.mktemp("any"), text)
    plate = description.plate
    assert plate.outline == p.Rectangle(0.0, 0.0, width / 1000, height / 1000)
    assert (plate.sensors[0].x_m, plate.sensors[0].y_m) == (x / 1000, y / 1000)
    assert (plate.zones[0].watts, plate.top.emissivity) == (watts, emissivity)
    assert plate.zones[0].loop == p.Loop("s", gain)
    assert description.alarm_limits[0].value == limit

"""The plate as described, drawn for the person who checks the description."""

from __future__ import annotations

import re
import xml.etree.ElementTree as ET
from dataclasses import replace
from pathlib import Path

import pytest

from platewatch.adapters.settings import Description, load
from platewatch.cli import main
from platewatch.studies.picture import svg_picture
from platewatch.studies.picture_plate import plate_picture
from platewatch.studies.whatif import whatif_steady
from platewatch.thermal.grid import build_grid
from platewatch.thermal.plate import Edge, EdgeKind
from platewatch.units import TemperatureUnit

CONFIG = Path(__file__).resolve().parents[3] / "config"
SVG = "{http://www.w3.org/2000/svg}"


@pytest.fixture(scope="module")
def notched() -> Description:
    return load(CONFIG / "notched-plate.toml")


def drawn(description: Description) -> ET.Element:
    return ET.fromstring(plate_picture(description.plate, build_grid(description.plate)))


def words(picture: ET.Element) -> list[str]:
    return ["".join(text.itertext()) for text in picture.iter(f"{SVG}text")]


def place_of(picture: ET.Element, name: str) -> tuple[float, float]:
    """Pixels of the label of a thermocouple."""
    found = next(text for text in picture.iter(f"{SVG}text") if text.text == name)
    return float(found.attrib["x"]), float(found.attrib["y"])


def test_everything_that_has_a_name_is_written_on_the_drawing(notched: Description) -> None:
    """`check --picture` draws plate, zones, thermocouples, clamps and known loads."""
    shown = words(drawn(notched))
    plate = notched.plate
    assert {zone.name for zone in plate.zones} <= set(shown)
    assert {sensor.name for sensor in plate.sensors} <= set(shown)
    assert "load tray" in shown
    assert {"clamp", "edge held at a temperature", "inset: other material or thickness"} <= set(
        shown
    )


def test_x_points_right_and_y_up(notched: Description) -> None:
    """A thermocouple with larger x stands further right, with larger y further up."""
    picture = drawn(notched)
    left, right, far = (place_of(picture, name) for name in ("L", "R", "F"))
    assert left[0] < right[0]
    assert left[1] == pytest.approx(right[1])
    assert far[1] < left[1]


def test_the_hole_and_the_notch_are_not_drawn_as_plate(notched: Description) -> None:
    """The filled outline has one ring for the rim and one for the hole."""
    filled = next(
        path for path in drawn(notched).iter(f"{SVG}path") if path.get("fill-rule") == "evenodd"
    )
    assert filled.attrib["d"].count("M") == 2


def test_each_kind_of_edge_is_drawn_where_it_lies(notched: Description) -> None:
    """The near side is held: a heavy line along the whole foot of the drawing."""
    held = [path for path in drawn(notched).iter(f"{SVG}path") if path.get("stroke-width") == "8"]
    pairs = [
        [float(number) for number in re.findall(r"[\d.]+", path.attrib["d"])]
        for path in held
        if path.attrib["d"] != "M0 -5h40"  # the legend
    ]
    assert len(pairs) == 1
    xs, ys = pairs[0][::2], pairs[0][1::2]
    assert max(ys) - min(ys) < 0.01
    assert max(xs) - min(xs) == pytest.approx(720.0, abs=0.2)


def test_the_name_of_a_round_zone_stands_on_the_plate() -> None:
    """The corner of a ring's bounding box lies beside the plate; a name there misleads."""
    plate = load(CONFIG / "round-bake-plate.toml").plate
    picture = ET.fromstring(plate_picture(plate, build_grid(plate)))
    centre, north = place_of(picture, "C"), place_of(picture, "N")
    px_per_m = (centre[1] - north[1]) / (plate.sensor("N").y_m - plate.sensor("C").y_m)
    for zone in plate.zones:
        x, y = place_of(picture, zone.name)
        assert (x - centre[0]) ** 2 + (y - centre[1]) ** 2 < (0.15 * px_per_m) ** 2


def test_where_the_operator_stands_is_said(notched: Description) -> None:
    """x right, y up as the operator sees it, with the description's own note."""
    noted = replace(notched, plate=replace(notched.plate, position_note="seen from the <aisle>"))
    assert any("seen from the <aisle>" in text for text in words(drawn(noted)))
    assert any("as the operator sees it" in text for text in words(drawn(notched)))


def test_a_plate_without_edges_is_drawn_insulated() -> None:
    """A rim that nobody described loses nothing, and the drawing says so."""
    description = load(CONFIG / "demo-table.toml")
    bare = replace(description, plate=replace(description.plate, edges=()))
    assert "insulated edge" in words(drawn(bare))
    one = Edge(EdgeKind.HELD, held=20.0)
    assert "insulated edge" not in words(
        drawn(replace(description, plate=replace(description.plate, edges=(one,))))
    )


def test_a_field_is_drawn_in_the_unit_of_the_plate(notched: Description) -> None:
    """A plate described in degrees Fahrenheit once had its scale in degrees Celsius."""
    result = whatif_steady(notched.plate, {"left": 500.0}, cell_m=0.025)
    numbers = words(ET.fromstring(svg_picture(result, TemperatureUnit.DEGF)))
    assert f"{result.hottest_degC * 1.8 + 32:.1f} °F" in numbers
    assert not any("°C" in text for text in numbers)


@pytest.mark.parametrize("name", sorted(path.name for path in CONFIG.glob("*.toml")))
def test_every_shipped_plate_can_be_drawn(name: str) -> None:
    """Well-formed, and no mark lies outside the drawing."""
    picture = drawn(load(CONFIG / name))
    _, _, width, height = (float(number) for number in picture.attrib["viewBox"].split())
    for text in picture.iter(f"{SVG}text"):
        if "x" in text.attrib and text.get("transform") is None:
            assert 0 <= float(text.attrib["x"]) <= width
            assert 0 <= float(text.attrib["y"]) <= height


def test_check_writes_the_drawing(tmp_path: Path, capfd: pytest.CaptureFixture[str]) -> None:
    """`check PLATE.toml --picture OUT.svg`, told in the last line."""
    out = tmp_path / "plate.svg"
    assert main(["check", str(CONFIG / "preheater.toml"), "--picture", str(out)]) == 0
    assert capfd.readouterr().out.splitlines()[-1] == f"picture in {out}"
    assert ET.parse(out).getroot().tag == f"{SVG}svg"

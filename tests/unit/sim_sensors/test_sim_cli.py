"""The simulator's program: files, bus, mistakes."""

from __future__ import annotations

import csv
import json
import os
import queue
import signal
import subprocess
import sys
import threading
import time
from collections.abc import Iterator
from pathlib import Path

import numpy as np
import pytest
from paho.mqtt.client import Client, MQTTMessage
from paho.mqtt.enums import CallbackAPIVersion

from platewatch.adapters.broker import EmbeddedBroker, free_port
from platewatch.units import from_iso
from sim_sensors.cli import main
from sim_sensors.publish import Pace, message, publish
from sim_sensors.simulation import Plant, Sample, simulate

DEMO = Path(__file__).parents[3] / "config" / "demo-table.toml"
START = "2026-03-02T06:00:00Z"


def _rows(path: Path) -> list[dict[str, str]]:
    with path.open(encoding="utf-8", newline="") as lines:
        return list(csv.DictReader(lines))


def test_a_log_has_the_names_of_the_bus_and_the_truth_beside_it(tmp_path: Path) -> None:
    """Wide log: `at` with offset first, then channels, `batch` last."""
    log, truth = tmp_path / "log.csv", tmp_path / "truth.csv"
    words = ["clean", str(DEMO), "--log", str(log), "--truth", str(truth)]
    assert main([*words, "--until", "20", "--start", START, "--fields", "10"]) == 0
    rows, true = _rows(log), _rows(truth)
    names = list(rows[0])
    assert (names[0], names[1], names[-1]) == ("at", "sensor/T1", "batch")
    assert {"zone/Z1/duty", "zone/Z1/setpoint", "surround/ambient"} < set(names)
    assert [row["at"] for row in rows] == [row["at"] for row in true]
    assert from_iso(rows[-1]["at"]) - from_iso(START) == 20_000_000
    assert json.loads(rows[0]["batch"])["event"] == "start"
    assert 20.0 < float(true[-1]["peak_degC"]) < 24.0
    with np.load(tmp_path / "log.fields.npz") as fields:
        assert fields["degC"].shape == (2, fields["x_m"].size)


def test_skipping_the_start_leaves_the_rest_as_it_was(tmp_path: Path) -> None:
    """`--from` runs the same plant silently; stamps begin at `--start`."""
    whole, part = tmp_path / "whole.csv", tmp_path / "part.csv"
    words = ["1", str(DEMO), "--until", "20", "--start", START, "--log"]
    assert main([*words, str(whole)]) == 0
    assert main([*words, str(part), "--from", "10"]) == 0
    whole_rows, part_rows = _rows(whole), _rows(part)
    assert [r["sensor/T1"] for r in whole_rows[5:]] == [r["sensor/T1"] for r in part_rows]
    assert part_rows[0]["at"] == "2026-03-02T06:00:02Z"


@pytest.mark.parametrize(
    ("words", "code", "says"),
    [
        (["hot", str(DEMO), "--log", "x.csv"], 2, "no batch 'hot'"),
        (["clean", "nowhere.toml", "--log", "x.csv"], 2, "nowhere.toml"),
        (["clean", str(DEMO), "--log", "no/folder/x.csv", "--until", "4"], 4, "cannot be written"),
        (["clean", str(DEMO), "--publish", "localhost"], 2, "give HOST:PORT"),
        (["clean", str(DEMO), "--log", "x.csv", "--start", "6:00"], 2, "--start"),
        (["clean", str(DEMO), "--log", "x.csv", "--from", "9600"], 2, "not before the end"),
        (["cold-load", str(DEMO), "--log", "x.csv", "--zone", "Z9"], 2, "no zone 'Z9'"),
    ],
)
def test_a_foreseeable_mistake_gets_one_line_and_its_exit_code(
    words: list[str], code: int, says: str, capsys: pytest.CaptureFixture[str]
) -> None:
    """No traceback: 2 wrong use, 4 storage."""
    assert main(words) == code
    said = capsys.readouterr().err.strip()
    assert says in said
    assert said.startswith("sim-sensors: ")
    assert "\n" not in said


def test_help_is_quick_and_shows_an_example() -> None:
    """It loads neither numpy nor scipy."""
    program = (
        "import sys, contextlib\nfrom sim_sensors.cli import main\n"
        "with contextlib.suppress(SystemExit): main(['--help'])\n"
        "print('heavy' if {'numpy', 'scipy'} & set(sys.modules) else 'light')"
    )
    run = subprocess.run([sys.executable, "-c", program], capture_output=True, text=True)
    assert run.stdout.strip().endswith("light")
    assert "sim-sensors clean table.toml --log" in run.stdout


def test_samples_are_sent_in_plate_time(small_plant: Plant) -> None:
    """At 100 times the speed, 20 s of plate time take 0.2 s; stamps stay plate time."""
    sent: list[tuple[str, str]] = []
    start_us = from_iso(START)
    begun = time.monotonic()
    pace = Pace(start_us, begun, 100.0)
    count = publish(
        simulate(small_plant, "clean", until_s=20.0),
        lambda topic, payload: sent.append((topic, payload)),
        "small",
        pace=pace,
        start_us=start_us,
        stop=threading.Event(),
    )
    assert count == 10
    assert time.monotonic() - begun >= 0.2
    topics = [topic for topic, _ in sent]
    assert topics[0] == "plates/small/batch"
    assert topics[1:] == ["plates/small/readings"] * 10
    assert json.loads(sent[-1][1])["at"] == "2026-03-02T06:00:20Z"


def test_a_channel_without_a_value_is_left_out_of_the_message(small_plant: Plant) -> None:
    """JSON knows no NaN, and a missing reading is missing."""
    sample = next(iter(simulate(small_plant, "clean", until_s=2.0)))
    holed = Sample(sample.at_s, {**sample.readings, "sensor/A": float("nan")}, (), sample.truth)
    body = json.loads(message("t", holed))
    assert "sensor/A" not in body
    assert "sensor/B" in body


@pytest.fixture
def broker() -> Iterator[EmbeddedBroker]:
    embedded = EmbeddedBroker().start()
    yield embedded
    embedded.stop()


def test_a_batch_reaches_a_broker_and_ends_in_order_on_sigterm(broker: EmbeddedBroker) -> None:
    """QoS 1, one flat message a sample, exit code 0 after the signal."""
    heard: queue.Queue[MQTTMessage] = queue.Queue()
    client = Client(CallbackAPIVersion.VERSION2, client_id="listener")
    client.on_message = lambda c, userdata, arrived: heard.put(arrived)
    client.connect("127.0.0.1", broker.port)
    client.subscribe("plates/table-1/#", qos=1)
    client.loop_start()
    words = [sys.executable, "-m", "sim_sensors", "clean", str(DEMO), "--speed", "20", "--tell"]
    program = subprocess.Popen(
        [*words, "--publish", f"127.0.0.1:{broker.port}"],
        stdout=subprocess.PIPE,
        text=True,
        env={**os.environ, "OPENBLAS_NUM_THREADS": "1"},
    )
    try:
        arrived = [heard.get(timeout=20.0) for _ in range(4)]
        program.send_signal(signal.SIGTERM)
        said, _ = program.communicate(timeout=10.0)
    finally:
        program.kill()
        client.disconnect()
        client.loop_stop()
    assert arrived[0].topic == "plates/table-1/batch"
    assert {m.topic for m in arrived[1:]} == {"plates/table-1/readings"}
    assert all(m.qos == 1 for m in arrived)
    stamps = [from_iso(json.loads(m.payload)["at"]) for m in arrived[1:]]
    assert set(np.diff(stamps)) == {2_000_000}
    assert program.returncode == 0
    assert "samples of batch clean sent" in said


def test_no_broker_is_said_in_one_line(capsys: pytest.CaptureFixture[str]) -> None:
    """Exit code 3 and the address that did not answer."""
    address = f"127.0.0.1:{free_port()}"
    assert main(["clean", str(DEMO), "--publish", address, "--wait", "0.5"]) == 3
    assert f"no broker at {address}" in capsys.readouterr().err

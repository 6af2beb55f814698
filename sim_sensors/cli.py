"""sim-sensors: publish a simulated batch, or write it as a log with its truth beside it.

Exit codes: 0 done, 2 wrong use or settings, 3 no broker, 4 a file cannot be written.
"""

from __future__ import annotations

import argparse
import os
import signal
import sys
import threading
import time
from collections.abc import Iterator, Sequence
from pathlib import Path
from typing import TYPE_CHECKING

from platewatch.errors import NoDataError, PlatewatchError, SettingsError, StorageError
from platewatch.units import from_iso

if TYPE_CHECKING:
    from platewatch.adapters.settings import Description
    from sim_sensors.batches import Batch
    from sim_sensors.publish import Pace
    from sim_sensors.simulation import Sample, Simulation
    from sim_sensors.telling import Teller

NAMES = (
    ("clean", "1", "heat-up and soak, nothing goes wrong"),
    ("announced-load", "1b", "a cold mould is put on and announced"),
    ("cold-load", "2", "a cold mould is put on a control thermocouple, unannounced"),
    ("zone-stays-on", "3", "the switch of a zone stays on"),
    ("zone-not-heating", "4", "the heater of a zone is open"),
    ("loose-sensor", "5", "a control thermocouple comes loose"),
    ("reversed-sensor", "7", "a control thermocouple is reversed from the start"),
)


def main(argv: Sequence[str] | None = None) -> int:
    """Run the program; the exit code."""
    arguments = _parser().parse_args(argv)
    try:
        return _run(arguments)
    except PlatewatchError as error:
        print(f"sim-sensors: {error}", file=sys.stderr)
        return {StorageError: 4, NoDataError: 3}.get(type(error), 2)
    except KeyboardInterrupt:
        return 0


def _parser() -> argparse.ArgumentParser:
    listing = "\n".join(f"  {name:18s}{number:4s}{what}" for name, number, what in NAMES)
    parser = argparse.ArgumentParser(
        prog="sim-sensors",
        formatter_class=argparse.RawDescriptionHelpFormatter,
        description="Simulate a heated plate with its thermocouples, by its own physics.",
        epilog=f"batches (by name or number):\n{listing}\n\nexamples:\n"
        "  sim-sensors clean table.toml --log clean.csv --truth clean-truth.csv\n"
        "  sim-sensors cold-load table.toml --publish 127.0.0.1:1883 --speed 10 --from 5100 --tell",
    )
    add = parser.add_argument
    add("batch", help="what happens on the plate")
    add("plate", type=Path, metavar="PLATE.toml", help="plate description")
    where = parser.add_mutually_exclusive_group(required=True)
    where.add_argument("--publish", metavar="HOST:PORT", help="send to this MQTT broker")
    where.add_argument("--log", type=Path, metavar="FILE", help="write a wide CSV log")
    add("--truth", type=Path, metavar="FILE", help="with --log: true peak and watts as CSV")
    add("--fields", type=_positive, metavar="S", help="with --log: the true field every S s, npz")
    add("--speed", type=_positive, default=1.0, help="plate seconds per second (default 1)")
    add("--seed", type=int, default=0, help="of the noise (default 0)")
    add("--from", dest="begin_s", type=_seconds, default=0.0, metavar="S", help="skip S s silently")
    add("--until", type=_positive, metavar="S", help="end at S s of the batch (default 9600)")
    add("--start", metavar="ISO", help="source time at which it begins (default now)")
    add("--sample", type=_positive, default=2.0, metavar="S", help="between samples (default 2)")
    add("--incident-at", type=_seconds, metavar="S", help="moment of the incident (default 5400)")
    add("--zone", default="", help="zone of the incident")
    add("--sensor", default="", help="sensor of the incident")
    add("--as-described", action="store_true", help="true plate without the stated model errors")
    add("--anti-windup", choices=("clamp", "hold"), default="clamp", help="of the PI loops")
    add("--tell", action="store_true", help="say in plain lines what really happens")
    add("--wait", type=_positive, default=10.0, metavar="S", help="for the broker (default 10)")
    add("--clock", metavar="US:MONOTONIC:SPEED", help="plate time shared with another process")
    return parser


def _positive(text: str) -> float:
    value = _seconds(text)
    if value == 0:
        raise argparse.ArgumentTypeError(f"{text} is not above 0")
    return value


def _seconds(text: str) -> float:
    try:
        value = float(text)
    except ValueError:
        raise argparse.ArgumentTypeError(f"{text!r} is no number") from None
    if not 0 <= value < 1e9:
        raise argparse.ArgumentTypeError(f"{text} is out of range")
    return value


def _run(arguments: argparse.Namespace) -> int:
    from platewatch.adapters.settings import load
    from sim_sensors.control import AntiWindup
    from sim_sensors.simulation import Plant, Simulation
    from sim_sensors.truth import AS_DESCRIBED, STATED_ERROR

    description = load(arguments.plate)
    start_us = _start(arguments.start)
    batch = _batch(arguments, description)
    simulation = Simulation(
        Plant.of(description),
        batch.faults,
        seed=arguments.seed,
        sample_s=arguments.sample,
        model_error=AS_DESCRIBED if arguments.as_described else STATED_ERROR,
        anti_windup=AntiWindup(arguments.anti_windup),
        batch_name=f"{description.plate.name}-{arguments.seed}",
    )
    if arguments.log:
        return _write(
            arguments, simulation, batch, start_us, _teller(arguments, description, batch)
        )
    return _send(arguments, simulation, batch, start_us, _teller(arguments, description, batch))


def _batch(arguments: argparse.Namespace, description: Description) -> Batch:
    from dataclasses import replace

    from sim_sensors.batches import batch

    chosen = batch(
        arguments.batch,
        description.plate,
        incident_s=arguments.incident_at,
        zone=arguments.zone,
        sensor=arguments.sensor,
    )
    end_s = arguments.until or chosen.lasts_s
    if arguments.begin_s >= end_s:
        raise SettingsError(f"--from {arguments.begin_s:g} is not before the end at {end_s:g} s")
    return replace(chosen, lasts_s=end_s)


def _start(text: str | None) -> int:
    if text is None:
        return time.time_ns() // 1_000_000_000 * 1_000_000  # whole seconds read better
    try:
        return from_iso(text)
    except ValueError as error:
        raise SettingsError(f"--start: {error}, for example 2026-03-02T06:00:00Z") from None


def _teller(arguments: argparse.Namespace, description: Description, batch: Batch) -> Teller | None:
    from sim_sensors.telling import Teller

    if not arguments.tell:
        return None
    limits = [limit.value for limit in description.alarm_limits if limit.kind == "peak"]
    return Teller(lambda line: print(line, flush=True), batch.faults, limits)


def _samples(
    simulation: Simulation, begin_s: float, end_s: float, tell: Teller | None
) -> Iterator[Sample]:
    """The samples after `begin_s`; those before are simulated and dropped."""
    while simulation.at_s < end_s - 1e-9:
        sample = simulation.step()
        if sample.at_s > begin_s + 1e-9:
            if tell:
                tell(sample)
            yield sample


def _write(
    arguments: argparse.Namespace,
    simulation: Simulation,
    batch: Batch,
    start_us: int,
    tell: Teller | None,
) -> int:
    from sim_sensors.recording import record

    log: Path = arguments.log
    fields = None
    if arguments.fields:
        fields = (log.with_suffix(".fields.npz"), arguments.fields, simulation.truth.lattice)
    count = record(
        _samples(simulation, arguments.begin_s, batch.lasts_s, tell),
        log,
        start_us=start_us - round(arguments.begin_s * 1e6),
        truth=arguments.truth,
        fields=fields,
    )
    print(f"{count} samples of batch {batch.name} in {log}")
    return 0


def _send(
    arguments: argparse.Namespace,
    simulation: Simulation,
    batch: Batch,
    start_us: int,
    tell: Teller | None,
) -> int:
    from sim_sensors.publish import Gateway, publish

    host, port = _address(arguments.publish)
    stop = threading.Event()
    signal.signal(signal.SIGTERM, lambda number, frame: stop.set())
    signal.signal(signal.SIGINT, lambda number, frame: stop.set())
    gateway = Gateway(host, port, f"sim-sensors-{os.getpid()}").open(arguments.wait)
    while simulation.at_s < arguments.begin_s - 1e-9 and not stop.is_set():
        simulation.step()
    pace = _pace(arguments, start_us)
    sample_us = round(arguments.sample * 1e6)
    begin_us = -(-pace.now_us() // sample_us) * sample_us  # stamps fall on whole samples
    sent = publish(
        _samples(simulation, arguments.begin_s, batch.lasts_s, None),
        gateway.send,
        simulation.plant.plate.name,
        pace=pace,
        start_us=begin_us - round(simulation.at_s * 1e6),
        stop=stop,
        told=tell or (lambda sample: None),
    )
    left = gateway.close()
    print(f"{sent} samples of batch {batch.name} sent to {host}:{port}", flush=True)
    if left:
        raise NoDataError(f"the broker at {host}:{port} did not acknowledge {left} messages")
    return 0


def _pace(arguments: argparse.Namespace, start_us: int) -> Pace:
    """Plate time from now on; without --start it begins at the machine's time."""
    from sim_sensors.publish import Pace

    if arguments.clock is None:
        begin_us = start_us if arguments.start else time.time_ns() // 1000
        return Pace(begin_us, time.monotonic(), arguments.speed)
    try:
        origin_us, monotonic, speed = arguments.clock.split(":")
        return Pace(int(origin_us), float(monotonic), float(speed))
    except ValueError:
        raise SettingsError(
            f"--clock {arguments.clock!r}: give microseconds UTC, seconds of the "
            "monotonic clock and speed, with colons between"
        ) from None


def _address(text: str) -> tuple[str, int]:
    host, _, port = text.rpartition(":")
    if not host or not port.isdigit() or not 0 < int(port) < 65_536:
        raise SettingsError(f"--publish {text!r} is no address; give HOST:PORT, 127.0.0.1:1883")
    return host.strip("[]"), int(port)

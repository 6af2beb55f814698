"""The arguments of every command.  Light: nothing here may load numpy."""

from __future__ import annotations

import argparse
import difflib
from typing import TYPE_CHECKING, NoReturn

from platewatch import __version__
from platewatch.errors import SettingsError

if TYPE_CHECKING:
    Commands = argparse._SubParsersAction["Parser"]

EXITS = (
    "exit codes: 0 done, 1 finding (a check failed, an alarm was raised), 2 wrong use or "
    "settings, 3 no data or no broker, 4 storage"
)
LOOK_ONLY = "platewatch is a monitoring and record-keeping aid; it switches nothing."
WHATIF_CAUTION = (
    "Calculated from the description you gave. "
    "Confirm by measurement before changing a recipe, limit or sensor."
)
BATCHES = "clean, announced-load, cold-load, zone-stays-on, zone-not-heating, loose-sensor"


class Parser(argparse.ArgumentParser):
    """Ends wrong use with one line instead of the whole usage text."""

    def error(self, message: str) -> NoReturn:
        raise SettingsError(f"{message}; see {self.prog} --help")


def build_parser() -> Parser:
    """Every command with its help and an example."""
    parser = Parser(
        prog="platewatch",
        description="Infers the whole temperature field of a heated plate from a few "
        f"thermocouples, predicts its peak, raises alarms and keeps the record. {LOOK_ONLY}",
        epilog=EXITS,
    )
    parser.add_argument("--version", action="version", version=f"platewatch {__version__}")
    commands = parser.add_subparsers(dest="command", metavar="COMMAND", required=True)
    for add in (
        _check,
        _run,
        _demo,
        _replay,
        _whatif,
        _alarms,
        _answer,
        _export,
        _verify,
        _backup,
        _tidy,
        _health,
    ):
        add(commands)
    return parser


def known_command(argv: list[str]) -> None:
    """Raises SettingsError with a suggestion where the first word is no command."""
    word = next((word for word in argv if not word.startswith("-")), None)
    if word is None or word in COMMANDS:
        return
    close = difflib.get_close_matches(word, COMMANDS, 1, 0.5)
    hint = f"did you mean {close[0]}?" if close else f"there are {', '.join(COMMANDS)}"
    raise SettingsError(f"no command {word!r}; {hint}")


COMMANDS = (
    "check",
    "run",
    "demo",
    "replay",
    "whatif",
    "alarms",
    "answer",
    "export",
    "verify",
    "backup",
    "tidy",
    "health",
)


def _command(commands: Commands, name: str, what: str, example: str) -> Parser:
    return commands.add_parser(
        name,
        help=what,
        description=f"{what[0].upper()}{what[1:]}.",
        epilog=f"example: platewatch {example}\n{EXITS}",
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )


def _json(parser: Parser) -> None:
    parser.add_argument("--json", action="store_true", help="print the result as JSON")


def _record(parser: Parser, *, needed: bool = True) -> None:
    which = "the record" if needed else "the record, instead of that of PLATE.toml"
    parser.add_argument("--db", metavar="FILE", required=needed, default="", help=which)


def _times(parser: Parser) -> None:
    parser.add_argument(
        "--from", dest="from_time", metavar="ISO", default="", help="first moment, with offset"
    )
    parser.add_argument(
        "--to", dest="to_time", metavar="ISO", default="", help="moment before which it ends"
    )


def _check(commands: Commands) -> None:
    parser = _command(
        commands,
        "check",
        "read a plate description, list every mistake, else the facts that follow from it",
        "check config/demo-table.toml --picture table.svg",
    )
    parser.add_argument("plate", metavar="PLATE.toml")
    parser.add_argument(
        "--picture", metavar="OUT.svg", default="", help="draw the plate as described"
    )
    _json(parser)


def _run(commands: Commands) -> None:
    parser = _command(
        commands,
        "run",
        "watch one or several plates: bus in, picture, forecast, alarms and record out",
        "run table-1.toml --broker 127.0.0.1:1883",
    )
    parser.add_argument("plates", metavar="PLATE.toml", nargs="+")
    parser.add_argument("--broker", metavar="HOST:PORT", default="", help="instead of [bus]")
    parser.add_argument("--db", metavar="URL", default="", help="instead of [store] url")
    parser.add_argument("--json-log", action="store_true", help="log one JSON object a line")
    parser.add_argument(
        "--for", dest="for_s", metavar="SECONDS", type=float, help="stop after this time"
    )


def _demo(commands: Commands) -> None:
    parser = _command(
        commands,
        "demo",
        "a simulated plate with an incident, watched for about two minutes",
        "demo zone-stays-on",
    )
    parser.add_argument(
        "batch", metavar="BATCH", nargs="?", default="", help=f"the incident: {BATCHES}"
    )
    parser.add_argument("--speed", type=float, metavar="N", help="plate seconds a second")
    parser.add_argument(
        "--for", dest="for_s", type=float, metavar="SECONDS", help="length, in your seconds"
    )
    parser.add_argument(
        "--data",
        metavar="DIR",
        default="platewatch-demo-data",
        help="folder of its record (default %(default)s)",
    )
    parser.add_argument("--port", type=int, default=0, help="port of the broker; 0: any free one")
    parser.add_argument(
        "--no-screen", action="store_true", help="only lines; there is no live page yet"
    )


def _replay(commands: Commands) -> None:
    parser = _command(
        commands,
        "replay",
        "run recorded readings through the same estimator into a new record; "
        "ends with 1 if an alarm was raised",
        "replay table-1.toml monday.csv --db monday.sqlite",
    )
    parser.add_argument("plate", metavar="PLATE.toml")
    parser.add_argument(
        "log", metavar="LOG", help="a wide log (CSV, Parquet) or a platewatch database"
    )
    parser.add_argument("--db", metavar="OUT.sqlite", required=True, help="a new record")
    _times(parser)
    parser.add_argument("--speed", type=float, metavar="N", help="plate seconds a second")
    parser.add_argument(
        "--columns", metavar="MAP.toml", default="", help="what the columns of another file mean"
    )
    parser.add_argument(
        "--limits",
        metavar="OTHER.toml",
        default="",
        help="its alarm limits instead, and what they change",
    )
    parser.add_argument("--offset", metavar="+01:00", default="", help="of times that name none")
    _json(parser)


def _whatif(commands: Commands) -> None:
    parser = _command(
        commands,
        "whatif",
        "the field that given zone powers and surroundings would produce",
        "whatif config/demo-table.toml --power Z1=300 --ambient 25 --steady --at 200,200",
    )
    parser.epilog = f"{parser.epilog}\n{WHATIF_CAUTION}"
    parser.add_argument("plate", metavar="PLATE.toml")
    parser.add_argument(
        "--power", metavar="ZONE=W", action="append", default=[], help="watts of a zone"
    )
    parser.add_argument(
        "--ambient",
        metavar="T",
        action="append",
        default=[],
        help="of every surround channel, or NAME=T",
    )
    when = parser.add_mutually_exclusive_group()
    when.add_argument("--after", type=float, metavar="SECONDS", help="from a plate at ambient")
    when.add_argument("--steady", action="store_true", help="the final field (the default)")
    parser.add_argument(
        "--load", metavar="NAME", action="append", default=[], help="a [[contact]] lying on"
    )
    parser.add_argument("--at", metavar="X,Y", action="append", default=[], help="a place, mm")
    parser.add_argument("--picture", metavar="OUT.svg", default="", help="draw the field")
    _json(parser)


def _alarms(commands: Commands) -> None:
    parser = _command(
        commands,
        "alarms",
        "list the alarms of a record, acknowledge one, or reset a latched one",
        'alarms ack peak-coming product --person "early shift" --db table-1.sqlite',
    )
    parser.add_argument(
        "words",
        metavar="PLATE.toml | ack ALARM SUBJECT | reset ALARM SUBJECT",
        nargs="*",
        help="whose record, or what to acknowledge",
    )
    _record(parser, needed=False)
    parser.add_argument("--plate", metavar="NAME", default="", help="where a record holds several")
    parser.add_argument("--all", action="store_true", help="those that are over, too")
    parser.add_argument("--person", default="", help="who acknowledges")
    parser.add_argument("--reason", default="", help="why, kept in the record")
    _json(parser)


def _answer(commands: Commands) -> None:
    parser = _command(
        commands,
        "answer",
        "answer the open question of a plate; evidence for it, never a verdict",
        'answer table-1.toml yes --person "early shift"',
    )
    parser.add_argument("plate_file", metavar="PLATE.toml", nargs="?", default="")
    parser.add_argument("said", choices=("yes", "no", "withdraw"))
    _record(parser, needed=False)
    parser.add_argument("--plate", metavar="NAME", default="", help="where a record holds several")
    parser.add_argument("--person", default="", help="who answers")
    parser.add_argument("--reason", default="", help="why, kept in the record")


def _export(commands: Commands) -> None:
    parser = _command(
        commands,
        "export",
        "write readings, peaks, alarms or the field at one moment as CSV or Parquet",
        "export readings --db table-1.sqlite --out monday.csv",
    )
    parser.add_argument(
        "what",
        choices=("readings", "peaks", "alarms", "field"),
        help="readings: those that were used, as a wide log that replay takes",
    )
    _record(parser)
    parser.add_argument("--out", metavar="FILE", required=True, help="ends in .csv or .parquet")
    _times(parser)
    parser.add_argument("--plate", metavar="NAME", default="", help="where a record holds several")
    parser.add_argument("--at", metavar="ISO", default="", help="moment of the field")
    parser.add_argument(
        "--description",
        metavar="PLATE.toml",
        default="",
        help="of the field; else the one that the record keeps",
    )


def _verify(commands: Commands) -> None:
    parser = _command(
        commands,
        "verify",
        "check a record: file, hash chains, descriptions; ends with 1 on a finding",
        "verify --db table-1.sqlite",
    )
    _record(parser)
    _json(parser)


def _backup(commands: Commands) -> None:
    parser = _command(
        commands,
        "backup",
        "copy a record while a daemon writes to it",
        "backup --db table-1.sqlite --to copy.sqlite",
    )
    _record(parser)
    parser.add_argument("--to", metavar="FILE", required=True, help="the copy, a new file")


def _tidy(commands: Commands) -> None:
    parser = _command(
        commands,
        "tidy",
        "remove what is past its keeping time and give the room back",
        "tidy --db table-1.sqlite --keep-readings-days 90 --keep-days 400",
    )
    _record(parser)
    parser.add_argument(
        "--keep-readings-days",
        type=float,
        metavar="DAYS",
        default=90.0,
        help="of readings, powers and fields (default %(default)g)",
    )
    parser.add_argument(
        "--keep-days",
        type=float,
        metavar="DAYS",
        default=400.0,
        help="of peaks and alarms (default %(default)g)",
    )
    _json(parser)


def _health(commands: Commands) -> None:
    parser = _command(
        commands,
        "health",
        "is the record being kept as it should: age of the picture, blindness, store, clocks; "
        "ends with 1 and the reasons if not",
        "health --db table-1.sqlite",
    )
    parser.add_argument("plate_file", metavar="PLATE.toml", nargs="?", default="")
    parser.add_argument("--db", metavar="FILE", default="", help="instead of PLATE.toml")
    parser.add_argument("--plate", metavar="NAME", default="", help="only this one of a record")
    parser.add_argument(
        "--max-age", type=float, default=30.0, metavar="S", help="of the last picture (default 30)"
    )
    _json(parser)

"""The program `platewatch`: arguments to commands, errors to one line and an exit code."""

from __future__ import annotations

import importlib
import os
import sys
from collections.abc import Sequence

from platewatch.cli_parser import build_parser, known_command
from platewatch.errors import NoDataError, PlatewatchError, StorageError

# Each command's code is loaded only when it is asked for.
MODULES = {
    "check": "platewatch.cli_plate",
    "whatif": "platewatch.cli_plate",
    "run": "platewatch.cli_run",
    "demo": "platewatch.cli_run",
    "replay": "platewatch.cli_run",
    "alarms": "platewatch.cli_record",
    "answer": "platewatch.cli_record",
    "export": "platewatch.cli_record",
    "verify": "platewatch.cli_record",
    "backup": "platewatch.cli_record",
    "tidy": "platewatch.cli_record",
    "health": "platewatch.cli_health",
}
INTERRUPTED = 130


def main(argv: Sequence[str] | None = None) -> int:
    """Run one command; the answer is the exit code.

    0 done, 1 finding, 2 wrong use or settings, 3 no data or no broker, 4 storage
    """
    # One BLAS thread: a replay must give what live gave, and small matrices are faster so.
    os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
    words = list(sys.argv[1:] if argv is None else argv)
    try:
        known_command(words)
        arguments = build_parser().parse_args(words)
        command = arguments.command
        code = int(getattr(importlib.import_module(MODULES[command]), command)(arguments))
        sys.stdout.flush()
        return code
    except PlatewatchError as error:
        for line in str(error).splitlines():
            print(f"platewatch: {line}", file=sys.stderr)
        return exit_code(error)
    except KeyboardInterrupt:
        print("platewatch: interrupted", file=sys.stderr)
        return INTERRUPTED
    except BrokenPipeError:
        # The reader of our output has gone; nothing more can be said to it.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return 0


def exit_code(error: PlatewatchError) -> int:
    """What a foreseeable mistake ends the program with."""
    if isinstance(error, StorageError):
        return 4
    return 3 if isinstance(error, NoDataError) else 2

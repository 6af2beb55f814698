"""Format, lint, types and tests: `python -m tests.all` ends with the worst exit code."""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

TOP = Path(__file__).resolve().parent.parent
STEPS = (
    ("format", ("ruff", "format", "--check", "--quiet", ".")),
    ("lint", ("ruff", "check", "--quiet", ".")),
    ("types", ("mypy",)),
    ("tests", ("pytest", "-n", "2", "--dist", "loadfile")),
)


def main() -> int:
    """Run every step, also after one has failed, so that one run shows all there is."""
    environment = os.environ | {"OPENBLAS_NUM_THREADS": "1"}
    failed = []
    for name, command in STEPS:
        print(f"== {name}: {' '.join(command)}", flush=True)
        done = subprocess.run([sys.executable, "-m", *command], cwd=TOP, env=environment)
        if done.returncode:
            failed.append(name)
            print(f"== {name} FAILED", flush=True)
    if failed:
        print(f"failed: {', '.join(failed)}", file=sys.stderr)
    return 1 if failed else 0


if __name__ == "__main__":
    sys.exit(main())

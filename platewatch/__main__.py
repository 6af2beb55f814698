"""`python -m platewatch`."""

from __future__ import annotations

import sys

from platewatch.cli import main

if __name__ == "__main__":
    sys.exit(main())

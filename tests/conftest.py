"""What every test shares: one BLAS thread, as the program itself sets it."""

from __future__ import annotations

import os

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

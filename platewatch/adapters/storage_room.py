"""Room on the disk: how much is left, and a reserve for alarms and peaks.

A database on a full disk cannot even store the alarm that says so.  A file of its own
beside the database holds a little room back; it goes when the disk is full, and is made
again when there is room.
"""

from __future__ import annotations

import contextlib
import os
import shutil
from dataclasses import dataclass
from pathlib import Path

RESERVE_BYTES = 16 * 2**20  # peaks and alarms of one plate for about two days
RESERVE_PART = 16  # at most this part of what is free, on a very small disk


@dataclass(frozen=True, slots=True)
class Sizes:
    """Bytes of the database, of its write-ahead log, and free on the disk."""

    database: int
    wal: int
    free: int


def sizes_of(path: Path | None) -> Sizes:
    """Room used and left; all zero for a record in memory."""
    if path is None:
        return Sizes(0, 0, 0)
    wal = path.with_name(path.name + "-wal")
    free = shutil.disk_usage(path.resolve().parent).free
    return Sizes(_size(path), _size(wal), free)


def keep_reserve(path: Path | None) -> None:
    """Make the reserve if it is missing and can be had without using up the disk."""
    if path is None or _size(_reserve(path)):
        return
    room = min(RESERVE_BYTES, sizes_of(path).free // RESERVE_PART)
    try:
        with open(_reserve(path), "wb") as file:
            os.posix_fallocate(file.fileno(), 0, room)
    except (OSError, ValueError):
        give_reserve(path)


def give_reserve(path: Path | None) -> bool:
    """Free the reserve; False where there was none."""
    if path is None or not _size(_reserve(path)):
        return False
    with contextlib.suppress(OSError):
        _reserve(path).unlink()
    return True


def _reserve(path: Path) -> Path:
    return path.with_name(path.name + "-reserve")


def _size(path: Path) -> int:
    try:
        return path.stat().st_size
    except OSError:
        return 0

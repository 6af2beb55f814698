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
RESERVE_PART = 16  # at most this part of the disk, where it is a very small one


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


def keep_reserve(path: Path | None) -> bool:
    """Make the reserve if it is missing and as much again stays free; is it there now?"""
    if path is None:
        return True
    disk = shutil.disk_usage(path.resolve().parent)
    size = min(RESERVE_BYTES, disk.total // RESERVE_PART)
    if _size(_reserve(path)) >= size:
        return True
    if disk.free < 2 * size:
        return False
    try:
        with open(_reserve(path), "wb") as file:
            os.posix_fallocate(file.fileno(), 0, size)
    except OSError:
        give_reserve(path)
        return False
    return True


def give_reserve(path: Path | None) -> None:
    """Free the reserve, if there is one."""
    if path is not None:
        with contextlib.suppress(OSError):
            _reserve(path).unlink()


def _reserve(path: Path) -> Path:
    return path.with_name(path.name + "-reserve")


def _size(path: Path) -> int:
    try:
        return path.stat().st_size
    except OSError:
        return 0

"""Bytes of a stored estimator state: mean and drive float64, covariance a float32 triangle."""

from __future__ import annotations

import struct

import numpy as np

from platewatch.errors import StorageError
from platewatch.types import FieldShot

_MAGIC = b"PWFS"
_VERSION = 1
_HEADER = struct.Struct("<4sHII")  # magic, version, states n, drive length k


def pack_state(shot: FieldShot) -> bytes:
    """Mean (n,), drive (k,) and the upper triangle of cov (n, n), little-endian.

    Raises StorageError if the shapes disagree or a value of mean or cov is not finite; the
    drive may hold NaN for what was never heard.
    """
    n, k = shot.mean.size, shot.drive.size
    if shot.cov.shape != (n, n):
        raise StorageError(f"state of {n} values with a covariance of shape {shot.cov.shape}")
    if not all(np.isfinite(part).all() for part in (shot.mean, shot.cov)):
        raise StorageError(f"state at {shot.at_us} us holds a value that is not finite")
    triangle = shot.cov[np.triu_indices(n)]
    return b"".join(
        (
            _HEADER.pack(_MAGIC, _VERSION, n, k),
            shot.mean.astype("<f8").tobytes(),
            shot.drive.astype("<f8").tobytes(),
            triangle.astype("<f4").tobytes(),
        )
    )


def unpack_state(at_us: int, basis: str, state: bytes) -> FieldShot:
    """The shot that `pack_state` wrote; raises StorageError if the bytes are not one.

    float32 rounding changes each entry by at most u sqrt(P_ii P_jj), u = 2^-24, which could
    leave the matrix slightly indefinite. Adding n u P_ii to the diagonal makes it positive
    semi-definite again (Gershgorin, on the scaled matrix) and widens the band by n u / 2.
    """
    n, k = _sizes(state)
    at = _HEADER.size
    mean = np.frombuffer(state, "<f8", n, at).astype(np.float64)
    drive = np.frombuffer(state, "<f8", k, at + 8 * n).astype(np.float64)
    triangle = np.frombuffer(state, "<f4", offset=at + 8 * (n + k))
    cov = np.zeros((n, n))
    cov[np.triu_indices(n)] = triangle
    cov = cov + np.triu(cov, 1).T
    cov[np.diag_indices(n)] *= 1 + n * 2.0**-24
    return FieldShot(at_us, basis, mean, cov, drive)


def _sizes(state: bytes) -> tuple[int, int]:
    if len(state) < _HEADER.size or state[:4] != _MAGIC:
        raise StorageError("a stored field state does not begin as one; run platewatch verify")
    _, version, n, k = _HEADER.unpack_from(state)
    if version != _VERSION:
        raise StorageError(f"field state of version {version}; this platewatch reads {_VERSION}")
    if len(state) != _HEADER.size + 8 * (n + k) + 4 * (n * (n + 1) // 2):
        raise StorageError("a stored field state is cut short; run platewatch verify")
    return n, k

"""A thermocouple with its wires exchanged: what it shows falls where the plate warms.

It shows 2 T_cj - T for a junction at T with terminals at T_cj.  No passive plate in a
warm room does that: a reading below the room by as much as the neighbours are above it
is a mirror image, whatever the field behind it.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from platewatch.monitor.estimator import Quiet
from platewatch.monitor.tolerance import bias_sd_K
from platewatch.types import Array

LEAST_K = 0.8  # fall of the reading, and rise of the neighbours
NOISE_SD = 5.0  # and so many standard deviations of a reading
MISMATCH = 0.5  # share by which fall and rise may differ: neighbours warm unequally
MISMATCH_HOT = 0.25  # the same for a plate found hot
LEAST_HOT_K = 8.0  # below the terminals, for a plate found hot
BIAS_SD = 3.0
LASTS_US = 10_000_000
WARMER_CABINET_K = 6.0  # terminals may be this much warmer than the room


@dataclass(frozen=True)
class Mirrors:
    """By thermocouple (ns,).

    first: first reading, nan before it;  since_us: since when a mirror image, 0 when not
    neighbours: what the others expected there at the first reading
    """

    first: Array
    neighbours: Array
    since_us: Array


def no_mirrors(quiet: Quiet) -> Mirrors:
    """Before the first reading."""
    ns = len(quiet.plate.sensors)
    return Mirrors(np.full(ns, np.nan), np.full(ns, np.nan), np.zeros(ns))


def from_neighbours(quiet: Quiet, degC: Array, doubtful: frozenset[int]) -> Array:
    """(ns,) inverse-distance mean of the other thermocouples, nan where there is none.

    The two nearest usable ones and more share it, so that one liar does not decide.
    Source: Shepard, Proc. 23rd ACM National Conference (1968) 517.
    """
    place = np.array([(s.x_m, s.y_m) for s in quiet.plate.sensors])
    usable = np.isfinite(degC) & ~np.isin(np.arange(len(degC)), list(doubtful))
    distance = np.hypot(*(place[:, None] - place[None]).transpose(2, 0, 1))
    weight = np.where(usable[None], 1 / np.maximum(distance, 1e-6) ** 2, 0.0)
    np.fill_diagonal(weight, 0.0)
    total = weight.sum(axis=1)
    value = weight @ np.where(usable, degC, 0.0)
    return np.where(total > 0, value / np.maximum(total, 1e-12), np.nan)


def look(
    quiet: Quiet,
    mirrors: Mirrors,
    at_us: int,
    degC: Array,
    around: Array,
    junctions: Mapping[str, float],
    doubtful: frozenset[int],
) -> Mirrors:
    """One tick.  degC (ns,) readings, nan where none;  around (nu,) the surroundings.

    doubtful: thermocouples that are not asked as neighbours
    """
    near = from_neighbours(quiet, degC, doubtful)
    new = np.isnan(mirrors.first) & np.isfinite(degC) & np.isfinite(near)
    first = np.where(new, degC, mirrors.first)
    neighbours = np.where(new, near, mirrors.neighbours)
    terminals = terminal_degC(quiet, around, junctions)
    room = min(float(around.min()) if around.size else np.inf, float(terminals.min(initial=np.inf)))
    sd = np.sqrt(quiet.noise_var)
    least = np.maximum(LEAST_K, NOISE_SD * sd)
    fall, rise = first - degC, near - neighbours
    mirrored = np.abs(fall - rise) <= MISMATCH * rise + 2 * sd
    opposite = (fall >= least) & (rise >= least) & mirrored & (degC < room)
    below, above = terminals - degC, near - terminals
    reference = quiet.reduced.model.reference_degC
    bias = np.array([bias_sd_K(s, reference) for s in quiet.plate.sensors])
    slack = MISMATCH_HOT * np.abs(above) + BIAS_SD * bias + WARMER_CABINET_K
    hot = (below >= LEAST_HOT_K + BIAS_SD * bias) & (above > 0) & (np.abs(below - above) <= slack)
    seen = np.isfinite(degC) & (opposite | hot)
    since = np.where(seen, np.where(mirrors.since_us > 0, mirrors.since_us, at_us), 0)
    since = np.where(np.isnan(degC), mirrors.since_us, since)
    return Mirrors(first, neighbours, since)


def mirrored(mirrors: Mirrors, at_us: int) -> frozenset[int]:
    """Thermocouples that have been a mirror image for LASTS_US."""
    lasting = (mirrors.since_us > 0) & (at_us - mirrors.since_us >= LASTS_US)
    return frozenset(np.flatnonzero(lasting).tolist())


def terminal_degC(quiet: Quiet, around: Array, junctions: Mapping[str, float]) -> Array:
    """(ns,) of each thermocouple's terminals: measured, described, or that of the room."""
    room = float(around.mean()) if around.size else 22.0
    found = []
    for sensor in quiet.plate.sensors:
        place = sensor.cold_junction
        if isinstance(place, str):
            found.append(junctions.get(place, room))
        else:
            found.append(room if place is None else float(place))
    return np.array(found)

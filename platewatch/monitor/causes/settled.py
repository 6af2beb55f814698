"""Causes that have been watched long enough become part of the picture.

The bank looks back over a limited window.  Before a cause falls out of it, the field as
that cause sees it becomes the field, heat that goes on becomes known heat, and a
thermocouple at fault is left out until it agrees with the field again.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from platewatch.monitor.causes.catalogue import Cause, Family
from platewatch.monitor.causes.refine import FAMILY_OF
from platewatch.monitor.causes.views import View
from platewatch.monitor.estimator import FieldState, Observed, Quiet
from platewatch.types import Array, Gaussian

DOUBT = 0.2  # share of the change that may be wrong
MOST_SHIFT_K = 20.0
LEFT_OVER_K = 1.0  # and this much anywhere
SPREAD_S = 900.0  # what the modes miss of heat that has ended fades like this
HEATING = (Family.SOURCE, Family.LOSS, Family.ZONE)
RETURN_SD = 3.0  # a left-out thermocouple is heard again when it agrees this well
RETURN_US = 180_000_000  # for this long
LOAD_WARMS_S = 600.0  # what a load still takes when it has settled fades like this
OVER_SHARE = 0.1  # of a zone's watts: below this a settled heater fault is over
OVER_US = 1_800_000_000  # loads and losses are part of the plate after this long


@dataclass(frozen=True)
class Settled:
    """One settled cause.

    view: as it was when it settled;  since_us: when that was
    agrees_us: since when its thermocouple has agreed with the field, 0 when it does not
    """

    view: View
    since_us: int
    agrees_us: int = 0

    @property
    def sensor(self) -> str | None:
        """The thermocouple it is about, if it is about one."""
        for cause, subject in self.view.parts:
            if FAMILY_OF[cause] is Family.SENSOR:
                return subject
        return None


def adopt(field: FieldState, view: View, quiet: Quiet) -> tuple[FieldState, Settled]:
    """The field as the cause sees it, its lasting heat known from now on."""
    k = quiet.blocks
    mean = view.belief.mean.copy()
    change = mean - field.belief.mean
    cov = view.belief.cov + (DOUBT**2) * np.outer(change, change)
    shift = float(np.square(change[k.a]).sum()) / k.modes / mean_square_mode(quiet)
    anywhere = LEFT_OVER_K**2 + DOUBT**2 * min(shift, MOST_SHIFT_K**2)
    cov[k.a, k.a] += anywhere * np.eye(k.modes) * mean_square_mode(quiet)
    moved = replace(field, belief=Gaussian(mean, cov), misfit=1.0)
    return moved, Settled(view, field.at_us)


def lasts(each: Settled, at_us: int) -> float:
    """Share of a settled cause's lasting heat that still flows: a load warms, a fault stays."""
    if each.view.cause is not Cause.COLD_LOAD:
        return 1.0
    return float(np.exp(-(at_us - each.since_us) / 1e6 / LOAD_WARMS_S))


def lasting_heat(settled: Sequence[Settled], at_us: int) -> Array | None:
    """(r,) modal watts of all settled heat, None where there is none."""
    heating = [s for s in settled if any(FAMILY_OF[c] in HEATING for c, _ in s.view.parts)]
    if not heating:
        return None
    return np.asarray(sum(lasts(each, at_us) * each.view.lasting for each in heating))


def missed_now(settled: Sequence[Settled], at_us: int) -> Array | None:
    """(cells,) K that the modes miss of settled heat: what lasts stays, the rest spreads."""
    total: Array | None = None
    for each in settled:
        if FAMILY_OF[each.view.cause] not in HEATING or not each.view.missed.any():
            continue
        gone_s = (at_us - each.since_us) / 1e6
        share = each.view.lasting_share * lasts(each, at_us)
        part = each.view.missed * (
            share + (1 - each.view.lasting_share) * float(np.exp(-gone_s / SPREAD_S))
        )
        total = part if total is None else total + part
    return total


def mean_square_mode(quiet: Quiet) -> float:
    """Modal amplitude squared that stands for 1 K^2 on average over the plate."""
    return float(quiet.reduced.V.shape[0] / np.square(quiet.reduced.V).sum())


def left_out(settled: Sequence[Settled], quiet: Quiet) -> frozenset[int]:
    """Thermocouples that nobody listens to."""
    names = [s.name for s in quiet.plate.sensors]
    return frozenset(names.index(s.sensor) for s in settled if s.sensor is not None)


def left_out_but(quiet: Quiet, sensors: Sequence[int]) -> frozenset[int]:
    """All thermocouples but these."""
    return frozenset(range(len(quiet.plate.sensors))) - frozenset(sensors)


def without(seen: Observed, ignored: frozenset[int]) -> Observed:
    """The readings without those of the left-out thermocouples."""
    if not ignored:
        return seen
    keep = [i for i, sensor in enumerate(seen.sensors) if sensor not in ignored]
    return replace(
        seen,
        sensors=tuple(seen.sensors[i] for i in keep),
        degC=seen.degC[keep],
        count=seen.count[keep],
        share=seen.share[keep],
    )


def review(
    settled: Sequence[Settled],
    quiet: Quiet,
    field: FieldState,
    seen: Observed,
    showing: frozenset[str] = frozenset(),
) -> tuple[Settled, ...]:
    """Those that still hold: a repaired thermocouple returns, a repaired heater is over.

    showing: thermocouples whose reading shows its fault by itself; they do not return
    """
    kept = []
    for each in settled:
        if each.sensor is not None and each.sensor in showing:
            kept.append(replace(each, agrees_us=0))
            continue
        reviewed = _review(each, quiet, field, seen)
        if reviewed is not None:
            kept.append(reviewed)
    return tuple(kept)


def _review(each: Settled, quiet: Quiet, field: FieldState, seen: Observed) -> Settled | None:
    if each.sensor is not None:
        return _return_check(each, quiet, field, seen)
    family = FAMILY_OF[each.view.cause]
    if family is Family.ZONE:
        zone = quiet.plate.zone(each.view.subject)
        number = [z.name for z in quiet.plate.zones].index(zone.name)
        beyond = each.view.watts + field.belief.mean[quiet.blocks.d.start + number]
        sign = 1.0 if each.view.cause is Cause.ZONE_STAYS_ON else -1.0
        return each if sign * beyond >= OVER_SHARE * zone.watts else None
    return each if field.at_us - each.since_us < OVER_US else None


def _return_check(each: Settled, quiet: Quiet, field: FieldState, seen: Observed) -> Settled | None:
    """The thermocouple must agree with the field for RETURN_US on end."""
    number = [s.name for s in quiet.plate.sensors].index(each.sensor or "")
    if number not in seen.sensors:
        return each
    row = quiet.H[number]
    reading = float(seen.degC[seen.sensors.index(number)])
    sd = float(np.sqrt(row @ field.belief.cov @ row + quiet.noise_var[number]))
    if abs(reading - float(row @ field.belief.mean)) > RETURN_SD * sd:
        return replace(each, agrees_us=0)
    since = each.agrees_us or field.at_us
    return None if field.at_us - since >= RETURN_US else replace(each, agrees_us=since)

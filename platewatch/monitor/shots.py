"""The estimator's state as one stored value and back, and the watts it tells of."""

from __future__ import annotations

import numpy as np

from platewatch.monitor.estimator import POWER, FieldState, Quiet
from platewatch.types import Array, FieldShot, Gaussian, ZonePowerRow


def shot_of(quiet: Quiet, field: FieldState, duty: Array) -> FieldShot:
    """Field, heaters and surroundings; duty (nz,) as last heard."""
    drive = np.concatenate((field.heater_W, field.called_W, duty, field.around, [field.misfit]))
    basis = quiet.reduced.basis_hash
    return FieldShot(field.at_us, basis, field.belief.mean, field.belief.cov, drive)


def field_of(quiet: Quiet, shot: FieldShot | None) -> tuple[FieldState, Array] | None:
    """Field and duties of a shot; None where it belongs to another description."""
    if shot is None or shot.basis != quiet.reduced.basis_hash:
        return None
    nz, nu = len(quiet.zone_u), len(quiet.around_u)
    if shot.mean.size != quiet.blocks.size or shot.drive.size != 3 * nz + nu + 1:
        return None
    heater, called, duty, around, rest = np.split(shot.drive, [nz, 2 * nz, 3 * nz, 3 * nz + nu])
    belief = Gaussian(shot.mean, shot.cov)
    return FieldState(shot.at_us, belief, heater, called, around, float(rest[0])), duty


def power_rows(quiet: Quiet, field: FieldState) -> tuple[ZonePowerRow, ...]:
    """Watts called for and delivered, by zone, at the heaters' output.

    Delivered is (called + d)(1 + theta), d the zone's own excess and theta the relative
    error of all heater power; its variance is linearised there.
    """
    k, mean, cov = quiet.blocks, field.belief.mean, field.belief.cov
    common = k.theta.start + POWER
    share = 1 + mean[common]
    plain = field.heater_W + mean[k.d]
    variance = share**2 * np.diag(cov)[k.d] + plain**2 * cov[common, common]
    variance += 2 * share * plain * cov[k.d, common]
    return tuple(
        ZonePowerRow(field.at_us, zone.name, float(called), float(watts), float(sd))
        for zone, called, watts, sd in zip(
            quiet.plate.zones, field.heater_W, share * plain, np.sqrt(variance), strict=True
        )
    )

"""Angstrom's method: diffusivity from the decay and the delay of a thermal wave.

On a long strip heated periodically at one end the wave falls as exp(-m x) and lags by
n x; whatever the heat loss, alpha = omega / (2 m n) (A. J. Angstrom 1861; Carslaw &
Jaeger, Conduction of Heat in Solids, sec. 4.8, from memory).
"""

from __future__ import annotations

import csv
import os
from pathlib import Path

import numpy as np
import pytest
from scipy.sparse import diags_array
from scipy.sparse.linalg import spsolve
from thin_plates import material, model_of, plate

from platewatch.thermal.conduction import ThermalModel, transient
from platewatch.thermal.plate import Rectangle, Zone
from platewatch.thermal.rim import Ints
from platewatch.types import Array

COPPER_ALPHA = 1.17e-4  # m2/s at 300 K, Incropera & DeWitt, 7th ed., Table A.1
OMEGA = 2 * np.pi * 1.0  # the record's heater runs at 1 Hz
COPPER = (401.0, 8933.0, 385.0)  # k, rho, cp, the same table


def angstrom(x_m: Array, log_ratio: Array, delay: Array) -> float:
    """Diffusivity, m2/s, from ln of the amplitude ratio and the phase delay, rad, to x = 0."""
    decay = -(x_m @ log_ratio) / (x_m @ x_m)
    lag = (x_m @ delay) / (x_m @ x_m)
    return float(OMEGA / (2 * decay * lag))


def test_the_copper_strip_record_gives_the_handbook_diffusivity() -> None:
    """Within 8 % of 1.17e-4 m2/s: infrared phases and amplitudes at 14 places, 6 groups.

    Record rec565 of the Angstrom-method repository (pyangstromRT, MIT licence).
    """
    folder = os.environ.get("PLATEWATCH_DATA")
    name = "thermal_wave_strip/rec565_IR_phase_amp_6groups.csv"
    if not folder or not (Path(folder) / name).is_file():
        pytest.skip(f"needs the open measured data; PLATEWATCH_DATA names no folder with {name}")
    with (Path(folder) / name).open(encoding="utf-8") as file:
        rows = list(csv.DictReader(file))
    assert len(rows) == 84
    x, ratio, delay = (
        np.array([float(row[key]) for row in rows]) for key in ("x", "amp_ratio", "phase_diff")
    )
    alpha = angstrom(x, np.log(ratio), delay)
    print(f"copper strip, measured: {alpha:.4g} m2/s, {alpha / COPPER_ALPHA - 1:+.1%}")
    assert alpha == pytest.approx(COPPER_ALPHA, rel=0.08)


def strip(loss: float) -> ThermalModel:
    """A copper strip 60 x 2 x 0.5 mm, heated over its first 0.5 mm; cells of 0.125 mm."""
    end = Zone("end", (Rectangle(0, 0, 0.0005, 0.002),), 1.0, 0.0, 1.0)
    described = plate((0.06, 0.002), material(*COPPER), 0.0005, loss, zones=[end])
    return model_of(described, 0.000125)


def evaluated(x_m: Array, wave: Array) -> float:
    """Diffusivity from complex amplitudes along the strip, read at the record's places."""
    places = 0.0010 + np.arange(0.0, 0.0071, 0.0005)
    log = np.interp(places, x_m, np.log(np.abs(wave)))
    phase = np.interp(places, x_m, np.unwrap(np.angle(wave)))
    return angstrom(places[1:] - places[0], log[1:] - log[0], phase[0] - phase[1:])


def along(model: ThermalModel) -> tuple[Array, Ints]:
    """x of the lowest row of cells, rising, and their numbers."""
    cells = np.flatnonzero(model.grid.y == model.grid.y.min())
    cells = cells[np.argsort(model.grid.x[cells])]
    return model.grid.x[cells], cells


@pytest.mark.parametrize("loss", [20.0, 2000.0])
def test_our_conduction_returns_the_diffusivity_of_a_periodically_heated_strip(loss: float) -> None:
    """Within 2 % by the same evaluation, with hardly any face loss and with much.

    The settled wave of C dT/dt = -K T + B u for u = exp(i omega t): (K + i omega C) T = B.
    """
    model = strip(loss)
    shifted = diags_array(1j * OMEGA * model.capacity) + model.K
    wave = np.asarray(spsolve(shifted.tocsc(), model.B[:, 0].astype(complex)))
    x, cells = along(model)
    alpha = evaluated(x, wave[cells])
    k, rho, cp = COPPER
    print(f"copper strip, our model, {loss:g} W/m2K: {alpha / (k / rho / cp) - 1:+.2%}")
    assert alpha == pytest.approx(k / (rho * cp), rel=0.02)


def test_stepping_in_time_gives_the_same_diffusivity() -> None:
    """Within 2 %: 0.5 W + 0.5 W sin(omega t) from cold; the wave is taken from the last of
    eight periods, its slow warming as a straight line."""
    model = strip(2000.0)
    u = model.nominal.copy()

    def drive(t: float) -> Array:
        u[0] = 0.5 + 0.5 * np.sin(OMEGA * t)
        return u

    times = np.concatenate((np.arange(1.0, 8.0), 7.0 + np.arange(1, 41) / 40))
    x, cells = along(model)
    fields = transient(model, np.zeros(model.grid.n), drive, times, tolerance_K=1e-3)
    last, t = fields[-40:, cells], times[-40:]
    basis = np.column_stack((np.sin(OMEGA * t), np.cos(OMEGA * t), np.ones(40), t - t.mean()))
    sine, cosine = np.linalg.lstsq(basis, last, rcond=None)[0][:2]
    k, rho, cp = COPPER
    assert evaluated(x, sine + 1j * cosine) == pytest.approx(k / (rho * cp), rel=0.02)

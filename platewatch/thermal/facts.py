"""Figures that follow from a plate's description: is it thin, how far and fast heat spreads."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from platewatch.thermal.conduction import ThermalModel
from platewatch.thermal.reduction import ReducedModel

THIN = 0.1  # Biot number up to which the temperature is even through the thickness


@dataclass(frozen=True)
class PlateFacts:
    """cells, order: numbers;  largest_h W/m2K: of faces and load contacts
    biot: largest_h d / k, through all layers;  core_K_per_W_m2: d / (3 k), what a heat
    flow into one face adds between that face and the mean
    spread_m: sqrt(k d / h), how far a disturbance reaches; infinite without face loss
    time_constants_s: the three slowest, infinite without any loss;  error_K: see ReducedModel
    """

    cells: int
    order: int
    error_K: float
    largest_h: float
    biot: float
    core_K_per_W_m2: float
    spread_m: float
    time_constants_s: tuple[float, ...]

    @property
    def is_thin(self) -> bool:
        return self.biot <= THIN

    def core_band_K(self, flux_W_m2: float) -> float:
        """Surface-to-core difference to add to a band, K; 0 on a thin plate."""
        return 0.0 if self.is_thin else abs(flux_W_m2) * self.core_K_per_W_m2


def plate_facts(reduced: ReducedModel) -> PlateFacts:
    """The facts of one plate at its reference temperature."""
    model = reduced.model
    faces = _face_coefficients(model)
    largest = max([*faces, *(contact.conductance for contact in model.plate.contacts)])
    resistance = _through_resistance(model)
    loss = sum(faces)
    sheet = float(np.mean(model.stack.sheet_conductance(model.reference_degC)))
    slowest = reduced.rates[:3]
    floor = 1e-9 * float(reduced.rates.max())
    return PlateFacts(
        model.grid.n,
        reduced.order,
        reduced.error_K,
        largest,
        largest * resistance,
        resistance / 3,
        float(np.sqrt(sheet / loss)) if loss > 0 else np.inf,
        tuple(float(1 / rate) if rate > floor else np.inf for rate in slowest),
    )


def _face_coefficients(model: ThermalModel) -> list[float]:
    reference = np.array([model.reference_degC])
    return [float(face.slopes(reference, model.nominal)[0][0]) for face in model.faces]


def _through_resistance(model: ThermalModel) -> float:
    """d / k in m2K/W through all layers, where it is largest."""
    parts = model.stack.parts
    total = np.sum([depth / m.k.at(model.reference_degC) for m, depth in parts], axis=0)
    return float(np.max(total))

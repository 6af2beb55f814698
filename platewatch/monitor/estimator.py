"""The quiet filter of one plate: from thermocouples and heater powers to the field.

"Quiet" because its process noise is never inflated to chase an event: what does
not fit is left to be explained, not absorbed.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np
import shapely
from numpy.typing import NDArray

from platewatch.monitor.kalman import Coupling, Innovation, predict_coupled, update
from platewatch.monitor.tolerance import bias_sd_K
from platewatch.monitor.transition import Blocks, Continuous, Noise, Steps
from platewatch.thermal.conduction import InputKind, conduction_matrix
from platewatch.thermal.grid import Grid, hats
from platewatch.thermal.plate import Plate, geometry
from platewatch.thermal.reduction import (
    ReducedModel,
    flux_modes,
    point_rows,
    project,
    radiated,
    remainder,
)
from platewatch.types import Array, Gaussian

BUMPS = 24  # nodes of the coarse mesh that carries the smooth unknown heat
LEAST_LAG_S = 0.5  # a thermocouple without lag would only stiffen the arithmetic
POWER_MEMORY_S = 240.0
BUMP_MEMORY_S = 3600.0
BIAS_MEMORY_S = 30 * 86400.0
THETA_MEMORY_S = 30 * 86400.0
# The readings may move theta only while the model fits: what an event does to them is
# not the plate's conductivity.  Misfit is NIS per reading, averaged over MISFIT_S.
MISFIT_S = 30.0
MISFIT_MOST = 2.0
MISFIT_AT_ONCE = 4.0
# Over a time without ticks the losses are linearised anew this often.
LONGEST_STEP_US = 120_000_000
# Readings that come back after this long, and miss what is expected of them by about four
# standard deviations each, tell that the plate was not left alone: start from them.
FORGET_AFTER_US = 300_000_000
FORGET_NIS = 16.0
# Of a relative uncertainty so much (in standard deviations) differs from place to place,
# for losses, or from zone to zone, for power; the rest is common to the plate.
LOCAL_SHARE = 0.2
ZONE_SHARE = 0.5
PARAMETERS = 5  # conductivity, losses, heat capacity, power, emissivity
POWER = 3  # which of them is the error of all heater power


@dataclass(frozen=True)
class Quiet:
    """What never changes while one description runs.

    H (ns, n): each reading is its lagged junction plus its bias
    noise_var (ns,) K2;  conduction, losses (r, r) modal W per K, their sum is diag(rates)
    around_u: which inputs of the model are temperatures;  zone_u: which are powers
    around_default (nu,) degC for a channel that nobody has heard of yet
    cell_zone (n_cells,): the zone each cell counts to, by nearest film
    """

    plate: Plate
    reduced: ReducedModel
    blocks: Blocks
    steps: Steps
    deaf_steps: Steps
    H: Array
    noise_var: Array
    conduction: Array
    losses: Array
    zone_u: tuple[int, ...]
    around_u: tuple[int, ...]
    around_names: tuple[str, ...]
    around_default: Array
    prior_field: Array
    cell_zone: tuple[str, ...]

    @property
    def grid(self) -> Grid:
        return self.reduced.model.grid

    def inputs(self, zone_W: Array, around: Array) -> Array:
        """The model's input vector (m,) from zone watts and surrounding temperatures."""
        powers, temperatures = self._places_of_inputs
        u = np.zeros(len(self.reduced.inputs))
        u[powers] = zone_W
        u[temperatures] = around
        return u

    @cached_property
    def _places_of_inputs(self) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
        return np.array(self.zone_u, dtype=np.int64), np.array(self.around_u, dtype=np.int64)

    def steps_for(self, heard: bool) -> Steps:
        """Exact steps; where duty is not on the bus, heater power is far less certain."""
        return self.steps if heard else self.deaf_steps


@dataclass(frozen=True)
class FieldState:
    """What is known of the plate at one instant.

    heater_W (nz,): output of the heaters as called for, after their lag
    called_W (nz,): last called watts;  around (nu,): last known temperatures
    misfit: running mean of NIS per reading, 1 where the model fits
    extra (r,): modal watts of heat that is known to go on, None where there is none
    """

    at_us: int
    belief: Gaussian
    heater_W: Array
    called_W: Array
    around: Array
    misfit: float = 1.0
    extra: Array | None = None


@dataclass(frozen=True)
class Observed:
    """The usable readings of one tick.

    sensors (m,): indices;  degC (m,);  count (m,): readings averaged in each
    share (m,): where in the tick they were taken, 0 its start, 1 its end
    called_W (nz,): mean over the tick;  called_end_W (nz,): at its end
    """

    sensors: tuple[int, ...]
    degC: Array
    count: Array
    share: Array
    called_W: Array
    called_end_W: Array
    around: Array
    duty_heard: bool = True


def bump_fluxes(grid: Grid, nodes: int = BUMPS) -> Array:
    """The coarse mesh as heat: (n_cells, nb) in m2; equal values are one uniform flux."""
    q = hats(grid, nodes) * grid.area[:, None]
    return np.asarray(q[:, q.sum(0) > 1e-3 * grid.area.sum() / nodes])


def nearest_zone(plate: Plate, grid: Grid) -> tuple[str, ...]:
    """The zone that each cell counts to: the one whose film is nearest."""
    if not plate.zones:
        return ("",) * grid.x.size
    points = shapely.points(grid.x, grid.y)
    distance = np.array(
        [
            shapely.distance(shapely.union_all([geometry(s) for s in zone.shapes]), points)
            for zone in plate.zones
        ]
    )
    return tuple(plate.zones[i].name for i in distance.argmin(axis=0))


def _noise(plate: Plate, reference_degC: float, loss_W_m2: float, heard: bool) -> Noise:
    watts = np.array([zone.watts for zone in plate.zones])
    sure = plate.uncertain
    share = ZONE_SHARE * sure.power if heard else 0.5
    of_losses, of_power = np.sqrt(1 - LOCAL_SHARE**2), np.sqrt(1 - ZONE_SHARE**2)
    theta = (sure.k, of_losses * sure.losses, sure.cp, of_power * sure.power, sure.emissivity)
    return Noise(
        power_W=share * watts,
        power_s=POWER_MEMORY_S if heard else POWER_MEMORY_S / 6,
        bump_W_m2=LOCAL_SHARE * sure.losses * loss_W_m2,
        bump_s=BUMP_MEMORY_S,
        bias_K=np.array([bias_sd_K(s, reference_degC) for s in plate.sensors]),
        bias_s=BIAS_MEMORY_S,
        theta=np.array(theta),
        theta_s=THETA_MEMORY_S,
    )


def build_quiet(plate: Plate, reduced: ReducedModel, reference_degC: float) -> Quiet:
    """Everything of the filter that follows from the description alone."""
    model, grid = reduced.model, reduced.model.grid
    zone_u = tuple(i for i, u in enumerate(reduced.inputs) if u.kind is InputKind.POWER)
    around_u = tuple(i for i, u in enumerate(reduced.inputs) if u.kind is InputKind.TEMPERATURE)
    around_default = np.array(
        [u.value if u.value is not None else 22.0 for u in (reduced.inputs[i] for i in around_u)]
    )
    bumps = flux_modes(reduced, bump_fluxes(grid))
    rows = point_rows(reduced, np.array([(s.x_m, s.y_m) for s in plate.sensors]))
    ns = len(plate.sensors)
    blocks = Blocks(reduced.rates.size, len(zone_u), bumps.shape[1], ns, PARAMETERS)
    ambient = float(around_default.mean()) if around_default.size else 22.0
    loss_W_m2 = _typical_loss(reduced, reference_degC, ambient)

    def system(heard: bool) -> Continuous:
        return Continuous(
            blocks=blocks,
            rates=reduced.rates,
            heat_zone=reduced.G[:, zone_u],
            heat_bump=bumps,
            heat_around=reduced.G[:, around_u],
            constant=reduced.g0,
            sensors=rows,
            sensor_lag_s=np.array([max(s.lag_s, LEAST_LAG_S) for s in plate.sensors]),
            heater_lag_s=np.array([max(z.lag_s, LEAST_LAG_S) for z in plate.zones]),
            noise=_noise(plate, reference_degC, loss_W_m2, heard),
        )

    H = np.zeros((ns, blocks.size))
    H[:, blocks.L] = np.eye(ns)
    H[:, blocks.beta] = np.eye(ns)
    spread = conduction_matrix(grid, model.stack.sheet_conductance(model.reference_degC))
    conduction = reduced.V.T @ (spread @ reduced.V)
    return Quiet(
        plate=plate,
        reduced=reduced,
        blocks=blocks,
        steps=Steps(system(True)),
        deaf_steps=Steps(system(False)),
        H=H,
        noise_var=np.array([s.noise_K**2 + s.quantum_K**2 / 12 for s in plate.sensors]),
        conduction=conduction,
        losses=np.diag(reduced.rates) - conduction,
        zone_u=zone_u,
        around_u=around_u,
        around_names=tuple(reduced.inputs[i].name for i in around_u),
        around_default=around_default,
        prior_field=_prior_field(plate, reduced, reference_degC, ambient),
        cell_zone=nearest_zone(plate, grid),
    )


def _typical_loss(reduced: ReducedModel, reference_degC: float, ambient_degC: float) -> float:
    """Mean loss in W/m2 of the plate at the reference temperature."""
    model = reduced.model
    heat = model.K @ np.full(model.capacity.size, max(reference_degC - ambient_degC, 10.0))
    return float(heat.sum() / model.grid.area.sum())


def _prior_field(
    plate: Plate, reduced: ReducedModel, reference_degC: float, ambient_degC: float
) -> Array:
    """Modal covariance (r, r) of a plate about which nothing is known yet.

    Anything between cold and hot all over, plus the pattern of any zone running
    steadily at up to what holds the reference temperature.
    """
    ones = project(reduced, np.ones(reduced.model.capacity.size))
    spread = max(reference_degC - ambient_degC, 20.0)
    cov = np.outer(ones, ones) * spread**2
    for column, zone in zip(reduced.G.T, plate.zones, strict=False):
        quick = np.maximum(reduced.rates, 1 / 3600.0)
        pattern = column / quick * zone.watts * 0.3
        pattern = pattern - ones * (ones @ pattern) / (ones @ ones)
        cov += np.outer(pattern, pattern)
    return cov + np.eye(reduced.rates.size) * float(ones @ ones) * 1e-4


def first_state(quiet: Quiet, at_us: int, seen: Observed) -> FieldState:
    """Where the filter starts: a field as warm as its thermocouples, patterns unknown."""
    k = quiet.blocks
    level = float(np.median(seen.degC)) if seen.degC.size else float(quiet.around_default.mean())
    mean = np.zeros(k.size)
    mean[k.a] = project(quiet.reduced, np.full(quiet.reduced.model.capacity.size, level))
    system = quiet.steps_for(seen.duty_heard).system
    mean[k.L] = system.sensors @ mean[k.a]
    lift = np.zeros((k.size, k.modes))
    lift[k.a] = np.eye(k.modes)
    lift[k.L] = system.sensors
    cov = lift @ quiet.prior_field @ lift.T
    noise = system.noise
    spread = np.zeros(k.size)
    spread[k.d] = noise.power_W
    spread[k.b] = noise.bump_W_m2
    spread[k.L] = 0.5
    spread[k.beta] = noise.bias_K
    spread[k.theta] = noise.theta
    cov[np.diag_indices(k.size)] += spread**2
    prior = Gaussian(mean, cov)
    posterior, _ = _condition(quiet, prior, seen, prior.mean, 1.0)
    return FieldState(at_us, posterior, seen.called_end_W, seen.called_end_W, seen.around)


def sensitivities(
    quiet: Quiet, a: Array, zone_W: Array, bump: Array, around: Array, held_s: float = 2.0
) -> Array:
    """Modal heat (r, PARAMETERS + 1) per unit relative error of conductivity, of losses but
    for radiation, of heat capacity, heater power and emissivity; in the last column the
    remainder: bent losses, k(T) and cp(T).  It will be held for held_s."""
    system, properties = quiet.steps.system, quiet.reduced.properties
    u = quiet.inputs(zone_W, around)
    rest = remainder(quiet.reduced, a, u)
    rays = radiated(quiet.reduced, a, u)
    spread = quiet.conduction @ a
    lost = quiet.losses @ a - system.heat_around @ around - system.constant - rest
    zone_heat = system.heat_zone @ zone_W
    warming = zone_heat + system.heat_bump @ bump - spread - lost
    if properties is None:
        return np.array((-spread, rays - lost, -warming, zone_heat, -rays, rest)).T
    linear = warming - rest
    more = properties.conducted(a, u)
    heat = np.array((-spread - more, rays - lost, zone_heat, -rays, warming - more)).T
    by_k, by_losses, by_power, by_rays, warming = properties.warming(a, heat, held_s).T
    return np.array((by_k, by_losses, -warming, by_power, by_rays, warming - linear)).T


def advance(
    quiet: Quiet, state: FieldState, dt_us: int, seen: Observed
) -> tuple[FieldState, Innovation]:
    """One tick: predict over dt_us, then take in what was read during it."""
    prior, heater_W = forecast_step(quiet, state, dt_us, seen.called_W, seen.around, seen)
    posterior, innovation = _condition(quiet, prior, seen, state.belief.mean, state.misfit)
    moved = FieldState(
        state.at_us + dt_us,
        posterior,
        heater_W,
        seen.called_end_W,
        seen.around,
        _misfit(state.misfit, innovation, dt_us),
        state.extra,
    )
    return moved, innovation


def _misfit(before: float, innovation: Innovation, dt_us: int) -> float:
    """Running mean of NIS per reading over MISFIT_S."""
    if not innovation.rows:
        return before
    keep = float(np.exp(-dt_us / 1e6 / MISFIT_S))
    return keep * before + (1 - keep) * innovation.nis / len(innovation.rows)


def forecast_step(
    quiet: Quiet,
    state: FieldState,
    dt_us: int,
    called_W: Array,
    around: Array,
    seen: Observed | None = None,
) -> tuple[Gaussian, Array]:
    """The belief dt_us later when `called_W` is held: prior and heater outputs."""
    k = quiet.blocks
    step = quiet.steps_for(seen.duty_heard if seen else True).of(dt_us)
    mean = state.belief.mean
    delivered = state.heater_W + mean[k.d]
    S = sensitivities(quiet, mean[k.a], delivered, mean[k.b], around, dt_us / 1e6)
    by_theta = step.modal @ S
    push = (
        step.heater @ state.heater_W
        + step.called @ called_W
        + step.around @ around
        + step.constant
        + by_theta[:, -1]
    )
    if state.extra is not None:
        push = push + step.modal @ state.extra
    couplings = (
        *step.couplings,
        Coupling(k.a, k.theta, by_theta[k.a, :-1]),
        Coupling(k.L, k.theta, by_theta[k.L, :-1]),
    )
    heater_W = step.decay * state.heater_W + (1 - step.decay) * called_W
    return predict_coupled(state.belief, step.keep, couplings, step.Q, push), heater_W


def _condition(
    quiet: Quiet, prior: Gaussian, seen: Observed, before: Array, misfit: float
) -> tuple[Gaussian, Innovation]:
    """Take in the readings; one taken inside the tick is compared with the mean
    expected at its own instant, between the start and the end of the tick."""
    rows = list(seen.sensors)
    H = quiet.H[rows]
    share = seen.share
    expected = share * (H @ prior.mean) + (1 - share) * (H @ before)
    variance = quiet.noise_var[rows] / seen.count
    theta = quiet.blocks.theta
    frozen = theta if misfit > MISFIT_MOST else None
    args = (prior, seen.degC, H, variance, seen.sensors, expected)
    posterior, innovation = update(*args, considered=frozen)
    if frozen is None and innovation.nis > MISFIT_AT_ONCE * len(rows):
        return update(*args, considered=theta)
    return posterior, innovation


def restarted(quiet: Quiet, state: FieldState, at_us: int) -> FieldState:
    """The state carried over a time without readings, its uncertainty grown by it.

    The last watts called for are held; steps are short enough for bent losses.
    """
    while state.at_us < at_us:
        dt_us = min(at_us - state.at_us, LONGEST_STEP_US)
        belief, heater_W = forecast_step(quiet, state, dt_us, state.called_W, state.around)
        state = replace(state, at_us=state.at_us + dt_us, belief=belief, heater_W=heater_W)
    return replace(state, at_us=at_us)


def is_another_plate(innovation: Innovation) -> bool:
    """Do the readings tell of a field that nothing carried over explains?"""
    return bool(innovation.rows) and innovation.nis > FORGET_NIS * len(innovation.rows)

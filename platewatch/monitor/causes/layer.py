"""The bank as one piece: watch every tick, explain when something does not fit."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from platewatch.monitor.causes.bank_model import Model, State, build_model
from platewatch.monitor.causes.deaf import (
    LEAD_TICKS,
    Deaf,
    Past,
    listen_without,
    load_against_loose,
    view_without,
)
from platewatch.monitor.causes.evidence import (
    begin,
    findings,
    observe,
    strongest,
)
from platewatch.monitor.causes.plain import Plain, verdict
from platewatch.monitor.causes.refine import FAMILY_OF, Fit
from platewatch.monitor.causes.second_look import apart, second_look
from platewatch.monitor.causes.settled import (
    HEATING,
    adopt,
    left_out,
    left_out_but,
    mean_square_mode,
    review,
    without,
)
from platewatch.monitor.causes.views import View, build_views
from platewatch.monitor.causes.weighing import (
    RELIABILITY,
    SUSPECT_CAUSES,
    open_pairs,
    says_load,
    weigh,
)
from platewatch.monitor.estimator import (
    FieldState,
    Observed,
    Quiet,
    first_state,
    sensitivities,
)
from platewatch.types import Array, Gaussian, Tick

WARM_UP_US = 120_000_000  # the quiet filter finds its feet before the bank listens
AFTERWARDS_US = 300_000_000  # the filter takes in a settled cause before the bank listens again
SPREADS_US = 900_000_000  # longer where it left heat in the plate: that takes its time to spread
UNLISTENED_US = 60_000_000  # and a thermocouple that is left out, if it lied by itself
SUSPECT_LOG_ODDS = -2.0  # below this nothing is looked at twice
STRIKING = 9.0  # nats of the best single hypothesis, below which none is looked at
CREDIBLE = 0.01  # the alarm floor: causes above it count
SHOWN = 5  # causes carried as views
ANSWERS = {("answer", "yes"): 1.0, ("answer", "no"): -1.0, ("answer", "withdraw"): 0.0}
SETTLE_S = 900.0

__all__ = ["Model", "State", "attend", "build_model", "explain", "settle", "take_evidence"]


def take_evidence(model: Model, state: State, tick: Tick) -> State:
    """A person's answer or a load event: evidence for or against a load, not a verdict."""
    answer = state.answer
    for action in tick.actions:
        answer = ANSWERS.get((action.verb, action.subject), answer)
    for event in tick.events:
        if event.event == "load-on":
            answer = 1.0
    return replace(state, answer=answer)


def attend(model: Model, state: State, before: FieldState, dt_us: int, seen: Observed) -> State:
    """One tick.  before: the quiet filter's state at its start; seen: its readings."""
    if before.at_us < state.idle_until_us:
        return state
    if dt_us != model.tick_us:
        return State(state.sensors, answer=state.answer, settled=state.settled)
    quiet = model.quiet
    sentinel, bank = model.of(state.sensors)
    n = len(sentinel.F)
    watch = state.watch or begin(bank, before.belief.mean[:n], model.tick_s)
    push = _push(quiet, watch.mean, before, dt_us, seen)
    z = np.full(len(quiet.plate.sensors), np.nan)
    z[list(seen.sensors)] = seen.degC
    z = z[list(state.sensors)]
    after, v = observe(sentinel, bank, watch, push, z, model.tick_s)
    kept = v[None] if state.seen is None else np.vstack((state.seen[-bank.ages + 1 :], v))
    past = (*state.past[-bank.ages - LEAD_TICKS :], Past(watch.mean, push, z))
    return replace(state, watch=after, seen=kept, past=past, at_us=before.at_us + dt_us)


def _push(quiet: Quiet, mean: Array, before: FieldState, dt_us: int, seen: Observed) -> Array:
    """(n,) what drives the observer over this tick, theta taken from the quiet filter."""
    k = quiet.blocks
    step = quiet.steps_for(seen.duty_heard).of(dt_us)
    S = sensitivities(quiet, mean[k.a], before.heater_W + mean[k.d], mean[k.b], seen.around)
    theta = before.belief.mean[k.theta]
    push = (
        step.heater @ before.heater_W
        + step.called @ seen.called_W
        + step.around @ seen.around
        + step.constant
        + step.modal @ (S[:, -1] + S[:, : theta.size] @ theta)
    )
    if before.extra is not None:
        push = push + step.modal @ before.extra
    return np.asarray(push[: k.theta.start])


def explain(model: Model, state: State, field_state: FieldState, times_s: Array) -> State:
    """Say which causes are credible now, with the plate as each sees it."""
    if state.watch is None or state.seen is None:
        return replace(state, p_none=1.0, views=())
    sentinel, bank = model.of(state.sensors)
    if strongest(bank, state.watch, model.tick_s) < STRIKING:
        return replace(state, p_none=1.0, views=())
    found, _ = findings(bank, state.watch, model.groups(state.sensors), model.tick_s)
    if not found or found[0].log_odds < SUSPECT_LOG_ODDS:
        return replace(state, p_none=1.0, views=())
    fits = second_look(model, bank, found, state)
    fits = apart(fits, bank)
    pairs = open_pairs(fits, bank)
    said = state.answer * np.log(RELIABILITY / (1 - RELIABILITY)) / 2
    fits = [replace(f, log_prior=f.log_prior + said * says_load(f)) for f in fits]
    open_ones = [_without(model, state, fits, i, j) for i, j in pairs]
    probabilities, p_none = weigh(
        fits, [(i, j, d.odds) for (i, j), d in zip(pairs, open_ones, strict=True)]
    )
    order = np.argsort(-probabilities)[:SHOWN]
    kept = [i for i in order if probabilities[i] >= CREDIBLE]
    views = build_views(
        model.quiet,
        sentinel,
        model.fuller,
        bank,
        state.watch.mean,
        field_state,
        [fits[i] for i in kept],
        [float(probabilities[i]) for i in kept],
        times_s,
    )
    views = tuple(_deafened(model, v, open_ones, field_state) for v in views)
    return replace(state, p_none=p_none, views=views)


@dataclass(frozen=True)
class _Open:
    """An open pair: odds of the load against the loose thermocouple, from the others."""

    sensor: int
    deaf: Deaf
    odds: float


def _without(model: Model, state: State, fits: list[Fit], load: int, loose: int) -> _Open:
    """Hear the others alone on whether there is a load or a loose thermocouple."""
    plate = model.quiet.plate
    sensor = [s.name for s in plate.sensors].index(fits[loose].subject)
    sentinel, bank = model.without(state.sensors, sensor)
    age = max(fits[load].age, fits[loose].age)
    deaf = listen_without(model.quiet, sentinel, state.past, state.sensors, sensor, age)
    odds = load_against_loose(deaf, bank, fits[load], model.of(state.sensors)[1])
    return _Open(sensor, deaf, odds)


def _deafened(
    model: Model, view: View, open_ones: Sequence[_Open], field_state: FieldState
) -> View:
    """A view in which a thermocouple is loose, as the others alone see the plate."""
    for each in open_ones:
        name = model.quiet.plate.sensors[each.sensor].name
        if len(view.parts) == 1 and view.cause in SUSPECT_CAUSES and view.subject == name:
            return view_without(model.quiet, view, each.deaf, field_state, each.sensor)
    return view


def settle(model: Model, state: State, field_state: FieldState) -> tuple[State, FieldState]:
    """Before the leading cause falls out of the window, make it part of the picture."""
    if not state.views:
        return state, field_state
    if state.at_us - state.views[0].onset_us < SETTLE_S * 1e6:
        return state, field_state
    moved, settled = adopt(field_state, state.views[0], model.quiet)
    everyone = range(len(model.quiet.plate.sensors))
    all_settled = (*state.settled, settled)
    ignored = left_out(all_settled, model.quiet)
    sensors = tuple(i for i in everyone if i not in ignored)
    heated = any(FAMILY_OF[cause] in HEATING for cause, _ in state.views[0].parts)
    until_us = field_state.at_us + (SPREADS_US if heated else AFTERWARDS_US)
    return State(sensors, settled=all_settled, idle_until_us=until_us), moved


def leave_out_plain(
    model: Model, state: State, field_state: FieldState, seen: Observed, plain: Plain, young: bool
) -> tuple[State, FieldState]:
    """Leave out thermocouples whose reading shows its fault by itself.

    The field is made from the others: from before the fault where that is remembered,
    from their readings alone where the plate has hardly been watched (young).
    """
    known = {s.sensor for s in state.settled}
    names = [s.name for s in model.quiet.plate.sensors]
    new = [i for i in plain.found if names[i] not in known]
    if not new or len(known) + len(new) >= len(names):
        return state, field_state
    since = {i: int(plain.still.since_us[i]) for i in new}
    verdicts = [verdict(model.quiet, field_state, plain.found[i], i, since[i]) for i in new]
    settled = (*state.settled, *verdicts)
    ignored = left_out(settled, model.quiet)
    sensors = tuple(i for i in range(len(names)) if i not in ignored)
    moved = _by_the_others(model, state, field_state, seen, sensors, new[0], young)
    until_us = field_state.at_us + UNLISTENED_US
    return State(sensors, answer=state.answer, settled=settled, idle_until_us=until_us), moved


def _by_the_others(
    model: Model,
    state: State,
    field: FieldState,
    seen: Observed,
    sensors: tuple[int, ...],
    liar: int,
    young: bool,
) -> FieldState:
    """The field without what a lying thermocouple has done to it."""
    quiet, k = model.quiet, model.quiet.blocks
    if young:
        return first_state(quiet, field.at_us, without(seen, left_out_but(quiet, sensors)))
    cov = field.belief.cov.copy()
    cov[k.a, k.a] += mean_square_mode(quiet) * np.eye(k.modes)
    mean = field.belief.mean
    if state.past and liar in state.sensors and set(sensors) <= set(state.sensors):
        sentinel, _ = model.of(sensors)
        deaf = listen_without(quiet, sentinel, state.past, state.sensors, liar, len(state.past))
        n = len(sentinel.F)
        mean = np.concatenate((deaf.mean, mean[k.theta]))
        cov = np.zeros_like(cov)
        cov[:n, :n] = sentinel.cov
        cov[k.theta, k.theta] = field.belief.cov[k.theta, k.theta]
    return replace(field, belief=Gaussian(mean, cov), misfit=1.0)


def review_settled(
    model: Model,
    state: State,
    field_state: FieldState,
    seen: Observed,
    showing: frozenset[str] = frozenset(),
) -> State:
    """Drop settled causes that are over; a thermocouple that returns is listened to again.

    showing: thermocouples whose reading shows its fault by itself
    """
    if not state.settled:
        return state
    kept = review(state.settled, model.quiet, field_state, seen, showing)
    ignored = left_out(kept, model.quiet)
    sensors = tuple(i for i in range(len(model.quiet.plate.sensors)) if i not in ignored)
    if sensors != state.sensors:
        until_us = field_state.at_us + AFTERWARDS_US
        return State(sensors, settled=kept, idle_until_us=until_us)
    return replace(state, settled=kept)

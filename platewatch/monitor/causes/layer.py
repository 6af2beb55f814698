"""The bank as one piece: watch every tick, explain when something does not fit."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field, replace

import numpy as np

from platewatch.monitor.causes.catalogue import Cause, Family, patterns, prior_rate
from platewatch.monitor.causes.evidence import (
    DAY_S,
    Finding,
    Groups,
    Watch,
    begin,
    findings,
    groups_of,
    observe,
    spacing_ticks,
    strongest,
)
from platewatch.monitor.causes.fuller import Fuller, build_fuller
from platewatch.monitor.causes.refine import (
    FAMILY_OF,
    NEAR,
    Evidence,
    Fit,
    columns_of,
    fit,
    reads_low,
)
from platewatch.monitor.causes.sentinel import Sentinel, build_sentinel
from platewatch.monitor.causes.settled import Settled, adopt, left_out, review
from platewatch.monitor.causes.signatures import Bank, build_bank
from platewatch.monitor.causes.views import View, build_views
from platewatch.monitor.estimator import FieldState, Observed, Quiet, sensitivities
from platewatch.monitor.options import CauseOptions
from platewatch.thermal.grid import point_row
from platewatch.types import Array, Tick

WARM_UP_US = 120_000_000  # the quiet filter finds its feet before the bank listens
SUSPECT_LOG_ODDS = -2.0  # below this nothing is looked at twice
STRIKING = 9.0  # nats of the best single hypothesis, below which none is looked at
LOOKED_AT = 8  # findings of the bank that get a second look
CREDIBLE = 0.01  # the alarm floor: causes above it count
SHOWN = 5  # causes carried as views
# Two causes together are tried where the best single one leaves this much unexplained.
LEFT_SHARE = 0.03
LEFT_LEAST = 60.0
DOUBTFUL = 100.0  # nats of evidence above which misfit, not noise, decides between causes
OPEN_FLOOR = 0.1
RELIABILITY = 0.95  # of an answer
ANSWERS = {("answer", "yes"): 1.0, ("answer", "no"): -1.0, ("answer", "withdraw"): 0.0}
SETTLE_S = 900.0
SETTLE_BEFORE = 15  # ticks before the window's end
SUSPECT_CAUSES = (Cause.SENSOR_LOOSE, Cause.SENSOR_DRIFT)
Parts = tuple[tuple[Cause, str], ...]


@dataclass(frozen=True)
class Model:
    """What never changes: the observer and the bank by set of sensors."""

    quiet: Quiet
    tick_us: int
    options: CauseOptions
    fuller: Fuller
    _built: dict[tuple[int, ...], tuple[Sentinel, Bank]] = field(default_factory=dict)
    _groups: dict[tuple[int, ...], Groups] = field(default_factory=dict)

    @property
    def tick_s(self) -> float:
        return self.tick_us / 1e6

    def of(self, sensors: tuple[int, ...]) -> tuple[Sentinel, Bank]:
        """Observer and bank of one set of sensors, built once."""
        if sensors not in self._built:
            sentinel = build_sentinel(self.quiet, self.tick_us, sensors)
            bank = build_bank(self.quiet, sentinel, self.fuller, patterns(self.quiet), self.tick_us)
            self._built[sensors] = (sentinel, bank)
        return self._built[sensors]

    def groups(self, sensors: tuple[int, ...]) -> Groups:
        """Hypotheses by cause and subject, with their priors."""
        if sensors not in self._groups:
            self._groups[sensors] = groups_of(self.of(sensors)[1], self.options)
        return self._groups[sensors]


def build_model(quiet: Quiet, tick_us: int, options: CauseOptions) -> Model:
    """The layer of one plate; observer and bank are built when first asked for."""
    rows = np.array([point_row(quiet.grid, s.x_m, s.y_m) for s in quiet.plate.sensors])
    return Model(quiet, tick_us, options, build_fuller(quiet, rows))


@dataclass(frozen=True)
class State:
    """What the bank carries along.

    sensors: those it listens to;  seen (ticks, m): whitened innovations, newest last
    p_none: probability that nothing is the matter;  views: every credible cause
    answer: +1 a load was put on, -1 none was, 0 nobody said
    """

    sensors: tuple[int, ...]
    watch: Watch | None = None
    seen: Array | None = None
    p_none: float = 1.0
    views: tuple[View, ...] = ()
    answer: float = 0.0
    at_us: int = 0
    settled: tuple[Settled, ...] = ()


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
    return replace(state, watch=after, seen=kept, at_us=before.at_us + dt_us)


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
    fits = _apart(fits, bank)
    pairs = open_pairs(fits, bank, round(SETTLE_S / model.tick_s))
    said = state.answer * np.log(RELIABILITY / (1 - RELIABILITY)) / 2
    fits = [replace(f, log_prior=f.log_prior + said * _says_load(f)) for f in fits]
    probabilities, p_none = weigh(fits, pairs)
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
    return replace(state, p_none=p_none, views=views)


def settle(model: Model, state: State, field_state: FieldState) -> tuple[State, FieldState]:
    """Before the leading cause falls out of the window, make it part of the picture."""
    if not state.views:
        return state, field_state
    _, bank = model.of(state.sensors)
    age = round((state.at_us - state.views[0].onset_us) / model.tick_us)
    if age < bank.ages - SETTLE_BEFORE:
        return state, field_state
    moved, settled = adopt(field_state, state.views[0], model.quiet)
    everyone = range(len(model.quiet.plate.sensors))
    all_settled = (*state.settled, settled)
    ignored = left_out(all_settled, model.quiet)
    sensors = tuple(i for i in everyone if i not in ignored)
    return State(sensors, settled=all_settled), moved


def review_settled(model: Model, state: State, field_state: FieldState, seen: Observed) -> State:
    """Drop settled causes that are over; a thermocouple that returns is listened to again."""
    if not state.settled:
        return state
    kept = review(state.settled, model.quiet, field_state, seen)
    ignored = left_out(kept, model.quiet)
    sensors = tuple(i for i in range(len(model.quiet.plate.sensors)) if i not in ignored)
    if sensors != state.sensors:
        return State(sensors, settled=kept)
    return replace(state, settled=kept)


def _says_load(f: Fit) -> float:
    """+1 for a load alone, -1 for a thermocouple fault alone, else 0."""
    if len(f.parts) > 1:
        return 0.0
    if f.cause is Cause.COLD_LOAD:
        return 1.0
    return -1.0 if FAMILY_OF[f.cause] is Family.SENSOR else 0.0


def second_look(model: Model, bank: Bank, found: list[Finding], state: State) -> list[Fit]:
    """The best fits of the leading findings, and of two causes together where one is not
    enough; at most one fit for each cause and subject.

    What was credible a moment ago is looked at again with its own onset, so that a cause
    does not come and go with the onsets that happen to be tried.
    """
    assert state.seen is not None
    seen = state.seen
    leading = _varied(sorted(found, key=lambda f: -f.log_odds))[:LOOKED_AT]
    top = leading[0]
    longest = min(len(seen), bank.ages) - 1
    fits: dict[Parts, Fit] = {}
    evidence = Evidence(bank, seen)

    def look(finding: Finding, age: int) -> None:
        if 0 <= age <= longest:
            columns = columns_of(bank, finding.cause, finding.subject, finding.x_m, finding.y_m)
            parts = [(finding.cause, finding.subject)]
            _keep(bank, fits, fit(evidence, parts, columns, age, _log_prior(model, finding.cause)))

    for finding in leading:
        look(finding, top.age)
    for finding in leading[:3]:
        if finding.age != top.age:
            look(finding, finding.age)
    for view in state.views:
        age = round((state.at_us - view.onset_us) / model.tick_us)
        if 0 <= age <= longest:
            columns = np.concatenate(
                [columns_of(bank, c, s, view.x_m, view.y_m) for c, s in view.parts]
            )
            prior = sum(_log_prior(model, c) for c, _ in view.parts)
            _keep(bank, fits, fit(evidence, list(view.parts), columns, age, prior))
    best = max(fits.values(), key=lambda f: f.evidence, default=None)
    if best is not None:
        spacing = spacing_ticks(model.tick_s)
        winner = next((f for f in leading if (f.cause, f.subject) == best.parts[0]), None)
        for age in (best.age - spacing, best.age + spacing):
            if winner is not None and len(best.parts) == 1:
                look(winner, age)
        _pairs(fits, max(fits.values(), key=lambda f: f.evidence), evidence)
    return list(fits.values())


def _apart(fits: list[Fit], bank: Bank) -> list[Fit]:
    """Of several fits of one source cause at one place only the best."""
    kept: list[Fit] = []
    for f in sorted(fits, key=lambda f: -f.evidence):
        same = [
            g
            for g in kept
            if [c for c, _ in g.parts] == [c for c, _ in f.parts]
            and FAMILY_OF[f.cause] is Family.SOURCE
            and np.hypot(g.x_m - f.x_m, g.y_m - f.y_m) <= 2 * NEAR * bank.scale_m
        ]
        if not same:
            kept.append(f)
    return kept


def _varied(leading: list[Finding]) -> list[Finding]:
    """The leaders, but no more than two of one family at a time come first."""
    count: dict[Family, int] = {}
    first: list[Finding] = []
    later: list[Finding] = []
    for finding in leading:
        family = FAMILY_OF[finding.cause]
        count[family] = count.get(family, 0) + 1
        (first if count[family] <= 2 else later).append(finding)
    return first + later


def _keep(bank: Bank, fits: dict[Parts, Fit], new: Fit) -> None:
    if not reads_low(bank, new):
        return
    old = fits.get(new.parts)
    if old is None or new.evidence > old.evidence:
        fits[new.parts] = new


def _log_prior(model: Model, cause: Cause) -> float:
    """Per onset tried, for one subject of this cause."""
    plate = model.quiet.plate
    subjects = {
        Family.ZONE: len(plate.zones),
        Family.SENSOR: len(plate.sensors),
        Family.SOURCE: len(plate.zones) or 4,
        Family.LOSS: 5,
        Family.BLOCK: len({s.junction_block for s in plate.sensors}),
    }[FAMILY_OF[cause]]
    spacing_s = spacing_ticks(model.tick_s) * model.tick_s
    rate = prior_rate(model.options, cause)
    return float(np.log(max(rate, 1e-12) * spacing_s / DAY_S / max(subjects, 1)))


def _pairs(fits: dict[Parts, Fit], best: Fit, evidence: Evidence) -> None:
    """A sensor fault together with a physical cause, where one alone leaves too much."""
    left = evidence.available(best.age) - best.evidence
    if left < max(LEFT_LEAST, LEFT_SHARE * best.evidence):
        return
    single = sorted(fits.values(), key=lambda f: -f.evidence)
    sensors = [f for f in single if FAMILY_OF[f.cause] is Family.SENSOR and len(f.parts) == 1][:2]
    others = [f for f in single if FAMILY_OF[f.cause] is not Family.SENSOR and len(f.parts) == 1][
        :2
    ]
    for s in sensors:
        for o in others:
            columns = np.concatenate((o.columns, s.columns))
            prior = s.log_prior + o.log_prior
            both = fit(evidence, [*o.parts, *s.parts], columns, best.age, prior)
            _keep(evidence.bank, fits, both)


def weigh(fits: list[Fit], pairs: Sequence[tuple[int, int]] = ()) -> tuple[Array, float]:
    """Probabilities of the fits and of none.

    That something is the matter follows from the evidence as it is; which cause it is,
    from its differences, divided by 1 + evidence / DOUBTFUL: where the response is huge, a
    misfit that all share says little about which.  pairs: fits that stay open, neither
    below OPEN_FLOOR of the two.
    """
    if not fits:
        return np.zeros(0), 1.0
    evidence = np.array([f.evidence for f in fits])
    prior = np.array([f.log_prior for f in fits])
    logs = evidence + prior
    any_cause = 1 / (1 + np.exp(-np.clip(logs.max(), -50, 50)))
    shared = evidence.max()
    among = np.exp((evidence - shared) / (1 + max(shared, 0.0) / DOUBTFUL) + prior - prior.max())
    among /= among.sum()
    for i, j in pairs:
        both = among[i] + among[j]
        among[i] = np.clip(among[i], OPEN_FLOOR * both, (1 - OPEN_FLOOR) * both)
        among[j] = both - among[i]
    return np.asarray(any_cause * among), float(1 - any_cause)


def open_pairs(fits: list[Fit], bank: Bank, settle_ticks: int) -> list[tuple[int, int]]:
    """A load near a thermocouple and that thermocouple loose: not to be told apart early."""
    found = []
    for i, load in enumerate(fits):
        for j, loose in enumerate(fits):
            if load.parts[0][0] is not Cause.COLD_LOAD or len(load.parts) > 1:
                continue
            if loose.parts[0][0] not in SUSPECT_CAUSES or len(loose.parts) > 1:
                continue
            at = bank.patterns[bank.column_pattern[loose.columns[0]]]
            near = np.hypot(at.x_m - load.x_m, at.y_m - load.y_m) <= NEAR * bank.scale_m
            if near and max(load.age, loose.age) < settle_ticks:
                found.append((i, j))
    return found

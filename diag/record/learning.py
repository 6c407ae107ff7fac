"""Rates, strengths and reliabilities from closed cases, as an overlay that can be reviewed.

- A rate per hour with `x` events in `T` hours: Gamma(a, b) becomes Gamma(a + x, b + T). A
  chance per event with `n` events: Beta(a, b) becomes Beta(a + x, b + n - x).
- A case exists because somebody complained, and P(fault | complaint) goes with
  rate · exposure · P(complaint | fault). Exposure is therefore counted times
  `complaint_chance`, the chance that the cause shows on the engine's own indications.
- The hours of the fleet stand in no log. Where nobody gives them, they are set so that as
  many causes are expected in all as were found: then only the proportions are learned.
- The strengths of links and the reliability of checks meet in conditions that nobody sees.
  They are found together by expectation and maximisation (Dempster, Laird & Rubin 1977) with
  Beta and Dirichlet pseudo-counts. A chance of 0 or 1 is structure and stays.
- Links to conditions that an indication reads, or that a report speaks of, keep their
  strength: without the symptom there would have been no case, so cases overstate it.
- The share of unlisted causes is not learned: such cases end unconfirmed.

The pseudo-counts say how much the circuit's own number is worth; they are judgement.
"""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from diag.belief.evidence import outcome_table
from diag.belief.frame import Array, Frame, Indices, signal_matrix, state_chances
from diag.circuit.model import Circuit
from diag.errors import UnknownName, UsageError
from diag.record.harvest import Harvest, LeftOut, Look, Scene

LOOKS = 20.0
"""Looks that a chance of the circuit counts as much as. Judgement."""
ENOUGH = 1.0
"""Looks below which a chance is not written: it would still be the circuit's own number."""
MOST_ITERATIONS = 500
SETTLED = 1e-5
"""Largest change of a chance in one iteration at which the iteration stops."""


@dataclass(frozen=True, slots=True)
class Weights:
    """What the circuit's own numbers are worth, as pseudo-counts. Judgement."""

    events: float = 1.0
    """A rate counts as much as so many events seen."""
    looks: float = LOOKS
    """A chance counts as much as so many looks."""


@dataclass(frozen=True, slots=True)
class Fleet:
    """What the logs were gathered from; what is not known is left open."""

    hours: float | None = None
    """Flying hours of all engines together."""
    events: Mapping[str, float] = field(default_factory=dict)
    """Events such as servicings, by name; without them, the circuit's own ratio to hours."""


@dataclass(frozen=True, slots=True)
class Number:
    """One number before and after.

    Attributes:
        kind: `rate`, `check` or `link`.
        name: mode, observation, or `MODE -> NODE`.
        item: which number of it: `per_million_hours`, `per_event`, `detects`, `false_alarm`,
            or the state that a link leads to.
        counted: events, or expected looks that came out so.
        out_of: hours or events of exposure, or expected looks in all.
        prior: parameters of the Gamma (events, hours) or Beta before; Dirichlet as Beta
            against all other states.
        posterior: the same after.
    """

    kind: str
    name: str
    item: str
    before: float
    after: float
    counted: float
    out_of: float
    prior: tuple[float, float]
    posterior: tuple[float, float]

    @property
    def moved(self) -> float:
        """How far it moved: log ratio of rates, log odds ratio of chances, without a sign."""
        if self.kind == "rate":
            return abs(float(np.log(self.after / self.before)))
        return abs(_logit(self.after) - _logit(self.before))

    @property
    def note(self) -> str:
        """Counts, prior and posterior in words."""
        gamma = self.item == "per_million_hours"
        family = "Gamma" if gamma else "Beta"
        unit = " h" if gamma else ""
        pairs = (self.prior, self.posterior)
        told = " -> ".join(f"{family}({a:.6g}, {b:.6g}{unit})" for a, b in pairs)
        return (
            f"{self.item}: {self.counted:.4g} in {self.out_of:.6g}{unit}; {told}; "
            f"{self.before:.4g} -> {self.after:.4g}"
        )


def _logit(chance: float) -> float:
    inner = min(max(chance, 1e-9), 1.0 - 1e-9)
    return float(np.log(inner / (1.0 - inner)))


@dataclass(frozen=True, slots=True)
class Learned:
    """What the logs of one circuit say.

    Attributes:
        numbers: every number that was learned, the furthest moved first.
        hours: exposure in flying hours, given or set as described above.
    """

    circuit: str
    cases: int
    left_out: tuple[LeftOut, ...]
    numbers: tuple[Number, ...]
    hours: float
    hours_given: bool
    iterations: int
    counted: tuple[str, ...]


def learn(
    circuit: Circuit, harvest: Harvest, fleet: Fleet | None = None, weights: Weights | None = None
) -> Learned:
    """Learns from what `gather` found.

    Raises:
        UsageError: no case counts, or the exposure is not a positive number.
        UnknownName: an event of the fleet that the circuit does not count.
    """
    if not harvest.cases:
        raise UsageError("no log counts: none is closed with a confirmed and verified cause")
    fleet, weights = fleet or Fleet(), weights or Weights()
    hours, rates = learned_rates(circuit, harvest.arisen, fleet, weights)
    em = Em(circuit, harvest.scenes, harvest.complained, weights.looks)
    iterations = em.run()
    numbers = [*rates, *em.numbers()]
    numbers.sort(key=lambda n: (-round(n.moved, 9), n.kind, n.name, n.item))
    return Learned(
        circuit.id,
        harvest.cases,
        tuple(harvest.left_out),
        tuple(numbers),
        hours,
        fleet.hours is not None,
        iterations,
        tuple(harvest.counted),
    )


# -- rates ------------------------------------------------------------------------------


def complaint_chance(circuit: Circuit) -> dict[str, float]:
    """P(at least one of the engine's own indications reads abnormal | the mode, alone).

    One look at each indication at each of its points, false alarms included.
    """
    frame = Frame(circuit)
    by_node: dict[str, list[tuple[Indices, Array]]] = defaultdict(list)
    for observable in circuit.observables.values():
        if observable.record.kind == "indication":
            passed = frame.through(observable)
            silent = outcome_table(observable)[:, observable.outcomes.index(observable.normal)]
            by_node[observable.node].append((passed.digit, passed.matrices @ silent))
    quiet = np.ones(frame.none + 1)
    for name, looks in by_node.items():
        side = frame.sides[name]
        column = frame.leak * frame.cumulative
        states = state_chances(column[:, side.down], column[:, side.up], side.normal)
        for digit, silent in looks:
            states = states * silent[digit]
        quiet *= states.sum(axis=1)
    return {ref: float(1.0 - quiet[frame.index[ref]]) for ref in circuit.modes}


def learned_rates(
    circuit: Circuit, arisen: Mapping[str, int], fleet: Fleet, weights: Weights
) -> tuple[float, list[Number]]:
    """Hours of exposure, and the rate of every mode.

    Raises:
        UsageError, UnknownName: as `learn`.
    """
    caught = complaint_chance(circuit)
    _check_fleet(circuit, fleet)
    hours = fleet.hours if fleet.hours is not None else _balanced_hours(circuit, arisen, caught)
    exposure = circuit.exposure
    numbers = []
    for ref, mode in circuit.modes.items():
        x = float(arisen.get(ref, 0))
        rate = mode.rate
        if rate.per_million_hours is not None:
            numbers.append(_hourly(ref, rate.per_million_hours, x, hours * caught[ref], weights))
        elif rate.per_event is not None and rate.event is not None and 0.0 < rate.per_event < 1.0:
            usual = exposure.events.get(rate.event, 0.0) * hours / exposure.hours
            events = fleet.events.get(rate.event, usual)
            numbers.append(_eventual(ref, rate.per_event, x, events * caught[ref], weights))
    return hours, [number for number in numbers if number.out_of > 0.0]


def _check_fleet(circuit: Circuit, fleet: Fleet) -> None:
    given = [*fleet.events.values(), *([] if fleet.hours is None else [fleet.hours])]
    if any(not 0.0 < number < 1e12 for number in given):
        raise UsageError("hours and events of the fleet must be positive numbers")
    for name in fleet.events:
        if name not in circuit.exposure.events:
            raise UnknownName("event", name, circuit.exposure.events)


def _balanced_hours(
    circuit: Circuit, arisen: Mapping[str, int], caught: Mapping[str, float]
) -> float:
    """Hours in which as many causes are expected to be caught as were."""
    exposure = circuit.exposure
    expected = 0.0
    for ref, mode in circuit.modes.items():
        if mode.rate.per_million_hours is not None:
            expected += mode.rate.per_million_hours * 1e-6 * caught[ref]
        elif mode.rate.per_event is not None and mode.rate.event is not None:
            often = exposure.events.get(mode.rate.event, 0.0) / exposure.hours
            expected += mode.rate.per_event * often * caught[ref]
    return sum(arisen.values()) / expected if expected > 0.0 else 0.0


def _hourly(ref: str, before: float, x: float, hours: float, weights: Weights) -> Number:
    a, b = weights.events, weights.events / (before * 1e-6)
    after = (a + x) / (b + hours) * 1e6
    posterior = (a + x, b + hours)
    return Number("rate", ref, "per_million_hours", before, after, x, hours, (a, b), posterior)


def _eventual(ref: str, before: float, x: float, events: float, weights: Weights) -> Number:
    a, b = weights.events, weights.events * (1.0 - before) / before
    # The complaint chance makes the count of events an expectation, which `x` may exceed.
    other = b + max(events - x, 0.0)
    after = (a + x) / (a + x + other)
    return Number("rate", ref, "per_event", before, after, x, events, (a, b), (a + x, other))


# -- strengths and reliabilities ----------------------------------------------------------


class Em:
    """Expectation and maximisation over the scenes of all cases.

    Attributes:
        links: (mode, node, side) to (levels + 1,) chances that the mode alone brings that side
            of the node to each level, 0 first; side 0 is down, 1 is up.
        checks: observation to its chances (detects, false_alarm).
        tallies: expected counts of the last iteration, as `links`; for checks
            (detected, abnormal looks, alarms, normal looks).
        log_likelihood: of the scenes, before the last iteration.
    """

    def __init__(
        self,
        circuit: Circuit,
        scenes: Mapping[Scene, int],
        complained: Iterable[str] = (),
        weight: float = LOOKS,
        start: Mapping[str, tuple[float, float]] | None = None,
    ) -> None:
        self.circuit, self.weight = circuit, weight
        indicated = (o for o in circuit.observables.values() if o.record.kind == "indication")
        self.selected = {o.node for o in indicated} | set(complained)
        self.links: dict[tuple[str, str, int], Array] = {}
        records = {o.record.id: o.record for o in circuit.observables.values()}
        self.checks = {name: (r.detects, r.false_alarm) for name, r in records.items()}
        self.groups = self._grouped(scenes)
        self.given = (dict(self.links), dict(self.checks))
        self.checks |= dict(start or {})
        self.tallies: dict[tuple[str, str, int], Array] = {}
        self.check_tallies: dict[str, Array] = {}
        self.log_likelihood = 0.0

    def _grouped(self, scenes: Mapping[Scene, int]) -> list[_Group]:
        by_kind: dict[tuple[str, tuple[str, ...]], list[tuple[Scene, int]]] = defaultdict(list)
        for scene, count in scenes.items():
            by_kind[scene.node, scene.causes].append((scene, count))
            for ref in scene.causes:
                for side in (0, 1):
                    key = (ref, scene.node, side)
                    if key not in self.links:
                        self.links[key] = _levels(self.circuit, *key)
        return [_Group(self.circuit, *kind, members) for kind, members in sorted(by_kind.items())]

    def run(self, most: int = MOST_ITERATIONS, settled: float = SETTLED) -> int:
        """Iterates until no chance changes by more than `settled`; gives the iterations."""
        for count in range(1, most + 1):
            if self.iterate() <= settled:
                return count
        return most

    def iterate(self) -> float:
        """One expectation and one maximisation; gives the largest change of a chance."""
        self.tallies = {key: np.zeros_like(p) for key, p in self.links.items()}
        self.check_tallies = {name: np.zeros(4) for name in self.checks}
        self.log_likelihood = 0.0
        for group in self.groups:
            self.log_likelihood += group.expect(self)
        return max(self._links_anew(), self._checks_anew(), 0.0)

    def _links_anew(self) -> float:
        largest = 0.0
        for key, tally in self.tallies.items():
            given = self.given[0][key]
            if key[1] in self.selected or len(given) == 1:
                continue
            new = _revised(given, tally, self.weight)
            largest = max(largest, float(np.abs(new - self.links[key]).max()))
            self.links[key] = new
        return largest

    def _checks_anew(self) -> float:
        largest = 0.0
        for name, (hits, abnormal, alarms, normal) in self.check_tallies.items():
            detects, false_alarm = self.given[1][name]
            new = (
                self._chance_anew(detects, hits, abnormal),
                self._chance_anew(false_alarm, alarms, normal),
            )
            old = self.checks[name]
            largest = max(largest, abs(new[0] - old[0]), abs(new[1] - old[1]))
            self.checks[name] = new
        return largest

    def _chance_anew(self, given: float, count: float, total: float) -> float:
        pair, tally = np.array([1.0 - given, given]), np.array([total - count, count])
        return float(_revised(pair, tally, self.weight)[1])

    def numbers(self) -> list[Number]:
        """The chances that enough looks speak of."""
        return [*self._check_numbers(), *self._link_numbers()]

    def _check_numbers(self) -> Iterable[Number]:
        for name, (hits, abnormal, alarms, normal) in self.check_tallies.items():
            given = self.given[1][name]
            for i, item, count, total in (
                (0, "detects", hits, abnormal),
                (1, "false_alarm", alarms, normal),
            ):
                if total >= ENOUGH and 0.0 < given[i] < 1.0:
                    after = self.checks[name][i]
                    yield self._number("check", name, item, given[i], after, count, total)

    def _link_numbers(self) -> Iterable[Number]:
        for (ref, node, side), tally in self.tallies.items():
            given, after = self.given[0][ref, node, side], self.links[ref, node, side]
            if node in self.selected or tally.sum() < ENOUGH:
                continue
            for level, state in enumerate(_side_states(self.circuit, node, side), start=1):
                if 0.0 < given[level] < 1.0:
                    name, total = f"{ref} -> {node}", float(tally.sum())
                    before, now, count = given[level], after[level], tally[level]
                    yield self._number("link", name, state, before, now, count, total)

    def _number(
        self, kind: str, name: str, item: str, before: float, after: float, x: float, n: float
    ) -> Number:
        a, b = self.weight * before, self.weight * (1.0 - before)
        prior, posterior = (float(a), float(b)), (float(a + x), float(b + n - x))
        before, after, x, n = float(before), float(after), float(x), float(n)
        return Number(kind, name, item, before, after, x, n, prior, posterior)


def _revised(given: Array, tally: Array, weight: float) -> Array:
    """Pseudo-counts and counts together; as given where neither says anything."""
    if ((given == 0.0) | (given == 1.0)).all():
        return given
    # What the circuit calls impossible stays so, whatever the counts.
    counts = np.where(given > 0.0, weight * given + tally, 0.0)
    total = counts.sum()
    return counts / total if total > 0.0 else given


def _side_states(circuit: Circuit, node: str, side: int) -> tuple[str, ...]:
    """Abnormal states on one side, the mildest first."""
    record = circuit.nodes[node]
    states, normal = record.record.states, record.normal
    return states[normal + 1 :] if side else states[:normal][::-1]


def _levels(circuit: Circuit, ref: str, node: str, side: int) -> Array:
    """(levels + 1,) chances of the levels of one side, from one cause or (`ref` empty) none."""
    found = circuit.nodes[node]
    gives = found.effects[ref].gives if ref else found.record.leak
    up = [gives.get(state, 0.0) for state in _side_states(circuit, node, side)]
    return np.array([1.0 - sum(up), *up])


class _Group:
    """All scenes of one condition with the same causes, as arrays.

    Attributes:
        looks: the different answers met.
        had: (scenes, looks) how often each scene holds each answer.
        numbers: (scenes, states) log likelihood of the readings.
        count: (scenes,) how often each scene was met.
    """

    def __init__(
        self,
        circuit: Circuit,
        node: str,
        causes: tuple[str, ...],
        members: Sequence[tuple[Scene, int]],
    ) -> None:
        self.circuit, self.node, self.causes = circuit, node, causes
        self.looks = sorted({look for scene, _ in members for look in scene.looks})
        place = {look: i for i, look in enumerate(self.looks)}
        self.had = np.zeros((len(members), len(self.looks)))
        for row, (scene, _) in enumerate(members):
            for look in scene.looks:
                self.had[row, place[look]] += 1.0
        self.numbers = np.log(np.array([scene.numbers for scene, _ in members]))
        self.count = np.array([float(count) for _, count in members])
        self.shown = [_passed(circuit, node, look) for look in self.looks]
        self.leaks = [_levels(circuit, "", node, side) for side in (0, 1)]
        down, up = (np.arange(len(leak)) for leak in self.leaks)
        normal = circuit.nodes[node].normal
        self.state: np.ndarray[Any, np.dtype[np.int64]] = normal + up[None, :] - down[:, None]

    def expect(self, em: Em) -> float:
        """Adds the expected counts to the tallies; gives the log likelihood."""
        sides = [
            [self.leaks[s], *(em.links[ref, self.node, s] for ref in self.causes)] for s in (0, 1)
        ]
        levels = [_highest(side) for side in sides]
        joint = levels[0][:, None] * levels[1][None, :]
        states = np.zeros(self.numbers.shape[1])
        np.add.at(states, self.state, joint)
        answers = [self._answer(em, look) for look in self.looks]
        given = self._given(answers, states)
        evidence = given.sum(axis=1, keepdims=True)
        given /= np.maximum(evidence, 1e-300)
        per_state = self.count @ given
        both = joint * (per_state / np.maximum(states, 1e-300))[self.state]
        for s, reached in ((0, both.sum(axis=1)), (1, both.sum(axis=0))):
            for ref, tally in zip(self.causes, _shares(sides[s], reached)[1:], strict=True):
                em.tallies[ref, self.node, s] += tally
        self._tally_looks(em, answers, given)
        return float(self.count @ np.log(np.maximum(evidence[:, 0], 1e-300)))

    def _answer(self, em: Em, look: Look) -> Array:
        """(states,) P(this answer | state shown), with the chances as they are now."""
        observable = self.circuit.observables[look.observable]
        detects, false_alarm = em.checks[observable.record.id]
        outcome = observable.outcomes.index(look.outcome)
        normal = observable.outcomes.index(observable.normal)
        reports = np.array(observable.reports)
        if outcome == normal:
            return np.where(reports == normal, 1.0 - false_alarm, 1.0 - detects)
        alarm = false_alarm / (len(observable.outcomes) - 1)
        return np.where(reports == normal, alarm, np.where(reports == outcome, detects, 0.0))

    def _given(self, answers: Sequence[Array], states: Array) -> Array:
        """(scenes, states) P(answers, state), up to the factor of the readings."""
        logs = self.numbers
        if answers:
            table = np.array([m @ a for m, a in zip(self.shown, answers, strict=True)])
            logs = logs + self.had @ np.log(np.maximum(table, 1e-300))
        found: Array = states * np.exp(logs)
        return found

    def _tally_looks(self, em: Em, answers: Sequence[Array], given: Array) -> None:
        met = (self.had * self.count[:, None]).T @ given
        for look, shown, answer, true in zip(self.looks, self.shown, answers, met, strict=True):
            if not look.counts:
                continue
            split = shown * answer
            split /= np.maximum(split.sum(axis=1, keepdims=True), 1e-300)
            seen = true @ split
            observable = self.circuit.observables[look.observable]
            normal = observable.outcomes.index(observable.normal)
            sound = np.array(observable.reports) == normal
            abnormal, fine = float(seen[~sound].sum()), float(seen[sound].sum())
            alarm = look.outcome != observable.normal
            tally = em.check_tallies[observable.record.id]
            tally += [abnormal * alarm, abnormal, fine * alarm, fine]


def _passed(circuit: Circuit, node: str, look: Look) -> Array:
    """(states, states) P(state shown | true state) through the instruments of a look."""
    found, observable = circuit.nodes[node], circuit.observables[look.observable]
    size = len(found.record.states)
    matrix = np.eye(size)
    for name in observable.through:
        for ref in look.faulty:
            mode = circuit.modes[ref]
            if mode.component == name:
                matrix = matrix @ signal_matrix(mode.record.signal, size, found.normal)
    return matrix


def _highest(draws: Sequence[Array]) -> Array:
    """(levels + 1,) chances of the highest of independent levels."""
    reached = np.prod([np.cumsum(p) for p in draws], axis=0)
    found: Array = np.diff(reached, prepend=0.0)
    return np.maximum(found, 0.0)


def _shares(draws: Sequence[Array], reached: Array) -> list[Array]:
    """Expected counts of each cause's own level, given counts of the highest.

    Args:
        draws: per cause (levels + 1,) chances of its own level.
        reached: (levels + 1,) expected counts of the highest level.
    """
    highest = np.maximum(_highest(draws), 1e-300)
    found = []
    for i, own in enumerate(draws):
        others = [p for j, p in enumerate(draws) if j != i]
        below = np.prod([np.cumsum(p) for p in others], axis=0) if others else np.ones_like(own)
        exactly = np.diff(below, prepend=0.0)
        # Below the highest level another cause must have reached it; at it, none went beyond.
        joint = np.triu(own[:, None] * exactly[None, :], 1) + np.diag(own * below)
        found.append(joint @ (reached / highest))
    return found

"""A case as an abstract problem: its weightiest hypotheses, its most telling checks.

What is left out is small and known: hypotheses of little weight, checks that tell little per
minute, repairs of unlikely causes. A hypothesis is the set of modes present now; those that a
repair would leave are added, so that every repair has its twin.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from functools import cached_property
from itertools import combinations

import numpy as np

from diag.advice.plan.ground import Door, Ground, Spell, Stand, Wants
from diag.advice.plan.problem import Array, Check, Condition, Indices, Problem, Repair, Stop
from diag.advice.steps import LIKELY_ENOUGH, Place, needs_of
from diag.belief.evidence import outcome_table
from diag.belief.hypotheses import Posterior, Sight
from diag.belief.outlook import Outlook
from diag.circuit.model import Circuit, Observable, Remedy
from diag.circuit.records import Needs

ROWS = 60
"""Hypotheses kept, by weight; those that repairs leave come on top."""
CHECKS = 20
"""Checks kept: most by bits per minute, the last quarter by bits alone."""
REPAIRS = 8
"""Rectifications kept, by the chance to help per minute."""
FAINT = 1e-3
"""Bits of a check and chance of a rectification below which they are left out. Judgement."""
LOOKS = 2
"""Looks of a check with fresh noise that a plan may count on. Judgement."""
_RUNNING = frozenset({"motoring", "idle", "high_power"})

Faults = frozenset[int]


@dataclass(frozen=True)
class Situation:
    """What a plan is made from.

    Attributes:
        posterior: of the findings that count.
        world: modes restored so far, each with the chance that it worked.
        place: engine state and openings.
        done: findings taken in the present world, and steps that are not possible.
        barred: steps that must not be done now.
        recalled: indications may still be taken from the report or the recorded data.
    """

    circuit: Circuit
    posterior: Posterior
    world: tuple[tuple[str, float], ...] = ()
    place: Place = field(default_factory=Place)
    done: frozenset[str] = frozenset()
    barred: frozenset[str] = frozenset()
    recalled: bool = True


class Lookout(Outlook):
    """Predictions for given fault sets, as the world is now."""

    def __init__(self, posterior: Posterior, modes: Indices, weight: Array) -> None:
        super().__init__(posterior, (), most=1)
        self.modes, self.weight = modes, weight

    def _seen(self, node: str, chances: Array) -> Array:
        return chances

    def looks_through(self, observable: Observable) -> Array:
        """(hypotheses or 1, states, outcomes) P(outcome | hypothesis, state)."""
        passed = self._transfer(observable)
        tables: Array = passed.matrices @ outcome_table(observable)
        return tables if len(tables) == 1 else tables[passed.digit[self.modes].sum(axis=1)]


@dataclass(frozen=True)
class Draft:
    """A case as an abstract problem, and what its numbers stand for.

    Attributes:
        sets: per hypothesis, the indices of the modes present.
        observables, remedies: what the checks and repairs of the problem are.
    """

    problem: Problem
    sets: tuple[Faults, ...]
    observables: tuple[Observable, ...]
    remedies: tuple[Remedy, ...]


def draft(situation: Situation, rows: int = ROWS, checks: int = CHECKS) -> Draft:
    """The abstract problem of a situation."""
    return _Drafting(situation, rows, checks).made()


class _Drafting:
    def __init__(self, situation: Situation, rows: int, checks: int) -> None:
        self.situation, self.rows, self.checks = situation, rows, checks
        self.circuit, self.frame = situation.circuit, situation.posterior.frame
        self.ground = ground_of(self.circuit)
        self.stand = Stand(situation.place.engine, situation.place.opened)

    @cached_property
    def _weighed(self) -> dict[Faults, float]:
        """The weightiest fault sets as they are present now."""
        posterior, none = self.situation.posterior, self.frame.none
        rows, weight = posterior.modes[: self.rows].tolist(), posterior.weight.tolist()
        shares = [self._left(frozenset(m for m in row if m != none)) for row in rows]
        sets = list(dict.fromkeys(faults for share in shares for faults in share))
        likely = [1.0] * len(sets)
        if self.situation.world:
            likely = self._likelihood(sets).tolist()
        chance, found = dict(zip(sets, likely, strict=True)), dict.fromkeys(sets, 0.0)
        for share, mass in zip(shares, weight, strict=False):
            total = sum(p * chance[faults] for faults, p in share.items())
            for faults, p in share.items():
                part = p * chance[faults] / total if total > 0.0 else p
                found[faults] += mass * part
        total = sum(found.values())
        return {faults: mass / total for faults, mass in found.items()}

    def _left(self, faults: Faults) -> dict[Faults, float]:
        """What the rectifications done so far may have left of a set, with its chances."""
        failed: dict[int, float] = {}
        for ref, success in self.situation.world:
            mode = self.frame.index[ref]
            failed[mode] = failed.get(mode, 1.0) * (1.0 - success)
        touched = sorted(faults & set(failed))
        shares = {}
        for count in range(len(touched) + 1):
            for kept in combinations(touched, count):
                chance = np.prod([failed[m] if m in kept else 1.0 - failed[m] for m in touched])
                shares[faults - set(touched) | set(kept)] = float(chance)
        return shares

    def _likelihood(self, sets: Sequence[Faults]) -> Array:
        """(sets,) P(findings made in the present world | what is present)."""
        look = Lookout(self.situation.posterior, self._rows_of(sets), np.ones(len(sets)))
        found = np.ones(len(sets))
        for node, sights in self._sights.items():
            found *= (look.states(node) * _shown(sights, look.modes)).sum(axis=1)
        return found

    @cached_property
    def _sights(self) -> dict[str, list[Sight]]:
        """Findings of the present world by node, as seen by the fault sets present now."""
        posterior = self.situation.posterior
        here = [replace(f, world=()) for f in posterior.findings if f.world == self.situation.world]
        found: dict[str, list[Sight]] = {}
        for sight in posterior.engine.sights(here):
            found.setdefault(sight.node, []).append(sight)
        return found

    def _rows_of(self, sets: Sequence[Faults]) -> Indices:
        size = max((len(s) for s in sets), default=0) or 1
        rows = np.full((len(sets), size), self.frame.none, dtype=np.int64)
        for number, faults in enumerate(sets):
            rows[number, : len(faults)] = sorted(faults)
        return rows

    @cached_property
    def _remedies(self) -> tuple[Remedy, ...]:
        """The rectifications most likely to help per minute."""
        barred = self.situation.barred | self.situation.done
        ranked = []
        for remedy in self.circuit.remedies.values():
            modes = {self.frame.index[ref] for ref in remedy.restores}
            chance = sum(w for faults, w in self._weighed.items() if faults & modes)
            minutes, _ = self.ground.go(self.stand, wants_of(remedy.record.needs))
            minutes += remedy.record.minutes + remedy.record.parts_minutes
            if chance >= FAINT and remedy.id not in barred:
                ranked.append((-chance / max(minutes, 1.0), remedy.id, remedy))
        return tuple(remedy for _, _, remedy in sorted(ranked, key=lambda r: r[:2])[:REPAIRS])

    @cached_property
    def _sets(self) -> tuple[Faults, ...]:
        """The sets weighed and all that repairs would leave of them."""
        found = dict.fromkeys(self._weighed)
        queue = list(found)
        while queue:
            faults = queue.pop()
            for remedy in self._remedies:
                left = faults - {self.frame.index[ref] for ref in remedy.restores}
                if left not in found:
                    found[left] = None
                    queue.append(left)
        return tuple(found)

    @cached_property
    def _look(self) -> Lookout:
        weight = np.array([self._weighed.get(faults, 0.0) for faults in self._sets])
        return Lookout(self.situation.posterior, self._rows_of(self._sets), weight)

    def _now(self, node: str) -> Array:
        """(hypotheses, states) chances with the findings of the present world."""
        chances = self._look.states(node)
        if node in self._sights:
            chances = chances * _shown(self._sights[node], self._look.modes)
            chances = chances / np.maximum(chances.sum(axis=1, keepdims=True), 1e-300)
        return chances

    def _is_stale(self, observable: Observable) -> bool:
        """Looked at before a repair that cannot have changed what it looks at."""
        posterior, world = self.situation.posterior, self.situation.world
        if all(f.key != observable.id for f in posterior.findings) or not world:
            return False
        side = self.frame.sides[observable.node]
        rows = [self.frame.index[ref] for ref, _ in world]
        moved = (self.frame.cumulative[rows, side.down.start : side.up.stop] < 1.0).any()
        mended = {ref.split(".")[0] for ref, _ in world} & set(observable.through)
        return not moved and not mended

    @cached_property
    def _observables(self) -> tuple[Observable, ...]:
        """The checks that tell most per minute, and some that tell most."""
        skipped = self.situation.barred | self.situation.done
        rated = []
        for observable in self.circuit.observables.values():
            if observable.id in skipped or self._is_stale(observable):
                continue
            bits = self._bits(observable)
            wants = wants_of(needs_of(observable, self.situation.recalled))
            minutes = self.ground.go(self.stand, wants)[0] + observable.record.minutes
            if bits >= FAINT:
                rated.append((bits / max(minutes, 0.5), bits, observable))
        rated.sort(key=lambda r: (-round(r[0], 9), r[2].id))
        quick = rated[: self.checks - self.checks // 4]
        rest = sorted(rated[len(quick) :], key=lambda r: (-round(r[1], 9), r[2].id))
        return tuple(r[2] for r in (*quick, *rest[: self.checks // 4]))

    def _bits(self, observable: Observable) -> float:
        table = self._look.looks_through(observable)
        answers = (self._now(observable.node)[:, :, None] * table).sum(axis=1)
        joint = answers * self._look.weight[:, None]
        outcome = np.maximum(joint.sum(axis=0), 1e-300)
        return float((joint * np.log2(np.maximum(answers, 1e-300) / outcome)).sum())

    def made(self) -> Draft:
        nodes = tuple(dict.fromkeys(o.node for o in self._observables))
        problem = Problem(
            self._look.weight / self._look.weight.sum(),
            tuple(Condition(self._now(n), self._look.states(n)) for n in nodes),
            tuple(self._check(o, nodes.index(o.node)) for o in self._observables),
            tuple(self._repair(remedy) for remedy in self._remedies),
            self._stops(),
            self.ground,
            self.stand,
        )
        return Draft(problem, self._sets, self._observables, self._remedies)

    def _check(self, observable: Observable, condition: int) -> Check:
        record = observable.record
        return Check(
            observable.id,
            condition,
            self._look.looks_through(observable),
            record.minutes,
            wants_of(needs_of(observable, self.situation.recalled)),
            LOOKS if record.noise == "fresh" else 1,
            wants_of(needs_of(observable, False)),
        )

    def _repair(self, remedy: Remedy) -> Repair:
        record, place = remedy.record, {s: n for n, s in enumerate(self._sets)}
        modes = {self.frame.index[ref] for ref in remedy.restores}
        wrong = np.array([0.0 if s & modes else 1.0 for s in self._sets])
        minutes = record.minutes + record.parts_minutes
        proof = self.circuit.observables[record.verify]
        fresh = self._look.states(proof.node)[:, :, None] * self._look.looks_through(proof)
        return Repair(
            remedy.id,
            minutes + wrong * self.circuit.file.costs.wrong_removal_minutes,
            np.array([place[s - modes] for s in self._sets]),
            fresh.sum(axis=1)[:, proof.outcomes.index(proof.normal)],
            record.success,
            wants_of(record.needs),
            proof.record.minutes,
            wants_of(needs_of(proof, False)),
        )

    def _stops(self) -> tuple[Stop, ...]:
        """Closing and handing on; whoever finds a cause later still has to remove it."""
        escalate = self.circuit.file.costs.escalate_minutes
        mend = mending(self.circuit)
        refs = self.frame.refs
        later = np.array([sum(mend.get(refs[m], 0.0) for m in s) for s in self._sets])
        wrong = np.array([comes_back(self.circuit) if s else 0.0 for s in self._sets])
        return (Stop("close", wrong + later), Stop("escalate", escalate + later))


def _shown(sights: Sequence[Sight], modes: Indices) -> Array:
    """(hypotheses, states) P(findings | state), instruments as the hypotheses have them."""
    found: Array = np.ones(())
    for sight in sights:
        found = found * sight.table[sight.digit[modes].sum(axis=1)]
    return found


def mending(circuit: Circuit) -> dict[str, float]:
    """Per mode, the least minutes of a rectification that removes it, parts included."""
    found: dict[str, float] = {}
    for remedy in circuit.remedies.values():
        minutes = remedy.record.minutes + remedy.record.parts_minutes
        for ref in remedy.restores:
            found[ref] = min(minutes, found.get(ref, minutes))
    return found


def comes_back(circuit: Circuit) -> float:
    """Minutes of closing a case with a cause left in it.

    Such that closing is better than handing on exactly from the probability at which the
    bench proposes it.
    """
    return circuit.file.costs.escalate_minutes / (1.0 - LIKELY_ENOUGH)


def wants_of(needs: Needs) -> Wants:
    """What a step needs, for the ground."""
    engine = "" if needs.engine == "any" else needs.engine
    return Wants(engine, needs.opens, needs.after_minutes or 0.0)


def ground_of(circuit: Circuit) -> Ground:
    """The engine states and openings of a circuit.

    A running engine is shut but for what the step itself keeps open. Stopping a warm engine
    costs only the leaving, and so does motoring a cold one.
    """
    states = {n: s for n, s in circuit.engine_states.items() if n not in ("any", "stopped")}
    spells = {n: Spell(s.reach_minutes, s.leave_minutes) for n, s in states.items()}
    answers: Mapping[str, tuple[str, ...]] = {
        **{name: (name,) for name in spells},
        "stopped": tuple(n for n in ("cold", "hot_stopped") if n in spells),
    }
    free = {("idle", "hot_stopped"), ("high_power", "hot_stopped"), ("motoring", "cold")}
    doors = {
        name: Door(
            o.open_minutes + o.close_minutes,
            o.inside,
            "" if o.needs == "any" else o.needs,
            _RUNNING,
        )
        for name, o in circuit.openings.items()
    }
    return Ground(spells, answers, dict.fromkeys(free, 0.0), doors)


__all__ = ["Draft", "Lookout", "Situation", "draft", "ground_of"]

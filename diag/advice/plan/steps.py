"""One step of a plan after another: what it costs, what may come of it, where it leads.

Beliefs are kept as masses, P(hypothesis and what was found), so that the cost of a branch is
already weighted with the chance of getting there and branches simply add up.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np

from diag.advice.plan.ground import Stand
from diag.advice.plan.problem import Array, Indices, Mask, Problem, Repair

NIL = 1e-12
"""Share of the mass below which a branch or a fault counts as impossible."""


@dataclass(frozen=True, eq=False)
class Belief:
    """A state of the work.

    Attributes:
        mass: (hypotheses,) P(hypothesis, what was found since the start).
        states: conditions that are no longer as at the start, (hypotheses, states) each.
        looks: per check, how often it was made in the present world.
        tries: per repair, how often it was made.
    """

    mass: Array
    stand: Stand
    looks: tuple[int, ...]
    tries: tuple[int, ...]
    states: Mapping[int, Array] = field(default_factory=dict)


@dataclass(frozen=True, eq=False)
class Option:
    """A check or repair that can be made now.

    Attributes:
        kind: `check` or `repair`; `number` its index in the problem.
        cost: minutes, weighted with the mass of the belief.
        masses: (outcomes, hypotheses) of the beliefs it may lead to; for a repair, passed
            comes first and failed second.
    """

    kind: str
    number: int
    cost: float
    masses: Array
    stand: Stand


class Walk:
    """The steps of one problem."""

    def __init__(self, problem: Problem) -> None:
        self.problem = problem
        checks, conditions = problem.checks, problem.conditions
        self._now = [_answers(conditions[c.condition].now, c.table) for c in checks]
        self._fresh = [_answers(conditions[c.condition].fresh, c.table) for c in checks]
        self._changes = [self._changed_by(repair) for repair in problem.repairs]
        self._anew = [self._looked_at_anew(n) for n in range(len(problem.repairs))]

    def _changed_by(self, repair: Repair) -> tuple[int, ...]:
        """Conditions that the repair may change; the others stay as they are."""
        return tuple(
            number
            for number, condition in enumerate(self.problem.conditions)
            if not np.array_equal(condition.fresh, condition.fresh[repair.after])
        )

    def _looked_at_anew(self, number: int) -> frozenset[int]:
        """Checks worth repeating after a repair: of a changed condition or instrument."""
        changed, after = self._changes[number], self.problem.repairs[number].after
        return frozenset(
            n
            for n, check in enumerate(self.problem.checks)
            if check.condition in changed
            or (len(check.table) > 1 and not np.array_equal(check.table, check.table[after]))
        )

    @property
    def start(self) -> Belief:
        """Nothing done yet."""
        p = self.problem
        return Belief(p.weights, p.stand, (0,) * len(p.checks), (0,) * len(p.repairs))

    def answers(self, belief: Belief, check: int) -> Array:
        """(hypotheses, outcomes) P(outcome | hypothesis, what was found)."""
        chosen = self.problem.checks[check]
        states = belief.states.get(chosen.condition)
        if states is None:
            return self._now[check]
        if states is self.problem.conditions[chosen.condition].fresh:
            return self._fresh[check]
        return _answers(states, chosen.table)

    def stopping(self, belief: Belief) -> tuple[float, int]:
        """Cost of the best way to stop now, and which one that is."""
        costs = [float(belief.mass @ stop.costs) for stop in self.problem.stops]
        best = int(np.argmin(costs))
        leave = self.problem.ground.leave(belief.stand) * float(belief.mass.sum())
        return costs[best] + leave, best

    def options(self, belief: Belief) -> list[Option]:
        """Every check that can tell something and every repair that can remove something."""
        total = float(belief.mass.sum())
        live = belief.mass > NIL * total
        checks = (self._check(belief, n, total, live) for n in range(len(belief.looks)))
        repairs = (self._repair(belief, n, total) for n in range(len(belief.tries)))
        return [option for option in (*checks, *repairs) if option is not None]

    def _check(self, belief: Belief, number: int, total: float, live: Mask) -> Option | None:
        check = self.problem.checks[number]
        if belief.looks[number] >= check.looks:
            return None
        answers = self.answers(belief, number)
        if float(np.ptp(answers[live], axis=0).max()) < NIL:
            return None
        wants = check.later if check.later and any(belief.tries) else check.wants
        minutes, stand = self.problem.ground.go(belief.stand, wants)
        masses = answers.T * belief.mass
        return Option("check", number, (minutes + check.minutes) * total, masses, stand)

    def _repair(self, belief: Belief, number: int, total: float) -> Option | None:
        repair = self.problem.repairs[number]
        moved = repair.after != np.arange(len(belief.mass))
        if belief.tries[number] >= repair.tries or belief.mass[moved].sum() < NIL * total:
            return None
        ground = self.problem.ground
        minutes, stand = ground.go(belief.stand, repair.wants)
        more, stand = ground.go(stand, repair.proof_wants)
        cost = (minutes + more + repair.proof_minutes) * total + belief.mass @ repair.minutes
        mass = repaired(belief.mass, repair)
        masses = np.array([mass * repair.passes, mass * (1.0 - repair.passes)])
        return Option("repair", number, float(cost), masses, stand)

    def after(self, belief: Belief, option: Option, outcome: int) -> Belief:
        """The belief after an option and its outcome."""
        mass = option.masses[outcome]
        if option.kind == "repair":
            return self._repaired(belief, option, mass)
        check = self.problem.checks[option.number]
        states = belief.states.get(check.condition, self.problem.conditions[check.condition].now)
        seen = states * check.table[:, :, outcome]
        seen = seen / np.maximum(seen.sum(axis=1, keepdims=True), 1e-300)
        return Belief(
            mass,
            option.stand,
            _counted(belief.looks, option.number),
            belief.tries,
            {**belief.states, check.condition: seen},
        )

    def _repaired(self, belief: Belief, option: Option, mass: Array) -> Belief:
        """What the repair may have changed is drawn anew and can be looked at again."""
        changed = self._changes[option.number]
        fresh = {c: self.problem.conditions[c].fresh for c in changed}
        anew = self._anew[option.number]
        looks = tuple(0 if n in anew else count for n, count in enumerate(belief.looks))
        tries = _counted(belief.tries, option.number)
        return Belief(mass, option.stand, looks, tries, {**belief.states, **fresh})


def repaired(mass: Array, repair: Repair) -> Array:
    """(hypotheses,) the mass once the repair was made: moved to the twins where it works."""
    moved: Indices = np.flatnonzero(repair.after != np.arange(len(mass)))
    found = mass.copy()
    found[moved] *= 1.0 - repair.success
    np.add.at(found, repair.after[moved], mass[moved] * repair.success)
    return found


def _answers(states: Array, table: Array) -> Array:
    found: Array = (states[:, :, None] * table).sum(axis=1)
    return found


def _counted(counts: tuple[int, ...], number: int) -> tuple[int, ...]:
    return (*counts[:number], counts[number] + 1, *counts[number + 1 :])


def bits(option: Option) -> float:
    """Mutual information between the outcome of an option and the hypotheses."""
    joint = option.masses / option.masses.sum()
    outer = joint.sum(axis=1, keepdims=True) * joint.sum(axis=0, keepdims=True)
    terms = joint * np.log2(np.maximum(joint, 1e-300) / np.maximum(outer, 1e-300))
    return max(float(terms.sum()), 0.0)


def key_of(belief: Belief) -> tuple[object, ...]:
    """What tells two beliefs apart, their scale aside: equal keys have equal values."""
    shape = (belief.mass / belief.mass.sum()).round(10) + 0.0
    states = tuple((c, (s.round(10) + 0.0).tobytes()) for c, s in sorted(belief.states.items()))
    return (shape.tobytes(), belief.stand, belief.looks, belief.tries, states)

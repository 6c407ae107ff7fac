"""What the work costs when one first looks and then repairs.

The most telling check per minute (the selection ratio of Gorry & Barnett 1968), a few times
over with whatever it shows, and after each the p/c repair plan where that is cheaper. It can
be carried out, so its cost bounds the optimum from above, as that of the repair plan does.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from diag.advice.plan.bounds import RepairPlan
from diag.advice.plan.ground import Stand
from diag.advice.plan.problem import Array, Indices, Mask
from diag.advice.plan.steps import NIL, Belief, Walk

DEPTH = 8
"""Checks in a row."""
THIN = 0.01
"""Share of the mass below which a branch is not looked into further. Judgement."""


@dataclass(frozen=True, eq=False)
class _Level:
    """Beliefs after the same number of looks.

    Attributes:
        parent: (beliefs,) index of the belief that each comes from.
        open: (beliefs, checks) checks whose condition has not been looked at.
    """

    mass: Array
    stands: list[Stand]
    parent: Indices
    open: Mask


class LookPlan:
    """Cost of looking first, for one belief at a time."""

    def __init__(self, walk: Walk, repairs: RepairPlan, depth: int = DEPTH) -> None:
        self.walk, self.repairs, self.depth = walk, repairs, depth
        checks = walk.problem.checks
        self.reads = np.array([c.condition for c in checks], dtype=np.int64)
        self.outcomes = max((c.table.shape[2] for c in checks), default=0)
        self._ways: dict[tuple[Stand, bool], tuple[Array, list[Stand]]] = {}

    def cost(self, belief: Belief) -> float:
        """Cost of the plan, weighted with the belief's mass."""
        answers, tries = self._answers(belief), np.array([belief.tries])
        open_ = np.array([[c.looks for c in self.walk.problem.checks]]) > np.array([belief.looks])
        first = np.zeros(1, dtype=np.int64)
        level = _Level(belief.mass[None], [belief.stand], first, open_)
        values = [self._repairing(level, tries)]
        parents, paid = [first], []
        for _ in range(self.depth if self.outcomes else 0):
            pay, level = self._look(belief, level, answers)
            paid.append(pay)
            if not len(level.mass):
                break
            values.append(self._repairing(level, tries))
            parents.append(level.parent)
        return self._backwards(values, parents, paid)

    def _repairing(self, level: _Level, tries: Indices) -> Array:
        return self.repairs.costs(level.mass, level.stands, tries.repeat(len(level.mass), axis=0))

    @staticmethod
    def _backwards(values: list[Array], parents: list[Indices], paid: list[Array]) -> float:
        below = values[-1]
        for depth in range(len(values) - 2, -1, -1):
            ahead = paid[depth] + np.bincount(parents[depth + 1], below, len(values[depth]))
            below = np.minimum(values[depth], ahead)
        return float(below[0])

    def _answers(self, belief: Belief) -> Array:
        """(checks, hypotheses, outcomes) P(outcome | hypothesis), zero past the last outcome."""
        found = np.zeros((len(self.reads), len(belief.mass), self.outcomes))
        for number in range(len(self.reads)):
            table = self.walk.answers(belief, number)
            found[number, :, : table.shape[1]] = table
        return found

    def _look(self, belief: Belief, level: _Level, answers: Array) -> tuple[Array, _Level]:
        """(beliefs,) what each pays for its best look (inf without one), and where that leads."""
        ways = [self._way(stand, any(belief.tries)) for stand in level.stands]
        minutes = np.array([way[0] for way in ways])
        total = level.mass.sum(axis=1)
        rate = _bits(level.mass, answers) / np.maximum(minutes, 0.5)
        rate = np.where(level.open, rate, 0.0)
        pick: Indices = rate.round(12).argmax(axis=1)
        rows = np.arange(len(total))
        looks = (rate[rows, pick] > NIL) & (total > THIN * belief.mass.sum())
        pay = np.where(looks, minutes[rows, pick] * total, np.inf)
        chosen = np.flatnonzero(looks)
        mass = level.mass[chosen][:, None, :] * answers[pick[chosen]].transpose(0, 2, 1)
        parent = np.repeat(chosen, self.outcomes)
        flat = mass.reshape(-1, level.mass.shape[1])
        real = np.flatnonzero(flat.sum(axis=1) > NIL * total[parent])
        parent = parent[real]
        shut = self.reads[None, :] == self.reads[pick[parent]][:, None]
        stands = [ways[p][1][pick[p]] for p in parent.tolist()]
        return pay, _Level(flat[real], stands, parent, level.open[parent] & ~shut)

    def _way(self, stand: Stand, later: bool) -> tuple[Array, list[Stand]]:
        """Per check from `stand`: minutes until it is done, and where one then stands."""
        key = (stand, later)
        if key not in self._ways:
            minutes, stands = [], []
            for check in self.walk.problem.checks:
                wants = check.later if later and check.later else check.wants
                way, there = self.walk.problem.ground.go(stand, wants)
                minutes.append(way + check.minutes)
                stands.append(there)
            self._ways[key] = (np.array(minutes), stands)
        return self._ways[key]


def _bits(mass: Array, answers: Array) -> Array:
    """(beliefs, checks) mutual information of outcome and hypothesis."""
    total = mass.sum(axis=1)
    given = (answers * np.log2(np.maximum(answers, 1e-300))).sum(axis=2)
    checks, rows, outcomes = answers.shape
    flat = answers.transpose(1, 0, 2).reshape(rows, -1)
    outcome = (mass @ flat / total[:, None]).reshape(len(mass), checks, outcomes)
    mean = (outcome * np.log2(np.maximum(outcome, 1e-300))).sum(axis=2)
    found: Array = np.maximum(mass @ given.T / total[:, None] - mean, 0.0)
    return found

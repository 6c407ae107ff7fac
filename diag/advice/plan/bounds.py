"""What the work will cost at most and at least, without looking ahead.

At most: the p/c repair plan (Kadane & Simon 1977; Heckerman, Breese & Rommelse 1995), the
likeliest repair per minute first, each with its verification, stopping where that is best.
It is a plan that can be carried out, so its cost bounds the optimum from above. At least: the
cost if every fault became known for free.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from diag.advice.plan.ground import Ground, Stand
from diag.advice.plan.problem import Array, Indices, Mask, Problem, Repair
from diag.advice.plan.steps import NIL, repaired

DEPTH = 6
"""Repairs that the p/c plan makes at most, one after the other."""


class RepairPlan:
    """Cost of the p/c repair plan for many beliefs at once."""

    def __init__(self, problem: Problem, depth: int = DEPTH) -> None:
        self.problem, self.depth = problem, depth
        size, repairs = len(problem.weights), problem.repairs
        self.count = len(repairs)
        self.stops = np.array([stop.costs for stop in problem.stops]).T
        here = np.arange(size)
        moves = [np.array([repaired(row, r) for row in np.eye(size)]) for r in repairs]
        self.fails = [m * (1.0 - r.passes) for m, r in zip(moves, repairs, strict=True)]
        passes = [m * r.passes for m, r in zip(moves, repairs, strict=True)]
        columns = [
            *((r.after != here) * r.success for r in repairs),
            *(r.minutes + r.proof_minutes for r in repairs),
            *(p.sum(axis=1) for p in passes),
            *((p @ self.stops).T[k] for p in passes for k in range(self.stops.shape[1])),
        ]
        self.linear = np.array(columns).T if columns else np.zeros((size, 0))
        self.tries = np.array([r.tries for r in repairs], dtype=np.int64)
        self._number: dict[Stand, int] = {}
        self._minutes: list[list[float]] = []
        self._there: list[list[int]] = []
        self._leave: list[float] = []

    def number(self, stand: Stand) -> int:
        """The row of a stand in the tables of ways; new ones are added with all they lead to."""
        if stand not in self._number:
            self._number[stand] = len(self._number)
            ground, stands = self.problem.ground, []
            minutes: list[float] = []
            self._leave.append(ground.leave(stand))
            self._minutes.append(minutes)
            self._there.append([])
            for repair in self.problem.repairs:
                first, there = ground.go(stand, repair.wants)
                second, there = ground.go(there, repair.proof_wants)
                minutes.append(first + second)
                stands.append(there)
            self._there[self._number[stand]] = [self.number(there) for there in stands]
        return self._number[stand]

    def costs(self, mass: Array, stands: Sequence[Stand], tries: Array | Indices) -> Array:
        """(beliefs,) cost of the plan, weighted with each belief's mass.

        Args:
            mass: (beliefs, hypotheses).
            stands: where the work stands, per belief.
            tries: (beliefs, repairs) how often each repair was made.
        """
        here: Indices = np.array([self.number(stand) for stand in stands], dtype=np.int64)
        minutes, there = np.array(self._minutes), np.array(self._there, dtype=np.int64)
        leave, left = np.array(self._leave), tries < self.tries
        rows = np.arange(len(mass))
        stop, paid = [self._stop(mass, leave[here])], []
        for _ in range(min(self.depth, self.count)):
            way, after = minutes[here], there[here]
            pick, pay = self._next(mass, way, leave[after], left)
            if not np.isfinite(pay).any():
                break
            paid.append(pay)
            left = left.copy()
            left[rows, pick] = False
            mass, here = self._failed(mass, pick), after[rows, pick]
            stop.append(self._stop(mass, leave[here]))
        value = stop.pop()
        while paid:
            value = np.minimum(stop.pop(), paid.pop() + value)
        return value

    def _stop(self, mass: Array, leave: Array) -> Array:
        found: Array = (mass @ self.stops).min(axis=1) + leave * mass.sum(axis=1)
        return found

    def _next(self, mass: Array, way: Array, leave: Array, left: Mask) -> tuple[Indices, Array]:
        """Per belief: the repair with the best p/c, and what it costs with a passed end."""
        n, total = self.count, mass.sum(axis=1, keepdims=True)
        linear = mass @ self.linear
        hit, cost, passed = linear[:, :n], linear[:, n : 2 * n], linear[:, 2 * n : 3 * n]
        end = linear[:, 3 * n :].reshape(len(mass), n, -1).min(axis=2)
        cost = cost + way * total
        useful = left & (hit > NIL * total)
        ratio = np.where(useful, hit / np.maximum(cost, NIL * total + 1e-300), -1.0)
        # Rounding keeps equal ratios equal, so that ties fall to the first repair everywhere.
        top = ratio.max(axis=1, keepdims=True)
        scaled = ratio / np.where(top > 0.0, top, 1.0)
        pick: Indices = scaled.round(9).argmax(axis=1)
        rows = np.arange(len(mass))
        pay = (cost + end + leave * passed)[rows, pick]
        return pick, np.where(useful[rows, pick], pay, np.inf)

    def _failed(self, mass: Array, pick: Indices) -> Array:
        found = np.empty_like(mass)
        for repair in np.unique(pick):
            rows = pick == repair
            found[rows] = mass[rows] @ self.fails[repair]
        return found


class KnownFault:
    """Least cost if what is present were always known: a bound from below.

    Knowing more never costs more. The first repair pays the way to it; those after it only
    what is certain wherever the work stands.
    """

    def __init__(self, problem: Problem) -> None:
        self.problem = problem
        self.stops: Array = np.array([stop.costs for stop in problem.stops]).min(axis=0)
        self.sure = [_certain(problem.ground, r) for r in problem.repairs]
        self.anywhere = self._anywhere()
        self._from: dict[Stand, Array] = {}

    def _anywhere(self) -> Array:
        """(hypotheses,) minutes to go, the way to each repair left out."""
        best = self.stops
        for _ in range(len(best)):
            before = best
            for repair, (turn, _leave) in zip(self.problem.repairs, self.sure, strict=True):
                best = np.minimum(best, _through(repair, turn, best))
            if np.array_equal(best, before):
                break
        return best

    def costs(self, stand: Stand) -> Array:
        """(hypotheses,) minutes to go from `stand`, each hypothesis known."""
        if stand not in self._from:
            ground = self.problem.ground
            best = self.stops + ground.leave(stand)
            for repair, (turn, leave) in zip(self.problem.repairs, self.sure, strict=True):
                way = ground.at_least(stand, repair.wants) + leave
                best = np.minimum(best, _through(repair, turn, self.anywhere) + way)
            self._from[stand] = best
        return self._from[stand]

    def below(self, masses: Array, stand: Stand) -> Array:
        """(…,) the bound for masses (…, hypotheses), weighted with them."""
        found: Array = masses @ self.costs(stand)
        return found


def _certain(ground: Ground, repair: Repair) -> tuple[float, float]:
    """Minutes from any repair to its proof, and to leave the engine after it, at least."""
    if not repair.proof_wants.engine:
        return 0.0, 0.0
    ends = ground.answers[repair.proof_wants.engine]
    leave = min(ground.spells[name].leave for name in ends)
    if not repair.wants.engine:
        return 0.0, leave
    starts = ground.answers[repair.wants.engine]
    return min(ground.turning(name, repair.proof_wants.engine) for name in starts), leave


def _through(repair: Repair, turn: float, best: Array) -> Array:
    """(hypotheses,) cost of repairing until it works and going on; inf where it is no use."""
    tries = 1.0 / max(repair.success, 1e-9)
    cost = (repair.minutes + repair.proof_minutes + turn) * tries + best[repair.after]
    return np.where(repair.after != np.arange(len(best)), cost, np.inf)

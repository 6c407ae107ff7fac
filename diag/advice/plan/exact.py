"""The cheapest plan of a small problem.

Depth-first AO* over beliefs with a memo: an option is dropped as soon as its cost and an
admissible bound on what follows exceed the best found (Pattipati & Alexandridis 1990; Martelli
& Montanari 1978). Looks and tries are limited, so every plan ends.
"""

from __future__ import annotations

import numpy as np

from diag.advice.plan.bounds import KnownFault, RepairPlan
from diag.advice.plan.policy import Choice
from diag.advice.plan.problem import Problem
from diag.advice.plan.steps import NIL, Belief, Option, Walk, key_of
from diag.errors import UsageError

EVEN = 1e-9
"""Relative difference below which two plans count as equal; the first named is then kept."""


class Exact:
    """The optimal plan.

    Args:
        problem: the problem.
        most: beliefs after which it is given up.

    Raises:
        UsageError: from its methods, when more beliefs than `most` would be needed.
    """

    def __init__(self, problem: Problem, most: int = 500_000) -> None:
        self.walk, self.most = Walk(problem), most
        self.known = KnownFault(problem)
        self.plan = RepairPlan(problem)
        self._values: dict[tuple[object, ...], float] = {}

    @property
    def beliefs(self) -> int:
        """How many beliefs were valued so far."""
        return len(self._values)

    def cost(self) -> float:
        """Expected minutes of the optimal plan from the start."""
        return self.value(self.walk.start)

    def value(self, belief: Belief) -> float:
        """Cost to go under the optimal plan, weighted with the belief's mass."""
        total = float(belief.mass.sum())
        if total <= 0.0:
            return 0.0
        key = key_of(belief)
        if key not in self._values:
            if len(self._values) >= self.most:
                raise UsageError(f"the problem has more than {self.most} beliefs")
            self._values[key] = self._least(belief) / total
        return self._values[key] * total

    def _least(self, belief: Belief) -> float:
        best = self._without_looking(belief)
        least = float(self.known.below(belief.mass, belief.stand))
        if best <= least * (1.0 + EVEN):
            return best
        bounded = [(o.cost + self._bound(o), o) for o in self.walk.options(belief)]
        for bound, option in sorted(bounded, key=lambda pair: pair[0]):
            if bound >= best * (1.0 - EVEN):
                break
            best = min(best, self._through(belief, option, best))
        return best

    def _without_looking(self, belief: Belief) -> float:
        """Cost of the p/c repair plan, stopping at once included."""
        tries = np.array([belief.tries])
        return float(self.plan.costs(belief.mass[None], [belief.stand], tries)[0])

    def _bound(self, option: Option) -> float:
        return float(self.known.below(option.masses, option.stand).sum())

    def _through(self, belief: Belief, option: Option, best: float) -> float:
        """Cost of an option, or anything above `best` once it cannot do better."""
        bounds = self.known.below(option.masses, option.stand)
        cost = option.cost + float(bounds.sum())
        for outcome, mass in enumerate(option.masses):
            if mass.sum() <= NIL * belief.mass.sum():
                continue
            after = self.walk.after(belief, option, outcome)
            cost += self.value(after) - float(bounds[outcome])
            if cost >= best:
                break
        return cost

    def choose(self, belief: Belief) -> Choice:
        """The optimal step, equally good ones in the order of the problem."""
        cost, stop = self.walk.stopping(belief)
        best = Choice(None, stop, cost)
        for option in self.walk.options(belief):
            cost = self._through(belief, option, float("inf"))
            if cost < best.cost - EVEN * abs(best.cost):
                best = Choice(option, -1, cost)
        return best

"""Simple orders to hold a planner against: greedy information, p/c, and a fixed list.

All of them know the same beliefs and costs; they differ in how far they look.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence

import numpy as np

from diag.advice.plan.policy import Choice
from diag.advice.plan.problem import Array, Problem
from diag.advice.plan.steps import Belief, Option, Walk, bits

Worth = Callable[[Belief, Option], float]


class ByWorth:
    """Takes the option of the greatest worth as long as stopping is not cheaper.

    Stopping is held against the least that the option can end in: its own minutes, and then
    the best way to stop at each outcome.

    Args:
        problem: the problem.
        worth: the greater, the sooner; options at or below zero are left out.
    """

    def __init__(self, problem: Problem, worth: Worth) -> None:
        self.walk, self.worth = Walk(problem), worth
        self.stops: Array = np.array([stop.costs for stop in problem.stops]).T

    def choose(self, belief: Belief) -> Choice:
        """The next step."""
        cost, stop = self.walk.stopping(belief)
        best, most = Choice(None, stop, cost), 0.0
        for option in self.walk.options(belief):
            worth = round(self.worth(belief, option), 12)
            if worth > most and self._may_pay(option, cost):
                best, most = Choice(option, -1, cost), worth
        return best

    def _may_pay(self, option: Option, stopping: float) -> bool:
        known = self.stops.min(axis=1)
        return option.cost + float((option.masses @ known).sum()) < stopping


def greedy_information(problem: Problem) -> ByWorth:
    """Most bits about the faults per minute; repairs count their verification."""
    return ByWorth(problem, lambda belief, option: bits(option) / _minutes(belief, option))


def p_over_c(problem: Problem) -> ByWorth:
    """Repairs only, the likeliest to help per minute first (Kadane & Simon 1977)."""

    def worth(belief: Belief, option: Option) -> float:
        if option.kind != "repair":
            return 0.0
        return _hit(problem, belief, option) / _minutes(belief, option)

    return ByWorth(problem, worth)


def fixed_order(problem: Problem) -> ByWorth:
    """A list made once, at the start: every check and repair by chance to tell or to help per
    minute; then gone through from the top, what has been done left out."""
    walk = Walk(problem)
    start = walk.start
    ranked: Sequence[Option] = sorted(
        walk.options(start), key=lambda option: -_chance(problem, start, option)
    )
    place = {(o.kind, o.number): -float(n) for n, o in enumerate(ranked)}
    last = float(len(ranked))

    def worth(belief: Belief, option: Option) -> float:
        done = belief.looks if option.kind == "check" else belief.tries
        return 0.0 if done[option.number] else last + place.get((option.kind, option.number), 0.0)

    return ByWorth(problem, worth)


def _chance(problem: Problem, belief: Belief, option: Option) -> float:
    if option.kind == "repair":
        return _hit(problem, belief, option) / _minutes(belief, option)
    chances = option.masses.sum(axis=1)
    return float(1.0 - chances.max() / chances.sum()) / _minutes(belief, option)


def _hit(problem: Problem, belief: Belief, option: Option) -> float:
    repair = problem.repairs[option.number]
    moved = repair.after != np.arange(len(belief.mass))
    return repair.success * float(belief.mass[moved].sum()) / float(belief.mass.sum())


def _minutes(belief: Belief, option: Option) -> float:
    return max(option.cost / float(belief.mass.sum()), 1e-9)

"""Time-bounded search for the next step.

Every belief is first valued by the p/c repair plan, a plan that can be carried out. One
expansion looks one step further at a belief: the value of each observation and repair over
that plan (Heckerman, Breese & Rommelse 1995). Expansions follow the best plan known so far and
its nearest rivals, so the value is that of a rolled-out and ever improved plan (rollout,
Bertsekas, Tsitsiklis & Wu 1997) and bounds the optimum from above; the bound from below comes
from known faults. The search can be stopped at any time and depends on nothing but its steps.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field

import numpy as np

from diag.advice.plan.bounds import KnownFault, RepairPlan
from diag.advice.plan.looks import LookPlan
from diag.advice.plan.policy import Choice
from diag.advice.plan.problem import Array, Problem
from diag.advice.plan.steps import NIL, Belief, Option, Walk, key_of

STEPS = 60
"""Expansions of one search unless told otherwise."""
EAGER = 0.5
"""Weight of what an option might still gain when choosing where to look. Judgement."""
CLOSE = 1e-9
"""Relative gap between the bounds at which nothing is left to look for."""


@dataclass(eq=False)
class _Branch:
    """An option with what is known of the beliefs behind it."""

    option: Option
    upper: Array
    """(outcomes,) cost to go at most, weighted."""
    lower: Array
    behind: dict[int, _Point] = field(default_factory=dict)
    visits: int = 0

    @property
    def most(self) -> float:
        return self.option.cost + float(self.upper.sum())

    @property
    def least(self) -> float:
        return self.option.cost + float(self.lower.sum())


@dataclass(eq=False)
class _Point:
    """A belief with its bounds, and its branches once it has been expanded."""

    belief: Belief
    upper: float
    lower: float
    stop: float
    branches: list[_Branch] | None = None


@dataclass(frozen=True, slots=True)
class Rated:
    """One thing that could be done, with its expected minutes.

    Attributes:
        most: expected minutes of a plan that begins with it.
        least: no plan that begins with it can cost less.
    """

    choice: Choice
    most: float
    least: float


@dataclass(frozen=True, slots=True)
class Found:
    """What a search came to.

    Attributes:
        rated: everything that can be done, the fewest minutes first.
        lower: no plan can cost less.
        steps: expansions made.
    """

    rated: tuple[Rated, ...]
    lower: float
    steps: int

    @property
    def best(self) -> Rated:
        return self.rated[0]

    @property
    def gap(self) -> float:
        """By how much the plan may exceed the optimum at most, relative; inf without a bound."""
        if self.lower <= 0.0:
            return 0.0 if self.best.most <= 0.0 else float("inf")
        return max(self.best.most / self.lower - 1.0, 0.0)


class Search:
    """A policy that searches at each belief, and builds on what it has seen before.

    Args:
        problem: the problem.
        steps: expansions per choice.
        stop: asked before each expansion whether the time is up.
    """

    def __init__(
        self, problem: Problem, steps: int = STEPS, stop: Callable[[], bool] = lambda: False
    ) -> None:
        self.walk, self.steps, self.stop = Walk(problem), steps, stop
        self.plan = RepairPlan(problem)
        self.looks = LookPlan(self.walk, self.plan)
        self.known = KnownFault(problem)
        self._points: dict[tuple[object, ...], _Point] = {}

    def choose(self, belief: Belief) -> Choice:
        """The step with the fewest expected minutes found."""
        return self.look(belief).best.choice

    def look_from_start(self) -> Found:
        """Searches with nothing done yet."""
        return self.look(self.walk.start)

    def look(self, belief: Belief) -> Found:
        """Searches from a belief; the belief itself is always expanded."""
        root, made = self._point(belief), 0
        if root.branches is None:
            self._expand(root)
            made = 1
        while made < self.steps and not _settled(root) and not self.stop():
            self._deepen(root)
            made += 1
        return self._found(root, made)

    def _point(self, belief: Belief) -> _Point:
        """The point of a belief; the same one when other steps led to the same belief."""
        key = key_of(belief)
        if key not in self._points or not _as_heavy(belief, self._points[key].belief):
            self._points[key] = self._new_point(belief)
        return self._points[key]

    def _new_point(self, belief: Belief) -> _Point:
        stop, _ = self.walk.stopping(belief)
        upper = self.looks.cost(belief)
        lower = min(float(self.known.below(belief.mass, belief.stand)), upper)
        return _Point(belief, upper, lower, stop)

    def _expand(self, point: _Point) -> None:
        options = self.walk.options(point.belief)
        uppers = self._costs(point.belief, options)
        point.branches = [
            _Branch(option, upper, np.minimum(self.known.below(option.masses, option.stand), upper))
            for option, upper in zip(options, uppers, strict=True)
        ]
        _back_up(point)

    def _costs(self, belief: Belief, options: Sequence[Option]) -> list[Array]:
        """Per option, the cost to go of each outcome under the repair plan."""
        if not options:
            return []
        counts = [len(option.masses) for option in options]
        stands = [o.stand for o, n in zip(options, counts, strict=True) for _ in range(n)]
        tries = np.array([_tries(belief, o) for o in options])
        masses = np.concatenate([option.masses for option in options])
        costs = self.plan.costs(masses, stands, np.repeat(tries, counts, axis=0))
        return np.split(costs, np.cumsum(counts)[:-1])

    def _deepen(self, root: _Point) -> None:
        """One expansion: down to where most is open, and the values back up."""
        path: list[tuple[_Point, _Branch, int]] = []
        point = root
        while point.branches is not None:
            branch = _promising(point)
            if branch is None:
                break
            outcome = int(np.argmax(branch.upper - branch.lower))
            branch.visits += 1
            path.append((point, branch, outcome))
            if outcome not in branch.behind:
                after = self.walk.after(point.belief, branch.option, outcome)
                branch.behind[outcome] = self._point(after)
            point = branch.behind[outcome]
        if point.branches is None:
            self._expand(point)
        for above, branch, outcome in reversed(path):
            below = branch.behind[outcome]
            branch.upper[outcome] = min(below.upper, branch.upper[outcome])
            branch.lower[outcome] = max(below.lower, branch.lower[outcome])
            _back_up(above)

    def _found(self, root: _Point, made: int) -> Found:
        total = float(root.belief.mass.sum())
        leave = self.walk.problem.ground.leave(root.belief.stand) * total
        ends = [float(root.belief.mass @ s.costs) + leave for s in self.walk.problem.stops]
        rated = [
            Rated(Choice(None, stop, cost), cost / total, cost / total)
            for stop, cost in enumerate(ends)
        ]
        rated += [
            Rated(Choice(b.option, -1, b.most), b.most / total, b.least / total)
            for b in root.branches or ()
        ]
        scale = max(1e-300, min(r.most for r in rated))
        # Rounding keeps equal steps in the order of the problem, whatever the machine.
        rated.sort(key=lambda r: round(r.most / scale, 9))
        return Found(tuple(rated), root.lower / total, made)


def _as_heavy(one: Belief, other: Belief) -> bool:
    mass = float(other.mass.sum())
    return abs(float(one.mass.sum()) - mass) <= 1e-9 * mass


def _tries(belief: Belief, option: Option) -> list[int]:
    tries = list(belief.tries)
    if option.kind == "repair":
        tries[option.number] += 1
    return tries


def _back_up(point: _Point) -> None:
    branches = point.branches or []
    point.upper = min([point.upper, *(b.most for b in branches)])
    point.lower = max(point.lower, min([point.stop, *(b.least for b in branches)]))


def _settled(point: _Point) -> bool:
    return point.upper - point.lower <= CLOSE * abs(point.upper) + NIL


def _promising(point: _Point) -> _Branch | None:
    """The branch to look behind: cheap as far as known, and with something left to gain."""
    best, chosen = point.upper, None
    score = float("inf")
    for branch in point.branches or ():
        open_ = branch.most - branch.least
        if branch.least >= best or open_ <= CLOSE * abs(branch.most) + NIL:
            continue
        mine = branch.most - EAGER * open_ / (1.0 + branch.visits)
        if mine < score:
            score, chosen = mine, branch
    return chosen

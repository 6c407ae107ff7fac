"""Policies, and what they cost when every outcome is followed."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Protocol

from diag.advice.plan.steps import NIL, Belief, Option, Walk, key_of


@dataclass(frozen=True, slots=True)
class Choice:
    """What to do at a belief: an option, or a way to stop when `option` is None.

    Attributes:
        stop: index of the way to stop, -1 with an option.
        cost: expected minutes from here as the policy sees it, weighted with the mass.
    """

    option: Option | None
    stop: int
    cost: float


class Policy(Protocol):
    """Says what to do at any belief."""

    def choose(self, belief: Belief) -> Choice:
        """The next step."""


def expected_cost(walk: Walk, policy: Policy) -> float:
    """Expected minutes of a policy from the start; it is asked once for each belief."""
    memo: dict[tuple[object, ...], float] = {}

    def cost(belief: Belief) -> float:
        total = float(belief.mass.sum())
        key = key_of(belief)
        if key not in memo:
            memo[key] = _followed(walk, belief, policy.choose(belief), cost) / total
        return memo[key] * total

    return cost(walk.start)


def _followed(walk: Walk, at: Belief, choice: Choice, cost: Callable[[Belief], float]) -> float:
    option = choice.option
    if option is None:
        stop = walk.problem.stops[choice.stop]
        leave = walk.problem.ground.leave(at.stand) * float(at.mass.sum())
        return float(at.mass @ stop.costs) + leave
    total = option.cost
    for outcome, mass in enumerate(option.masses):
        if mass.sum() > NIL * at.mass.sum():
            total += cost(walk.after(at, option, outcome))
    return total

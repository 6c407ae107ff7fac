"""Cost of the search and of simple orders over the optimum, on problems drawn from seeds."""

from __future__ import annotations

from itertools import count

from diag.advice.plan.exact import Exact
from diag.advice.plan.orders import fixed_order, greedy_information, p_over_c
from diag.advice.plan.policy import expected_cost
from diag.advice.plan.problem import Problem
from diag.advice.plan.search import Search
from diag.advice.plan.steps import Walk
from diag.errors import UsageError
from tests.advice.problems import random_problem

STEPS = 60
NAMES = (
    f"search, {STEPS} steps",
    "search, 1 step",
    "greedy information per min",
    "p/c, repairs only",
    "fixed order",
)


def measured(problems: int, most: int, steps: int = STEPS) -> tuple[list[list[float]], int]:
    """Ratios per problem, in the order of `NAMES`, and how many were too large to solve."""
    rows: list[list[float]] = []
    passed_over = 0
    for seed in count():
        problem = random_problem(seed)
        try:
            optimum = Exact(problem, most).cost()
        except UsageError:
            passed_over += 1
            continue
        rows.append([cost / optimum for cost in costs(problem, steps)])
        if len(rows) == problems:
            return rows, passed_over
    raise AssertionError("seeds do not end")


def costs(problem: Problem, steps: int) -> list[float]:
    """Expected minutes of each policy, all outcomes followed."""
    orders = (greedy_information, p_over_c, fixed_order)
    policies = [Search(problem, steps), Search(problem, 1), *(make(problem) for make in orders)]
    return [expected_cost(Walk(problem), policy) for policy in policies]

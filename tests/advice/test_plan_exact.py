"""The exact solver and the bounded search on problems whose answers are known elsewhere."""

from __future__ import annotations

import numpy as np
import pytest

from diag.advice.plan.exact import Exact
from diag.advice.plan.ground import Door
from diag.advice.plan.orders import greedy_information, p_over_c
from diag.advice.plan.policy import expected_cost
from diag.advice.plan.problem import Problem, Stop
from diag.advice.plan.search import Search
from diag.advice.plan.steps import Walk, bits
from diag.errors import UsageError
from tests.advice.problems import random_problem, repair_problem, test_sequencing
from tests.advice.ratios import measured

# Pattipati & Alexandridis 1990; inputs from memory, recomputed by enumeration.
P1 = test_sequencing(
    [0.70, 0.01, 0.02, 0.10, 0.05, 0.12],
    ["00000", "01001", "00110", "10011", "11000", "11110"],
    [1.0] * 5,
)
# Jensen et al.; from memory, recomputed by enumeration.
P2 = repair_problem([0.20, 0.25, 0.40, 0.15], [(0, 1), (1, 2), (2, 3)], [1, 1, 1])
# Constructed, solved exhaustively by hand.
SINGLES = [(0,), (1,), (2,)]
C1 = repair_problem([0.5, 0.3, 0.2], SINGLES, [10, 3, 4])
C2 = repair_problem([0.5, 0.3, 0.2], SINGLES, [10, 3, 4], question=[0.9, 0.2, 0.2])
C4 = repair_problem(
    [0.3, 0.2, 0.2, 0.3],
    [(0,), (1,), (2,), (3,)],
    [5, 2, 5, 4],
    opens={0: "panel", 1: "panel"},
    doors={"panel": Door(6.0)},
)
KNOWN = [
    pytest.param(P1, 2.18, {"t2", "t4"}, id="test sequencing"),
    pytest.param(P2, 1.45, {"a3"}, id="dependent actions"),
    pytest.param(C1, 10.8, {"a2"}, id="p/c tie"),
    pytest.param(C2, 9.65, {"Q"}, id="question first"),
    pytest.param(C4, 13.0, {"a4"}, id="shared access"),
]


def named(problem: Problem, policy: Exact | Search) -> str:
    option = policy.choose(Walk(problem).start).option
    assert option is not None
    steps = problem.checks if option.kind == "check" else problem.repairs
    return steps[option.number].id


@pytest.mark.parametrize(("problem", "optimum", "first"), KNOWN)
def test_optimum(problem: Problem, optimum: float, first: set[str]) -> None:
    solver = Exact(problem)
    assert solver.cost() == pytest.approx(optimum, abs=1e-9)
    assert named(problem, solver) in first
    assert expected_cost(Walk(problem), solver) == pytest.approx(optimum, abs=1e-9)


@pytest.mark.parametrize(("problem", "optimum", "first"), KNOWN)
def test_search_finds_the_optimum(problem: Problem, optimum: float, first: set[str]) -> None:
    assert expected_cost(Walk(problem), Search(problem)) == pytest.approx(optimum, abs=1e-9)
    assert named(problem, Search(problem)) in first


def test_greedy_information_is_not_optimal() -> None:
    """The same example: greedy information gain pays 2.86."""
    assert expected_cost(Walk(P1), greedy_information(P1)) == pytest.approx(2.86)


@pytest.mark.parametrize(
    ("test", "cost"), [("t1", 2.86), ("t2", 2.18), ("t3", 2.82), ("t4", 2.18), ("t5", 2.89)]
)
def test_cost_of_each_first_test(test: str, cost: float) -> None:
    """The same example, every first test followed by the best plan."""
    solver, walk = Exact(P1), Walk(P1)
    option = next(o for o in walk.options(walk.start) if P1.checks[o.number].id == test)
    after = [walk.after(walk.start, option, n) for n in range(2)]
    assert option.cost + sum(map(solver.value, after)) == pytest.approx(cost)


def test_shared_access_ignored_costs_more() -> None:
    """Constructed: the p/c order that does not know the opening pays 14.7 for 1, 2 apart.

    Knowing the opening but not that it is shared, p/c still cannot beat the optimum.
    """
    assert expected_cost(Walk(C4), p_over_c(C4)) >= 13.0


def test_question_tells_what_it_should() -> None:
    """Constructed: gain .397313 bits; P(yes) = .55."""
    walk = Walk(C2)
    question = next(o for o in walk.options(walk.start) if o.kind == "check")
    assert bits(question) == pytest.approx(0.397313, abs=1e-6)
    assert question.masses.sum(axis=1) == pytest.approx([0.45, 0.55])
    yes = question.masses[1] / question.masses[1].sum()
    assert yes[:3] == pytest.approx([0.81818, 0.10909, 0.07273], abs=1e-5)
    solver = Exact(C2)
    costs = [solver.value(walk.after(walk.start, question, n)) for n in (0, 1)]
    assert costs[1] / 0.55 == pytest.approx(10.83636, abs=1e-5)
    assert costs[0] / 0.45 == pytest.approx(5.97778, abs=1e-5)


def test_asked_once_a_persistent_question_is_gone() -> None:
    walk = Walk(C2)
    question = next(o for o in walk.options(walk.start) if o.kind == "check")
    after = walk.after(walk.start, question, 1)
    assert all(option.kind == "repair" for option in walk.options(after))


def test_search_is_the_same_every_time() -> None:
    problem = random_problem(3)
    first, second = (Search(problem, 20).look_from_start() for _ in range(2))
    assert [r.most for r in first.rated] == [r.most for r in second.rated]
    assert (first.lower, first.steps) == (second.lower, second.steps)


def test_search_stops_when_told() -> None:
    asked: list[int] = []

    def stop() -> bool:
        asked.append(1)
        return len(asked) > 3

    assert Search(random_problem(3), 1000, stop).look_from_start().steps == 4


def test_close_to_the_optimum_on_random_problems() -> None:
    """The optimum is recomputed by dynamic programming over all beliefs."""
    rows, _ = measured(40, most=400, steps=25)
    ratios = np.array(rows)
    assert (ratios >= 1.0 - 1e-6).all()
    assert ratios[:, 0].mean() <= 1.02
    assert ratios[:, 0].max() <= 1.10
    assert ratios[:, 0].mean() < ratios[:, 2:].mean(axis=0).min()


@pytest.mark.parametrize("seed", range(6))
def test_bounds_hold(seed: int) -> None:
    problem = random_problem(seed)
    found = Search(problem, 30).look_from_start()
    assert found.lower <= found.best.most + 1e-9
    try:
        optimum = Exact(problem, 800).cost()
    except UsageError:
        return
    assert found.lower <= optimum + 1e-6
    assert found.best.most >= optimum - 1e-6


def test_tables_that_do_not_fit_are_refused() -> None:
    with pytest.raises(UsageError, match="one row for each of 2"):
        Problem(np.array([0.5, 0.5]), (), (), (), (Stop("close", np.zeros(3)),))
    with pytest.raises(UsageError, match="add up to 1"):
        Problem(np.array([0.5, 0.4]), (), (), (), (Stop("close", np.zeros(2)),))

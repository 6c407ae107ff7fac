"""Abstract problems: the published ones, and random ones drawn from a seed."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from itertools import combinations

import numpy as np

from diag.advice.plan.ground import Door, Ground, Spell, Stand, Wants
from diag.advice.plan.problem import Array, Check, Condition, Problem, Repair, Stop, own_condition

NEVER = 1e6
"""Minutes that make a wrong way to stop no way at all."""


def test_sequencing(
    priors: Sequence[float], outcomes: Sequence[str], costs: Sequence[float]
) -> Problem:
    """Faultless tests that have to tell every state from every other; repairs cost nothing.

    Args:
        outcomes: per state, the outcomes of all tests as a string of 0 and 1.
    """
    conditions, checks = [], []
    for number, minutes in enumerate(costs):
        table = [[1.0 - int(row[number]), float(row[number])] for row in outcomes]
        condition, own = own_condition(table, persistent=True)
        conditions.append(condition)
        checks.append(Check(f"t{number + 1}", number, own, minutes))
    size = range(len(priors))
    stops = [Stop(f"s{i}", np.array([0.0 if i == j else NEVER for j in size])) for i in size]
    return Problem(np.array(priors), tuple(conditions), tuple(checks), (), tuple(stops))


test_sequencing.__test__ = False  # type: ignore[attr-defined]


def repair_problem(
    priors: Sequence[float],
    actions: Sequence[Sequence[int]],
    costs: Sequence[float],
    opens: Mapping[int, str] | None = None,
    doors: Mapping[str, Door] | None = None,
    question: Sequence[float] | None = None,
) -> Problem:
    """One fault, repairs that always work and are seen to work, until it is gone.

    Args:
        actions: per repair, the faults it removes.
        opens: the door each repair needs.
        question: P(yes | fault) of a question that costs 1 and can be asked once.
    """
    count = len(priors)
    sound = np.array([0.0] * count + [1.0])
    repairs = []
    for number, (faults, minutes) in enumerate(zip(actions, costs, strict=True)):
        after = np.array([count if f in faults else f for f in range(count + 1)])
        wants = Wants(opens=(opens[number],) if opens and number in opens else ())
        cost = np.full(count + 1, float(minutes))
        repairs.append(Repair(f"a{number + 1}", cost, after, sound, wants=wants))
    conditions: tuple[Condition, ...] = ()
    checks: tuple[Check, ...] = ()
    if question:
        condition, table = own_condition([[1 - q, q] for q in (*question, 0.5)], persistent=True)
        conditions, checks = (condition,), (Check("Q", 0, table, 1.0),)
    return Problem(
        np.array([*priors, 0.0]),
        conditions,
        checks,
        tuple(repairs),
        (Stop("close", NEVER * (1.0 - sound)),),
        Ground(doors=doors or {}),
    )


@dataclass(frozen=True)
class _Draw:
    """Random parts of one small problem: fault sets, closed under repair, and chance itself."""

    rng: np.random.Generator
    faults: int
    sets: tuple[frozenset[int], ...]

    def minutes(self, low: float, high: float) -> float:
        return float(np.exp(self.rng.uniform(np.log(low), np.log(high))).round(1))

    def wants(self) -> Wants:
        engine = str(self.rng.choice(["", "stopped", "running"], p=[0.3, 0.4, 0.3]))
        opens = ((), ("cowl",), ("bowl",))[int(self.rng.integers(3))]
        return Wants(engine, opens if engine != "running" else ())


def random_problem(seed: int) -> Problem:
    """Mixed checks, repairs, access, noise and two-fault hypotheses, small enough to solve."""
    rng = np.random.default_rng(seed)
    faults = 3 + int(rng.random() < 0.25)
    pairs = list(combinations(range(faults), 2))
    chosen = [pairs[i] for i in rng.choice(len(pairs), size=5 - faults, replace=False)]
    sets = [frozenset(), *(frozenset({f}) for f in range(faults)), *map(frozenset, chosen)]
    draw = _Draw(rng, faults, tuple(sets))
    odds = np.array([_odds(rng, len(s)) for s in sets])
    conditions, checks = _checks(draw)
    repairs = _repairs(draw)
    escalate = draw.minutes(150, 500)
    sound = np.array([not s for s in sets])
    stops = (
        Stop("close", np.where(sound, 0.0, escalate / 0.15)),
        Stop("escalate", np.full(len(sets), escalate)),
    )
    start = Stand("cold", frozenset({"cowl"} if rng.random() < 0.2 else ()))
    return Problem(odds / odds.sum(), conditions, checks, repairs, stops, _ground(draw), start)


def _odds(rng: np.random.Generator, size: int) -> float:
    scale = (0.3, 1.0, 0.15)[size]
    return float(scale * rng.gamma(1.0))


def _ground(draw: _Draw) -> Ground:
    running = frozenset({"running"})
    return Ground(
        {
            "cold": Spell(),
            "warm": Spell(draw.minutes(15, 30)),
            "running": Spell(draw.minutes(8, 20), draw.minutes(3, 10)),
        },
        {"stopped": ("cold", "warm"), "running": ("running",)},
        {("running", "warm"): 0.0, ("warm", "cold"): 60.0, ("running", "cold"): 60.0},
        {
            "cowl": Door(draw.minutes(5, 25), engine="stopped", shut_in=running),
            "bowl": Door(draw.minutes(10, 40), ("cowl",), "stopped", running),
        },
    )


def _seen(draw: _Draw) -> Array:
    """(sets,) chance that a condition is abnormal: some faults act on it, and a small leak."""
    strength = np.where(draw.rng.random(draw.faults) < 0.5, draw.rng.uniform(0.5, 1.0), 0.0)
    leak = float(draw.rng.choice([0.0, 0.03]))
    return np.array([1 - (1 - leak) * np.prod([1 - strength[f] for f in s]) for s in draw.sets])


def _checks(draw: _Draw) -> tuple[tuple[Condition, ...], tuple[Check, ...]]:
    rng, conditions, checks = draw.rng, [], []
    for number in range(2):
        abnormal = _seen(draw)
        chances = np.column_stack([1 - abnormal, abnormal])
        conditions.append(Condition(chances, chances))
        for look in range(1 + int(number == 0 and rng.random() < 0.3)):
            detects, alarm = rng.uniform(0.75, 1.0), rng.uniform(0.0, 0.15)
            table = np.array([[[1 - alarm, alarm], [1 - detects, detects]]])
            fresh = 1 + int(look == 0 and number == 1 and rng.random() < 0.2)
            name = f"c{number}.{look}"
            checks.append(Check(name, number, table, draw.minutes(2, 60), draw.wants(), fresh))
    return tuple(conditions), tuple(checks)


def _repairs(draw: _Draw) -> tuple[Repair, ...]:
    rng, repairs = draw.rng, []
    units = [{f} for f in range(draw.faults)]
    if draw.faults > 3 or rng.random() < 0.4:
        units = [{0, 1}, *units[2:]]
    proof = Wants("running") if rng.random() < 0.5 else Wants()
    missed, alarm = rng.uniform(0.0, 0.15), rng.uniform(0.0, 0.05)
    passes = np.array([1 - alarm if not s else missed for s in draw.sets])
    for number, unit in enumerate(units):
        after = np.array([_twin(draw.sets, s, unit) for s in draw.sets])
        wrong = np.array([0.0 if s & unit else 20.0 for s in draw.sets])
        repairs.append(
            Repair(
                f"r{number}",
                draw.minutes(10, 200) + wrong,
                after,
                passes,
                float(rng.choice([1.0, 0.95])),
                draw.wants(),
                draw.minutes(2, 10),
                proof,
                tries=1 + int(number == 0 and rng.random() < 0.1),
            )
        )
    return tuple(repairs)


def _twin(sets: Sequence[frozenset[int]], faults: frozenset[int], unit: set[int]) -> int:
    return list(sets).index(faults - unit)

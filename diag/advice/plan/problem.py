"""A troubleshooting problem without any oil in it: hypotheses, checks, repairs, ways to stop.

Decision-theoretic troubleshooting (Heckerman, Breese & Rommelse 1995): minutes are spent on
checks that tell and repairs that change the world until the work stops, either closed or
handed on. Hypotheses are sets of faults present *now*; a repair moves weight from a set to
its repaired twin, so that later findings see the repaired state. Checks look at conditions:
two checks of one condition, or two looks of a persistent check, share its state.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from diag.advice.plan.ground import Ground, Stand, Wants
from diag.errors import UsageError

Array = NDArray[np.float64]
Indices = NDArray[np.int64]
Mask = NDArray[np.bool_]


@dataclass(frozen=True, eq=False)
class Condition:
    """A true state that checks look at.

    Attributes:
        now: (hypotheses, states) chances of its states, all earlier findings included.
        fresh: (hypotheses, states) the same once a repair has changed the world.
    """

    now: Array
    fresh: Array


@dataclass(frozen=True, eq=False)
class Check:
    """Something that yields one of several outcomes.

    Attributes:
        table: (hypotheses or 1, states, outcomes) P(outcome | hypothesis, state).
        looks: how often it may be made while its condition stays the same.
        later: what it needs once something was repaired, where that differs from `wants`.
    """

    id: str
    condition: int
    table: Array
    minutes: float
    wants: Wants = field(default_factory=Wants)
    looks: int = 1
    later: Wants | None = None


@dataclass(frozen=True, eq=False)
class Repair:
    """Something that removes faults, with the verification that follows it.

    Attributes:
        minutes: (hypotheses,) of the repair with its parts, and what a wrong removal costs.
        after: (hypotheses,) index of the twin that a successful repair leaves.
        passes: (hypotheses,) P(the verification is passed | what is present after it).
        wants: what the repair needs; `proof_wants` what its verification needs.
        tries: how often it may be made.
    """

    id: str
    minutes: Array
    after: Indices
    passes: Array
    success: float = 1.0
    wants: Wants = field(default_factory=Wants)
    proof_minutes: float = 0.0
    proof_wants: Wants = field(default_factory=Wants)
    tries: int = 1


@dataclass(frozen=True, eq=False)
class Stop:
    """A way to end: closing, handing on, or naming a cause.

    Attributes:
        costs: (hypotheses,) minutes it costs when the hypothesis is true.
    """

    id: str
    costs: Array


@dataclass(frozen=True, eq=False)
class Problem:
    """Everything a plan depends on.

    Attributes:
        weights: (hypotheses,) probabilities that add up to one.

    Raises:
        UsageError: arrays that do not fit each other, or no way to stop.
    """

    weights: Array
    conditions: tuple[Condition, ...]
    checks: tuple[Check, ...]
    repairs: tuple[Repair, ...]
    stops: tuple[Stop, ...]
    ground: Ground = field(default_factory=Ground)
    stand: Stand = field(default_factory=Stand)

    def __post_init__(self) -> None:
        size = len(self.weights)
        rows = [
            *(len(c.now) for c in self.conditions),
            *(len(c.fresh) for c in self.conditions),
            *(len(array) for r in self.repairs for array in (r.minutes, r.after, r.passes)),
            *(len(s.costs) for s in self.stops),
        ]
        if any(n != size for n in rows):
            raise UsageError(f"every table of a plan needs one row for each of {size} hypotheses")
        if abs(float(self.weights.sum()) - 1.0) > 1e-9:
            raise UsageError("the weights of a plan must add up to 1")
        if not self.stops:
            raise UsageError("a plan needs at least one way to stop")


def own_condition(table: Sequence[Sequence[float]], persistent: bool) -> tuple[Condition, Array]:
    """A condition for one check alone, and the check's table on it.

    A persistent check shows again what it showed first: its condition is the outcome itself.
    A fresh one draws each look anew: its condition has a single state.

    Args:
        table: (hypotheses, outcomes) P(outcome | hypothesis).
    """
    chances = np.array(table, dtype=np.float64)
    if persistent:
        return Condition(chances, chances), np.eye(chances.shape[1])[None]
    single = np.ones((len(chances), 1))
    return Condition(single, single), chances[:, None, :]

"""The next step by expected minutes to a verified fix, with its rivals.

Checks, rectifications and ways to end compete in one list. What a step is worth is the cost of
the best plan found that begins with it; nothing that was spent before counts.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

from diag.advice.plan.draft import Draft, Situation, draft
from diag.advice.plan.problem import Array
from diag.advice.plan.search import Found, Rated, Search
from diag.advice.plan.steps import Option, bits

RIVALS = 4
"""Steps shown beside the chosen one."""


@dataclass(frozen=True, slots=True)
class Budget:
    """How long a search may take.

    Attributes:
        steps: expansions; alone they make a plan that is the same everywhere.
        stop: asked before each expansion whether the time is up.
    """

    steps: int = 100
    stop: Callable[[], bool] = lambda: False


@dataclass(frozen=True, slots=True)
class Answer:
    """What one answer to a step would mean.

    Attributes:
        answer: the outcome; `passed` or `failed` for the proof of a rectification.
        chance: P(answer).
        top: the likeliest cause then, `COMPONENT.MODE`, or empty for "nothing found".
        probability: of that cause then.
    """

    answer: str
    chance: float
    top: str
    probability: float


@dataclass(frozen=True, slots=True)
class Planned:
    """A step as the planner sees it.

    Attributes:
        id: of the check, the rectification, or `close` or `escalate`.
        kind: `indication`, `check`, `rectification`, `close` or `escalate`.
        minutes: expected until a verified fix, when the plan begins with it.
        least: no plan that begins with it costs less.
        bits: expected information about what is present.
        answers: what each answer would make the top cause.
    """

    id: str
    kind: str
    minutes: float
    least: float
    bits: float
    answers: tuple[Answer, ...]


@dataclass(frozen=True, slots=True)
class Plan:
    """The chosen step with its rivals.

    Attributes:
        steps: all that was rated, the fewest minutes first; the first is the chosen one.
        lower: no plan costs less, as far as the hypotheses and checks looked at go.
        searched: expansions made.
    """

    steps: tuple[Planned, ...]
    lower: float
    searched: int

    @property
    def chosen(self) -> Planned:
        return self.steps[0]

    @property
    def rivals(self) -> tuple[Planned, ...]:
        """The next best steps."""
        return self.steps[1 : 1 + RIVALS]

    def rated(self, step: str) -> Planned | None:
        """Any step by its id, for "why not this one?"; None when it tells too little."""
        return next((s for s in self.steps if s.id == step), None)


def plan(situation: Situation, budget: Budget | None = None) -> Plan:
    """Searches for the step with the fewest expected minutes to a verified fix."""
    budget = budget or Budget()
    made = draft(situation)
    found = Search(made.problem, budget.steps, budget.stop).look_from_start()
    return told(situation, made, found)


def told(situation: Situation, made: Draft, found: Found) -> Plan:
    """What a search found, in the words of the circuit."""
    steps = tuple(_planned(situation, made, rated) for rated in found.rated)
    return Plan(steps, found.lower, found.steps)


def _planned(situation: Situation, made: Draft, rated: Rated) -> Planned:
    option = rated.choice.option
    if option is None:
        name = made.problem.stops[rated.choice.stop].id
        return Planned(name, name, rated.most, rated.least, 0.0, ())
    if option.kind == "repair":
        name, kind = made.remedies[option.number].id, "rectification"
        words: tuple[str, ...] = ("passed", "failed")
    else:
        observable = made.observables[option.number]
        name, kind, words = observable.id, observable.record.kind, observable.outcomes
    answers = _answers(situation, made, option, words)
    return Planned(name, kind, rated.most, rated.least, bits(option), answers)


def _answers(
    situation: Situation, made: Draft, option: Option, words: tuple[str, ...]
) -> tuple[Answer, ...]:
    total = float(option.masses.sum())
    found = []
    for word, mass in zip(words, option.masses, strict=True):
        chance = float(mass.sum())
        if chance > 0.0:
            top, probability = _top(situation, made, mass / chance)
            found.append(Answer(word, chance / total, top, probability))
    return tuple(found)


def _top(situation: Situation, made: Draft, weight: Array) -> tuple[str, float]:
    """The likeliest cause, "nothing found" among them; ties by name."""
    refs, chances = situation.posterior.frame.refs, {"": 0.0}
    for faults, share in zip(made.sets, weight.tolist(), strict=True):
        for name in [refs[m] for m in faults] or [""]:
            chances[name] = chances.get(name, 0.0) + share
    top = min(chances, key=lambda name: (-round(chances[name], 9), name))
    return top, chances[top]


__all__ = ["Answer", "Budget", "Plan", "Planned", "Situation", "plan"]

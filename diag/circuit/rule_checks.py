"""Checks of rules: every name they speak of exists, and they can fire without contradiction."""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from itertools import combinations

from diag.circuit.faults import Faults
from diag.circuit.model import Circuit
from diag.circuit.rules import Rule, Selector, When, named_places
from diag.circuit.units import in_unit, split_number
from diag.errors import Problem, UsageError

BANDS = {
    "reading": ("above", "below"),
    "taken": ("later_than", "sooner_than"),
    "age": ("later_than", "sooner_than"),
    "likely": ("more_than", "less_than"),
}
"""Subjects with a lower and an upper bound."""


def rules_known(circuit: Circuit, faults: Faults) -> None:
    """Every observation, outcome, unit, component, state and step of the rules exists."""
    for rule in circuit.rules:
        for place in named_places(rule):
            if place not in circuit.observables:
                known = circuit.observables
                faults.dangling(
                    rule.where, f"{rule.id}.{place}", "observation", place, known, "observations"
                )
        for when in rule.when.leaves():
            _statement_known(circuit, rule, when, faults)
        for selector in (rule.blocks, rule.at):
            if selector is not None:
                _selector_known(circuit, rule, selector, faults)
        if rule.instead:
            _finding_known(circuit, rule, faults)
        faults.expect(rule.where, rule.id, "raises", rule.raises, "component", circuit.components)


def _statement_known(circuit: Circuit, rule: Rule, when: When, faults: Faults) -> None:
    where, owner = when.where, f"{rule.id}.when"
    observable = circuit.observables.get(when.place or "")
    if when.finding and observable:
        faults.expect(where, owner, "reads", when.reads, "outcome", observable.outcomes)
    if (when.reading or when.change) and observable:
        for word in ("above", "below", "faster_than"):
            if text := getattr(when, word):
                _quantity_fits(circuit, when, word, text, owner, faults)
    states = circuit.engine_states
    faults.expect(where, owner, "engine", when.engine, "engine state", states, "engine_states")
    if when.open:
        faults.expect(where, owner, "open", (when.open,), "opening", circuit.openings, "openings")
    if when.worked_on and when.worked_on != "any":
        known = circuit.components
        faults.expect(where, owner, "worked_on", (when.worked_on,), "component", known)
    if when.likely:
        causes = (*circuit.modes, *circuit.components, "unlisted", "nothing")
        faults.expect(where, owner, "likely", (when.likely,), "cause", causes)


def _quantity_fits(
    circuit: Circuit, when: When, word: str, text: str, owner: str, faults: Faults
) -> None:
    observable = circuit.observables[when.place or ""]
    scale = observable.record.scale
    if scale is None:
        message = f"{observable.id} takes no number"
        faults.note(when.where, f"{owner}.{word}", message, (word,), text)
        return
    parts = split_number(text)
    assert parts is not None
    try:
        number = in_unit(*parts, scale.unit, observable.id)
    except UsageError as error:
        faults.note(when.where, f"{owner}.{word}", str(error), (word,), text, scale.unit)
        return
    low, high = scale.range
    if word != "faster_than" and not low <= number <= high:
        accepted = f"{low:g} to {high:g} {scale.unit}"
        message = "outside the range of the instrument"
        faults.note(when.where, f"{owner}.{word}", message, (word,), text, accepted)


def _selector_known(circuit: Circuit, rule: Rule, selector: Selector, faults: Faults) -> None:
    where, owner = selector.where, rule.id
    states = circuit.engine_states
    faults.expect(where, owner, "engine", selector.engine, "engine state", states, "engine_states")
    faults.expect(where, owner, "opens", selector.opens, "opening", circuit.openings, "openings")
    known = {*(o.record.id for o in circuit.observables.values()), *circuit.remedies}
    faults.expect(where, owner, "steps", selector.steps, "step", known)


def _finding_known(circuit: Circuit, rule: Rule, faults: Faults) -> None:
    place, _, value = rule.instead.partition("=")
    observable = circuit.observables.get(place)
    if observable and value not in observable.outcomes:
        accepted = ", ".join(observable.outcomes)
        message = "no such outcome"
        faults.note(rule.where, f"{rule.id}.instead", message, ("instead",), value, accepted)


def rule_doubts(circuit: Circuit) -> Iterator[Problem]:
    """Rules that can never fire, and pairs that contradict each other."""
    for rule in circuit.rules:
        for reason in _impossible(circuit, rule.when):
            message = f"rule {rule.id} can never fire: {reason}"
            yield Problem(rule.where, f"rules.{rule.id}", message, doubt=True)
    for one, other in combinations(circuit.rules, 2):
        if reason := _contradiction(one, other):
            message = f"rules {one.id} and {other.id} contradict each other: {reason}"
            yield Problem(other.where, f"rules.{other.id}", message, doubt=True)


def _impossible(circuit: Circuit, when: When) -> Iterator[str]:
    if when.all:
        yield from _clash(when.all)
        for inner in when.all:
            yield from _impossible(circuit, inner)
    elif when.any:
        reasons = [list(_impossible(circuit, inner)) for inner in when.any]
        if all(reasons):
            yield from reasons[0]
    elif when.subject in BANDS:
        low, high = (_bound(circuit, when, word) for word in BANDS[when.subject])
        if low >= high:
            yield f"{when.place or when.likely} cannot be above {low:g} and below {high:g}"


def _bound(circuit: Circuit, when: When, word: str) -> float:
    value = getattr(when, word)
    if value is None:
        return -math.inf if word in ("above", "later_than", "more_than") else math.inf
    if isinstance(value, str):
        observable = circuit.observables[when.place or ""]
        parts, scale = split_number(value), observable.record.scale
        assert parts is not None
        return in_unit(*parts, scale.unit, observable.id) if scale else parts[0]
    return float(value)


def _clash(inner: Sequence[When]) -> Iterator[str]:
    """Statements of one `all` that exclude each other."""
    for one, other in combinations(inner, 2):
        if one.finding and one.finding == other.finding and not {*one.reads} & {*other.reads}:
            yield f"{one.finding} cannot read both"
        if one.engine and other.engine and not {*one.engine} & {*other.engine}:
            yield "the engine cannot be in both states"
        if one.people and other.people and one.people != other.people:
            yield "people cannot be both near and clear"


def _contradiction(one: Rule, other: Rule) -> str:
    """Why two rules that fire on the same grounds cannot both be followed, or nothing."""
    if one.when.model_dump() != other.when.model_dump():
        return ""
    if one.finding and one.finding == other.finding and one.kind != other.kind:
        return f"{one.finding} is {one.kind} for one and {other.kind} for the other"
    for hold, again in ((one, other), (other, one)):
        if hold.kind == "hold" and again.again and hold.blocks:
            name = again.again.partition("@")[0]
            if name in hold.blocks.steps:
                return f"one holds {name}, the other asks for it"
    return ""

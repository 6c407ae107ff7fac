"""Which rules of a circuit fire on a case, and on what grounds.

Evaluation is pure: the case, the clock and the odds come as arguments. Rules that decide what
counts as a finding are evaluated before the odds are known, the others after.
"""

from __future__ import annotations

from collections.abc import Callable, Container, Iterable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from datetime import datetime

from diag.advice.steps import NextStep, Place, check_step, meets, needs_of, wanted_openings
from diag.belief.evidence import Finding, number_of, outcome_of
from diag.circuit.model import Circuit, Observable, Remedy
from diag.circuit.records import Needs
from diag.circuit.rules import ON_FINDINGS, Rule, Selector, When, in_words
from diag.circuit.units import in_unit, split_number


@dataclass(frozen=True, slots=True)
class Sighting:
    """A finding as rules look at it.

    Attributes:
        at: when it was taken.
        minutes_after_stop: how long after shutdown, where that is known.
        previous: the finding of the same observation before it, with its time.
    """

    finding: Finding
    at: datetime
    minutes_after_stop: float | None = None
    previous: tuple[Finding, datetime] | None = None


@dataclass(frozen=True, slots=True)
class Odds:
    """What rules may ask of the odds."""

    chance: Callable[[str], float]
    """Probability of COMPONENT.MODE, COMPONENT, `unlisted` or `nothing`."""
    conflict: Callable[[], float]
    nothing_worth: Callable[[], bool]


@dataclass(frozen=True, slots=True)
class View:
    """The case as rules look at it; `now` is the time of the latest event."""

    circuit: Circuit
    sightings: Mapping[str, Sighting]
    now: datetime
    place: Place = field(default_factory=Place)
    worked_on: frozenset[str] = frozenset()
    both_engines: bool = False
    odds: Odds | None = None


@dataclass(frozen=True, slots=True)
class Firing:
    """A rule that applies, with the statements that made it."""

    rule: Rule
    because: tuple[str, ...]


def fired(view: View, kinds: Iterable[str]) -> tuple[Firing, ...]:
    """The rules of these kinds that apply, in the order of the circuit."""
    wanted = set(kinds)
    found = []
    for rule in view.circuit.rules:
        if rule.kind in wanted and (because := grounds(rule.when, view)) is not None:
            found.append(Firing(rule, because))
    return tuple(found)


def grounds(when: When, view: View) -> tuple[str, ...] | None:
    """The plain statements that make `when` true, or None where it is false."""
    if when.all:
        parts = [grounds(inner, view) for inner in when.all]
        return None if None in parts else tuple(x for part in parts for x in part or ())
    if when.any:
        return next((g for inner in when.any if (g := grounds(inner, view)) is not None), None)
    if when.no is not None:
        return (in_words(when),) if grounds(when.no, view) is None else None
    return (_told(when, view),) if _STATEMENTS[when.subject](when, view) else None


def _told(when: When, view: View) -> str:
    sighting = view.sightings.get(when.place or "")
    return str(sighting.finding) if when.finding and sighting else in_words(when)


def _finding(when: When, view: View) -> bool:
    sighting = view.sightings.get(when.finding or "")
    return sighting is not None and outcome_of(sighting.finding) in when.reads


def _reading(when: When, view: View) -> bool:
    sighting = view.sightings.get(when.reading or "")
    number = number_of(sighting.finding) if sighting else None
    if sighting is None or number is None:
        return False
    observable = sighting.finding.observable
    above = when.above is None or number > _quantity(observable, when.above)
    return above and (when.below is None or number < _quantity(observable, when.below))


def _quantity(observable: Observable, text: str) -> float:
    parts, scale = split_number(text), observable.record.scale
    assert parts is not None
    assert scale is not None
    return in_unit(*parts, scale.unit, observable.id)


def _taken(when: When, view: View) -> bool:
    sighting = view.sightings.get(when.taken or "")
    minutes = sighting.minutes_after_stop if sighting else None
    return minutes is not None and _within(when, minutes)


def _age(when: When, view: View) -> bool:
    sighting = view.sightings.get(when.age or "")
    return sighting is not None and _within(when, minutes_between(sighting.at, view.now))


def _within(when: When, minutes: float) -> bool:
    later = when.later_than is None or minutes > when.later_than
    return later and (when.sooner_than is None or minutes < when.sooner_than)


def _change(when: When, view: View) -> bool:
    sighting = view.sightings.get(when.change or "")
    if sighting is None or sighting.previous is None or when.faster_than is None:
        return False
    before, at = sighting.previous
    numbers = number_of(before), number_of(sighting.finding)
    minutes = minutes_between(at, sighting.at)
    if numbers[0] is None or numbers[1] is None or minutes < 0:
        return False
    limit = _quantity_of_change(sighting.finding.observable, when.faster_than)
    return abs(numbers[1] - numbers[0]) > limit * minutes


def _quantity_of_change(observable: Observable, text: str) -> float:
    """A difference in the unit of the scale; 10 degF of change are 5.6 degC of change."""
    parts = split_number(text)
    assert parts is not None
    here = _quantity(observable, text)
    return here - _quantity(observable, f"0{parts[1]}")


def _engine(when: When, view: View) -> bool:
    return view.place.engine in when.engine


def _stopped_longer(when: When, view: View) -> bool:
    minutes = minutes_stopped(view)
    return minutes is not None and minutes > (when.stopped_longer_than or 0.0)


def _stopped_less(when: When, view: View) -> bool:
    minutes = minutes_stopped(view)
    return minutes is not None and minutes < (when.stopped_less_than or 0.0)


def minutes_stopped(view: View) -> float | None:
    """Minutes since the engine stopped, where that is known."""
    place = view.place
    if place.since is None or place.engine not in ("cold", "hot_stopped"):
        return None
    return minutes_between(place.since, view.now)


def minutes_between(start: datetime, end: datetime) -> float:
    """Minutes from `start` to `end`."""
    return (end - start).total_seconds() / 60.0


def _open(when: When, view: View) -> bool:
    return when.open in view.place.opened


def _people(when: When, view: View) -> bool:
    return (when.people == "near") == view.place.people_near


def _worked_on(when: When, view: View) -> bool:
    return bool(view.worked_on) if when.worked_on == "any" else when.worked_on in view.worked_on


def _both_engines(when: When, view: View) -> bool:
    return view.both_engines == when.both_engines


def _likely(when: When, view: View) -> bool:
    if view.odds is None:
        return False
    chance = view.odds.chance(when.likely or "")
    more = when.more_than is None or chance > when.more_than
    return more and (when.less_than is None or chance < when.less_than)


def _conflict(when: When, view: View) -> bool:
    return view.odds is not None and view.odds.conflict() > (when.conflict_above or 0.0)


def _nothing_worth(when: When, view: View) -> bool:
    return view.odds is not None and view.odds.nothing_worth() == when.nothing_worth


_STATEMENTS: Mapping[str, Callable[[When, View], bool]] = {
    "finding": _finding,
    "reading": _reading,
    "taken": _taken,
    "age": _age,
    "change": _change,
    "engine": _engine,
    "stopped_longer_than": _stopped_longer,
    "stopped_less_than": _stopped_less,
    "open": _open,
    "people": _people,
    "worked_on": _worked_on,
    "both_engines": _both_engines,
    "likely": _likely,
    "conflict_above": _conflict,
    "nothing_worth": _nothing_worth,
}


# -- what firings do --------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class Verdict:
    """What the rules on findings decided.

    Attributes:
        ignored: findings that do not count, with the rule that says so.
        added: findings that a veto puts in their place, `NAME@POINT=VALUE`.
        raised: components to factors on their modes' prior odds.
    """

    firings: tuple[Firing, ...] = ()
    ignored: Mapping[str, Rule] = field(default_factory=dict)
    added: tuple[str, ...] = ()
    raised: tuple[tuple[str, float], ...] = ()


def judge_findings(view: View) -> Verdict:
    """Applies the rules that decide what counts."""
    firings = fired(view, ON_FINDINGS)
    ignored = {f.rule.finding: f.rule for f in firings if f.rule.finding}
    added = [f.rule.instead for f in firings if f.rule.instead]
    raised: dict[str, float] = {}
    for firing in firings:
        for component, factor in firing.rule.raises.items():
            if component in view.circuit.components:
                raised[component] = raised.get(component, 1.0) * factor
    kept = tuple(dict.fromkeys(x for x in added if x.partition("=")[0] not in view.sightings))
    return Verdict(firings, ignored, kept, tuple(sorted(raised.items())))


def blocks(
    selector: Selector, circuit: Circuit, step: Observable | Remedy, place: Place, recalled: bool
) -> bool:
    """Whether a hold applies to a step, done from where the work stands."""
    name, needs = _name_and_needs(step, recalled)
    if name in selector.steps or needs.engine in selector.engine:
        return True
    if not meets(needs.engine, place.engine):
        # The step is done in another engine state than the one the rule sees.
        return False
    return any(n in selector.opens for n in wanted_openings(circuit, needs, place))


def concerns(selector: Selector, step: Observable | Remedy, recalled: bool) -> bool:
    """Whether a caution belongs to a step."""
    name, needs = _name_and_needs(step, recalled)
    chosen = name in selector.steps or needs.engine in selector.engine
    return chosen or bool(set(needs.opens) & set(selector.opens))


def _name_and_needs(step: Observable | Remedy, recalled: bool) -> tuple[str, Needs]:
    if isinstance(step, Observable):
        return step.record.id, needs_of(step, recalled)
    return step.id, step.record.needs


def with_rules(
    steps: Sequence[NextStep], firings: Sequence[Firing], view: View, recalled: bool
) -> tuple[list[NextStep], list[NextStep]]:
    """Steps as the rules leave them, and the steps that a rule holds."""
    circuit = view.circuit
    things: dict[str, Observable | Remedy] = {**circuit.observables, **circuit.remedies}
    free: list[NextStep] = []
    held: list[NextStep] = []
    for step in steps:
        thing = things.get(step.id)
        if thing is None:
            free.append(step)
            continue
        reasons, cautions = _said(firings, view, thing, recalled)
        made = replace(step, held=reasons, cautions=(*step.cautions, *cautions))
        (held if reasons else free).append(made)
    return free, held


def _said(
    firings: Sequence[Firing], view: View, thing: Observable | Remedy, recalled: bool
) -> tuple[tuple[str, ...], tuple[str, ...]]:
    """Reasons to hold a step, and cautions to show at it."""
    held, cautions = [], []
    for rule in (firing.rule for firing in firings):
        if rule.blocks and blocks(rule.blocks, view.circuit, thing, view.place, recalled):
            held.append(rule.text)
        if rule.at and concerns(rule.at, thing, recalled):
            cautions.append(rule.text)
    return tuple(held), tuple(cautions)


def asked_again(
    firings: Sequence[Firing], view: View, not_possible: Container[str], recalled: bool
) -> list[NextStep]:
    """Observations that a rule wants made again, with its conditions as a note."""
    circuit, found = view.circuit, []
    for rule in (firing.rule for firing in firings):
        if rule.again and rule.again not in not_possible:
            observable = circuit.observables[rule.again]
            step = check_step(circuit, observable, 0.0, view.place, recalled)
            found.append(replace(step, note=rule.text))
    return list({step.id: step for step in found}.values())


def recheck(
    view: View, finding: Finding, not_possible: Container[str], recalled: bool
) -> list[NextStep]:
    """Other looks at what a doubtful finding looked at, cheapest first, then the same look."""
    circuit, own = view.circuit, finding.observable
    others = [
        observable
        for observable in circuit.observables.values()
        if observable.node == own.node
        and observable.id not in not_possible
        and (observable.id == own.id or observable.id not in view.sightings)
    ]
    steps = [check_step(circuit, other, 0.0, view.place, recalled) for other in others]
    # The same look errs the same way when its error is persistent: another one is better.
    steps.sort(key=lambda s: (s.id == own.id, s.expected_minutes, s.id))
    note = f"The findings do not hang together; {finding} fits least. Look again."
    return [replace(step, note=note) for step in steps]

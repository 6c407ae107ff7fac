"""The session: a fold over events, and what follows from the state it reaches.

Nothing here knows a clock, a file or a screen. A front end sends events and renders what
comes back; the findings log is the list of those events.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from datetime import UTC, datetime
from functools import cached_property
from typing import Any

import numpy as np

from diag.advice.reasons import Reason, reasons
from diag.advice.rules import (
    Firing,
    Odds,
    Sighting,
    Verdict,
    View,
    asked_again,
    fired,
    judge_findings,
    minutes_between,
    recheck,
    with_rules,
)
from diag.advice.steps import NOTICE, NextStep, Place, meets, next_steps
from diag.belief.conflict import conflict_bits
from diag.belief.evidence import Finding, make_finding, parse_finding
from diag.belief.explain import suspect
from diag.belief.frame import Raised, World
from diag.belief.hypotheses import Engine, Posterior
from diag.belief.outlook import Outlook
from diag.circuit.model import UNLISTED, Circuit
from diag.errors import InputError, UnknownName, UsageError
from diag.record.events import (
    AnyEvent,
    Closed,
    Doubted,
    Found,
    NotPossible,
    Opened,
    Rectified,
    RuleFired,
    Standing,
    StateChanged,
    Withdrawn,
)
from diag.record.narrate import NOTHING, cause_title

CONFLICT_BITS = 3.0
"""Conflict from which a re-check is proposed. Judgement."""
TOP = 5
"""Causes kept in a standing."""


@dataclass(frozen=True, slots=True)
class Taken:
    """A finding of the case: which event brought it, and what it says."""

    number: int
    finding: Finding
    complaint: bool
    at: datetime
    minutes_after_stop: float | None = None
    superseded: bool = False


@dataclass(frozen=True, slots=True)
class CaseState:
    """Where a case stands after its events.

    Attributes:
        events: everything that happened, withdrawn or not.
        taken: findings that were not withdrawn, in the order in which they came.
        not_possible: steps that cannot be done.
        world: modes restored so far, each with the chance that it worked.
        unproven: rectifications done whose verification is still open.
    """

    circuit: Circuit
    events: tuple[AnyEvent, ...] = ()
    opened: Opened | None = None
    taken: tuple[Taken, ...] = ()
    not_possible: frozenset[str] = frozenset()
    place: Place = field(default_factory=Place)
    world: World = ()
    rectified: tuple[Rectified, ...] = ()
    unproven: tuple[str, ...] = ()
    closed: Closed | None = None

    @property
    def findings(self) -> tuple[Finding, ...]:
        """Findings that stand: neither withdrawn nor superseded."""
        return tuple(t.finding for t in self.taken if not t.superseded)

    @property
    def done(self) -> set[str]:
        """Steps that need not be proposed: taken since the last rectification, or impossible."""
        keys = {t.finding.key for t in self.taken if t.finding.world == self.world}
        return keys | self.not_possible

    @property
    def undoable(self) -> AnyEvent | None:
        """The latest event that can be taken back."""
        gone = {e.target for e in self.events if isinstance(e, Withdrawn)}
        kinds = (Found, Doubted, NotPossible, StateChanged, Rectified)
        live = (e for e in reversed(self.events) if isinstance(e, kinds) and e.number not in gone)
        return next(live, None)


def fold(circuit: Circuit, events: Iterable[AnyEvent]) -> CaseState:
    """The state after `events`.

    Raises:
        UsageError: an event does not fit the state it meets; names the event.
        UnknownName: an event names something that the circuit does not have.
    """
    state = CaseState(circuit)
    for event in events:
        state = advance(state, event)
    return state


def advance(state: CaseState, event: AnyEvent) -> CaseState:
    """The state after one more event; see `fold` for what it raises."""
    if state.closed is not None:
        raise UsageError("the case is closed; nothing can be added")
    if (state.opened is None) != isinstance(event, Opened):
        raise UsageError("a case begins with its opening, once")
    if isinstance(event, Withdrawn):
        after = _without(state, event)
    else:
        after = _STEPS[type(event)](state, event) if type(event) in _STEPS else state
    return replace(after, events=(*state.events, event))


def _opened(state: CaseState, event: Opened) -> CaseState:
    for name in event.worked_on:
        if name not in state.circuit.components:
            raise UnknownName("component", name, state.circuit.components)
    return replace(state, opened=event)


def _found(state: CaseState, event: Found) -> CaseState:
    observable = state.circuit.observable(event.name, event.point)
    finding = replace(make_finding(observable, event.value), world=state.world)
    taken = tuple(
        replace(t, superseded=True)
        if t.finding.key == finding.key and t.finding.world == finding.world
        else t
        for t in state.taken
    )
    proven = tuple(v for v in state.unproven if v != finding.key)
    new = Taken(event.number, finding, event.complaint, event.at, _after_stop(state, event))
    return replace(state, taken=(*taken, new), unproven=proven)


def _after_stop(state: CaseState, event: Found) -> float | None:
    """Minutes after shutdown: as the person says, else since the engine was reported stopped."""
    place = state.place
    if event.minutes_after_stop is not None or place.since is None:
        return event.minutes_after_stop
    return minutes_between(place.since, event.at) if meets("stopped", place.engine) else None


def _doubted(state: CaseState, event: Doubted) -> CaseState:
    if all(t.number != event.target for t in state.taken):
        raise UsageError(f"event {event.target} is not a finding that counts")
    taken = tuple(
        replace(t, finding=replace(t.finding, trust=event.trust)) if t.number == event.target else t
        for t in state.taken
    )
    return replace(state, taken=taken)


def _not_possible(state: CaseState, event: NotPossible) -> CaseState:
    known = (*state.circuit.observables, *state.circuit.remedies)
    if event.step not in known:
        raise UnknownName("step", event.step, known)
    return replace(state, not_possible=state.not_possible | {event.step})


def _state_changed(state: CaseState, event: StateChanged) -> CaseState:
    circuit = state.circuit
    engine = event.engine or state.place.engine
    if engine not in circuit.engine_states:
        raise UnknownName("engine state", engine, circuit.engine_states)
    for name in (*event.opened, *event.closed):
        if name not in circuit.openings:
            raise UnknownName("opening", name, circuit.openings)
    opened = (state.place.opened | set(event.opened)) - set(event.closed)
    # Cooling down is no new state of rest: the clock runs from the stop.
    rests = meets("stopped", engine) and meets("stopped", state.place.engine)
    since = event.at if event.engine and not (rests and state.place.since) else state.place.since
    near = state.place.people_near if event.people_clear is None else not event.people_clear
    return replace(state, place=Place(engine, opened, since, near))


def _rectified(state: CaseState, event: Rectified) -> CaseState:
    remedies = state.circuit.remedies
    if event.rectification not in remedies:
        raise UnknownName("rectification", event.rectification, remedies)
    remedy = remedies[event.rectification]
    restored = tuple((ref, remedy.record.success) for ref in remedy.restores)
    return replace(
        state,
        world=(*state.world, *restored),
        rectified=(*state.rectified, event),
        unproven=(*state.unproven, remedy.record.verify),
    )


def _closed(state: CaseState, event: Closed) -> CaseState:
    if event.outcome == "cause_confirmed" and not event.causes:
        raise UsageError("closing with a confirmed cause needs the cause")
    modes = state.circuit.modes
    for ref in event.causes:
        if ref not in modes and ref != UNLISTED:
            raise UnknownName("cause", ref, (*modes, UNLISTED))
    if event.verification is None and not event.not_verified_because.strip():
        raise UsageError("closing needs a verification finding, or the statement why none was done")
    if event.verification is not None:
        _check_verification(state, event.verification)
    return replace(state, closed=event)


def _check_verification(state: CaseState, number: int) -> None:
    proof = next((t for t in state.taken if t.number == number), None)
    if proof is None:
        raise UsageError(f"event {number} is not a finding of this case")
    if proof.superseded or proof.finding.world != state.world:
        raise UsageError(f"finding {number} was taken before the last rectification")


def _without(state: CaseState, event: Withdrawn) -> CaseState:
    """The state as if the target had never happened."""
    taken_back = {e.target for e in state.events if isinstance(e, Withdrawn)}
    target = next((e for e in state.events if e.number == event.target), None)
    fixed = (Opened, Withdrawn, Closed)
    if target is None or isinstance(target, fixed) or event.target in taken_back:
        raise UsageError(f"event {event.target} cannot be withdrawn")
    gone = taken_back | {event.target}
    doubts = {e.number for e in state.events if isinstance(e, Doubted) and e.target in gone}
    kept = [
        e
        for e in state.events
        if not isinstance(e, Withdrawn) and e.number not in gone and e.number not in doubts
    ]
    return fold(state.circuit, kept)


_STEPS: Mapping[type, Callable[[CaseState, Any], CaseState]] = {
    Opened: _opened,
    Found: _found,
    Doubted: _doubted,
    NotPossible: _not_possible,
    StateChanged: _state_changed,
    Rectified: _rectified,
    Closed: _closed,
}


def rule_view(state: CaseState) -> View:
    """The case as rules look at it, before any odds are known."""
    sightings: dict[str, Sighting] = {}
    for taken in state.taken:
        if taken.finding.world != state.world and taken.finding.key in sightings:
            continue
        earlier = sightings.get(taken.finding.key)
        previous = (earlier.finding, earlier.at) if earlier else None
        sightings[taken.finding.key] = Sighting(
            taken.finding, taken.at, taken.minutes_after_stop, previous
        )
    head = state.opened
    return View(
        circuit=state.circuit,
        sightings=sightings,
        now=state.events[-1].at if state.events else datetime.min.replace(tzinfo=UTC),
        place=state.place,
        worked_on=frozenset(head.worked_on if head else ()),
        both_engines=bool(head and head.both_engines),
    )


def counted_findings(state: CaseState, verdict: Verdict) -> tuple[Finding, ...]:
    """The findings that count: those that stand, as the rules leave them."""
    kept = [f for f in state.findings if f.key not in verdict.ignored or f.world != state.world]
    added = [parse_finding(state.circuit, text) for text in verdict.added]
    return (*kept, *(replace(finding, world=state.world) for finding in added))


def _firing_key(firing: Firing) -> tuple[str, ...]:
    return (firing.rule.id, *firing.because)


class Assessment:
    """What the findings of one state mean: causes, hypotheses and the next steps.

    Args:
        posterior: of the findings that count.
        state: the case.
        verdict: what the rules decided about the findings.
    """

    def __init__(self, posterior: Posterior, state: CaseState, verdict: Verdict) -> None:
        self.posterior, self.state, self.verdict = posterior, state, verdict
        self.circuit = state.circuit

    @cached_property
    def outlook(self) -> Outlook:
        return Outlook(self.posterior, self.state.world)

    @cached_property
    def marginals(self) -> dict[str, float]:
        """Probability of each mode at the time of the complaint."""
        return dict(zip(self.posterior.frame.refs, self.posterior.marginals.tolist(), strict=True))

    @cached_property
    def present(self) -> dict[str, float]:
        """Probability that each mode is still there, after the rectifications done."""
        found = dict(self.marginals)
        for ref, success in self.state.world:
            found[ref] *= 1.0 - success
        return found

    @property
    def unlisted(self) -> float:
        return self.posterior.unlisted

    @cached_property
    def standing(self) -> Standing:
        """The top causes, the unlisted cause and "nothing found" among them."""
        rows = [*self.marginals.items(), (NOTHING, self.posterior.nothing_wrong)]
        rows.sort(key=lambda row: (-row[1], row[0]))
        causes = tuple((ref, round(p, 6)) for ref, p in rows[:TOP])
        return Standing(causes=causes)

    @property
    def _recalled(self) -> bool:
        """Indications may be taken from the report until something was rectified."""
        return not self.state.world

    @cached_property
    def _by_worth(self) -> list[NextStep]:
        """Steps before the rules had their say."""
        return next_steps(
            self.circuit,
            self.outlook,
            self.present,
            self.state.place,
            self.state.done,
            self.state.unproven,
            recalled=self._recalled,
            sound=self.sound,
        )

    @cached_property
    def firings(self) -> tuple[Firing, ...]:
        """Every rule that applies now, with its grounds."""
        odds = Odds(self.chance, lambda: self.conflict_bits, self._nothing_worth)
        view = replace(rule_view(self.state), odds=odds)
        return (*self.verdict.firings, *fired(view, ("hold", "caution", "repeat", "escalate")))

    def _nothing_worth(self) -> bool:
        return self._by_worth[0].kind == "escalate"

    def chance(self, name: str) -> float:
        """Probability of COMPONENT.MODE, COMPONENT, `unlisted` or `nothing`."""
        if name in ("unlisted", "nothing"):
            return self.unlisted if name == "unlisted" else self.posterior.nothing_wrong
        if "." in name:
            return self.marginals[name]
        return sum(p for ref, p in self.marginals.items() if ref.partition(".")[0] == name)

    @cached_property
    def _ruled(self) -> tuple[list[NextStep], list[NextStep]]:
        view, recalled = rule_view(self.state), self._recalled
        free, held = with_rules(self._by_worth, self.firings, view, recalled)
        again = asked_again(self.firings, view, self.state.not_possible, recalled)
        first, more = with_rules(again, self.firings, view, recalled)
        if self.doubtful is not None:
            looks = recheck(view, self.doubtful[0], self.state.not_possible, recalled)
            first += with_rules(looks, self.firings, view, recalled)[0][:1]
        named = {step.id for step in first}
        rest = [step for step in free if step.id not in named]
        alarms = [f.rule for f in self.firings if f.rule.kind == "escalate"]
        if alarms:
            end = replace(rest[-1], note=" ".join(rule.text for rule in alarms))
            rest = [step for step in rest if step.kind != "escalate"]
            # A conflict is looked into first; what is dangerous or hopeless is handed over first.
            urgent = any(rule.when.subject != "conflict_above" for rule in alarms)
            first = [end, *first] if urgent else [*first, end]
        return [*first, *rest], [*more, *held]

    @property
    def steps(self) -> list[NextStep]:
        """Steps in the order in which they are proposed."""
        return self._ruled[0]

    @property
    def held(self) -> list[NextStep]:
        """Steps that a rule holds now, with the reasons."""
        return self._ruled[1]

    @cached_property
    def doubtful(self) -> tuple[Finding, float] | None:
        """In a conflict: the finding that fits least, and the conflict left without it."""
        return suspect(self.posterior) if self.conflict_bits > CONFLICT_BITS else None

    def reasons(self, ref: str) -> list[Reason]:
        """Findings for and against one cause, in decibans and in words.

        Raises:
            UnknownName: no such cause.
        """
        if ref not in self.posterior.frame.index:
            raise UnknownName("cause", ref, self.posterior.frame.refs)
        return reasons(self.posterior.engine, self.posterior.findings, ref)

    @property
    def sound(self) -> float:
        """After verified rectifications: the probability that no cause is left; else 0."""
        state = self.state
        if not state.rectified or state.unproven:
            return 0.0
        posterior = self.posterior
        chance = dict.fromkeys(posterior.frame.refs, 0.0)
        for ref, success in state.world:
            chance[ref] = 1.0 - (1.0 - chance[ref]) * (1.0 - success)
        kept = np.array([chance[ref] for ref in posterior.frame.refs] + [1.0])
        return float(posterior.weight @ kept[posterior.modes].prod(axis=1))

    @cached_property
    def conflict_bits(self) -> float:
        """How badly the findings hang together; positive is conflict."""
        return conflict_bits(self.posterior)


class Session:
    """One case in memory: its state, its assessment and the way to add events.

    Args:
        circuit: the circuit of the case.
        save: called with each event before it counts; a findings log, or None.
    """

    def __init__(self, circuit: Circuit, save: Callable[[AnyEvent], None] | None = None) -> None:
        self.circuit = circuit
        self.state = CaseState(circuit)
        self._save = save
        self._engines: dict[tuple[object, ...], Engine] = {}
        self._posteriors: dict[tuple[object, ...], Posterior] = {}
        self._assessed: Assessment | None = None

    @classmethod
    def replay(
        cls,
        circuit: Circuit,
        events: Sequence[AnyEvent],
        save: Callable[[AnyEvent], None] | None = None,
    ) -> Session:
        """A session carried on from the events of a log, exactly where it stopped."""
        session = cls(circuit, save)
        session.state = fold(circuit, events)
        return session

    def _engine(self, worked_on: tuple[str, ...], raised: Raised) -> Engine:
        key = (worked_on, raised)
        if key not in self._engines:
            self._engines[key] = Engine(self.circuit, worked_on, raised=raised)
        return self._engines[key]

    @property
    def assessment(self) -> Assessment:
        """What the findings mean now; computed once per state."""
        if self._assessed is None or self._assessed.state is not self.state:
            self._assessed = self._assess(self.state)
        return self._assessed

    def _assess(self, state: CaseState) -> Assessment:
        worked_on = state.opened.worked_on if state.opened else ()
        verdict = judge_findings(rule_view(state))
        counted = counted_findings(state, verdict)
        key = (worked_on, verdict.raised, *((f.key, f.value, f.trust, f.world) for f in counted))
        if key not in self._posteriors:
            made = self._engine(worked_on, verdict.raised).posterior(counted)
            self._posteriors = {key: made}
        return Assessment(self._posteriors[key], state, verdict)

    def add(self, event: AnyEvent) -> AnyEvent:
        """Adds one event: checked, weighed, saved, and only then acknowledged.

        Raises:
            UsageError, UnknownName: the event does not fit; the case is unchanged.
            Contradiction: no cause allows the findings together; the case is unchanged.
            InputError: the event could not be read back from a log; the case is unchanged.
            JournalError: the event is part of the case in memory but could not be saved.
        """
        before = self.assessment.standing if self.state.opened else None
        known = self._known_firings()
        numbered = event.model_copy(update={"number": len(self.state.events), "before": before})
        after = self._assess(advance(self.state, numbered)).standing
        full = numbered.model_copy(update={"after": after})
        self._keep(full)
        if not isinstance(event, Closed):
            self._record_rules(full, known)
        return full

    def _keep(self, event: AnyEvent) -> None:
        before, self.state = self.state, advance(self.state, event)
        try:
            if self._save is not None:
                self._save(event)
        except InputError:
            # Refused as it stands, not for want of space: then it is no part of the case.
            self.state = before
            raise

    def _known_firings(self) -> set[tuple[str, ...]]:
        """Rules that fire already and stand in the log; one that could not be saved does not."""
        if self.state.opened is None:
            return set()
        told = {(e.rule, *e.because) for e in self.state.events if isinstance(e, RuleFired)}
        return told & {_firing_key(firing) for firing in self.assessment.firings}

    def _record_rules(self, cause: AnyEvent, known: set[tuple[str, ...]]) -> None:
        """Writes down every rule that fires since `cause` and did not before."""
        for firing in self.assessment.firings:
            if _firing_key(firing) not in known:
                self._keep(
                    RuleFired(
                        at=cause.at,
                        number=len(self.state.events),
                        rule=firing.rule.id,
                        kind=firing.rule.kind,
                        because=firing.because,
                        text=firing.rule.text,
                    )
                )

    def find(self, at: datetime, name: str, point: str | None, value: str, **more: Any) -> AnyEvent:
        """Adds a finding; `more` as in `Found`."""
        return self.add(Found(at=at, name=name, point=point, value=value, **more))

    def undo(self, at: datetime, by: str = "") -> AnyEvent | None:
        """Takes back the latest event that can be, or None when there is none."""
        last = self.state.undoable
        if last is None:
            return None
        self.add(Withdrawn(at=at, by=by, target=last.number, reason="undo"))
        return last


def ranking(assessment: Assessment, count: int = 10, steps: int = 5) -> dict[str, Any]:
    """The ranking as plain data: the shape of `rank --json`."""
    circuit, posterior = assessment.circuit, assessment.posterior
    modes = circuit.modes
    return {
        "circuit": circuit.id,
        "version": circuit.file.version,
        "findings": [str(f) for f in posterior.findings],
        "causes": [
            {
                "component": modes[ref].component,
                "mode": ref.split(".")[1],
                "title": cause_title(circuit, ref),
                "probability": p,
            }
            for ref, p in posterior.causes()[:count]
        ],
        "hypotheses": [
            {"faults": list(faults), "probability": p}
            for faults, p in posterior.hypotheses(min(count, len(posterior.weight)))
        ],
        "unlisted": posterior.unlisted,
        "nothing_found": posterior.nothing_wrong,
        "coverage": posterior.coverage.value,
        "coverage_method": posterior.coverage.method,
        "conflict_bits": assessment.conflict_bits,
        "next": [step_data(step) for step in assessment.steps[:steps]],
        "notice": NOTICE,
    }


def step_data(step: NextStep) -> dict[str, Any]:
    """One next step as plain data."""
    return {
        "step": step.id,
        "kind": step.kind,
        "title": step.title,
        "minutes": step.minutes,
        "expected_minutes": step.expected_minutes,
        "information_bits": step.information_bits,
        "probability": step.probability,
        "needs": list(step.needs),
        "cautions": list(step.cautions),
        "reference": step.reference,
    }

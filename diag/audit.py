"""Replaying a findings log: does it still say what it said, and on which circuit?

Stands on the session, since only the session can weigh the findings again.
"""

from __future__ import annotations

import hashlib
import os
from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from itertools import takewhile
from pathlib import Path

from diag.circuit.model import Circuit
from diag.errors import DiagError, Origin, Problem
from diag.record.casefile import key_of
from diag.record.events import (
    AnyEvent,
    Closed,
    Found,
    NotPossible,
    Opened,
    Rectified,
    RuleFired,
    Standing,
)
from diag.record.journal import Replay, read_journal
from diag.record.narrate import NOTHING, event_line
from diag.session import Assessment, Session, advance

TOLERANCE = 1e-4
"""Difference of a probability that counts as none: other machines sum in another order."""
CHAIN_LIMITS = (
    "What a hash chain does not prove: the hashes take no secret, so whoever rewrites the whole "
    "file can rewrite the chain with it, and whole lines taken off the end leave a shorter log "
    "that is sound in itself. It shows accidents and careless edits. It does not show who wrote "
    "a line, that the clock was right, or that what was written is true. Against a forger, keep "
    "the hash of the last line, or a copy, where the forger cannot reach it."
)
UNLOADABLE = "the circuit cannot be loaded"

Load = Callable[[str], Circuit]
Fired = tuple[str, tuple[str, ...]]
"""A rule with what made it fire."""


@dataclass(frozen=True, slots=True)
class Verdict:
    """What a verification found.

    Attributes:
        problems: every difference, in the order of the log.
        notes: what a person should know but nothing is wrong with.
    """

    problems: tuple[Problem, ...]
    notes: tuple[str, ...]


def verify(log: str | os.PathLike[str], load: Load, tolerance: float = TOLERANCE) -> Verdict:
    """Reads a log, replays the case and reports every difference.

    Reported are a line that was altered, taken out or not written whole; a circuit other
    than the one the log was made on; an event that the case refuses; a probability or coverage
    that comes out differently by more than `tolerance`; a rule that fires otherwise.

    Args:
        load: gives a circuit by its id, with the overlays that the log was made with.

    Raises:
        JournalError: the log cannot be read at all.
    """
    replay = read_journal(log)
    audit = _Audit(str(log), tolerance)
    audit.journal(replay)
    if replay.events and isinstance(replay.events[0], Opened):
        audit.case(replay.events, load)
    notes = [_last_line(Path(log)), *audit.notes, CHAIN_LIMITS]
    return Verdict(tuple(audit.problems), tuple(notes))


def _last_line(log: Path) -> str:
    """The hash that a person may keep elsewhere."""
    raw = log.read_bytes()
    last = raw[raw.rstrip(b"\n").rfind(b"\n") + 1 :]
    return f"SHA-256 of the last line: {hashlib.sha256(last).hexdigest()}"


@dataclass(slots=True)
class _Audit:
    """Gathers what is wrong with one log."""

    log: str
    tolerance: float
    problems: list[Problem] = field(default_factory=list)
    notes: list[str] = field(default_factory=list)

    def journal(self, replay: Replay) -> None:
        """The file: chain, form, and its end."""
        self.problems.extend(replay.problems)
        notices = list(replay.notices)
        if replay.torn:
            # To a reader a torn end is a notice, the last one; a verified log has no such end.
            self.problems.append(Problem(Origin(self.log), "", notices.pop()))
        self.notes.extend(notices)

    def case(self, events: Sequence[AnyEvent], load: Load) -> None:
        """The case: the circuit it names, and every event replayed on it."""
        head = events[0]
        assert isinstance(head, Opened)
        try:
            circuit = load(head.circuit)
        except DiagError as error:
            self.fault(head, f"{UNLOADABLE}: {str(error).splitlines()[0]}", "circuit", head.circuit)
            return
        self.circuit(head, circuit)
        for step in replayed(circuit, events):
            self.step(step)
            self.rules(step)
        self.notes.append(
            f"{len(events)} events replayed on {circuit.id} {circuit.file.version}; "
            f"probabilities agree when they differ by no more than {self.tolerance:g}"
        )

    def circuit(self, head: Opened, circuit: Circuit) -> None:
        """Whether it is the circuit that the log was made on."""
        if circuit.id != head.circuit:
            self.fault(head, "another circuit", "circuit", head.circuit, circuit.id)
        if circuit.file.version != head.version:
            version = circuit.file.version
            self.fault(head, "another version of the circuit", "version", head.version, version)
        if circuit.overlays != head.overlays:
            made = ", ".join(head.overlays) or "none"
            now = ", ".join(circuit.overlays) or "none"
            self.fault(head, "made with other overlays", "overlays", made, now)
        if circuit.content_hash != head.content_hash:
            message = "the circuit has changed since the log was made"
            shown = (head.content_hash[:12], circuit.content_hash[:12])
            self.fault(head, message, "content_hash", *shown)

    def step(self, step: Replayed) -> None:
        """One event: taken at all, and with the same standing before and after."""
        if step.refusal:
            self.fault(step.event, f"the case refuses this event: {step.refusal}", "event")
            return
        event = step.event
        for path, stored, made in (
            ("before", event.before, step.before),
            ("after", event.after, step.after),
        ):
            if stored is not None and made is not None:
                for name, was, now in differences(stored, made, self.tolerance):
                    message = f"{name} no longer comes out"
                    self.fault(event, message, path, f"{was:.6f}", f"{now:.6f}")
        if event.after is None and not isinstance(event, RuleFired):
            self.notes.append(f"entry {event.number}: no standing was recorded with it")

    def rules(self, step: Replayed) -> None:
        """Whether the rules that fire are those that were recorded."""
        for name, because in step.missing:
            shown = ", ".join(because)
            self.fault(
                step.event, f"the rule {name} fires and was not recorded", "event", "", shown
            )
        if step.unfounded:
            assert isinstance(step.event, RuleFired)
            self.fault(step.event, f"the rule {step.event.rule} would not fire", "rule")

    def fault(
        self, event: AnyEvent, message: str, path: str, value: str = "", accepted: str = ""
    ) -> None:
        where = Origin(self.log, event.number + 1, 1)
        self.problems.append(Problem(where, path, message, value, accepted))


@dataclass(frozen=True, slots=True)
class Replayed:
    """One event of a log, weighed again.

    Attributes:
        before, after: the assessments around it; None where there is none.
        refusal: why the case does not take the event, or empty.
        missing: rules, with their grounds, that fire at it and are not recorded after it.
        unfounded: it records a rule that would not fire now.
    """

    event: AnyEvent
    before: Assessment | None
    after: Assessment | None
    refusal: str = ""
    missing: tuple[Fired, ...] = ()
    unfounded: bool = False


def replayed(circuit: Circuit, events: Sequence[AnyEvent]) -> Iterator[Replayed]:
    """Replays a case, going on past events that it refuses."""
    session = Session(circuit)
    current: Assessment | None = None
    firing: set[Fired] = set()
    due: set[Fired] = set()
    for place, event in enumerate(events):
        kept = session.state
        try:
            session.state = advance(kept, event)
            after = session.assessment
            now = {(f.rule.id, f.because) for f in after.firings}
        except DiagError as error:
            session.state = kept
            yield Replayed(event, current, None, str(error))
            continue
        if isinstance(event, RuleFired):
            unfounded = (event.rule, event.because) not in due
            yield Replayed(event, current, after, unfounded=unfounded)
        else:
            due = now - firing if not isinstance(event, Closed) else set()
            missing = tuple(sorted(due - _recorded(events[place + 1 :])))
            yield Replayed(event, current, after, missing=missing)
            firing = now
        current = after


def _recorded(following: Sequence[AnyEvent]) -> set[Fired]:
    """The rules recorded right after an event."""
    fired = takewhile(lambda event: isinstance(event, RuleFired), following)
    return {(e.rule, e.because) for e in fired if isinstance(e, RuleFired)}


def differences(
    stored: Standing, made: Assessment, tolerance: float = TOLERANCE
) -> Iterator[tuple[str, float, float]]:
    """What a stored standing says otherwise than an assessment: (what, stored, now)."""
    for ref, was in stored.causes:
        now = probability(made, ref)
        if now is None or abs(now - was) > tolerance:
            yield f"the probability of {ref}", was, -1.0 if now is None else now
    # Coverage is worked out on demand only, and it takes its time.
    if stored.coverage is not None:
        coverage = made.posterior.coverage.value
        if abs(coverage - stored.coverage) > tolerance:
            yield "the coverage", stored.coverage, coverage


def probability(made: Assessment, ref: str) -> float | None:
    """Of a mode, the unlisted cause or "nothing found"; None for a name it does not have."""
    if ref == NOTHING:
        return made.posterior.nothing_wrong
    return made.marginals.get(ref)


def chances_after(circuit: Circuit, events: Iterable[AnyEvent]) -> dict[int, Mapping[str, float]]:
    """Number of each event to the probability of every cause after it.

    Raises:
        UsageError, UnknownName, Contradiction: the events do not fit the circuit.
    """
    session = Session(circuit)
    found: dict[int, Mapping[str, float]] = {}
    for event in events:
        session.state = advance(session.state, event)
        made = session.assessment
        found[event.number] = {**made.marginals, NOTHING: made.posterior.nothing_wrong}
    return found


# -- carrying a case forward --------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class Change:
    """One thing that is otherwise when a case is carried forward to another circuit."""

    kind: str
    """`gone`, `new limits`, `refused`, `moved` or `version`."""
    name: str
    text: str


def carry_forward(
    events: Sequence[AnyEvent], old: Circuit | None, new: Circuit, tolerance: float = 0.01
) -> list[Change]:
    """What changes when a case made on `old` goes on with `new`.

    Args:
        events: the case, its opening first.
        old: the circuit it was made on, or None when no copy of it is at hand; then nothing
            can be said of limits.
        tolerance: difference of a probability that is worth telling.
    """
    changes = list(_versions(events, new))
    changes += _gone(events, new)
    if old is not None:
        changes += _limits(events, old, new)
    session = Session(new)
    for event in events:
        try:
            session.state = advance(session.state, event)
        except DiagError as error:
            text = f"{event_line(new, event)}: {error}"
            changes.append(Change("refused", str(event.number), text))
    if session.state.opened is not None:
        changes += _moved(events, session, tolerance)
    return changes


def _versions(events: Sequence[AnyEvent], new: Circuit) -> Iterator[Change]:
    head = events[0]
    if isinstance(head, Opened) and head.content_hash != new.content_hash:
        text = f"made on {head.circuit} {head.version}, carried forward to {new.file.version}"
        yield Change("version", head.circuit, text)


def _gone(events: Sequence[AnyEvent], new: Circuit) -> Iterator[Change]:
    """Names that the log uses and the new circuit lacks."""
    causes = {ref for e in events if isinstance(e, Closed) for ref in e.causes}
    for event in events:
        for standing in (event.before, event.after):
            causes |= {ref for ref, _ in standing.causes} if standing else set()
    steps = [e.step for e in events if isinstance(e, NotPossible)]
    named: list[tuple[str, Iterable[str], Iterable[str]]] = [
        ("finding", (key_of(e) for e in events if isinstance(e, Found)), new.observables),
        ("cause", sorted(causes - {NOTHING}), {*new.modes, "unlisted.present"}),
        (
            "rectification",
            (e.rectification for e in events if isinstance(e, Rectified)),
            new.remedies,
        ),
        ("step", steps, {*new.observables, *new.remedies}),
    ]
    for what, names, known in named:
        for name in dict.fromkeys(names):
            if name not in known:
                yield Change("gone", name, f"the circuit no longer has this {what}")


def _limits(events: Sequence[AnyEvent], old: Circuit, new: Circuit) -> Iterator[Change]:
    """Limits, units, outcomes and error rates of the findings taken."""
    for name in dict.fromkeys(key_of(e) for e in events if isinstance(e, Found)):
        if name not in old.observables or name not in new.observables:
            continue
        was, now = old.observables[name], new.observables[name]
        told = [
            f"{what} {a} -> {b}"
            for what, a, b in (
                ("limits", _cuts(old, name), _cuts(new, name)),
                ("outcomes", ", ".join(was.outcomes), ", ".join(now.outcomes)),
                ("detects", was.record.detects, now.record.detects),
                ("false alarm", was.record.false_alarm, now.record.false_alarm),
            )
            if a != b
        ]
        if told:
            yield Change("new limits", name, "; ".join(told))


def _cuts(circuit: Circuit, name: str) -> str:
    observable = circuit.observables[name]
    scale = observable.record.scale
    if scale is None:
        return "none"
    cuts = "/".join(f"{cut:g}" for cut in observable.cuts)
    return f"{cuts} {scale.unit} (tolerance {scale.tolerance:g})"


def _moved(events: Sequence[AnyEvent], session: Session, tolerance: float) -> Iterator[Change]:
    """How the causes of the last standing stand now."""
    stored = next((e.after for e in reversed(events) if e.after is not None), None)
    if stored is None:
        return
    try:
        made = session.assessment
    except DiagError as error:
        yield Change("refused", "findings", f"together: {error}")
        return
    for ref, was in stored.causes:
        now = probability(made, ref)
        if now is not None and abs(now - was) > tolerance:
            yield Change("moved", ref, f"probability {was:.4f} -> {now:.4f}")
    known = {ref for ref, _ in stored.causes}
    for ref, now in made.standing.causes:
        if ref not in known and now > tolerance + min((p for _, p in stored.causes), default=0.0):
            yield Change("moved", ref, f"probability not among the first before -> {now:.4f}")

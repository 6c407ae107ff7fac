"""What a log amounts to as a record: what counts, what was taken back, what is still open.

This is bookkeeping over the events alone. What the findings mean is the session's business.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass

from diag.belief.evidence import make_finding, outcome_of
from diag.circuit.model import Circuit
from diag.errors import DiagError, InputError
from diag.record.events import (
    Acknowledged,
    AnyEvent,
    Closed,
    Doubted,
    Found,
    HandedOver,
    NotPossible,
    Opened,
    Rectified,
    RuleFired,
    Standing,
    StateChanged,
    Withdrawn,
)


@dataclass(frozen=True, slots=True)
class CaseFile:
    """The state of the record after its last event.

    Attributes:
        events: everything in the log, in order.
        gone: number of an event that was taken back to the number of what took it back.
        live: the events that count.
        repeated: number of a finding to the later one that takes its place.
        after: number of a finding to how many rectifications had been done before it.
        trust: number of a doubted finding to how far it is trusted.
        engine: engine state as last stated, or None.
        opened: openings that were made and not closed again, in the order they were made.
    """

    head: Opened
    events: tuple[AnyEvent, ...]
    gone: Mapping[int, int]
    live: tuple[AnyEvent, ...]
    repeated: Mapping[int, int]
    after: Mapping[int, int]
    trust: Mapping[int, float]
    engine: str | None
    opened: tuple[str, ...]

    def of(self, *kinds: type) -> tuple[AnyEvent, ...]:
        """The events of some kinds that count."""
        return tuple(event for event in self.live if isinstance(event, kinds))

    @property
    def found(self) -> tuple[Found, ...]:
        """Findings that were not taken back, those repeated later included."""
        return tuple(event for event in self.live if isinstance(event, Found))

    @property
    def standing_findings(self) -> tuple[Found, ...]:
        """Findings that were neither taken back nor repeated."""
        return tuple(event for event in self.found if event.number not in self.repeated)

    @property
    def complaint(self) -> tuple[Found, ...]:
        """The findings of the report."""
        return tuple(event for event in self.found if event.complaint)

    @property
    def rectified(self) -> tuple[Rectified, ...]:
        return tuple(event for event in self.live if isinstance(event, Rectified))

    @property
    def not_possible(self) -> tuple[NotPossible, ...]:
        return tuple(event for event in self.live if isinstance(event, NotPossible))

    @property
    def fired(self) -> tuple[RuleFired, ...]:
        return tuple(event for event in self.live if isinstance(event, RuleFired))

    @property
    def closed(self) -> Closed | None:
        return next((event for event in self.live if isinstance(event, Closed)), None)

    @property
    def pending(self) -> HandedOver | None:
        """The hand-over that nobody has acknowledged yet."""
        last = self.of(HandedOver, Acknowledged)[-1:]
        return last[0] if last and isinstance(last[0], HandedOver) else None

    @property
    def standing(self) -> Standing | None:
        """How the causes stood last."""
        kept = (event.after for event in reversed(self.events) if event.after is not None)
        return next(kept, None)

    @property
    def proof(self) -> Found | None:
        """The finding that the closing names as verification, if it can be one.

        It must count, and have been taken after the last rectification.
        """
        closed, done = self.closed, len(self.rectified)
        if closed is None or closed.verification is None:
            return None
        fits = (
            f
            for f in self.standing_findings
            if f.number == closed.verification and self.after[f.number] == done
        )
        return next(fits, None)


def case_file(events: Iterable[AnyEvent]) -> CaseFile:
    """Reads the record.

    Raises:
        InputError: the events do not begin with the opening of a case.
    """
    listed = tuple(events)
    if not listed or not isinstance(listed[0], Opened):
        raise InputError("the log does not begin with the opening of a case")
    gone = _gone(listed)
    live = tuple(e for e in listed if e.number not in gone and not isinstance(e, Withdrawn))
    after, repeated = _worlds(live)
    engine, opened = _place(live)
    trust = {e.target: e.trust for e in live if isinstance(e, Doubted)}
    return CaseFile(listed[0], listed, gone, live, repeated, after, trust, engine, opened)


def _gone(events: Sequence[AnyEvent]) -> dict[int, int]:
    gone = {e.target: e.number for e in events if isinstance(e, Withdrawn)}
    doubts = (e for e in events if isinstance(e, Doubted) and e.target in gone)
    return gone | {e.number: gone[e.target] for e in doubts}


def _worlds(live: Sequence[AnyEvent]) -> tuple[dict[int, int], dict[int, int]]:
    """Rectifications before each finding, and which findings were repeated by which."""
    after: dict[int, int] = {}
    repeated: dict[int, int] = {}
    latest: dict[tuple[str, str | None, int], int] = {}
    done = 0
    for event in live:
        if isinstance(event, Rectified):
            done += 1
        elif isinstance(event, Found):
            after[event.number] = done
            key = (event.name, event.point, done)
            if key in latest:
                repeated[latest[key]] = event.number
            latest[key] = event.number
    return after, repeated


def _place(live: Sequence[AnyEvent]) -> tuple[str | None, tuple[str, ...]]:
    engine: str | None = None
    opened: dict[str, None] = {}
    for event in live:
        if isinstance(event, StateChanged):
            engine = event.engine or engine
            opened |= dict.fromkeys(event.opened)
            for name in event.closed:
                opened.pop(name, None)
    return engine, tuple(opened)


def key_of(found: Found) -> str:
    """`NAME@POINT`, or `NAME` where it has no point."""
    return f"{found.name}@{found.point}" if found.point else found.name


def reads_normal(circuit: Circuit, found: Found) -> bool:
    """Whether a finding is the unremarkable one; False where the circuit cannot tell."""
    try:
        observable = circuit.observable(found.name, found.point)
        return outcome_of(make_finding(observable, found.value)) == observable.normal
    except DiagError:
        return False


def unproven(circuit: Circuit | None, case: CaseFile) -> tuple[Rectified, ...]:
    """Rectifications after which nothing shows that they worked."""
    return tuple(event for event in case.rectified if proof_of(circuit, case, event) is None)


def proof_of(circuit: Circuit | None, case: CaseFile, event: Rectified) -> Found | None:
    """The finding that shows that a rectification worked, or None.

    It is the one that the rectification names, unremarkable and taken after it; where the
    circuit does not know the rectification, the verification that the closing names.
    """
    remedy = circuit.remedies.get(event.rectification) if circuit else None
    if circuit is None or remedy is None:
        return case.proof
    fits = (
        found
        for found in reversed(case.standing_findings)
        if key_of(found) == remedy.record.verify
        and found.number > event.number
        and reads_normal(circuit, found)
    )
    return next(fits, None)


def why_not_confirmed(circuit: Circuit, case: CaseFile) -> str:
    """Why nothing can be learned of causes from this case; empty when something can.

    "Replaced" is not "was faulty": a cause counts when it was confirmed at the closing, a
    rectification that removes it was done, and the fix was verified afterwards.
    """
    closed = case.closed
    if closed is None:
        return "not closed"
    remedies = (circuit.remedies.get(event.rectification) for event in case.rectified)
    restored = {ref for remedy in remedies if remedy for ref in remedy.restores}
    causes = set(closed.causes)
    reasons = {
        "no cause confirmed": closed.outcome == "cause_confirmed" and causes,
        "a confirmed cause that this circuit does not list": causes <= set(circuit.modes),
        "not verified": case.proof is not None,
        "the verification reads abnormal": case.proof and reads_normal(circuit, case.proof),
        "a confirmed cause was not rectified": causes <= restored,
    }
    return next((reason for reason, holds in reasons.items() if not holds), "")

"""One case on the desk: the session, its log, and what a screen needs to know of it.

Nothing here draws. Every change goes through `Desk`; it runs in a worker, and what comes back
is a `Look`, computed to the last figure, so that drawing it costs nothing.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from datetime import datetime
from pathlib import Path
from typing import Any

from pydantic import ValidationError

from diag.advice.steps import NextStep, remedies_by_chance
from diag.belief.evidence import make_finding, parse_finding
from diag.circuit.model import UNLISTED, Circuit, Observable
from diag.errors import DiagError, InputError, UsageError
from diag.oilpath import Marks, pins_of, suspicions, way_of
from diag.record.events import AnyEvent, Closed, Found, Opened, StateChanged
from diag.record.journal import Journal
from diag.record.narrate import NOTHING, cause_title
from diag.session import Assessment, CaseState, Session
from diag.tui.keeper import Keeper
from diag.tui.wording import spoken

ROWS = 12
"""Causes that a screen may show."""


@dataclass(frozen=True, slots=True)
class CauseRow:
    """One cause as it is shown: probability now and before the last answer."""

    ref: str
    title: str
    chance: float
    before: float


@dataclass(frozen=True, slots=True)
class Branch:
    """What one answer to a check would do: its chance, and the likely causes after it."""

    word: str
    chance: float
    causes: tuple[tuple[str, float], ...]


@dataclass(frozen=True, slots=True)
class Look:
    """Where the case stands, computed to the last figure.

    Attributes:
        steps: what could be done, the proposed step first.
        held: what a rule holds, with the reasons.
        causes: the likely causes, the unlisted one always among them.
        doubtful: the finding that fits least, in words, when the findings do not agree.
        alarms: texts of the rules that apply: holds and escalations.
        told: what the person should be told since the last look.
        new: events that came with the last change.
    """

    number: int
    state: CaseState
    assessment: Assessment
    steps: tuple[NextStep, ...]
    held: tuple[NextStep, ...]
    causes: tuple[CauseRow, ...]
    coverage: float
    conflict: float
    doubtful: str
    alarms: tuple[str, ...]
    marks: Marks
    unsaved: int
    told: tuple[str, ...] = ()
    new: tuple[AnyEvent, ...] = ()

    @property
    def circuit(self) -> Circuit:
        return self.state.circuit


@dataclass(slots=True)
class Desk:
    """A case that is being worked on.

    Args:
        circuit: the circuit of the case.
        keeper: keeps the log; None for a case that is not written down.
        now: the clock.
        by: who works.
    """

    circuit: Circuit
    keeper: Keeper | None
    now: Callable[[], datetime]
    by: str = ""
    session: Session = field(init=False)
    number: int = 0
    _before: dict[str, float] = field(default_factory=dict)
    _last: dict[str, float] = field(default_factory=dict)

    def __post_init__(self) -> None:
        self.session = Session(self.circuit, self.keeper.save if self.keeper else None)

    @classmethod
    def resumed(cls, circuit: Circuit, path: Path, now: Callable[[], datetime], by: str) -> Desk:
        """A case carried on from its log.

        Raises:
            DiagError: the log cannot be opened, or does not fit the circuit.
        """
        journal = Journal.open(path)
        try:
            desk = cls(circuit, Keeper(path, journal), now, by)
            assert desk.keeper is not None
            desk.session = Session.replay(circuit, journal.events, desk.keeper.save)
        except UsageError as error:
            journal.close()
            raise InputError(f"{path}: it does not fit the present circuit: {error}") from None
        except BaseException:
            journal.close()
            raise
        return desk

    # -- changes: these take time and belong in a worker ------------------------------------

    def record(self, kind: type[Any], **fields: Any) -> None:
        """Records an event of the kind, by this person, now.

        Raises:
            DiagError: it does not fit the case, or could not be saved.
        """
        try:
            event = kind(at=self.now(), by=self.by, **fields)
        except ValidationError as error:
            fault = error.errors(include_url=False)[0]
            raise UsageError(f"{fault['loc'][-1]}: {fault['msg']}") from None
        self.session.add(event)

    def found(
        self, observable: Observable, value: str, reference: str = "", complaint: bool = False
    ) -> None:
        """Records a finding.

        Raises:
            DiagError: the value is none that the observation can take.
        """
        finding = make_finding(observable, value)
        self.record(
            Found,
            name=observable.record.id,
            point=observable.point,
            value=finding.value,
            reference=reference,
            complaint=complaint,
        )

    def undo(self) -> None:
        """Takes back the latest event that can be.

        Raises:
            UsageError: there is none.
        """
        if self.session.undo(self.now(), self.by) is None:
            raise UsageError("nothing to take back")

    def open_case(self, intake: Intake) -> None:
        """The head of the log, the state of the engine and the findings of the complaint."""
        self.record(
            Opened,
            circuit=self.circuit.id,
            version=self.circuit.file.version,
            content_hash=self.circuit.content_hash,
            overlays=self.circuit.overlays,
            engine=intake.engine,
            aircraft=intake.aircraft,
            complaint=intake.words,
            worked_on=intake.worked_on,
            both_engines=intake.both_engines,
        )
        if intake.state and intake.state != self.session.state.place.engine:
            self.record(StateChanged, engine=intake.state)
        for text in intake.findings:
            finding = parse_finding(self.circuit, text)
            self.found(finding.observable, finding.value, complaint=True)

    # -- what the screen shows ----------------------------------------------------------------

    def look(self, since: int | None = None) -> Look:
        """Computes all that the screens show.

        Args:
            since: number of events before the last change, to tell what is new.
        """
        state, assessment = self.session.state, self.session.assessment
        chances = {**assessment.marginals, NOTHING: assessment.posterior.nothing_wrong}
        new = state.events[since:] if since is not None else ()
        if new:
            self._before = self._last or chances
        self._last = chances
        self.number += 1
        steps, held = tuple(assessment.steps), tuple(assessment.held)
        doubtful = assessment.doubtful
        return Look(
            number=self.number,
            state=state,
            assessment=assessment,
            steps=steps,
            held=held,
            causes=self._rows(chances),
            coverage=assessment.posterior.coverage.value,
            conflict=assessment.conflict_bits,
            doubtful=str(doubtful[0]) if doubtful else "",
            alarms=_alarms(assessment),
            marks=self._marks(state, assessment),
            unsaved=self.keeper.unsaved if self.keeper else 0,
            told=tuple(self.keeper.notices()) if self.keeper else (),
            new=tuple(new),
        )

    def _rows(self, chances: dict[str, float]) -> tuple[CauseRow, ...]:
        ranked = sorted(chances, key=lambda ref: (-chances[ref], ref))[:ROWS]
        if UNLISTED not in ranked:
            ranked[-1] = UNLISTED
        before = self._before or chances
        return tuple(
            CauseRow(ref, cause_title(self.circuit, ref), chances[ref], before.get(ref, 0.0))
            for ref in ranked
        )

    def _marks(self, state: CaseState, assessment: Assessment) -> Marks:
        return Marks(suspicions(assessment.present), pins_of(state))

    def close(self) -> int:
        """Closes the log; returns how many events are lost."""
        return self.keeper.close() if self.keeper else 0


@dataclass(frozen=True, slots=True)
class Intake:
    """What the complaint screen hands on."""

    words: str = ""
    findings: tuple[str, ...] = ()
    engine: str = ""
    aircraft: str = ""
    state: str = ""
    worked_on: tuple[str, ...] = ()
    both_engines: bool = False


def _alarms(assessment: Assessment) -> tuple[str, ...]:
    kinds = ("hold", "escalate")
    return tuple(dict.fromkeys(f.rule.text for f in assessment.firings if f.rule.kind in kinds))


def marked(look: Look, ref: str) -> Marks:
    """The marks of a look with the way of one cause."""
    marks = look.marks
    shown = [(row.title, row.chance) for row in look.causes[:5]]
    if all(row.ref != UNLISTED for row in look.causes[:5]):
        unlisted = next(row for row in look.causes if row.ref == UNLISTED)
        shown[-1] = (unlisted.title, unlisted.chance)
    return Marks(
        marks.suspicion,
        marks.pins,
        way_of(look.circuit, ref, look.state),
        cause_title(look.circuit, ref),
        tuple(shown),
    )


def branches(assessment: Assessment, observable: Observable, count: int = 3) -> list[Branch]:
    """What each answer to a check would do, the likely causes first."""
    outlook, circuit = assessment.outlook, assessment.circuit
    refs = outlook.frame.refs
    found = []
    for number, chance in enumerate(outlook.chances(observable).tolist()):
        after = outlook.after(observable, number)
        best = sorted(range(len(refs)), key=lambda i: (-after[i], refs[i]))[:count]
        causes = tuple((cause_title(circuit, refs[i]), float(after[i])) for i in best)
        found.append(Branch(spoken(observable, observable.outcomes[number]), chance, causes))
    return found


def likely_remedies(look: Look, count: int = 99) -> list[NextStep]:
    """Rectifications, the one whose cause is most likely first."""
    state = look.state
    present = look.assessment.present
    return remedies_by_chance(look.circuit, present, state.place, state.done)[:count]


def reading_value(observable: Observable, text: str) -> str:
    """A reading as it is recorded; a bare number has the unit that stands beside the field.

    Raises:
        UsageError: it is neither a number with a unit nor an outcome of the observation.
    """
    scale = observable.record.scale
    value = text.strip().replace(",", ".")
    if scale is not None:
        try:
            float(value)
        except ValueError:
            pass
        else:
            value += scale.unit
    return make_finding(observable, value).value


def closed_events(events: Sequence[AnyEvent]) -> bool:
    """Whether a log has come to its end."""
    return any(isinstance(event, Closed) for event in events)


__all__ = [
    "Branch",
    "CauseRow",
    "Desk",
    "DiagError",
    "Intake",
    "Look",
    "branches",
    "likely_remedies",
    "marked",
    "reading_value",
]

"""A session in plain lines: for pipes, screen readers and slow links.

Nothing is drawn over; every line stands by itself. Time, input and output come from outside.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Iterable
from dataclasses import dataclass
from datetime import datetime
from functools import partial
from typing import Any, Protocol, TypeVar

from pydantic import ValidationError

from diag.advice.steps import NOTICE, NextStep, remedies_by_chance, titled
from diag.belief.evidence import Finding, make_finding, parse_finding
from diag.circuit.model import UNLISTED, Observable
from diag.circuit.reading import brief
from diag.errors import DiagError, UnknownName, UsageError
from diag.record.events import (
    Acknowledged,
    AnyEvent,
    Closed,
    Doubted,
    Found,
    HandedOver,
    Noted,
    NotPossible,
    Opened,
    Rectified,
    RuleFired,
    StateChanged,
    Withdrawn,
)
from diag.record.narrate import NOTHING, cause_title, event_line, percent
from diag.session import Session

T = TypeVar("T")
SHOWN = 4
LONGEST = 4000
"""Characters in one line of a record."""
HELP = """\
An answer is the number or word beside it, or a reading with its unit (52psi, 3.6bar).
End an answer with `# TASK` to record the task of the approved data that you followed, and a
reading taken some time after shutdown with `after 20 min` (or `after 14 h`).
  can't [WHY]            this step is not possible; ask for another
  undo                   take back the last thing recorded
  why                    why this step, and its rivals
  why COMPONENT.MODE     what speaks for and against a cause
  causes                 all causes worth naming
  log                    what is recorded so far
  add NAME@POINT=VALUE   a finding nobody asked for; `add WORD` looks its name up
  doubt N TRUST          finding N may be wrong; TRUST from 0 to 1
  state STATE            the engine is in this state now; `state` lists them
  people near, people clear   who is by the engine
  open NAME, shut NAME   an opening, for example cowl; `open` lists them
  fixed by NAME          a rectification was done; `fixed by` lists the likely ones
  note TEXT              a remark
  hand over to NAME      pass the case on
  taken over             the hand-over was read
  save FILE              write the whole case to another file
  close                  end the case
  stop                   leave; the case can be resumed
"""
_QUIET = (Noted, HandedOver, Acknowledged)
"""Events after which the same question stands."""
_AIMS = (NotPossible, StateChanged, RuleFired)
"""Events that change what is asked, and seldom the odds."""


@dataclass(frozen=True, slots=True)
class Identity:
    """Whose engine and whose hand."""

    engine: str = ""
    aircraft: str = ""
    by: str = ""


class Keeper(Protocol):
    """What a session asks of the place that keeps its log."""

    @property
    def unsaved(self) -> int:
        """Events that are in memory only."""
        ...

    def elsewhere(self, path: str) -> object:
        """Writes the whole case to a new file and returns its name."""
        ...


class PlainSession:
    """Asks and records in lines. Ctrl-C and the end of input pass through, and end it.

    Args:
        session: the case.
        ask: shows a prompt and returns one line; raises EOFError at the end of input.
        say: prints one line.
        now: the clock.
        by: who answers.
        keeper: keeps the log; None for a case that is not written down.
    """

    def __init__(
        self,
        session: Session,
        ask: Callable[[str], str],
        say: Callable[[str], None],
        now: Callable[[], datetime],
        by: str = "",
        keeper: Keeper | None = None,
    ) -> None:
        self.session, self.circuit, self.keeper = session, session.circuit, keeper
        self.ask, self.say, self.now, self.by = ask, say, now, by
        self._shown: dict[str, float] = {}
        self._warned = False
        self._commands: tuple[tuple[re.Pattern[str], Callable[..., None]], ...] = tuple(
            (re.compile(rf"^(?:{pattern})$", re.IGNORECASE | re.DOTALL), handler)
            for pattern, handler in (
                (r"help|\?", self._help),
                (r"stop|quit|exit", self._leave),
                (r"undo", self._undo),
                (r"why(?:\s+(.+))?", self._why),
                (r"causes", self._causes),
                (r"log", self._log),
                (r"(?:can['’]?t|cannot)(?:\s+(.+))?", self._cannot),
                (r"add(?:\s+(.+))?", self._add),
                (r"doubt(?:\s+(.+))?", self._doubt),
                (r"state(?:\s+(.+))?", self._state),
                (r"people(?:\s+(.+))?", self._people),
                (r"open(?:\s+(.+))?", self._open),
                (r"shut(?:\s+(.+))?", self._shut),
                (r"fixed(?:\s+by)?(?:\s+(.+))?", self._fixed),
                (r"note(?:\s+(.+))?", self._note),
                (r"hand\s*over(?:\s+to)?(?:\s+(.+))?", self._hand_over),
                (r"taken\s+over", self._taken_over),
                (r"save(?:\s+(.+))?", self._save),
                (r"close", self._close),
            )
        )

    # -- the course of a case -----------------------------------------------------------

    def begin(
        self, who: Identity, worked_on: tuple[str, ...] = (), findings: Iterable[str] = ()
    ) -> None:
        """Takes the complaint: the crew's words and the findings among them."""
        self._greet()
        words: list[str] = []
        given = list(findings)
        try:
            if not given:
                self._complaint(words, given)
        except (EOFError, KeyboardInterrupt):
            # What was said is kept, although the person leaves.
            if words or given:
                self._open_case(who, worked_on, words, given)
            raise
        self._open_case(who, worked_on, words, given)

    def carry_on(self) -> None:
        """Says where a case stands that is taken up again."""
        self._greet()
        events = self.session.state.events
        self.say(event_line(self.circuit, events[0]))
        if len(events) > 1:
            self.say(f"last entry, {events[-1].number}: {event_line(self.circuit, events[-1])}")
            self.say("`log` shows them all.")

    def _greet(self) -> None:
        self.say(f"{self.circuit.title} ({self.circuit.id}, version {self.circuit.file.version})")
        self.say(NOTICE)

    def _open_case(
        self, who: Identity, worked_on: tuple[str, ...], words: list[str], findings: list[str]
    ) -> None:
        opened = {
            "circuit": self.circuit.id,
            "version": self.circuit.file.version,
            "content_hash": self.circuit.content_hash,
            "overlays": self.circuit.overlays,
            "engine": who.engine,
            "aircraft": who.aircraft,
            "complaint": " ".join(words),
            "worked_on": worked_on,
        }
        self._attempt(partial(self._record, Opened, **opened))
        for text in findings:
            self._attempt(partial(self._found, text, complaint=True))
        if not self.session.state.taken:
            self.say("Words move no odds: `add WORD` looks up how a finding is written.")

    def _complaint(self, words: list[str], findings: list[str]) -> None:
        self.say("Complaint: the crew's words, and findings such as oil_pressure@hot_idle=52psi.")
        self.say("One a line; an empty line ends it, `stop` leaves.")
        while line := self._read("complaint> "):
            if line.lower() in ("stop", "quit", "exit"):
                raise EOFError
            try:
                if "=" in line:
                    self._parsed(line)
                    findings.append(line)
                elif len(" ".join((*words, line))) > LONGEST:
                    raise UsageError(f"the complaint is longer than {LONGEST} characters")
                else:
                    words.append(line)
            except DiagError as error:
                self.say(f"not taken: {error}")

    def run(self) -> None:
        """Asks until the case is closed.

        Raises:
            EOFError: the person stops, or the input ends.
            KeyboardInterrupt: Ctrl-C.
        """
        new: list[AnyEvent] = []
        while self.session.state.closed is None:
            step = self._offer(all(isinstance(event, _AIMS) for event in new) and bool(new))
            while not (new := self._answer(step, self._read("answer> "))):
                pass
        self._bring_home()

    def _bring_home(self) -> None:
        """A closed case is not left before it is on the disk, unless the person stops."""
        while self.keeper and self.keeper.unsaved:
            path = self._read("not on disk; write the case to another FILE> ")
            if path in ("stop", "quit", "exit"):
                raise EOFError
            self._attempt(partial(self._save, path))

    def _read(self, prompt: str) -> str:
        """One line; lines that begin with # are remarks in a prepared file of answers."""
        while (line := self.ask(prompt).strip()).startswith("#") or len(line) > LONGEST:
            if len(line) > LONGEST:
                self.say(f"not taken: longer than {LONGEST} characters")
        return line

    def _offer(self, briefly: bool) -> NextStep:
        """Shows the causes, or briefly only where they moved, and the next step."""
        if not briefly or self._chances() != self._shown:
            self._show_causes(SHOWN)
        step = self.session.assessment.steps[0]
        self.say("")
        self.say(f"Next: {step.title}, {step.minutes:g} min")
        self.say(f"  why: {step.note or reason(step)}")
        if step.needs:
            self.say(f"  needs: {'; '.join(step.needs)}")
        if step.access_minutes:
            self.say(f"  getting there and closing up: {step.access_minutes:g} min")
        for caution in step.cautions:
            self.say(f"  CAUTION: {caution}")
        for text in dict.fromkeys(t for held in self.session.assessment.held for t in held.held):
            self.say(f"  HELD: {text}")
        self.say(f"  reference: {step.reference}")
        self._question(step)
        return step

    def _question(self, step: NextStep) -> None:
        observable = self.circuit.observables.get(step.id)
        if observable is None:
            word = "close" if step.kind in ("escalate", "close") else f"fixed by {step.id}"
            self.say(f"  When it is done, answer: {word}")
        else:
            self.say(f"  {observable.record.question or observable.record.title}")
            self.say(f"    {choices(observable)}")
        self.say("    or: can't, why, causes, add, fixed by, undo, close, stop, help")

    def _chances(self) -> dict[str, float]:
        assessment = self.session.assessment
        return {**assessment.marginals, NOTHING: assessment.posterior.nothing_wrong}

    def _show_causes(self, count: int) -> None:
        assessment = self.session.assessment
        now = [ref for ref, _ in assessment.standing.causes[:count]]
        if UNLISTED not in now:
            now.append(UNLISTED)
        chances = self._chances()
        self.say("")
        for ref in now:
            told, before = percent(chances[ref]), percent(self._shown.get(ref, chances[ref]))
            moved = f"  (was {before})" if before != told else ""
            self.say(f"  {told:>7}  {cause_title(self.circuit, ref)}{moved}")
        self._shown = chances
        if assessment.doubtful is not None:
            bits = f"{assessment.conflict_bits:.1f}"
            fits_least = assessment.doubtful[0]
            self.say(f"  The findings do not hang together ({bits} bits); {fits_least} fits least.")

    # -- answers ------------------------------------------------------------------------

    def _answer(self, step: NextStep, line: str) -> list[AnyEvent]:
        """Handles one line; gives what it recorded, nothing where the same question stands."""
        if not line:
            return []
        new = self._attempt(partial(self._handle, step, line))
        return [event for event in new if not isinstance(event, _QUIET)]

    def _attempt(self, act: Callable[[], None]) -> list[AnyEvent]:
        """Does something that may record; says what was recorded, and what was refused."""
        count = len(self.session.state.events)
        try:
            act()
        except DiagError as error:
            if len(self.session.state.events) == count:
                if not count:
                    raise
                self.say(f"not taken: {error}")
            else:
                self.say(f"NOT ON DISK, kept in memory: {error}")
                self.say("  `save FILE` writes the whole case to FILE and carries on there")
        new = list(self.session.state.events[count:])
        for event in new:
            if not isinstance(event, Withdrawn):
                self.say(f"  recorded {event.number}: {event_line(self.circuit, event)}")
        return new

    def _record(self, kind: type[Any], **fields: Any) -> None:
        """Records an event of the kind, by this person, now."""
        try:
            event = kind(at=self.now(), by=self.by, **fields)
        except ValidationError as error:
            fault = error.errors(include_url=False)[0]
            raise UsageError(f"{fault['loc'][-1]}: {fault['msg']}") from None
        self.session.add(event)

    def _handle(self, step: NextStep, line: str) -> None:
        observable = self.circuit.observables.get(step.id)
        if observable is not None and outcome_named(observable, line.partition("#")[0]):
            return self._take(step, line)
        for pattern, handler in self._commands:
            if match := pattern.match(line):
                if handler == self._cannot:
                    return handler(step, match[1] or "")
                return handler(*((text or "").strip() for text in match.groups()))
        return self._take(step, line)

    def _take(self, step: NextStep, line: str) -> None:
        observable = self.circuit.observables.get(step.id)
        value, task = split_task(line)
        if "=" in value:
            return self._found(line)
        value, minutes = split_after(value)
        if observable is None:
            raise UsageError(f"{brief(line)} is no answer here; `help` lists what can be said")
        name, point = observable.record.id, observable.point
        value = outcome_named(observable, value) or value
        try:
            make_finding(observable, value)
        except UsageError as error:
            raise UsageError(f"{error}; `help` lists what else can be said") from None
        return self._record(
            Found, name=name, point=point, value=value, reference=task, minutes_after_stop=minutes
        )

    def _found(self, text: str, complaint: bool = False) -> None:
        finding, task, minutes = self._parsed(text)
        record, point = finding.observable.record, finding.observable.point
        self._record(
            Found,
            name=record.id,
            point=point,
            value=finding.value,
            complaint=complaint,
            reference=task,
            minutes_after_stop=minutes,
        )

    def _parsed(self, text: str) -> tuple[Finding, str, float | None]:
        """A finding as it was typed, its task, and its minutes after shutdown."""
        body, task = split_task(text)
        body, minutes = split_after(body)
        return parse_finding(self.circuit, as_finding(body)), task, minutes

    # -- commands -----------------------------------------------------------------------

    def _help(self) -> None:
        for line in HELP.splitlines():
            self.say(line)

    def _leave(self) -> None:
        unsaved = self.keeper.unsaved if self.keeper else 0
        if unsaved and not self._warned:
            self._warned = True
            raise UsageError(
                f"entries in memory only: {unsaved}; `save FILE` first, or `stop` to lose them"
            )
        raise EOFError

    def _undo(self) -> None:
        last = self.session.undo(self.now(), self.by)
        text = f"taken back: {event_line(self.circuit, last)}" if last else "nothing to take back"
        self.say(text)

    def _why(self, cause: str) -> None:
        if cause:
            return self._why_cause(cause)
        steps = self.session.assessment.steps
        self.say(f"{steps[0].title}: {reason(steps[0])}")
        for rival in steps[1:5]:
            self.say(f"  instead: {rival.title} ({rival.id}), {reason(rival)}")
        observable = self.circuit.observables.get(steps[0].id)
        return self._foretell(observable) if observable is not None else None

    def _why_cause(self, cause: str) -> None:
        reasons = self.session.assessment.reasons(cause.lower())
        for told in reasons:
            self.say(f"  {told.sentence}")
        total = sum(told.weight.decibans for told in reasons)
        chance = self.session.assessment.marginals[cause.lower()]
        title = cause_title(self.circuit, cause.lower())
        self.say(f"  together {total:+.1f} db: {title}, {percent(chance)}")

    def _foretell(self, observable: Observable) -> None:
        outlook = self.session.assessment.outlook
        refs = outlook.frame.refs
        for number, chance in enumerate(outlook.chances(observable).tolist()):
            after = outlook.after(observable, number)
            best = int(after.argmax())
            cause = cause_title(self.circuit, refs[best])
            word = spoken(observable, observable.outcomes[number])
            self.say(f"  if {word} ({percent(chance)}): {cause}, {percent(float(after[best]))}")

    def _causes(self) -> None:
        for ref, chance in self.session.assessment.posterior.causes()[:15]:
            if chance >= 0.001:
                self.say(f"  {percent(chance):>6}  {cause_title(self.circuit, ref)} ({ref})")
        posterior = self.session.assessment.posterior
        self.say(f"  {percent(posterior.unlisted):>6}  a cause that this circuit does not list")
        self.say(f"  {percent(posterior.nothing_wrong):>6}  nothing found wrong")
        self.say("  together:")
        for faults, chance in posterior.hypotheses(min(5, len(posterior.weight))):
            self.say(f"  {percent(chance):>6}  {' + '.join(faults) or 'nothing'}")
        covered = posterior.coverage
        self.say(f"  coverage {covered.value:.6f} ({covered.method})")

    def _log(self) -> None:
        for event in self.session.state.events:
            self.say(f"  {event.number:>3}  {event_line(self.circuit, event)}")

    def _cannot(self, step: NextStep, why: str) -> None:
        if step.kind in ("escalate", "close"):
            raise UsageError("handing over is always possible; `close` or `stop`")
        self._record(NotPossible, step=step.id, reason=why)

    def _add(self, text: str) -> None:
        if "=" in text:
            self._found(text)
        elif not text:
            raise UsageError("write NAME@POINT=VALUE; `add WORD` lists the findings with WORD")
        else:
            self._look_up(text)

    def _look_up(self, word: str) -> None:
        found = [
            observable
            for observable in self.circuit.observables.values()
            if plain_id(word) in observable.id or word.lower() in titled(observable).lower()
        ]
        if not found:
            raise UnknownName("finding", word, self.circuit.observables)
        for observable in found:
            self.say(f"  {observable.id}   {titled(observable)}: {takes(observable)}")

    def _doubt(self, text: str) -> None:
        words = text.split()
        if not words:
            for taken in self.session.state.taken:
                self.say(f"  {taken.number:>3}  {taken.finding}")
        if len(words) != 2:
            raise UsageError("write doubt N TRUST, the number of a finding and 0 to 1")
        number, trust = whole(words[0]), fraction(words[1])
        if not 0.0 < trust <= 1.0:
            said = brief(words[1])
            raise UsageError(f"trust {said} must lie above 0 and not above 1, such as 0.5")
        self._record(Doubted, target=number, trust=trust)

    def _state(self, name: str) -> None:
        if not name:
            listed = ", ".join(self.circuit.engine_states)
            raise UsageError(f"write state STATE, one of {listed}")
        self._record(StateChanged, engine=plain_id(name))

    def _people(self, word: str) -> None:
        if word not in ("near", "clear"):
            raise UsageError("say `people near` or `people clear`")
        self._record(StateChanged, people_clear=word == "clear")

    def _open(self, name: str) -> None:
        self._record(StateChanged, opened=(self._opening("open", name),))

    def _shut(self, name: str) -> None:
        self._record(StateChanged, closed=(self._opening("shut", name),))

    def _opening(self, command: str, name: str) -> str:
        if not name:
            listed = ", ".join(self.circuit.openings)
            raise UsageError(f"write {command} NAME, one of {listed}")
        return plain_id(name)

    def _fixed(self, text: str) -> None:
        name, task = split_task(text)
        known = self.circuit.remedies
        if not name:
            return self._likely_remedies()
        if plain_id(name) not in known:
            unknown = UnknownName("rectification", name, known)
            raise UsageError(f"{unknown}; `fixed by` lists the likely ones")
        off = self._read("part off, serial (Enter if none)> ")
        on = self._read("part on, serial (Enter if none)> ")
        return self._record(
            Rectified, rectification=plain_id(name), part_off=off, part_on=on, reference=task
        )

    def _likely_remedies(self) -> None:
        state = self.session.state
        present = self.session.assessment.present
        for step in remedies_by_chance(self.circuit, present, state.place, state.done)[:10]:
            self.say(f"  {percent(step.probability):>7}  {step.id}   {step.title}")
        self.say("Write fixed by NAME.")

    def _note(self, text: str) -> None:
        self._record(Noted, text=given("note TEXT", text))

    def _hand_over(self, to: str) -> None:
        self._record(HandedOver, to=given("hand over to NAME", to))

    def _taken_over(self) -> None:
        self._record(Acknowledged)

    def _save(self, path: str) -> None:
        if self.keeper is None:
            raise UsageError("this case has no log; start it with one")
        self.say(f"the whole case is saved in {self.keeper.elsewhere(given('save FILE', path))}")
        self._warned = False

    # -- closing ------------------------------------------------------------------------

    def _close(self) -> None:
        self.say("  1 cause confirmed   2 no fault found   3 handed to engineering")
        outcomes = ("cause_confirmed", "no_fault_found", "handed_to_engineering")
        choice = self._until_good(
            "outcome, 1 to 3 (Enter: not yet)> ", lambda text: number_within(text, len(outcomes))
        )
        if choice is None:
            return self.say("not closed")
        causes = self._confirmed() if choice == 1 else ()
        proof = self._verification() if causes is not None else None
        if causes is None or proof is None:
            return self.say("not closed")
        number, why = proof
        self._record(
            Closed,
            outcome=outcomes[choice - 1],
            causes=causes,
            verification=number,
            not_verified_because=why,
        )
        return self.say("The case is closed. A licensed person completes and signs the record.")

    def _until_good(self, prompt: str, take: Callable[[str], T]) -> T | None:
        """What `take` makes of an answer, asked again until it is good; None for Enter."""
        while text := self._read(prompt):
            try:
                return take(text)
            except DiagError as error:
                self.say(f"not taken: {error}")
        return None

    def _confirmed(self) -> tuple[str, ...] | None:
        """The causes that were confirmed: by default those that are likely to be the answer."""
        posterior = self.session.assessment.posterior
        listed = [ref for ref, _ in posterior.causes()[:SHOWN]]
        best, chance = posterior.hypotheses(1)[0]
        top = best if chance > 0.5 else ()
        for number, ref in enumerate(listed, start=1):
            self.say(f"  {number} {ref}   {cause_title(self.circuit, ref)}")
        enter = ", ".join(top) or "not yet"
        prompt = f"causes, by number or COMPONENT.MODE, commas between (Enter: {enter})> "
        return self._until_good(prompt, lambda text: self._named(text, listed)) or top or None

    def _named(self, text: str, listed: list[str]) -> tuple[str, ...]:
        known = (*self.circuit.modes, UNLISTED)
        refs = []
        for word in filter(None, (part.strip() for part in text.split(","))):
            ref = listed[number_within(word, len(listed)) - 1] if word.isdecimal() else word
            if ref not in known:
                raise UnknownName("cause", ref, known)
            refs.append(ref)
        return tuple(dict.fromkeys(refs))

    def _verification(self) -> tuple[int | None, str] | None:
        """(the finding that proves it, or None, and then why there is none); None for Enter."""
        state = self.session.state
        fresh = [t for t in state.taken if t.finding.world == state.world and not t.superseded]
        for taken in fresh[-5:]:
            self.say(f"  {taken.number:>3}  {taken.finding}")
        named = {t.finding.key: t.number for t in fresh}

        def take(text: str) -> tuple[int | None, str]:
            if text.isdecimal():
                if whole(text) not in named.values():
                    raise UsageError(f"entry {text} is no finding since the last rectification")
                return whole(text), ""
            if " " not in text and ("@" in text or "_" in text or text in named):
                if plain_id(text) not in named:
                    raise UnknownName("finding since the last rectification", text, named)
                return named[plain_id(text)], ""
            return None, text

        prompt = "verified by finding (number or name), or why it was not (Enter: not yet)> "
        return self._until_good(prompt, take)


def given(usage: str, text: str) -> str:
    """`text`, where there is some.

    Raises:
        UsageError: it is empty; says how the command is written.
    """
    if not text:
        raise UsageError(f"write {usage}")
    return text


def split_task(line: str) -> tuple[str, str]:
    """An answer and the task that was followed, as in `52psi # TASK`."""
    answer, _, task = line.partition("#")
    return answer.strip(), task.strip()


def split_after(text: str) -> tuple[str, float | None]:
    """A value, and the minutes after shutdown where they are said: `9.5l after 20 min`."""
    match = re.match(r"^(.*?)\s+after\s+(\d{1,6}(?:\.\d{1,3})?)\s*(min|h)$", text.strip())
    if match is None:
        return text, None
    return match[1], float(match[2]) * (60.0 if match[3] == "h" else 1.0)


def as_finding(text: str) -> str:
    """A finding as people may type it, in the form NAME@POINT=VALUE."""
    name, _, value = text.partition("=")
    return f"{'@'.join(map(plain_id, name.split('@')))}={value.strip()}"


def whole(text: str) -> int:
    """A whole number as people type it.

    Raises:
        UsageError: it is not one.
    """
    if not (text.isdecimal() and len(text) < 10):
        raise UsageError(f"{brief(text)} is not the number of an entry")
    return int(text)


def fraction(text: str) -> float:
    """A number, or 0 where the text is none."""
    try:
        return float(text)
    except ValueError:
        return 0.0


def number_within(text: str, count: int) -> int:
    """A number from 1 to `count`.

    Raises:
        UsageError: it is anything else.
    """
    if not (text.isdecimal() and len(text) < 10 and 1 <= int(text) <= count):
        raise UsageError(f"{brief(text)} is not a number from 1 to {count}")
    return int(text)


def plain_id(name: str) -> str:
    """An id as people may type it."""
    return name.strip().lower().replace("-", "_").replace(" ", "_")


def spoken(observable: Observable, outcome: str) -> str:
    """An outcome as it reads to a person."""
    return observable.record.words.get(outcome, outcome.replace("_", " "))


def outcome_named(observable: Observable, text: str) -> str:
    """The outcome that `text` names by its number or word, or nothing."""
    said = text.strip()
    outcomes = observable.outcomes
    if said.isdecimal() and len(said) < 4 and 1 <= int(said) <= len(outcomes):
        return outcomes[int(said) - 1]
    for outcome in outcomes:
        word = spoken(observable, outcome).lower()
        if said.lower() in (word, word.partition(",")[0]) or plain_id(said) == outcome:
            return outcome
    return ""


def choices(observable: Observable) -> str:
    """The answers with their numbers, and the unit where a reading may be given."""
    listed = [f"{n} {spoken(observable, o)}" for n, o in enumerate(observable.outcomes, start=1)]
    scale = observable.record.scale
    reading = f"   or a reading in {scale.unit}" if scale else ""
    return "   ".join(listed) + reading


def takes(observable: Observable) -> str:
    """The values that a finding takes, as they are written in `add`."""
    scale = observable.record.scale
    return ", ".join((*observable.outcomes, *([f"or a reading in {scale.unit}"] if scale else [])))


def reason(step: NextStep) -> str:
    """Why this step, in a few words."""
    if step.kind == "rectification":
        return f"its cause is present with {percent(step.probability)}"
    if step.kind == "close":
        return f"no cause is left with {percent(step.probability)}"
    if step.kind == "escalate":
        return "no step left is worth its minutes"
    told = f"{step.information_bits:.2f} bits"
    return f"expected to tell {told} in {step.expected_minutes:g} min"

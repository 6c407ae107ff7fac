"""A session in plain lines: for pipes, screen readers and slow links.

Nothing is drawn over; every line stands by itself. Time, input and output come from outside.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Iterable
from dataclasses import dataclass
from datetime import datetime

from diag.advice.steps import NOTICE, NextStep
from diag.belief.evidence import parse_finding
from diag.circuit.model import Observable
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
    StateChanged,
)
from diag.record.narrate import cause_title, event_line, percent
from diag.session import Session

SHOWN = 4
HELP = """\
An answer is the number or word beside it, or a reading with its unit (52psi, 3.6bar).
End an answer with `# TASK` to record the task of the approved data that you followed.
  can't [WHY]            this step is not possible; ask for another
  undo                   take back the last thing recorded
  why                    why this step, and its rivals
  causes                 all causes worth naming
  log                    what is recorded so far
  add NAME@POINT=VALUE   a finding nobody asked for
  doubt N TRUST          finding N may be wrong; TRUST from 0 to 1
  state STATE            engine state: cold, hot_stopped, motoring, idle, high_power
  open NAME, shut NAME   an opening, for example cowl
  fixed by NAME          a rectification was done
  note TEXT              a remark
  hand over to NAME      pass the case on
  taken over             the hand-over was read
  save FILE              write the whole case to another file
  close                  end the case
  stop                   leave; the case can be resumed
"""


class _Stop(Exception):
    """The person leaves the session."""


@dataclass(frozen=True, slots=True)
class Identity:
    """Whose engine and whose hand."""

    engine: str = ""
    aircraft: str = ""
    by: str = ""


class PlainSession:
    """Asks and records in lines.

    Args:
        session: the case.
        ask: shows a prompt and returns one line; raises EOFError at the end of input.
        say: prints one line.
        now: the clock.
        by: who answers.
        save_elsewhere: writes the whole case to another file when its log cannot be written.
    """

    def __init__(
        self,
        session: Session,
        ask: Callable[[str], str],
        say: Callable[[str], None],
        now: Callable[[], datetime],
        by: str = "",
        save_elsewhere: Callable[[str], object] | None = None,
    ) -> None:
        self.save_elsewhere = save_elsewhere
        self.session, self.circuit = session, session.circuit
        self.ask, self.say, self.now, self.by = ask, say, now, by
        self._commands: tuple[tuple[re.Pattern[str], Callable[..., None]], ...] = tuple(
            (re.compile(rf"^(?:{pattern})$", re.IGNORECASE | re.DOTALL), handler)
            for pattern, handler in (
                (r"help|\?", self._help),
                (r"stop|quit|exit", self._leave),
                (r"undo", self._undo),
                (r"why", self._why),
                (r"causes", self._causes),
                (r"log", self._log),
                (r"can'?t|cannot|(?:can'?t|cannot)\s+(.*)", self._cannot),
                (r"add\s+(.+)", self._add),
                (r"doubt\s+(\d+)\s+(\S+)", self._doubt),
                (r"state\s+(\S+)", self._state),
                (r"open\s+(\S+)", self._open),
                (r"shut\s+(\S+)", self._shut),
                (r"fixed\s+by\s+(.+)", self._fixed),
                (r"note\s+(.+)", self._note),
                (r"hand\s*over\s+to\s+(.+)", self._hand_over),
                (r"taken\s+over", self._taken_over),
                (r"save\s+(.+)", self._save),
                (r"close", self._close),
            )
        )

    # -- the course of a case -----------------------------------------------------------

    def begin(
        self, who: Identity, worked_on: tuple[str, ...] = (), findings: Iterable[str] = ()
    ) -> None:
        """Takes the complaint: the crew's words and the findings among them."""
        given = list(findings)
        self.say(f"{self.circuit.title} ({self.circuit.id}, version {self.circuit.file.version})")
        self.say(NOTICE)
        words: list[str] = []
        if not given:
            words, given = self._complaint()
        self._record(
            Opened(
                at=self.now(),
                by=self.by,
                circuit=self.circuit.id,
                version=self.circuit.file.version,
                content_hash=self.circuit.content_hash,
                overlays=self.circuit.overlays,
                engine=who.engine,
                aircraft=who.aircraft,
                complaint=" ".join(words),
                worked_on=worked_on,
            )
        )
        for text in given:
            self._record(self._found(text, complaint=True))

    def _complaint(self) -> tuple[list[str], list[str]]:
        self.say("Complaint: the crew's words, and findings such as oil_pressure@hot_idle=52psi.")
        self.say("One a line; an empty line ends it.")
        words: list[str] = []
        findings: list[str] = []
        while line := self._read("complaint> "):
            if "=" not in line:
                words.append(line)
                continue
            try:
                findings.append(str(parse_finding(self.circuit, line)))
            except DiagError as error:
                self.say(f"not taken: {error}")
        return words, findings

    def run(self) -> None:
        """Asks until the case is closed or the person stops."""
        try:
            while self.session.state.closed is None:
                step = self._offer()
                while not self._answer(step, self._read("answer> ")):
                    pass
        except _Stop:
            return

    def _read(self, prompt: str) -> str:
        """One line; lines that begin with # are remarks in a prepared file of answers."""
        while (line := self.ask(prompt).strip()).startswith("#"):
            pass
        return line

    def _offer(self) -> NextStep:
        """Shows the causes and the next step."""
        self._show_causes(SHOWN)
        step = self.session.assessment.steps[0]
        self.say("")
        self.say(f"Next: {step.title}, {step.minutes:g} min")
        self.say(f"  why: {reason(step)}")
        for need in step.needs:
            self.say(f"  needs: {need}")
        if step.access_minutes:
            self.say(f"  getting there and closing up: {step.access_minutes:g} min")
        for caution in step.cautions:
            self.say(f"  CAUTION: {caution}")
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

    def _show_causes(self, count: int) -> None:
        assessment, state = self.session.assessment, self.session.state
        before = dict(state.events[-1].before.causes) if state.events[-1].before else {}
        now = assessment.standing.causes
        self.say("")
        for ref, chance in now[:count]:
            moved = f"  (was {percent(before[ref])})" if before.get(ref, chance) != chance else ""
            self.say(f"  {percent(chance):>6}  {cause_title(self.circuit, ref)}{moved}")
        if all(not ref.startswith("unlisted") for ref, _ in now[:count]):
            unlisted = percent(assessment.unlisted)
            self.say(f"  {unlisted:>6}  {cause_title(self.circuit, 'unlisted.present')}")
        if assessment.conflict_bits > 1.0:
            bits = f"{assessment.conflict_bits:.1f}"
            self.say(f"  The findings do not hang together ({bits} bits): doubt one of them.")

    # -- answers ------------------------------------------------------------------------

    def _answer(self, step: NextStep, line: str) -> bool:
        """Handles one line; False when the same question stands."""
        if not line:
            return False
        count = len(self.session.state.events)
        try:
            for pattern, handler in self._commands:
                if match := pattern.match(line):
                    if handler == self._cannot:
                        handler(step, match[1] or "")
                    else:
                        handler(*match.groups())
                    return len(self.session.state.events) != count
            self._take(step, line)
        except DiagError as error:
            if len(self.session.state.events) == count:
                self.say(f"not taken: {error}")
            else:
                self.say(f"kept in memory, NOT ON DISK: {error}")
                self.say("  `save FILE` writes the whole case elsewhere")
        return len(self.session.state.events) != count

    def _record(self, event: AnyEvent) -> None:
        self.session.add(event)

    def _take(self, step: NextStep, line: str) -> None:
        observable = self.circuit.observables.get(step.id)
        value, _, task = (part.strip() for part in line.partition("#"))
        if "=" in value:
            self._add(line)
            return
        if observable is None:
            raise UsageError(f"{line!r} is no answer here; `help` lists what can be said")
        if value.isdigit() and 1 <= int(value) <= len(observable.outcomes):
            value = observable.outcomes[int(value) - 1]
        name, point = observable.record.id, observable.point
        self._record(
            Found(at=self.now(), by=self.by, name=name, point=point, value=value, reference=task)
        )

    def _found(self, text: str, complaint: bool = False) -> Found:
        body, _, task = (part.strip() for part in text.partition("#"))
        finding = parse_finding(self.circuit, body)
        return Found(
            at=self.now(),
            by=self.by,
            name=finding.observable.record.id,
            point=finding.observable.point,
            value=finding.value,
            complaint=complaint,
            reference=task,
        )

    # -- commands -----------------------------------------------------------------------

    def _help(self) -> None:
        for line in HELP.splitlines():
            self.say(line)

    def _leave(self) -> None:
        raise _Stop

    def _undo(self) -> None:
        last = self.session.undo(self.now(), self.by)
        text = event_line(self.circuit, last) if last else "nothing to take back"
        self.say(f"taken back: {text}" if last else text)

    def _why(self) -> None:
        steps = self.session.assessment.steps
        self.say(f"{steps[0].title}: {reason(steps[0])}")
        for rival in steps[1:5]:
            self.say(f"  instead: {rival.title} ({rival.id}), {reason(rival)}")
        observable = self.circuit.observables.get(steps[0].id)
        if observable is not None:
            self._foretell(observable)

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
        self._record(NotPossible(at=self.now(), by=self.by, step=step.id, reason=why.strip()))

    def _add(self, text: str) -> None:
        self._record(self._found(text))

    def _doubt(self, number: str, trust: str) -> None:
        try:
            value = float(trust)
        except ValueError:
            value = 0.0
        if not 0.0 < value <= 1.0:
            raise UsageError(f"trust {trust!r} must lie above 0 and not above 1, such as 0.5")
        self._record(Doubted(at=self.now(), by=self.by, target=int(number), trust=value))

    def _state(self, name: str) -> None:
        self._record(StateChanged(at=self.now(), by=self.by, engine=plain_id(name)))

    def _open(self, name: str) -> None:
        self._record(StateChanged(at=self.now(), by=self.by, opened=(plain_id(name),)))

    def _shut(self, name: str) -> None:
        self._record(StateChanged(at=self.now(), by=self.by, closed=(plain_id(name),)))

    def _fixed(self, name: str) -> None:
        name, _, task = (part.strip() for part in name.partition("#"))
        known = self.circuit.remedies
        if plain_id(name) not in known:
            raise UnknownName("rectification", name, known)
        off = self._read("part off, serial (Enter if none)> ")
        on = self._read("part on, serial (Enter if none)> ")
        self._record(
            Rectified(
                at=self.now(),
                by=self.by,
                rectification=plain_id(name),
                part_off=off,
                part_on=on,
                reference=task,
            )
        )

    def _note(self, text: str) -> None:
        self._record(Noted(at=self.now(), by=self.by, text=text))

    def _hand_over(self, to: str) -> None:
        self._record(HandedOver(at=self.now(), by=self.by, to=to))

    def _taken_over(self) -> None:
        self._record(Acknowledged(at=self.now(), by=self.by))

    def _save(self, path: str) -> None:
        if self.save_elsewhere is None:
            raise UsageError("this case has no log; start it with one")
        self.say(f"the whole case is saved in {self.save_elsewhere(path.strip())}")

    def _close(self) -> None:
        self.say(
            "  1 cause confirmed   2 no fault found   3 handed to engineering   (Enter: not yet)"
        )
        outcomes = {
            "1": "cause_confirmed",
            "2": "no_fault_found",
            "3": "handed_to_engineering",
        }
        choice = self._read("outcome> ")
        if not choice:
            return
        if choice not in outcomes:
            raise UsageError(f"{choice!r} is not 1, 2 or 3")
        causes: tuple[str, ...] = ()
        if choice == "1":
            top = self.session.assessment.posterior.hypotheses(1)[0][0]
            typed = self.ask(f"causes, COMPONENT.MODE (Enter: {', '.join(top)})> ").split(",")
            causes = tuple(c.strip() for c in typed if c.strip()) or top
        number, why = self._verification()
        self._record(
            Closed.model_validate(
                {
                    "at": self.now(),
                    "by": self.by,
                    "outcome": outcomes[choice],
                    "causes": causes,
                    "verification": number,
                    "not_verified_because": why,
                }
            )
        )
        self.say("The case is closed. A licensed person completes and signs the record.")

    def _verification(self) -> tuple[int | None, str]:
        state = self.session.state
        fresh = [t for t in state.taken if t.finding.world == state.world and not t.superseded]
        for taken in fresh[-5:]:
            self.say(f"  {taken.number:>3}  {taken.finding}")
        answer = self.ask("verified by finding (number or name), or why it was not verified> ").strip()
        named = {t.finding.key: t.number for t in fresh}
        if answer in named:
            return named[answer], ""
        return (int(answer), "") if answer.isdigit() else (None, answer)


def plain_id(name: str) -> str:
    """An id as people may type it."""
    return name.strip().lower().replace("-", "_").replace(" ", "_")


def spoken(observable: Observable, outcome: str) -> str:
    """An outcome as it reads to a person."""
    return observable.record.words.get(outcome, outcome.replace("_", " "))


def choices(observable: Observable) -> str:
    """The answers with their numbers, and the unit where a reading may be given."""
    listed = [f"{n} {spoken(observable, o)}" for n, o in enumerate(observable.outcomes, start=1)]
    scale = observable.record.scale
    reading = f"   or a reading in {scale.unit}" if scale else ""
    return "   ".join(listed) + reading


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

"""The case: the step on the table, the likely causes, the other steps, the log so far."""

from __future__ import annotations

from collections.abc import Callable
from textwrap import wrap
from typing import TYPE_CHECKING

from textual import events, on, work
from textual.app import ComposeResult
from textual.containers import Horizontal, Vertical, VerticalScroll
from textual.content import Content
from textual.screen import Screen
from textual.widgets import Input, Label, Static

from diag.advice.steps import NO_REFERENCE, NextStep
from diag.circuit.model import Observable
from diag.errors import DiagError, UsageError
from diag.record.events import (
    Acknowledged,
    Closed,
    Doubted,
    HandedOver,
    Noted,
    NotPossible,
    Rectified,
    StateChanged,
)
from diag.record.narrate import event_line, narrate, percent
from diag.tui.actions import CASE, bindings
from diag.tui.desk import Branch, Look, branches, likely_remedies, reading_value
from diag.tui.dialogs.asking import AskState
from diag.tui.dialogs.reading import Reader, cause_lines, why_lines
from diag.tui.dialogs.slip import Fields, Line, Pick, Row
from diag.tui.flows import ask_any_finding, ask_closing, fresh
from diag.tui.widgets.causes import Causes
from diag.tui.widgets.lists import Rivals, SoFar
from diag.tui.widgets.parts import Heading, KeyStrip, TopLine, cut
from diag.tui.widgets.step import Answers, Warnings
from diag.tui.wording import KINDS, effort, place_words, reason, since, spoken

if TYPE_CHECKING:
    from diag.tui.app import DiagApp

PASSIVE = {"cannot", "answer", "fixed", "close", "hand_over", "add", "state", "doubt", "undo"}
"""What is no longer possible once a case is closed."""
DONE = {"rectification": "it is done", "close": "close the case", "escalate": "hand it over"}


class CaseScreen(Screen[None]):
    """One case; it draws a `Look` and sends what the person says to the app."""

    BINDINGS = bindings(CASE)
    AUTO_FOCUS = ""

    def __init__(self, look: Look) -> None:
        super().__init__()
        self.look = look
        self.turned = 0
        self.branches: tuple[Branch, ...] = ()
        self.said = ""

    @property
    def desk_app(self) -> DiagApp:
        from diag.tui.app import DiagApp

        assert isinstance(self.app, DiagApp)
        return self.app

    def compose(self) -> ComposeResult:
        yield TopLine(id="top")
        with Vertical(id="bench"):
            with Vertical(id="now-column"):
                yield Heading("NOW", id="now-heading")
                with VerticalScroll(id="now-body", classes="hung", can_focus=False):
                    yield Static(id="step-title", markup=False)
                    yield Static(id="step-question", markup=False)
                    yield Warnings(id="warnings")
                    yield Answers(id="answers")
                    with Horizontal(id="fields"):
                        yield Label("reading ", id="reading-label")
                        yield Input(compact=True, id="reading-field")
                        yield Label("", id="unit-label")
                        yield Label("task ")
                        yield Input(compact=True, id="task-field",
                                    placeholder="approved data, task followed")  # fmt: skip
                    yield Static(id="step-figures", markup=False)
                    yield Static(id="said", markup=False)
            with Vertical(id="side-column"):
                yield Heading("COULD BE", id="causes-heading")
                yield Causes(id="causes")
                yield Heading("INSTEAD", id="rivals-heading")
                yield Rivals(id="rivals")
            with Vertical(id="far-column"):
                yield Heading("SO FAR", last=True, id="far-heading")
                yield SoFar(id="far")
        yield KeyStrip(CASE)

    def on_mount(self) -> None:
        self.query_one(Causes).add_class("hung")
        self.query_one(Rivals).add_class("hung")
        self.set_interval(30, self._show_top)
        self.show(self.look)

    def on_resize(self, event: events.Resize) -> None:
        self.call_after_refresh(self._resized)

    def _resized(self) -> None:
        self._draw()
        self._foretell()

    # -- drawing --------------------------------------------------------------------------

    @property
    def step(self) -> NextStep:
        """The step on the table: the proposed one, or the one turned to."""
        return self.look.steps[min(self.turned, len(self.look.steps) - 1)]

    @property
    def observable(self) -> Observable | None:
        """What the step looks at, unless it is a rectification or an end."""
        return self.look.circuit.observables.get(self.step.id)

    def show(self, look: Look, said: str = "") -> None:
        """Draws the case anew, with the proposed step on the table."""
        asked = self.step.id
        self.look, self.turned, self.said = look, 0, said
        self.branches = ()
        if self.step.id != asked or look.new:
            self._clear_fields()
        self._draw()
        self._foretell()

    def told(self, said: str) -> None:
        """A word under the step, as when an entry was not taken."""
        self.said = said
        self._show_said()

    def _clear_fields(self) -> None:
        self.query_one("#reading-field", Input).value = ""
        reference = self.step.reference
        known = "" if reference == NO_REFERENCE else reference
        self.query_one("#task-field", Input).value = known
        self.set_focus(None)

    def _draw(self) -> None:
        wide = self.app.size.width >= 100
        self.query_one(Causes).set_room(self._room(wide), tall=wide and self.app.size.height >= 30)
        self._show_top()
        self._show_step(wide)
        self.query_one(Causes).show(self.look.causes)
        self._show_heads()
        self._show_lists(wide)
        self.query_one(KeyStrip).refresh()
        self.call_after_refresh(self._share_room)

    def _share_room(self) -> None:
        """A long step leaves fewer lines to the rest of the screen."""
        body = self.query_one("#now-body", VerticalScroll)
        bench = self.query_one("#bench")
        if self.app.size.width >= 100:
            # The step takes the lines it needs, and the log what is left of them.
            shown = [child for child in body.children if child.display]
            needs = 1 + sum(c.outer_size.height + c.styles.margin.height for c in shown)
            most = bench.size.height * 4 // 5
            bench.styles.grid_rows = f"{max(8, min(needs, most))} 1fr"
            long = needs > most
        else:
            long = bool(body.max_scroll_y)
            self._share_narrow()
        if long:
            kind = KINDS.get(self.step.kind, self.step.kind)
            self.query_one("#now-heading", Heading).aside = f"{kind} · PgDn: more"

    def _share_narrow(self) -> None:
        left = self.query_one("#bench").size.height - self.query_one("#now-column").size.height
        # Three headings, a line of the log and one other step at the least.
        most = max(3, min(self._room(False), left - 5))
        self.query_one(Causes).set_room(most, tall=False)
        rivals = max(1, min(4, left - most - 5))
        self.query_one(Rivals).show(self.look.steps, self.turned, len(self.look.held), rivals)

    def _room(self, wide: bool) -> int:
        """How many causes are shown."""
        height = self.app.size.height
        if wide:
            return min(10, height // 4 if height >= 30 else height - 14)
        return 5 if height < 30 else 8

    def _show_top(self) -> None:
        state = self.look.state
        head = state.opened
        who = [part for part in ((head.engine, head.aircraft) if head else ()) if part]
        left = " · ".join([*who, self.look.circuit.title])
        place = state.place
        words = place_words(self.look.circuit, place.engine, place.opened, place.people_near)
        right = f"{words} · {since(head.at, self.desk_app.now())}" if head else words
        lost = self.look.unsaved
        banner = f"NOT ON DISK: {lost} entries in memory only; v writes the case elsewhere"
        self.query_one(TopLine).show(left, right, banner if lost else "")

    def _show_step(self, wide: bool) -> None:
        step, observable = self.step, self.observable
        closed = self.look.state.closed
        width = self._inner(wide)
        title, question = self.query_one("#step-title", Static), self.query_one("#step-question")
        assert isinstance(question, Static)
        if closed is not None:
            title.update("The case is closed. A licensed person completes and signs the record.")
            question.update(event_line(self.look.circuit, closed))
        else:
            title.update(step.title)
            asks = observable.record.question if observable else step.note
            question.update("\n".join(wrap(asks, width)) if asks and asks != step.title else "")
        self.query_one(Warnings).show(self._holds(), step.cautions if not closed else (), width)
        self._show_answers(wide)
        scale = observable.record.scale if observable else None
        for name in ("#reading-label", "#reading-field", "#unit-label"):
            self.query_one(name).display = scale is not None and closed is None
        self.query_one("#unit-label", Label).update(f" {scale.unit}   " if scale else "")
        self.query_one("#fields").display = closed is None and step.kind not in (
            "escalate",
            "close",
        )
        self.query_one("#step-figures", Static).update(
            "" if closed else "\n".join(self._figures(width, wide))
        )
        self._show_said()

    def _inner(self, wide: bool) -> int:
        """Characters in a line of the step."""
        width = self.app.size.width
        return (width * 52 // 100 if wide else width) - 5

    def _holds(self) -> list[str]:
        """What a rule forbids now: of the step on the table, and of the case as a whole."""
        texts = list(self.step.held)
        return list(dict.fromkeys((*texts, *self.look.alarms)))

    def _show_answers(self, wide: bool) -> None:
        observable = self.observable
        answers = self.query_one(Answers)
        if self.look.state.closed is not None:
            answers.show(())
        elif observable is None:
            answers.show((DONE[self.step.kind],))
        else:
            words = [spoken(observable, outcome) for outcome in observable.outcomes]
            answers.show(words, self._notes() if wide else ())

    def _notes(self) -> list[str]:
        """What each answer would do, for screens with room for it."""
        notes = []
        for branch in self.branches:
            title, chance = branch.causes[0]
            notes.append(f"{percent(branch.chance)} likely; then {percent(chance)} {title}")
        return notes

    def _figures(self, width: int, wide: bool) -> list[str]:
        step = self.step
        lines = [f"{effort(step)} · {reason(step)}"]
        lines += [f"needs {'; '.join(step.needs)}"] if step.needs else []
        if step.note and self.observable is not None:
            lines += [f"asked because: {step.note}"]
        if not wide:
            return [cut(line, width) for line in lines]
        if step.kind not in ("escalate", "close"):
            lines.append(f"governed by {step.reference}")
        return [row for line in lines for row in wrap(line, width)]

    def _show_heads(self) -> None:
        look, step = self.look, self.step
        now = self.query_one("#now-heading", Heading)
        if self.turned:
            now.label = f"INSTEAD, {self.turned} of {len(look.steps) - 1}"
        else:
            now.label = "NOW"
        now.aside = "weighing …" if self.desk_app.busy else KINDS.get(step.kind, step.kind)
        causes = self.query_one("#causes-heading", Heading)
        if look.doubtful:
            causes.aside = f"{look.conflict:.1f} bits of conflict: {look.doubtful} fits least"
        else:
            fit = "findings agree" if look.conflict < 1 else f"{look.conflict:.1f} bits of conflict"
            causes.aside = f"{percent(look.coverage)} covered · {fit}"
        self.query_one("#rivals-heading", Heading).aside = f"← → turn to one of {len(look.steps)}"
        self.query_one("#far-heading", Heading).aside = f"{len(look.state.events)} entries"

    def _show_lists(self, wide: bool) -> None:
        most = 6 if wide else (2 if self.app.size.height < 30 else 4)
        self.query_one(Rivals).show(self.look.steps, self.turned, len(self.look.held), most)
        self.query_one(SoFar).show(self.look.state)

    def _show_said(self) -> None:
        said = self.query_one("#said", Static)
        said.display = bool(self.said)
        said.update(self.said)

    def busy_changed(self) -> None:
        """Says that the entry is being weighed, or that it has been."""
        self._show_heads()

    # -- foretelling ----------------------------------------------------------------------

    def _foretell(self) -> None:
        observable = self.observable
        if observable is not None and self.app.size.width >= 100:
            self._branch(self.look, observable)

    @work(thread=True, exclusive=True, group="foretell", exit_on_error=False)
    def _branch(self, look: Look, observable: Observable) -> None:
        found = tuple(branches(look.assessment, observable))
        self.app.call_from_thread(self._foretold, look, observable, found)

    def _foretold(self, look: Look, observable: Observable, found: tuple[Branch, ...]) -> None:
        if look is self.look and self.observable is observable:
            self.branches = found
            self._show_answers(self.app.size.width >= 100)

    # -- what a person may do -------------------------------------------------------------

    def check_action(self, action: str, parameters: tuple[object, ...]) -> bool | None:
        if self.look.state.closed is not None and action in PASSIVE:
            return None
        if action == "reading":
            scale = self.observable.record.scale if self.observable else None
            return True if scale is not None else None
        return True

    def _do(self, act: Callable[[], None]) -> None:
        self.desk_app.weigh(act)

    def _followed(self) -> str:
        return self.query_one("#task-field", Input).value.strip()

    def action_answer(self, number: int) -> None:
        observable = self.observable
        if observable is None:
            if number == 1:
                self._act_on_step()
            return
        if number > len(observable.outcomes):
            self.told(f"there is no answer {number} here")
            return
        value, task = observable.outcomes[number - 1], self._followed()
        self._do(lambda: self.desk_app.desk.found(observable, value, task))

    def _act_on_step(self) -> None:
        if self.step.kind == "rectification":
            self._rectify(self.step.id)
        elif self.step.kind == "close":
            self.action_close()
        else:
            self.action_hand_over()

    @on(Answers.Chosen)
    def _clicked(self, event: Answers.Chosen) -> None:
        self.action_answer(event.number)

    def action_reading(self) -> None:
        self.query_one("#reading-field", Input).focus()

    def action_task(self) -> None:
        self.query_one("#task-field", Input).focus()

    @on(Input.Submitted, "#task-field")
    def _task_given(self) -> None:
        self.set_focus(None)
        self.told("the task goes with the next answer")

    @on(Input.Submitted, "#reading-field")
    def _reading_given(self, event: Input.Submitted) -> None:
        observable = self.observable
        if observable is None or not event.value.strip():
            return
        try:
            value = reading_value(observable, event.value)
        except DiagError as error:
            self.told(f"NOT TAKEN: {error}")
            return
        task = self._followed()
        self._do(lambda: self.desk_app.desk.found(observable, value, task))

    def on_key(self, event: events.Key) -> None:
        if event.key == "escape" and self.focused is not None:
            event.stop()
            self.set_focus(None)

    def action_next_step(self) -> None:
        self._turn(1)

    def action_previous_step(self) -> None:
        self._turn(-1)

    def _turn(self, by: int) -> None:
        self.turned = (self.turned + by) % len(self.look.steps)
        self.branches, self.said = (), ""
        self._clear_fields()
        self._draw()
        self._foretell()

    def action_page(self, way: str) -> None:
        body = self.query_one("#now-body", VerticalScroll)
        body.scroll_page_down(animate=False) if way == "down" else body.scroll_home(animate=False)

    def action_cause_up(self) -> None:
        self.query_one(Causes).move(-1)

    def action_cause_down(self) -> None:
        self.query_one(Causes).move(1)

    def action_undo(self) -> None:
        self._do(self.desk_app.desk.undo)

    @work
    async def action_cannot(self) -> None:
        step = self.step
        if step.kind in ("escalate", "close"):
            self.told("handing over is always possible: h hands over, x closes")
            return
        line = Line("why", "why not", hint="Enter without a word is enough")
        said = await self.app.push_screen_wait(Fields("CAN'T", [line], step.title))
        if said is not None:
            self._do(
                lambda: self.desk_app.desk.record(NotPossible, step=step.id, reason=said["why"])
            )

    @work
    async def action_add(self) -> None:
        given = await ask_any_finding(self.app, self.look.circuit)
        if given is not None:
            observable, answer = given
            self._do(lambda: self.desk_app.desk.found(observable, answer.value, answer.reference))

    @work
    async def action_state(self) -> None:
        change = await self.app.push_screen_wait(AskState(self.look.circuit, self.look.state.place))
        if change is None:
            return
        if (
            change.engine is None
            and not (change.opened or change.closed)
            and (change.people_clear is None)
        ):
            self.told("nothing has changed")
            return
        self._do(
            lambda: self.desk_app.desk.record(
                StateChanged,
                engine=change.engine,
                opened=change.opened,
                closed=change.closed,
                people_clear=change.people_clear,
            )
        )

    @work
    async def action_fixed(self) -> None:
        rows = [Row(s.id, s.title, percent(s.probability)) for s in likely_remedies(self.look)]
        name = await self.app.push_screen_wait(Pick("WHAT WAS PUT RIGHT", rows, search=True))
        if name is not None:
            self._rectify(name)

    @work
    async def _rectify(self, name: str) -> None:
        remedy = self.look.circuit.remedies[name]
        own = self._followed() or remedy.record.reference
        lines = [
            Line("off", "part off, serial", hint="Enter if none"),
            Line("on", "part on, serial", hint="Enter if none"),
            Line("task", "task", own, "approved data, task followed"),
        ]
        given = await self.app.push_screen_wait(Fields("DONE", lines, remedy.record.title))
        if given is not None:
            self._do(
                lambda: self.desk_app.desk.record(
                    Rectified,
                    rectification=name,
                    part_off=given["off"],
                    part_on=given["on"],
                    reference=given["task"],
                )
            )

    @work
    async def action_hand_over(self) -> None:
        lines = [
            Line("to", "to whom", needed=True),
            Line("summary", "what they should know first", self._summary()),
        ]
        given = await self.app.push_screen_wait(Fields("HAND OVER", lines))
        if given is not None:
            self._do(
                lambda: self.desk_app.desk.record(
                    HandedOver, to=given["to"], summary=given["summary"]
                )
            )

    def _summary(self) -> str:
        top = self.look.causes[0]
        return f"{top.title} {percent(top.chance)}; next: {self.look.steps[0].title}"

    def action_taken_over(self) -> None:
        self._do(lambda: self.desk_app.desk.record(Acknowledged))

    @work
    async def action_note(self) -> None:
        said = await self.app.push_screen_wait(
            Fields("NOTE", [Line("text", "remark", needed=True)])
        )
        if said is not None:
            self._do(lambda: self.desk_app.desk.record(Noted, text=said["text"]))

    @work
    async def action_doubt(self) -> None:
        rows = [Row(str(t.number), str(t.finding)) for t in fresh(self.look)]
        if not rows:
            self.told("there is no finding to doubt")
            return
        number = await self.app.push_screen_wait(Pick("WHICH FINDING MAY BE WRONG", rows))
        if number is None:
            return
        lines = [
            Line("trust", "how far is it to be trusted, 0 to 1", "0.5", needed=True),
            Line("why", "why"),
        ]
        given = await self.app.push_screen_wait(Fields("DOUBT", lines))
        if given is not None:
            self._doubted(int(number), given)

    def _doubted(self, number: int, given: dict[str, str]) -> None:
        try:
            trust = float(given["trust"].replace(",", "."))
        except ValueError:
            self.told(f"NOT TAKEN: {given['trust']!r} is no number from 0 to 1")
            return
        self._do(
            lambda: self.desk_app.desk.record(
                Doubted, target=number, trust=trust, reason=given["why"]
            )
        )

    @work
    async def action_close(self) -> None:
        end = await ask_closing(self.app, self.look)
        if end is None:
            self.told("not closed")
            return
        self._do(
            lambda: self.desk_app.desk.record(
                Closed,
                outcome=end.outcome,
                causes=end.causes,
                verification=end.verification,
                not_verified_because=end.not_verified_because,
            )
        )

    @work
    async def action_save(self) -> None:
        line = Line("path", "file", hint="a new file, such as case.jsonl", needed=True)
        given = await self.app.push_screen_wait(Fields("WRITE THE CASE TO ANOTHER FILE", [line]))
        if given is not None:
            self._do(lambda: self._saved(given["path"]))

    def _saved(self, path: str) -> None:
        keeper = self.desk_app.desk.keeper
        if keeper is None:
            raise UsageError("this case has no log")
        place = keeper.elsewhere(path)
        self.desk_app.tell_later(f"the whole case is in {place}")

    # -- reading --------------------------------------------------------------------------

    def action_why(self) -> None:
        look, observable = self.look, self.observable
        ref = self.query_one(Causes).chosen_ref
        slip = Reader("WHY", self._why(self.branches, None))
        self.app.push_screen(slip)
        self._reasons(look, observable, ref, slip)

    def _why(self, found: tuple[Branch, ...], reasons: list[object] | None) -> list[Content]:
        width = self.app.size.width - 8
        row = next(r for r in self.look.causes if r.ref == self.query_one(Causes).chosen_ref)
        lines = why_lines(self.look.steps, self.turned, self.look.held, found, width)
        return [*lines, *cause_lines(row.title, reasons, width)]  # type: ignore[arg-type]

    @work(thread=True, exclusive=True, group="why", exit_on_error=False)
    def _reasons(self, look: Look, observable: Observable | None, ref: str, slip: Reader) -> None:
        found = tuple(branches(look.assessment, observable)) if observable else ()
        known = ref in look.assessment.posterior.frame.index
        reasons: list[object] = list(look.assessment.reasons(ref)) if known else []
        self.app.call_from_thread(self._reasoned, look, found, reasons, slip)

    def _reasoned(
        self, look: Look, found: tuple[Branch, ...], reasons: list[object], slip: Reader
    ) -> None:
        if look is self.look and slip.is_attached:
            slip.replaced(self._why(found, reasons))

    def action_log(self) -> None:
        width = self.app.size.width - 8
        rows = list(narrate(self.look.circuit, self.look.state.events))
        lines = [
            Content(row) for line in rows for row in wrap(line, width, subsequent_indent="    ")
        ]
        self.app.push_screen(Reader("THE WHOLE LOG", lines))

    def action_oil_path(self) -> None:
        self.desk_app.show_oil_path(self.look, self.query_one(Causes).chosen_ref)

    def as_text(self) -> str:
        """The words of the screen, to be copied."""
        step, observable = self.step, self.observable
        lines = [f"{self.look.circuit.title}: {step.title}"]
        if observable is not None:
            lines.append(observable.record.question)
            lines += [
                f"  {n} {spoken(observable, o)}" for n, o in enumerate(observable.outcomes, 1)
            ]
        lines += [f"CAUTION: {text}" for text in step.cautions]
        lines += [f"HOLD: {text}" for text in self._holds()]
        lines += [f"{percent(row.chance):>7}  {row.title}" for row in self.look.causes[:8]]
        lines += narrate(self.look.circuit, self.look.state.events)
        return "\n".join(lines)

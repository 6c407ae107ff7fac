"""Slips that ask for a finding, and for the state of engine and access."""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar

from textual import events, on
from textual.app import ComposeResult
from textual.binding import Binding, BindingType
from textual.containers import Horizontal
from textual.content import Content
from textual.widgets import Input, Label, Static

from diag.advice.steps import Place
from diag.circuit.model import Circuit, Observable
from diag.errors import DiagError
from diag.tui.desk import reading_value
from diag.tui.dialogs.slip import Slip
from diag.tui.widgets.parts import joined
from diag.tui.widgets.step import Answers
from diag.tui.wording import spoken


@dataclass(frozen=True, slots=True)
class Given:
    """A finding as it was given, with the task that was followed."""

    value: str
    reference: str = ""


class AskFinding(Slip[Given]):
    """The question of one observation, its answers on number keys, a reading with its unit."""

    hint = "number · r: reading · t: task · Esc: not now"
    BINDINGS: ClassVar[list[BindingType]] = [
        Binding("r", "reading", "reading", id="slip.reading"),
        Binding("t", "task", "task", id="slip.task"),
    ]

    AUTO_FOCUS = ""

    def __init__(self, observable: Observable) -> None:
        super().__init__()
        self.observable = observable
        record = observable.record
        where = f", {observable.point.replace('_', ' ')}" if observable.point else ""
        self.heading = f"{record.title}{where}"

    def body(self) -> ComposeResult:
        record = self.observable.record
        yield Static(record.question or record.title, classes="said", markup=False)
        yield Answers(id="slip-answers")
        with Horizontal(classes="line"):
            if record.scale is not None:
                yield Label("reading ")
                yield Input(compact=True, id="slip-reading")
                yield Label(f" {record.scale.unit}   ")
            yield Label("task ")
            yield Input(record.reference, compact=True, id="slip-task",
                        placeholder="approved data, task followed")  # fmt: skip

    def on_mount(self) -> None:
        super().on_mount()
        words = [spoken(self.observable, outcome) for outcome in self.observable.outcomes]
        self.query_one(Answers).show(words)

    def action_reading(self) -> None:
        if self.observable.record.scale is not None:
            self.query_one("#slip-reading", Input).focus()

    def action_task(self) -> None:
        self.query_one("#slip-task", Input).focus()

    def on_key(self, event: events.Key) -> None:
        number = int(event.key) if event.key.isdecimal() else 0
        if 0 < number <= len(self.observable.outcomes):
            event.stop()
            self._give(self.observable.outcomes[number - 1])

    @on(Answers.Chosen)
    def _clicked(self, event: Answers.Chosen) -> None:
        self._give(self.observable.outcomes[event.number - 1])

    @on(Input.Submitted, "#slip-reading")
    def _read(self, event: Input.Submitted) -> None:
        try:
            self._give(reading_value(self.observable, event.value))
        except DiagError as error:
            self.refuse(str(error))

    @on(Input.Submitted, "#slip-task")
    def _noted(self) -> None:
        self.set_focus(None)

    def _give(self, value: str) -> None:
        self.dismiss(Given(value, self.query_one("#slip-task", Input).value.strip()))


@dataclass(frozen=True, slots=True)
class Change:
    """A change of state; what stays as it is, is None or empty."""

    engine: str | None = None
    opened: tuple[str, ...] = ()
    closed: tuple[str, ...] = ()
    people_clear: bool | None = None


class AskState(Slip[Change]):
    """Engine state on numbers, openings on letters, people near on p; Enter takes it all."""

    hint = "number, letter, p · Enter: so it is · Esc: not now"
    BINDINGS: ClassVar[list[BindingType]] = [
        Binding("enter", "done", "so it is", id="slip.state_done", priority=True)
    ]
    heading = "STATE NOW"

    def __init__(self, circuit: Circuit, place: Place) -> None:
        super().__init__()
        self.circuit, self.place = circuit, place
        self.states = [s for s in circuit.engine_states if s not in ("any", "stopped")]
        self.openings = list(circuit.openings)
        # p is taken by the people near the engine.
        self.letters = list("abcdefghijklmnoqrstuvwxyz")[: len(self.openings)]
        self.engine, self.opened = place.engine, set(place.opened)
        self.near = place.people_near

    def body(self) -> ComposeResult:
        yield Static(id="states")

    def on_mount(self) -> None:
        super().on_mount()
        self._show()

    def _show(self) -> None:
        states = [("engine  ", "$faint")]
        for number, state in enumerate(self.states, start=1):
            here = state == self.engine
            states.append((f" {number} ", "reverse"))
            states.append((f" {'● ' if here else ''}{state.replace('_', ' ')}  ",
                           "bold" if here else ""))  # fmt: skip
        lines = [Content.assemble(*states)]
        for letter, name in zip(self.letters, self.openings, strict=True):
            tick = "[open]" if name in self.opened else "[shut]"
            opening = self.circuit.openings[name]
            inside = f"  inside {', '.join(opening.inside)}" if opening.inside else ""
            lines.append(
                Content.assemble(
                    (f" {letter} ", "reverse"), f" {tick} {opening.title}", (inside, "$faint")
                )
            )
        near = "[near]" if self.near else "[clear]"
        lines.append(Content.assemble((" p ", "reverse"), f" {near} people at the engine"))
        self.query_one("#states", Static).update(joined(lines))

    def on_key(self, event: events.Key) -> None:
        if event.key.isdecimal() and 0 < int(event.key) <= len(self.states):
            self.engine = self.states[int(event.key) - 1]
        elif event.key == "p":
            self.near = not self.near
        elif event.key in self.letters:
            self.opened ^= {self.openings[self.letters.index(event.key)]}
        else:
            return
        event.stop()
        self._show()

    def action_done(self) -> None:
        before = self.place
        self.dismiss(
            Change(
                self.engine if self.engine != before.engine else None,
                tuple(sorted(self.opened - before.opened)),
                tuple(sorted(before.opened - self.opened)),
                (not self.near) if self.near != before.people_near else None,
            )
        )

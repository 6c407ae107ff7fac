"""Slips: drawers that open from the foot of the screen and leave the question in sight."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import ClassVar, Generic, TypeVar

from textual import events, on
from textual.app import ComposeResult
from textual.binding import Binding, BindingType
from textual.containers import Horizontal, Vertical, VerticalScroll
from textual.content import Content
from textual.screen import ModalScreen
from textual.widgets import Input, Label, OptionList, Static
from textual.widgets.option_list import Option

from diag.tui.widgets.parts import Heading, cut, joined

T = TypeVar("T")


class Slip(ModalScreen[T], Generic[T]):
    """A drawer with a heading; Escape closes it without effect."""

    BINDINGS: ClassVar[list[BindingType]] = [
        Binding("escape", "cancel", "not now", id="slip.cancel")
    ]
    heading = ""
    hint = "Esc: not now"

    def compose(self) -> ComposeResult:
        with Vertical(id="slip"):
            yield Heading(self.heading, id="slip-heading")
            yield from self.body()

    def body(self) -> ComposeResult:
        """The widgets of the slip; each kind of slip brings its own."""
        yield from ()

    def on_mount(self) -> None:
        self.query_one("#slip-heading", Heading).aside = self.hint

    def action_cancel(self) -> None:
        self.dismiss(None)

    def refuse(self, why: str) -> None:
        """Says why an entry is not taken, and keeps the slip open."""
        self.query_one("#slip-heading", Heading).aside = f"NOT TAKEN: {why}"
        self.app.bell()


@dataclass(frozen=True, slots=True)
class Line:
    """A field of a slip."""

    name: str
    label: str
    value: str = ""
    hint: str = ""
    needed: bool = False


class Fields(Slip[dict[str, str]]):
    """One or more fields; Enter goes to the next, and from the last one gives them back."""

    hint = "Enter: next, then done · Esc: not now"

    def __init__(self, heading: str, lines: Sequence[Line], said: str = "") -> None:
        super().__init__()
        self.heading, self.lines, self.said = heading, tuple(lines), said

    def body(self) -> ComposeResult:
        if self.said:
            yield Static(self.said, classes="said", markup=False)
        for line in self.lines:
            with Horizontal(classes="line"):
                yield Label(f"{line.label} ", markup=False)
                yield Input(
                    value=line.value, placeholder=line.hint, compact=True, id=f"field-{line.name}"
                )

    def on_mount(self) -> None:
        super().on_mount()
        self.query(Input).first().focus()

    @on(Input.Submitted)
    def _next(self, event: Input.Submitted) -> None:
        inputs = list(self.query(Input))
        place = inputs.index(event.input)
        if place + 1 < len(inputs):
            inputs[place + 1].focus()
            return
        values = {
            line.name: field.value.strip() for line, field in zip(self.lines, inputs, strict=True)
        }
        for line in self.lines:
            if line.needed and not values[line.name]:
                self.query_one(f"#field-{line.name}", Input).focus()
                return self.refuse(f"{line.label} is needed")
        self.dismiss(values)
        return None


@dataclass(frozen=True, slots=True)
class Row:
    """A row to pick: what it stands for, how it reads, and a word on the right."""

    id: str
    text: str
    aside: str = ""


class Pick(Slip[str]):
    """One of several rows: by its number, with the arrows, or by typing a part of it.

    Args:
        heading: what is picked.
        rows: what there is to pick.
        search: whether there are so many that one types a part of the name; digits then
            belong to the search and choose no row.
    """

    def __init__(self, heading: str, rows: Sequence[Row], search: bool = False) -> None:
        super().__init__()
        self.heading, self.rows, self.search = heading, tuple(rows), search
        self.hint = (
            "type a part of it · ↑↓ · Enter · Esc: not now"
            if search
            else "number, or ↑↓ and Enter · Esc: not now"
        )

    def body(self) -> ComposeResult:
        if self.search:
            yield Input(placeholder="a part of the name", compact=True, id="search")
        yield OptionList(id="rows", compact=True, markup=False)

    def on_mount(self) -> None:
        super().on_mount()
        self._fill("")
        self.query_one("#search" if self.search else "#rows").focus()

    def _fill(self, part: str) -> None:
        rows = self.query_one("#rows", OptionList)
        rows.clear_options()
        width = max(self.app.size.width - 8, 30)
        wanted = part.lower().split()
        shown = [r for r in self.rows if all(w in f"{r.text} {r.id}".lower() for w in wanted)]
        for number, row in enumerate(shown, start=1):
            cap = f"{number} " if not self.search and number < 10 else "  "
            text = cut(row.text, width - len(row.aside) - 5)
            space = " " * max(1, width - len(cap) - len(text) - len(row.aside))
            rows.add_option(Option(f"{cap}{text}{space}{row.aside}", id=row.id))
        if shown:
            rows.highlighted = 0

    @on(Input.Changed, "#search")
    def _searched(self, event: Input.Changed) -> None:
        self._fill(event.value)

    @on(Input.Submitted, "#search")
    def _entered(self) -> None:
        self.query_one("#rows", OptionList).action_select()

    @on(OptionList.OptionSelected)
    def _picked(self, event: OptionList.OptionSelected) -> None:
        self.dismiss(event.option.id)

    def on_key(self, event: events.Key) -> None:
        rows = self.query_one("#rows", OptionList)
        if self.search and event.key in ("up", "down"):
            event.stop()
            rows.action_cursor_up() if event.key == "up" else rows.action_cursor_down()
        elif not self.search and event.key.isdecimal() and 0 < int(event.key) <= len(self.rows):
            event.stop()
            self.dismiss(self.rows[int(event.key) - 1].id)


class PickMany(Slip[tuple[str, ...]]):
    """Some of several rows: a number or Space ticks one, Enter takes all that are ticked."""

    hint = "number or Space ticks · Enter: done · Esc: not now"
    BINDINGS: ClassVar[list[BindingType]] = [
        Binding("space", "tick", "tick", id="slip.tick"),
        Binding("enter", "done", "done", id="slip.done", priority=True),
    ]

    def __init__(self, heading: str, rows: Sequence[Row], ticked: Iterable[str] = ()) -> None:
        super().__init__()
        self.heading, self.rows, self.ticked = heading, tuple(rows), set(ticked)
        self.at = 0

    def body(self) -> ComposeResult:
        with VerticalScroll(id="many"):
            yield Static(id="ticks")

    def on_mount(self) -> None:
        super().on_mount()
        self._show()

    def _show(self) -> None:
        width = max(self.app.size.width - 8, 30)
        lines = []
        for number, row in enumerate(self.rows):
            cap = f"{number + 1} " if number < 9 else "  "
            tick = "[x]" if row.id in self.ticked else "[ ]"
            mark = "› " if number == self.at else "  "
            text = cut(row.text, width - len(row.aside) - 10)
            line = f"{mark}{cap}{tick} {text}"
            gap = " " * max(1, width - len(line) - len(row.aside))
            lines.append(
                Content.styled(f"{line}{gap}{row.aside}", "bold" if mark[0] == "›" else "")
            )
        self.query_one("#ticks", Static).update(joined(lines))

    def on_key(self, event: events.Key) -> None:
        if event.key in ("up", "down"):
            event.stop()
            self.at = (self.at + (1 if event.key == "down" else -1)) % len(self.rows)
        elif event.key.isdecimal() and 0 < int(event.key) <= len(self.rows):
            event.stop()
            self.at = int(event.key) - 1
            self._toggle()
        self._show()

    def _toggle(self) -> None:
        self.ticked ^= {self.rows[self.at].id}

    def action_tick(self) -> None:
        self._toggle()
        self._show()

    def action_done(self) -> None:
        if not self.ticked:
            return self.refuse("tick at least one")
        self.dismiss(tuple(row.id for row in self.rows if row.id in self.ticked))
        return None

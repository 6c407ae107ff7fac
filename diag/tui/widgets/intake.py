"""Parts of the complaint: a choice on one line, and what the words may mean."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, ClassVar

from textual.binding import Binding, BindingType
from textual.content import Content
from textual.message import Message
from textual.widget import Widget

from diag.tui.widgets.parts import cut, joined

if TYPE_CHECKING:
    from diag.complaint import Proposal


class Cycle(Widget, can_focus=True):
    """One of several, changed with the left and right arrows (or Space)."""

    BINDINGS: ClassVar[list[BindingType]] = [
        Binding("right,space", "turn(1)", "next", id="cycle.next"),
        Binding("left", "turn(-1)", "previous", id="cycle.previous"),
    ]

    @dataclass
    class Turned(Message):
        """Another one is chosen."""

        cycle: Cycle
        value: str

        @property
        def control(self) -> Cycle:
            return self.cycle

    def __init__(
        self, choices: Sequence[tuple[str, str]], value: str = "", id: str | None = None
    ) -> None:
        super().__init__(id=id)
        self.choices = list(choices)
        self.at = next((i for i, (name, _) in enumerate(choices) if name == value), 0)

    @property
    def value(self) -> str:
        """The id of the choice."""
        return self.choices[self.at][0] if self.choices else ""

    def set_choices(self, choices: Sequence[tuple[str, str]], value: str) -> None:
        """Other choices, as when the circuits have been read."""
        self.choices = list(choices)
        self.at = next((i for i, (name, _) in enumerate(choices) if name == value), 0)
        self.refresh(layout=True)

    def action_turn(self, by: int) -> None:
        if self.choices:
            self.at = (self.at + by) % len(self.choices)
            self.refresh(layout=True)
            self.post_message(self.Turned(self, self.value))

    def get_content_width(self, container: object, viewport: object) -> int:
        return max((len(text) for _, text in self.choices), default=8) + 4

    def render(self) -> Content:
        text = self.choices[self.at][1] if self.choices else "reading …"
        return Content(f"◂ {text} ▸")


class Proposals(Widget, can_focus=True):
    """Findings that the words may mean; none counts before the person says so."""

    BINDINGS: ClassVar[list[BindingType]] = [
        Binding("up", "go(-1)", "up", id="proposals.up"),
        Binding("down", "go(1)", "down", id="proposals.down"),
        Binding("space,enter", "take", "take", id="proposals.take"),
        Binding("left", "point(-1)", "point", id="proposals.point_back"),
        Binding("right", "point(1)", "point", id="proposals.point"),
        Binding("delete,backspace", "drop", "drop", id="proposals.drop"),
    ]

    @dataclass
    class Changed(Message):
        """Something was taken, dropped or moved to another point."""

    def __init__(self, id: str | None = None) -> None:
        super().__init__(id=id)
        self.rows: list[Proposal] = []
        self.taken: set[str] = set()
        self.dropped: set[str] = set()
        self.own: list[str] = []
        """Findings added by hand; they count."""
        self.at = 0

    def propose(self, rows: Sequence[Proposal]) -> None:
        """What the words may mean now; what was taken stays, what was dropped stays away."""
        kept = [row for row in self.rows if row.finding in self.taken]
        names = {row.observable for row in kept}
        fresh = [r for r in rows if r.observable not in names and r.words not in self.dropped]
        words = {row.words for row in kept}
        self.rows = [*kept, *(row for row in fresh if row.words not in words or not kept)]
        self.at = min(self.at, max(0, self.count - 1))
        self.refresh(layout=True)

    def add(self, finding: str) -> None:
        """A finding that the person gives."""
        name = finding.partition("=")[0]
        self.own = [old for old in self.own if old.partition("=")[0] != name] + [finding]
        self.refresh(layout=True)
        self.post_message(self.Changed())

    @property
    def count(self) -> int:
        return len(self.rows) + len(self.own)

    @property
    def confirmed(self) -> list[str]:
        """The findings that count."""
        taken = [row.finding for row in self.rows if row.finding in self.taken]
        names = {text.partition("=")[0] for text in self.own}
        return [*(t for t in taken if t.partition("=")[0] not in names), *self.own]

    @property
    def open(self) -> int:
        """Proposals that were neither taken nor dropped."""
        return sum(row.finding not in self.taken for row in self.rows)

    def action_go(self, by: int) -> None:
        if not self.count or not 0 <= self.at + by < self.count:
            self.screen.focus_next() if by > 0 else self.screen.focus_previous()
            return
        self.at += by
        self.refresh()

    def action_take(self) -> None:
        if self.at < len(self.rows):
            row = self.rows[self.at]
            if not row.point_said and row.finding not in self.taken:
                self.rows[self.at] = row = row.at(row.observable.partition("@")[2])
            self.taken ^= {row.finding}
            self._changed()

    def action_point(self, by: int) -> None:
        """Another operating point, for words that do not say or say it wrongly."""
        if self.at >= len(self.rows) or len(self.rows[self.at].points) < 2:
            return
        row = self.rows[self.at]
        was = row.finding in self.taken
        self.taken.discard(row.finding)
        here = row.points.index(row.observable.partition("@")[2])
        row = row.at(row.points[(here + by) % len(row.points)])
        self.rows[self.at] = row
        if was:
            self.taken.add(row.finding)
        self._changed()

    def action_drop(self) -> None:
        if self.at < len(self.rows):
            row = self.rows.pop(self.at)
            self.taken.discard(row.finding)
            self.dropped.add(row.words)
        elif self.own:
            self.own.pop(self.at - len(self.rows))
        self.at = min(self.at, max(0, self.count - 1))
        self._changed()

    def _changed(self) -> None:
        self.refresh(layout=True)
        self.post_message(self.Changed())

    def get_content_height(self, container: object, viewport: object, width: int) -> int:
        return max(1, self.count)

    def render(self) -> Content:
        if not self.count:
            return Content.styled("nothing recognised yet; F3 looks a finding up", "$faint")
        width = self.size.width
        lines = [self._line(i, row, width) for i, row in enumerate(self.rows)]
        for number, text in enumerate(self.own, start=len(self.rows)):
            mark = "› " if number == self.at and self.has_focus else "  "
            lines.append(
                Content.styled(cut(f"{mark}[taken] {text}   given by hand", width), "bold")
            )
        return joined(lines)

    def _line(self, number: int, row: Proposal, width: int) -> Content:
        taken = row.finding in self.taken
        mark = "› " if number == self.at and self.has_focus else "  "
        tick = "[taken]" if taken else "[  ?  ]"
        name, _, point = row.observable.partition("@")
        where = f" at {point.replace('_', ' ')}" if point else ""
        assumed = "" if row.point_said else " (assumed, ←→)"
        head = f"{name.replace('_', ' ')}{where}{assumed}: {row.value.replace('_', ' ')}"
        room = width - len(mark) - len(tick) - 3
        shown = cut(head, room)
        words = cut(f"  “{row.words}” {row.score}", max(0, room - len(shown)))
        return Content.assemble(
            mark, (tick, "bold reverse" if taken else ""), " ", (shown, "bold"),
            (words, "$faint"),
        )  # fmt: skip

"""The step on the table: its question, what may hurt, and the answers on number keys."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from textwrap import wrap

from textual import events
from textual.content import Content
from textual.message import Message
from textual.widget import Widget
from textual.widgets import Static

from diag.tui.widgets.parts import cut, joined


class Warnings(Static):
    """Holds and cautions, in a frame of their own, in words and in reverse."""

    def show(self, holds: Sequence[str], cautions: Sequence[str], width: int) -> None:
        self.display = bool(holds or cautions)
        lines: list[Content] = []
        for word, texts in (("HOLD", holds), ("CAUTION", cautions)):
            for text in texts:
                lines += _warning(word, text, width)
        self.update(joined(lines))


def _warning(word: str, text: str, width: int) -> list[Content]:
    head = f" {word} "
    style = "bold reverse $error" if word == "HOLD" else "bold reverse $warning"
    rows = wrap(text, max(20, width - len(head) - 3)) or [""]
    mark = "■" if word == "HOLD" else "▲"
    lines = [Content.assemble((f"{mark}{head}", style), " ", (rows[0], "bold"))]
    edge = " " * len(head)
    lines += [Content.assemble((f"{mark}{edge}", style), " ", (row, "bold")) for row in rows[1:]]
    return lines


class Answers(Widget):
    """The answers beside their numbers; on one line where they fit, else one a line."""

    @dataclass
    class Chosen(Message):
        """An answer was clicked; `number` counts from 1."""

        number: int

    def __init__(self, id: str | None = None) -> None:
        super().__init__(id=id)
        self._words: tuple[str, ...] = ()
        self._notes: tuple[str, ...] = ()
        self._spans: list[tuple[int, int, int]] = []

    def show(self, words: Sequence[str], notes: Sequence[str] = ()) -> None:
        """Sets the answers; `notes` say what each would do, where there is room for it."""
        self._words, self._notes = tuple(words), tuple(notes)
        self.refresh(layout=True)

    def get_content_height(self, container: object, viewport: object, width: int) -> int:
        return len(self._rows(width))

    def _rows(self, width: int) -> list[list[int]]:
        """Numbers of the answers that share a line."""
        if not self._words:
            return []
        total = sum(len(word) + 8 for word in self._words)
        if total <= width and not self._notes:
            return [list(range(len(self._words)))]
        return [[number] for number in range(len(self._words))]

    def render(self) -> Content:
        width = self.size.width
        self._spans = []
        lines = []
        for y, row in enumerate(self._rows(width)):
            parts: list[tuple[str, str]] = []
            x = 0
            for number in row:
                cap = f" {number + 1} "
                word = cut(self._words[number], width - 6 if len(row) == 1 else 200)
                parts += [(cap, "bold reverse $answer"), (f" {word}    ", "bold")]
                self._spans.append((y, x, number + 1))
                x += len(cap) + len(word) + 5
                if len(row) == 1 and number < len(self._notes):
                    room = width - x - 2
                    parts.append((cut(self._notes[number], room), "$faint"))
            lines.append(Content.assemble(*parts))
        return joined(lines)

    def on_click(self, event: events.Click) -> None:
        here = [number for y, x, number in self._spans if y == event.y and x <= event.x]
        if here:
            self.post_message(self.Chosen(here[-1]))

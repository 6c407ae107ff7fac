"""Small parts of every screen: the feed line with its headings, the top line, the key strip."""

from __future__ import annotations

from collections.abc import Sequence

from textual.content import Content
from textual.reactive import reactive
from textual.widget import Widget

from diag.tui.actions import Act, acts_of, name_of

WIDE = 100
"""Columns from which a screen is wide."""


def cut(text: str, width: int) -> str:
    """A text in at most `width` characters, with a mark where it goes on."""
    return text if len(text) <= width else text[: max(width - 1, 0)] + "…"


def cut_title(title: str, width: int) -> str:
    """A title in at most `width` characters that keeps its operating point at the end."""
    head, comma, tail = title.rpartition(", ")
    if len(title) <= width or not comma or len(tail) > width // 2:
        return cut(title, width)
    return f"{cut(head, width - len(tail) - 2)}, {tail}"


class Heading(Widget):
    """A branch of the feed line that runs down the left edge, with a word on the right."""

    label: reactive[str] = reactive("")
    aside: reactive[str] = reactive("")

    def __init__(self, label: str, last: bool = False, id: str | None = None) -> None:
        super().__init__(id=id)
        self.label, self._last = label, last

    def render(self) -> Content:
        width = self.size.width
        left = f"{'┗' if self._last else '┣'}━ "
        name = f"{self.label} "
        aside = cut(self.aside, max(0, width - len(left) - len(name) - 4))
        tail = f" {aside} " if aside else ""
        line = "━" * max(0, width - len(left) - len(name) - len(tail))
        return Content.assemble((left, "$feed"), (name, "bold"), (line, "$feed"), (tail, "$faint"))


class TopLine(Widget):
    """Whose engine, which circuit, in what state; and what must not be overlooked."""

    def __init__(self, id: str | None = None) -> None:
        super().__init__(id=id)
        self._left = self._right = self._banner = ""

    def show(self, left: str, right: str, banner: str = "") -> None:
        """Sets what stands on the left and on the right, and a line of its own below."""
        self._left, self._right, self._banner = left, right, banner
        self.refresh(layout=True)

    def get_content_height(self, container: object, viewport: object, width: int) -> int:
        return 1 + bool(self._banner)

    def render(self) -> Content:
        width = self.size.width
        right = cut(self._right, width * 2 // 3)
        left = cut(self._left, width - len(right) - 2)
        gap = " " * max(1, width - len(left) - len(right))
        lines = [Content.assemble((left, "bold"), gap, right)]
        if self._banner:
            lines.append(Content.assemble((cut(f" ■ {self._banner} ", width), "bold reverse")))
        return joined(lines)


class KeyStrip(Widget):
    """The keys of a screen, as many as there is room for; the rest stand in the help."""

    def __init__(self, screen_name: str, id: str | None = "strip") -> None:
        super().__init__(id=id)
        self.screen_name = screen_name

    def get_content_height(self, container: object, viewport: object, width: int) -> int:
        return len(self._rows(width))

    def render(self) -> Content:
        return joined([self._row(row) for row in self._rows(self.size.width)])

    def _rows(self, width: int) -> list[list[tuple[Act, str]]]:
        """The acts in one line on a wide screen, in two on a narrow one.

        Help and leaving close the last line whatever else there is no room for.
        """
        caps: dict[str, str] = getattr(self.app, "keycaps", {})
        shown = [(a, caps.get(name_of(a), a.keycap)) for a in acts_of(self.screen_name) if a.strip]
        always = [pair for pair in shown if pair[0].id in ("help", "leave")]
        others = [pair for pair in shown if pair not in always]
        rows: list[list[tuple[Act, str]]] = [[]]
        most = 1 if width >= WIDE else 2
        kept = sum(_size(*pair) for pair in always)
        room = width - (kept if most == 1 else 0)
        for act, cap in others:
            if _size(act, cap) > room and len(rows) < most:
                rows.append([])
                room = width - kept
            if _size(act, cap) <= room:
                room -= _size(act, cap)
                rows[-1].append((act, cap))
        rows[-1] += always
        return rows

    def _row(self, row: list[tuple[Act, str]]) -> Content:
        pieces: list[tuple[str, str]] = []
        for act, cap in row:
            faint = self.screen.check_action(act.id, ()) is None
            pieces.append((f" {cap} ", "reverse dim" if faint else "reverse"))
            pieces.append((f" {act.word}  ", "dim" if faint else ""))
        return Content.assemble(*pieces)


def _size(act: Act, cap: str) -> int:
    """Characters that an act takes on the strip."""
    return len(cap) + len(act.word) + 5


def joined(lines: Sequence[Content]) -> Content:
    """Lines under one another."""
    return Content("\n").join(lines)

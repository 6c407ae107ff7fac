"""Small parts of every screen: the feed line with its headings, the top line, the key strip."""

from __future__ import annotations

from collections.abc import Sequence

from textual.content import Content
from textual.reactive import reactive
from textual.widget import Widget
from textual.widgets import Static

from diag.tui.actions import acts_of, name_of


def cut(text: str, width: int) -> str:
    """A text in at most `width` characters, with a mark where it goes on."""
    return text if len(text) <= width else text[: max(width - 1, 0)] + "…"


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
        aside = cut(self.aside, max(0, width - len(left) - len(name) - 3))
        tail = f" {aside}" if aside else ""
        line = "━" * max(0, width - len(left) - len(name) - len(tail))
        return Content.assemble(
            (left, "$feed"), (name, "bold"), (line, "$feed"), (tail, "$faint")
        )


class TopLine(Static):
    """Whose engine, which circuit, in what state; and what must not be overlooked."""

    def show(self, left: str, right: str, banner: str = "") -> None:
        width = max(self.size.width or self.app.size.width, 20)
        right = cut(right, width // 2)
        left = cut(left, width - len(right) - 2)
        gap = " " * max(1, width - len(left) - len(right))
        lines = [Content.assemble((left, "bold"), gap, right)]
        if banner:
            lines.append(Content.assemble((cut(f" ■ {banner} ", width), "bold reverse")))
        self.update(Content("\n").join(lines))


class KeyStrip(Widget):
    """The keys of a screen, as many as there is room for; the rest stand in the help."""

    def __init__(self, screen_name: str, id: str | None = "strip") -> None:
        super().__init__(id=id)
        self.screen_name = screen_name

    def render(self) -> Content:
        width, parts = self.size.width, []
        caps: dict[str, str] = getattr(self.app, "keycaps", {})
        shown = [act for act in acts_of(self.screen_name) if act.strip]
        shown.sort(key=lambda act: act.id not in ("help", "leave"))
        room = width
        for act in shown:
            cap = caps.get(name_of(act), act.keycap)
            size = len(cap) + len(act.word) + 5
            if size > room:
                continue
            room -= size
            parts.append((act, cap))
        order = list(acts_of(self.screen_name))
        parts.sort(key=lambda pair: order.index(pair[0]))
        pieces: list[tuple[str, str]] = []
        for act, cap in parts:
            faint = self.screen.check_action(act.id, ()) is None
            pieces.append((f" {cap} ", "reverse dim" if faint else "reverse"))
            pieces.append((f" {act.word}  ", "dim" if faint else ""))
        return Content.assemble(*pieces)


def joined(lines: Sequence[Content]) -> Content:
    """Lines under one another."""
    return Content("\n").join(lines)

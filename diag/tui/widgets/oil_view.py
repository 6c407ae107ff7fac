"""The oil path on the screen: the drawing, the part that is selected, a card about it."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import ClassVar

from rich.segment import Segment
from rich.style import Style
from textual import events
from textual.geometry import Region, Size
from textual.message import Message
from textual.scroll_view import ScrollView
from textual.strip import Strip

from diag.oilpath import Box, Cell, Drawing, Layout, Marks, text

STYLES = (
    "supply", "scavenge", "bypass", "spill", "vent", "sense", "signal", "heat", "tank", "oil",
    "shade0", "shade1", "shade2", "shade3", "shade4", "way", "selected", "card", "card-strong",
)  # fmt: skip
_WAYS = {"left": (-1, 0), "right": (1, 0), "up": (0, -1), "down": (0, 1)}


class OilView(ScrollView, can_focus=False):
    """Draws a layout with its marks; knows which part is selected."""

    COMPONENT_CLASSES: ClassVar[set[str]] = {f"oil--{name}" for name in STYLES}

    @dataclass
    class Selected(Message):
        """Another part is selected."""

        part: str

    def __init__(self, id: str | None = None) -> None:
        super().__init__(id=id)
        self.drawing: Drawing | None = None
        self.layout_: Layout | None = None
        self.marks = Marks()
        self.selected = ""
        self.card: Sequence[tuple[str, bool]] = ()
        self._styles: dict[str, Style] = {}

    def show(self, layout: Layout, marks: Marks, selected: str = "") -> None:
        """Draws a layout; the selected part stays selected where it is still there.

        Args:
            layout: what to draw.
            marks: what to mark on it.
            selected: another part to select.
        """
        self.layout_, self.marks = layout, marks
        self.selected = selected or self.selected
        if self.selected not in layout.parts:
            inside = layout.part_of(self.selected.rstrip("+"))
            self.selected = inside or self._most_suspected(layout, marks)
        self._styles.clear()
        self._redraw()

    @staticmethod
    def _most_suspected(layout: Layout, marks: Marks) -> str:
        return max(layout.parts.values(), key=lambda part: marks.of(part.members)).id

    def _redraw(self) -> None:
        if self.layout_ is None or not self.size.width:
            return
        self.drawing = text(
            self.layout_, self.marks, self.size.width, self.size.height, self.selected
        )
        rows = self.drawing.rows
        self.virtual_size = Size(len(rows[0]) if rows else 0, len(rows))
        self.refresh()
        box = self.drawing.boxes[self.selected]
        self.scroll_to_region(Region(box.x, box.y, box.width, box.height), animate=False)

    def on_resize(self, event: events.Resize) -> None:
        self._redraw()

    def set_card(self, lines: Sequence[tuple[str, bool]]) -> bool:
        """Lines about the selected part, written in the clearing of the ring.

        Returns:
            Whether there is a clearing to write in.
        """
        self.card = lines
        self.refresh()
        return self.drawing is not None and self.drawing.clearing is not None

    # -- moving ---------------------------------------------------------------------------

    def move(self, way: str) -> None:
        """Selects the nearest part in a direction."""
        if self.drawing is None:
            return
        dx, dy = _WAYS[way]
        here = self.drawing.boxes[self.selected]
        best: tuple[float, str] | None = None
        for name, box in self.drawing.boxes.items():
            along, across = _offset(here, box, dx, dy)
            if name == self.selected or along <= 0:
                continue
            cost = along + 3.0 * across
            if best is None or cost < best[0]:
                best = (cost, name)
        if best is not None:
            self.select(best[1])

    def select(self, name: str) -> None:
        """Selects a part."""
        self.selected = name
        self._redraw()
        self.post_message(self.Selected(name))

    def on_click(self, event: events.Click) -> None:
        if self.drawing is None:
            return
        x, y = event.x + self.scroll_offset.x, event.y + self.scroll_offset.y
        inside = [
            (box.width * box.height, name)
            for name, box in self.drawing.boxes.items()
            if box.x <= x < box.x + box.width and box.y <= y < box.y + box.height
        ]
        if inside:
            self.select(min(inside)[1])

    # -- drawing --------------------------------------------------------------------------

    def render_line(self, y: int) -> Strip:
        base = self.rich_style
        row = y + self.scroll_offset.y
        if self.drawing is None or row >= len(self.drawing.rows):
            return Strip.blank(self.size.width, base)
        cells = self._with_card(row)
        segments: list[Segment] = []
        for cell in cells:
            style = self._style(cell.style)
            if segments and segments[-1].style == style:
                segments[-1] = Segment(segments[-1].text + cell.char, style)
            else:
                segments.append(Segment(cell.char, style))
        strip = Strip(segments)
        left = self.scroll_offset.x
        return strip.crop_extend(left, left + self.size.width, base)

    def _with_card(self, row: int) -> Sequence[Cell]:
        """A row of the drawing with the card written into the clearing."""
        assert self.drawing is not None
        cells = self.drawing.rows[row]
        space = self.drawing.clearing
        if space is None or not space.y <= row < space.y + space.height:
            return cells
        number = row - space.y
        if number >= len(self.card):
            return cells
        words, strong = self.card[number]
        style = "card-strong" if strong else "card"
        written = [Cell(char, style) for char in words[: space.width]]
        return [*cells[: space.x], *written, *cells[space.x + len(written) :]]

    def _style(self, name: str) -> Style:
        if name not in self._styles:
            words = [w for w in name.split() if w in STYLES]
            words = ["selected"] if "selected" in words else words
            style = self.rich_style
            for word in words:
                style += self.get_component_rich_style(f"oil--{word}", partial=True)
            self._styles[name] = style
        return self._styles[name]

    def notify_style_update(self) -> None:
        super().notify_style_update()
        self._styles.clear()

    @property
    def clearing(self) -> Box | None:
        """Where the card stands."""
        return self.drawing.clearing if self.drawing else None


def _offset(here: Box, there: Box, dx: int, dy: int) -> tuple[float, float]:
    """How far a box lies ahead and aside; a line counts as two characters."""
    ax, ay = here.x + here.width / 2, 2 * (here.y + min(here.height, 2) / 2)
    bx, by = there.x + there.width / 2, 2 * (there.y + min(there.height, 2) / 2)
    along = (bx - ax) * dx + (by - ay) * dy
    across = abs((by - ay) * dx) + abs((bx - ax) * dy)
    return along, across

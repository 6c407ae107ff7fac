"""The likely causes: how high each stands, and where it stood before the last answer."""

from __future__ import annotations

from collections.abc import Sequence

from rich.cells import cell_len
from textual.content import Content
from textual.widget import Widget

from diag.circuit.model import UNLISTED
from diag.record.narrate import percent
from diag.tui.desk import CauseRow
from diag.tui.widgets.parts import cut, joined

EIGHTHS = " ▏▎▍▌▋▊▉█"
MOVED = 0.005
"""Least change of a probability that is told."""


def gauge(now: float, before: float, width: int) -> tuple[str, str, str]:
    """A bar in three pieces: what stands, what was gained, what was lost.

    The end of the bar has an eighth of a character's precision; what was gained is drawn
    lighter, what was lost is drawn as an empty stretch up to the mark where it stood.
    """
    full = now * width
    whole = int(full)
    part = EIGHTHS[int((full - whole) * 8)] if whole < width else ""
    bar = "█" * whole + part.strip()
    if not bar and now > 0:
        bar = EIGHTHS[1]
    old = min(width - 1, int(before * width))
    if before - now >= MOVED and old > len(bar):
        return bar, "", "·" * (old - len(bar)) + "╎"
    if now - before >= MOVED and old < len(bar) - 1:
        return bar[:old], "▓" * (len(bar) - old - 1) + bar[-1], ""
    return bar, "", ""


class Causes(Widget):
    """Rows of causes; one of them is chosen, for the oil path and for its reasons."""

    def __init__(self, id: str | None = None) -> None:
        super().__init__(id=id)
        self.rows: tuple[CauseRow, ...] = ()
        self.chosen = 0
        self.most = 5
        self.tall = False

    def show(self, rows: Sequence[CauseRow]) -> None:
        """Sets the rows; the chosen cause stays chosen where it is still shown."""
        kept = self.chosen_ref
        self.rows = tuple(rows)
        refs = [row.ref for row in self.listed]
        self.chosen = refs.index(kept) if kept in refs and self.chosen else 0
        self.refresh(layout=True)

    @property
    def listed(self) -> list[CauseRow]:
        """The rows shown: the likeliest, and the unlisted cause always."""
        shown = list(self.rows[: self.most])
        unlisted = next((row for row in self.rows if row.ref == UNLISTED), None)
        if unlisted is not None and unlisted not in shown and shown:
            shown[-1] = unlisted
        return shown

    @property
    def chosen_ref(self) -> str:
        """The cause that is chosen, or nothing before there are any."""
        shown = self.listed
        return shown[min(self.chosen, len(shown) - 1)].ref if shown else ""

    def move(self, by: int) -> None:
        """Chooses the cause so many rows further down."""
        if self.rows:
            self.chosen = (self.chosen + by) % len(self.listed)
            self.refresh()

    def set_room(self, most: int, tall: bool) -> None:
        """How many rows there is room for, and whether each may take two lines."""
        if (most, tall) != (self.most, self.tall):
            self.most, self.tall = max(2, most), tall
            self.refresh(layout=True)

    def get_content_height(self, container: object, viewport: object, width: int) -> int:
        return len(self.listed) * (2 if self.tall else 1)

    def render(self) -> Content:
        width = self.size.width
        bar = width - 10 if self.tall else max(8, min(28, width // 4))
        lines = [self._line(row, i, bar, width) for i, row in enumerate(self.listed)]
        return joined(lines)

    def _line(self, row: CauseRow, number: int, bar: int, width: int) -> Content:
        stands, gained, lost = gauge(row.chance, row.before, bar)
        blank = " " * (bar - len(stands) - len(gained) - len(lost))
        mark = "›" if number == self.chosen else " "
        moved = abs(row.chance - row.before) >= MOVED
        arrow = "▲" if row.chance > row.before else "▼"
        told = f" {arrow} was {percent(row.before)}" if moved else ""
        head = (f"{mark}{percent(row.chance):>7} ", "bold")
        gauge_ = ((stands, "$bar"), (gained, "$bar-gained"), (lost, "$bar-lost"))
        room = width - (10 if self.tall else bar + 10) - cell_len(told)
        title = cut(row.title, room)
        words = (
            (title, "bold" if number == self.chosen else ""),
            " " * max(0, room - cell_len(title)),
            (told, "$faint"),
        )
        if self.tall:
            return Content.assemble(head, *words, "\n", " " * 9, *gauge_)
        return Content.assemble(head, *gauge_, f"{blank} ", *words)

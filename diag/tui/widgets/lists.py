"""The other steps, and the log as it grows."""

from __future__ import annotations

from collections.abc import Sequence

from textual.content import Content
from textual.widget import Widget

from diag.advice.steps import NextStep
from diag.record.events import AnyEvent, Withdrawn
from diag.record.narrate import event_line, percent
from diag.session import CaseState
from diag.tui.widgets.parts import cut, cut_title, joined
from diag.tui.wording import minutes


class Rivals(Widget):
    """The steps one may turn to instead of the one on the table."""

    def __init__(self, id: str | None = None) -> None:
        super().__init__(id=id)
        self._steps: tuple[NextStep, ...] = ()
        self._turned = self._held = 0
        self._most = 2

    def show(self, steps: Sequence[NextStep], turned: int, held: int, most: int) -> None:
        """Sets the steps, which of them is on the table, how many are held, how many to show."""
        self._steps, self._turned, self._held, self._most = tuple(steps), turned, held, most
        self.refresh(layout=True)

    @property
    def _others(self) -> list[int]:
        others = [number for number in range(len(self._steps)) if number != self._turned]
        return others[: max(1, self._most - bool(self._held))]

    def get_content_height(self, container: object, viewport: object, width: int) -> int:
        return len(self._others) + bool(self._held)

    def render(self) -> Content:
        width = self.size.width
        lines = [_rival(self._steps[n], width, n < self._turned) for n in self._others]
        if self._held:
            word = "step is" if self._held == 1 else "steps are"
            lines.append(Content(cut(f"■ {self._held} {word} held by a rule; w tells why", width)))
        return joined(lines)


def _rival(step: NextStep, width: int, passed: bool) -> Content:
    worth = percent(step.probability) if step.kind == "rectification" else ""
    if step.information_bits:
        worth = f"{step.information_bits:.2f} bits"
    aside = f" {worth:>9} {minutes(step.expected_minutes):>8}"
    mark = "← " if passed else "  "
    room = max(width - len(aside) - len(mark), 0)
    return Content.assemble(mark, cut_title(step.title, room).ljust(room), (aside, "$faint"))


class SoFar(Widget):
    """The last entries of the log, the newest at the foot."""

    def __init__(self, id: str | None = None) -> None:
        super().__init__(id=id)
        self._state: CaseState | None = None

    def show(self, state: CaseState) -> None:
        """Sets the case whose log it is."""
        self._state = state
        self.refresh()

    def render(self) -> Content:
        if self._state is None:
            return Content("")
        state = self._state
        gone = {e.target for e in state.events if isinstance(e, Withdrawn)}
        last = state.events[-max(self.size.height, 1) :]
        return joined([self._line(event, event.number in gone) for event in last])

    def _line(self, event: AnyEvent, struck: bool) -> Content:
        assert self._state is not None
        head = f"{event.number:>3} {event.at:%H:%M} "
        mark = "taken back: " if struck else ""
        text = event_line(self._state.circuit, event)
        style = "strike $faint" if struck else ""
        room = self.size.width - len(head) - len(mark)
        return Content.assemble((head, "$faint"), mark, (cut(text, room), style))

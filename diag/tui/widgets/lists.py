"""The other steps, and the log as it grows."""

from __future__ import annotations

from collections.abc import Sequence

from textual.content import Content
from textual.widgets import Static

from diag.advice.steps import NextStep
from diag.record.events import Withdrawn
from diag.record.narrate import event_line, percent
from diag.session import CaseState
from diag.tui.widgets.parts import cut, joined
from diag.tui.wording import KINDS, minutes


class Rivals(Static):
    """The steps one may turn to instead, the one on the table marked."""

    def show(self, steps: Sequence[NextStep], turned: int, held: int, most: int) -> None:
        width = max(self.size.width, 30)
        first = max(0, min(turned - 1, len(steps) - most))
        lines = []
        for number in range(first, min(first + most, len(steps))):
            lines.append(_rival(steps[number], number == turned, width))
        if held and most > 1:
            word = "step is" if held == 1 else "steps are"
            lines = [*lines[: most - 1], Content(f"  ■ {held} {word} held by a rule; w tells why")]
        self.update(joined(lines))


def _rival(step: NextStep, here: bool, width: int) -> Content:
    worth = percent(step.probability) if step.kind == "rectification" else ""
    if step.information_bits:
        worth = f"{step.information_bits:.2f} bits"
    aside = f"  {worth:>9} {minutes(step.expected_minutes):>8}"
    title = cut(f"{KINDS.get(step.kind, step.kind)}: {step.title}", width - len(aside) - 2)
    return Content.assemble(
        "› " if here else "  ",
        (title.ljust(width - len(aside) - 2), "bold" if here else ""),
        (aside, "$faint"),
    )


class SoFar(Static):
    """The last entries of the log, the newest at the foot."""

    def show(self, state: CaseState, most: int) -> None:
        width = max(self.size.width, 30)
        gone = {e.target for e in state.events if isinstance(e, Withdrawn)}
        lines = []
        for event in state.events[-most:]:
            struck = event.number in gone
            text = event_line(state.circuit, event)
            head = f"{event.number:>3} {event.at:%H:%M} "
            mark = "taken back: " if struck else ""
            style = "strike $faint" if struck else ""
            lines.append(
                Content.assemble(
                    (head, "$faint"), mark, (cut(text, width - len(head) - len(mark)), style)
                )
            )
        self.update(joined(lines))

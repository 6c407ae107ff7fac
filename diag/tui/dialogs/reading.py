"""Slips to read: why, the log, all keys."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from textwrap import wrap
from typing import ClassVar

from textual.app import ComposeResult
from textual.binding import Binding, BindingType
from textual.containers import VerticalScroll
from textual.content import Content
from textual.widgets import Static

from diag.advice.reasons import Reason
from diag.advice.steps import NextStep
from diag.record.narrate import percent
from diag.tui.actions import ACTS, ANY, CASE, CASES, COMPLAINT, OIL, name_of
from diag.tui.desk import Branch
from diag.tui.dialogs.slip import Slip
from diag.tui.widgets.parts import cut, joined
from diag.tui.wording import reason


class Reader(Slip[None]):
    """Lines to scroll through; any of Escape, Enter and q puts it away."""

    hint = "↑↓ PgUp PgDn · Esc: put away"
    BINDINGS: ClassVar[list[BindingType]] = [
        Binding("enter,q", "cancel", "put away", id="slip.put_away"),
        Binding("up", "scroll('up')", "up", id="slip.up"),
        Binding("down", "scroll('down')", "down", id="slip.down"),
        Binding("pageup", "scroll('page_up')", "page up", id="slip.page_up"),
        Binding("pagedown", "scroll('page_down')", "page down", id="slip.page_down"),
    ]

    def __init__(self, heading: str, lines: Sequence[Content]) -> None:
        super().__init__()
        self.heading, self.lines = heading, list(lines)
        self.add_class("tall")

    def body(self) -> ComposeResult:
        with VerticalScroll(id="reader"):
            yield Static(joined(self.lines), id="reader-text")

    def on_mount(self) -> None:
        super().on_mount()
        self.query_one("#reader").focus()

    def replaced(self, lines: Sequence[Content]) -> None:
        """Shows other lines, as when something has been computed meanwhile."""
        self.lines = list(lines)
        self.query_one("#reader-text", Static).update(joined(self.lines))

    def action_scroll(self, way: str) -> None:
        getattr(self.query_one("#reader", VerticalScroll), f"scroll_{way}")(animate=False)

    def as_text(self) -> str:
        """The words of the slip."""
        return "\n".join(line.plain for line in self.lines)


def why_lines(
    steps: Sequence[NextStep],
    turned: int,
    held: Sequence[NextStep],
    branches: Sequence[Branch],
    width: int,
) -> list[Content]:
    """Why the step on the table, what each answer would do, its rivals, what is held."""
    step = steps[turned]
    lines = [Content.styled(step.title, "bold"), Content(f"  {reason(step)}")]
    if step.note:
        lines += _wrapped(step.note, width, "  ")
    if branches:
        lines += [Content(""), Content.styled("If the answer is", "bold")]
        for branch in branches:
            lines += _branch(branch, width)
    lines += [Content(""), Content.styled("Instead", "bold")]
    rivals = [s for number, s in enumerate(steps[:7]) if number != turned]
    lines += [Content(cut(f"  {s.title}: {reason(s)}", width)) for s in rivals]
    for other in held:
        lines += [Content(""), Content.assemble((" HOLD ", "bold reverse"), f" {other.title}")]
        for text in other.held:
            lines += _wrapped(text, width, "  ")
    return lines


def _branch(branch: Branch, width: int) -> list[Content]:
    head = f"  {branch.word} ({percent(branch.chance)})"
    lines = [Content.styled(cut(head, width), "bold")]
    for title, chance in branch.causes:
        if chance >= 0.005:
            lines.append(Content(cut(f"    {percent(chance):>7}  {title}", width)))
    return lines


def cause_lines(title: str, reasons: Sequence[Reason] | None, width: int) -> list[Content]:
    """The findings for and against one cause, in decibans, strongest shown as bars."""
    lines = [Content(""), Content.styled(f"Why it stands where it stands: {title}", "bold")]
    if reasons is None:
        return [*lines, Content("  weighing …")]
    if not reasons:
        return [*lines, Content("  no finding bears on it yet")]
    total = sum(r.weight.decibans for r in reasons)
    lines.append(Content(f"  all findings together: {total:+.1f} db on its odds"))
    for each in reasons:
        bar = ("+" if each.weight.decibans > 0 else "-") * min(12, round(abs(each.weight.decibans)))
        lines += [Content(f"  {bar or '·'}"), *_wrapped(each.sentence, width, "    ")]
    return lines


def _wrapped(text: str, width: int, lead: str) -> list[Content]:
    return [Content(f"{lead}{row}") for row in wrap(text, max(20, width - len(lead)))]


GROUPS = (
    (CASE, "On the case"), (OIL, "On the oil path"), (COMPLAINT, "On the complaint"),
    (CASES, "Among the cases"), (ANY, "Anywhere"),
)  # fmt: skip


def help_lines(caps: dict[str, str], first: str) -> list[Content]:
    """All keys, those of the present screen first."""
    order = sorted(GROUPS, key=lambda group: group[0] != first)
    lines: list[Content] = []
    for screen, title in order:
        lines += [Content.styled(title, "bold"), *_group(screen, caps), Content("")]
    lines.append(Content("Tab moves between fields, Escape leaves a field or a window."))
    lines.append(Content("Ctrl+P: everything by name."))
    return lines


def _group(screen: str, caps: dict[str, str]) -> Iterable[Content]:
    seen = set()
    for act in ACTS:
        if act.screen != screen or act.help in seen:
            continue
        seen.add(act.help)
        cap = caps.get(name_of(act), act.keycap)
        yield Content.assemble("  ", (f" {cap} ", "reverse"), f"  {act.help}")

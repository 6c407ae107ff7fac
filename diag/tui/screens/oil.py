"""The oil path of a case: where the oil runs, what is suspected, what was found where."""

from __future__ import annotations

from pathlib import Path
from textwrap import wrap
from typing import TYPE_CHECKING

from textual import events, on, work
from textual.app import ComposeResult
from textual.screen import Screen
from textual.widgets import Static

from diag.advice.steps import NOTICE
from diag.oilpath import Layout, Marks, Part, Sheets, layout, svg
from diag.record.narrate import percent
from diag.tui.actions import OIL, bindings
from diag.tui.desk import Look, marked
from diag.tui.widgets.oil_view import OilView
from diag.tui.widgets.parts import KeyStrip, TopLine

if TYPE_CHECKING:
    from diag.tui.app import DiagApp

NO_CAUSE = "no way shown"


class OilScreen(Screen[None]):
    """The drawing fills the screen; what is said of a part stands inside the ring."""

    BINDINGS = bindings(OIL)
    AUTO_FOCUS = ""

    def __init__(self, look: Look, ref: str) -> None:
        super().__init__()
        self.look = look
        self.refs = [row.ref for row in look.causes]
        self.at = self.refs.index(ref) if ref in self.refs else 0
        self.wanted: dict[str, bool] = {}
        self.heated = False
        self.marks = Marks()
        self.laid_out = 0
        """How often the circuit has been laid out."""
        self._number = 0
        self._then = ""

    def compose(self) -> ComposeResult:
        yield TopLine(id="top")
        yield OilView(id="oil")
        yield Static(id="oil-foot", markup=False)
        yield KeyStrip(OIL)

    def on_mount(self) -> None:
        self.query_one("#oil-foot").display = False

    def on_resize(self, event: events.Resize) -> None:
        self.call_after_refresh(self._ask)

    @property
    def desk_app(self) -> DiagApp:
        from diag.tui.app import DiagApp

        assert isinstance(self.app, DiagApp)
        return self.app

    def _sheets(self) -> Sheets:
        """The layouts of the circuit; they are made once and serve every look."""
        return self.desk_app.sheets_of(self.look.circuit, self.heated)

    # -- laying out takes a moment --------------------------------------------------------

    def _ask(self) -> None:
        size = self.query_one(OilView).size
        if size.width and size.height:
            self._number += 1
            ref = self.refs[self.at]
            self._lay_out(self._number, size.width, size.height, dict(self.wanted), ref)

    @work(thread=True, exclusive=True, group="oil", exit_on_error=False)
    def _lay_out(
        self, number: int, width: int, height: int, wanted: dict[str, bool], ref: str
    ) -> None:
        sheets = self._sheets()
        marks = marked(self.look, ref)
        made = sheets.layout(sheets.closed(marks, width, height, wanted))
        self.app.call_from_thread(self._laid_out, number, made, marks)

    def _laid_out(self, number: int, made: Layout, marks: Marks) -> None:
        if number != self._number or not self.is_attached:
            return
        self.marks = marks
        self.laid_out += 1
        self.query_one(OilView).show(made, marks, self._then)
        self._then = ""
        self._show_words()

    def _show_words(self) -> None:
        row = self.look.causes[self.at]
        way = f"way of {row.title}" if self.marks.way else f"{row.title}: it has no place"
        self.query_one(TopLine).show(f"{percent(row.chance)} {way}", "○ found normal ● telling")
        view = self.query_one(OilView)
        space = view.clearing
        width = space.width if space else self.size.width - 3
        lines = self._card(width)
        foot = self.query_one("#oil-foot", Static)
        written = view.set_card(lines)
        foot.display = not written
        foot.update("\n".join(line for line, _ in lines[:6]))

    # -- about a part ---------------------------------------------------------------------

    def _card(self, width: int) -> list[tuple[str, bool]]:
        """Lines about the selected part, and whether each is printed strongly."""
        view = self.query_one(OilView)
        if view.layout_ is None or view.selected not in view.layout_.parts:
            return []
        part = view.layout_.parts[view.selected]
        chance = percent(self.marks.of(part.members))
        lines = [(row, True) for row in wrap(f"{part.title}  {chance}", width)]
        if part.folded:
            titles = (self.look.circuit.components[n].title for n in part.members)
            rows = wrap(f"folded, Enter opens: {', '.join(titles)}", width)
            lines += [(row, False) for row in rows[:3]]
        pins = self.marks.pinned(part.members)
        lines += [(self._pin(pin.number, pin.text, pin.unremarkable, width), False) for pin in pins]
        lines += [(row, False) for row in self._modes(part, width)]
        causes = [(f"{percent(c):>7} {title}"[:width], False) for title, c in self.marks.causes]
        space = view.clearing
        if space and len(lines) + 2 + len(causes) <= space.height:
            lines += [("", False), ("likely now", True), *causes]
        return lines

    def _pin(self, number: int, text: str, unremarkable: bool, width: int) -> str:
        return f"{'○' if unremarkable else '●'} {number} {text}"[:width]

    def _modes(self, part: Part, width: int) -> list[str]:
        """The modes of its components, the likeliest first."""
        present = self.look.assessment.present
        circuit = self.look.circuit
        modes = [m for n in part.members for m in circuit.components[n].modes]
        modes.sort(key=lambda m: -present[m.ref])
        return [f"{percent(present[m.ref]):>7} {m.title}"[:width] for m in modes[:8]]

    # -- what a person may do -------------------------------------------------------------

    def action_move(self, way: str) -> None:
        self.query_one(OilView).move(way)

    @on(OilView.Selected)
    def _selected(self) -> None:
        self._show_words()

    def action_turn(self) -> None:
        view = self.query_one(OilView)
        if view.layout_ is None:
            return
        part = view.layout_.parts[view.selected]
        section = self._sheets().section_of(part.members[0])
        if section is None:
            self.told(f"{part.title} stands by itself; nothing to fold")
            return
        self.wanted[section.id] = part.folded
        self._then = part.members[0] if part.folded else section.id
        self._ask()

    def action_fold_all(self) -> None:
        view = self.query_one(OilView)
        ids = [s.id for s in self._sheets().sections]
        folded = view.layout_ is not None and any(p.folded for p in view.layout_.parts.values())
        self.wanted = dict.fromkeys(ids, folded)
        self._ask()

    def action_cause(self, by: int) -> None:
        self.at = (self.at + by) % len(self.refs)
        self._ask()

    def action_heat(self) -> None:
        self.heated = not self.heated
        self._ask()
        self.told("heat is shown" if self.heated else "heat is hidden")

    def action_back(self) -> None:
        self.app.pop_screen()

    def action_to_svg(self) -> None:
        self._write(self.desk_app.beside("oil-path.svg"), self.refs[self.at])

    @work(thread=True, exclusive=True, group="svg", exit_on_error=False)
    def _write(self, path: Path, ref: str) -> None:
        drawn = svg(
            layout(self.look.circuit), marked(self.look, ref), self.look.circuit.title, NOTICE
        )
        try:
            path.parent.mkdir(parents=True, exist_ok=True)
            path.write_text(drawn, encoding="utf-8")
            word = f"the drawing is in {path}"
        except OSError as error:
            word = f"NOT WRITTEN: {path}: {error.strerror}"
        self.app.call_from_thread(self.told, word)

    def told(self, said: str) -> None:
        """A word in the top line."""
        self.query_one(TopLine).show(said, "")

    def show(self, look: Look, said: str = "") -> None:
        """The case has moved while its oil path was shown."""
        self.look = look

    def as_text(self) -> str:
        """The drawing as characters, and the card."""
        drawing = self.query_one(OilView).drawing
        card = "\n".join(line for line, _ in self._card(76))
        return f"{drawing.plain() if drawing else ''}\n{card}"

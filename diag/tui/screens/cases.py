"""The cases of a folder: how old, whose, what is likely, what comes next."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING

from textual import on, work
from textual.app import ComposeResult
from textual.content import Content
from textual.screen import Screen
from textual.widgets import OptionList
from textual.widgets.option_list import Option
from textual.worker import get_current_worker

from diag.circuit.loading import load_circuit
from diag.circuit.model import Circuit
from diag.errors import DiagError
from diag.record.events import AnyEvent
from diag.record.journal import read_journal
from diag.record.narrate import cause_title, percent, summary
from diag.session import Session
from diag.tui.actions import CASES, bindings
from diag.tui.widgets.parts import Heading, KeyStrip, TopLine, cut
from diag.tui.wording import since

if TYPE_CHECKING:
    from diag.tui.app import DiagApp


@dataclass(frozen=True, slots=True)
class CaseRow:
    """One log of the folder."""

    path: Path
    age: str = ""
    who: str = ""
    circuit: str = ""
    state: str = ""
    cause: str = ""
    step: str = ""
    problem: str = ""


class CasesScreen(Screen[None]):
    """A list of logs; the next step of each comes in as it is worked out."""

    BINDINGS = bindings(CASES)
    AUTO_FOCUS = "#cases"

    def __init__(self, folder: Path) -> None:
        super().__init__()
        self.folder = folder
        self.rows: dict[str, CaseRow] = {}

    def compose(self) -> ComposeResult:
        yield TopLine(id="top")
        yield Heading("CASES", id="cases-heading")
        yield OptionList(id="cases", markup=False)
        yield KeyStrip(CASES)

    def on_mount(self) -> None:
        self.query_one(TopLine).show(str(self.folder), "")
        self.action_reread()

    @property
    def desk_app(self) -> DiagApp:
        from diag.tui.app import DiagApp

        assert isinstance(self.app, DiagApp)
        return self.app

    def action_reread(self) -> None:
        self._read()

    @work(thread=True, exclusive=True, group="cases", exit_on_error=False)
    def _read(self) -> None:
        """First what the logs say, then what each case asks for next."""
        worker = get_current_worker()
        paths = sorted(self.folder.glob("*.jsonl")) if self.folder.is_dir() else []
        read = [(path, *self._row(path)) for path in paths]
        self.app.call_from_thread(self._filled, [row for _, row, _ in read])
        circuits: dict[str, Circuit] = {}
        for _, row, events in read:
            if worker.is_cancelled:
                return
            if events:
                self.app.call_from_thread(self._refined, _with_step(row, events, circuits))

    def _row(self, path: Path) -> tuple[CaseRow, tuple[AnyEvent, ...]]:
        try:
            replay = read_journal(path)
        except DiagError as error:
            return CaseRow(path, problem=str(error)), ()
        if replay.problems or not replay.events:
            return CaseRow(path, problem=str(next(iter(replay.problems), "empty"))), ()
        found = summary(replay.events)
        who = " ".join(part for part in (found.engine, found.aircraft) if part) or "nobody's"
        top = f"{percent(found.probability)} {cause_title(None, found.top_cause)}"
        return CaseRow(
            path,
            since(replay.events[0].at, self.desk_app.now()),
            who,
            found.circuit.replace("_", " "),
            found.state,
            top if found.top_cause else "nothing weighed yet",
        ), replay.events

    def _filled(self, rows: Sequence[CaseRow]) -> None:
        self.rows = {row.path.name: row for row in rows}
        listed = self.query_one("#cases", OptionList)
        listed.clear_options()
        for row in rows:
            listed.add_option(Option(self._content(row), id=row.path.name))
        if rows:
            listed.highlighted = 0
        self.query_one("#cases-heading", Heading).aside = f"{len(rows)} logs"

    def _refined(self, row: CaseRow) -> None:
        self.rows[row.path.name] = row
        listed = self.query_one("#cases", OptionList)
        listed.replace_option_prompt(row.path.name, self._content(row))

    def _content(self, row: CaseRow) -> Content:
        width = max(self.app.size.width - 6, 40)
        if row.problem:
            return Content(cut(f"{row.path.name}  UNREADABLE: {row.problem}", width))
        first = f"{row.age:>9}  {row.who} · {row.circuit} · {row.state}"
        step = row.step or "…"
        return Content.assemble(
            (cut(first, width), "bold"), "\n",
            cut(f"           {row.cause}", width), "\n",
            (cut(f"           next: {step}   ({row.path.name})", width), "$faint"),
        )  # fmt: skip

    def action_open_case(self) -> None:
        self.query_one("#cases", OptionList).action_select()

    @on(OptionList.OptionSelected, "#cases")
    def _opened(self, event: OptionList.OptionSelected) -> None:
        row = self.rows.get(event.option.id or "")
        if row is None or row.problem:
            self.told("this log cannot be read; `diag log verify` tells what is wrong with it")
        elif row.state.startswith("closed"):
            self.told("the case is closed; `diag log show` reads it")
        else:
            self.told(f"opening {row.path.name} …")
            self.desk_app.open_log(row.path)

    def action_back(self) -> None:
        self.app.pop_screen()

    def told(self, said: str) -> None:
        """A word in the top line."""
        self.query_one(TopLine).show(said, "")

    def as_text(self) -> str:
        """The list as lines."""
        return "\n".join(self._content(row).plain for row in self.rows.values())


def _with_step(row: CaseRow, events: Sequence[AnyEvent], circuits: dict[str, Circuit]) -> CaseRow:
    """The row with cause and next step as the present circuit sees the case."""
    if row.state.startswith("closed"):
        return replace(row, step="none, it is closed")
    try:
        name = row.circuit.replace(" ", "_")
        if name not in circuits:
            circuits[name] = load_circuit(name)
        assessment = Session.replay(circuits[name], events).assessment
        ref, chance = assessment.standing.causes[0]
        cause = f"{percent(chance)} {cause_title(circuits[name], ref)}"
        return replace(row, cause=cause, step=assessment.steps[0].title)
    except DiagError as error:
        return replace(row, step=f"not known: {error}")

"""The application: it owns the case, runs what takes time, and tells the screens.

A screen never computes. `weigh` runs one change at a time in a thread and comes back with a
`Look`; whatever else a person types meanwhile goes to the fields as usual.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass
from datetime import datetime
from importlib.resources import files
from pathlib import Path
from typing import TYPE_CHECKING, Any

from textual import on, work
from textual.app import App, SystemCommand
from textual.message import Message
from textual.screen import Screen

from diag.errors import DiagError
from diag.tui.actions import ANY, CASE, CASES, COMPLAINT, OIL, acts_of, bindings, keycaps, name_of
from diag.tui.request import Request
from diag.tui.screens.complaint import ComplaintScreen
from diag.tui.screens.waiting import WaitingScreen
from diag.tui.themes import DEFAULTS, LAMP, NAMES, TERMINAL, THEMES

if TYPE_CHECKING:
    from diag.circuit.model import Circuit
    from diag.oilpath import Sheets
    from diag.tui.desk import Desk, Intake, Look


class DiagApp(App[None]):
    """The terminal screen of diag.

    Args:
        request: what the command line asks for.
        now: the clock.
        logs: folder for the logs of new cases.
        keymap: names of acts to keys, where they are not the usual ones.
        theme: one of `themes.NAMES`.
    """

    CSS = (files("diag.tui") / "diag.tcss").read_text(encoding="utf-8")
    TITLE = "diag"
    HORIZONTAL_BREAKPOINTS = [(0, "-narrow"), (100, "-wide")]  # noqa: RUF012
    BINDINGS = bindings(ANY)
    ENABLE_COMMAND_PALETTE = True

    @dataclass
    class Read(Message):
        """The circuits have been read."""

        circuits: Mapping[str, Circuit]
        chosen: str

    @dataclass
    class Weighed(Message):
        """A change has been weighed, or was not taken."""

        look: Look | None
        error: str = ""
        taken: bool = True

    @dataclass
    class Unreadable(Message):
        """What was asked for cannot be read."""

        error: str

    def __init__(
        self,
        request: Request,
        now: Callable[[], datetime],
        logs: Path,
        keymap: Mapping[str, str] | None = None,
        theme: str = LAMP,
    ) -> None:
        super().__init__()
        self.request, self.now, self.logs = request, now, logs
        self.keycaps = keycaps(keymap or {})
        for each in THEMES:
            self.register_theme(each)
        self.theme = LAMP if theme == TERMINAL and self.no_color else theme
        if keymap:
            self.set_keymap(dict(keymap))
        self.busy = False
        self.lost = 0
        self.farewell = ""
        self._desk: Desk | None = None
        self._later: list[str] = []
        self._sheets: dict[tuple[str, bool], Sheets] = {}

    def get_theme_variable_defaults(self) -> dict[str, str]:
        return DEFAULTS

    @property
    def desk(self) -> Desk:
        """The case on the desk."""
        assert self._desk is not None
        return self._desk

    def on_mount(self) -> None:
        self.start()

    def start(self) -> None:
        """Shows the first screen, and reads what it needs."""
        if self.request.resume is not None:
            self.push_screen(WaitingScreen(f"reading {self.request.resume} …"))
            self.resume(self.request.resume)
        elif self.request.at_once:
            self.push_screen(WaitingScreen("reading the circuit …"))
            self._begin_at_once()
        else:
            self.push_screen(ComplaintScreen(self.request))
            self._read_circuits()

    # -- what takes time ------------------------------------------------------------------

    @work(thread=True, exclusive=True, group="read", exit_on_error=False)
    def _read_circuits(self) -> None:
        """Reads the circuits that ship, and the one asked for, while a person types."""
        from diag.circuit.loading import circuit_names, load_circuit

        try:
            circuits = {}
            wanted = self.request.circuit.replace("-", "_") or circuit_names()[0]
            overlays = self.request.overlays if self.request.circuit else ()
            asked = load_circuit(self.request.circuit or wanted, overlays)
            circuits[asked.id] = asked
            for name in circuit_names():
                if name not in circuits and not self.request.circuit:
                    circuits[name] = load_circuit(name)
            self.post_message(self.Read(circuits, asked.id))
            import diag.tui.screens.case  # noqa: F401  warm for the moment the case begins
        except DiagError as error:
            self.post_message(self.Unreadable(str(error)))

    @on(Read)
    def _circuits_read(self, event: Read) -> None:
        for screen in self.screen_stack:
            if isinstance(screen, ComplaintScreen):
                screen.ready(event.circuits, event.chosen)

    @on(Unreadable)
    def _unreadable(self, event: Unreadable) -> None:
        self.farewell = event.error
        self.exit(return_code=3)

    @work(thread=True, exclusive=True, group="weigh", exit_on_error=False)
    def _begin_at_once(self) -> None:
        from diag.circuit.loading import load_circuit
        from diag.tui.desk import Intake

        asked = self.request
        try:
            circuit = load_circuit(asked.circuit, asked.overlays)
            intake = Intake(
                findings=asked.findings, engine=asked.engine, aircraft=asked.aircraft,
                worked_on=asked.worked_on,
            )  # fmt: skip
            self._open(intake, circuit, asked.by)
        except DiagError as error:
            self.post_message(self.Unreadable(str(error)))

    def begin(self, intake: Intake, circuit: Circuit, overlays: list[str], by: str) -> None:
        """Begins a case from the complaint screen."""
        if not self.busy:
            self._set_busy(True)
            self._begin(intake, circuit, overlays, by)

    @work(thread=True, exclusive=True, group="weigh", exit_on_error=False)
    def _begin(self, intake: Intake, circuit: Circuit, overlays: list[str], by: str) -> None:
        from diag.circuit.loading import load_circuit

        try:
            if tuple(overlays) != tuple(map(str, self.request.overlays)) or (
                overlays and not self.request.circuit
            ):
                circuit = load_circuit(circuit.id, [Path(o).expanduser() for o in overlays])
            self._open(intake, circuit, by)
        except (DiagError, OSError) as error:
            self.post_message(self.Weighed(None, str(error), False))

    def _open(self, intake: Intake, circuit: Circuit, by: str) -> None:
        """Opens a case; runs in a worker.

        Raises:
            DiagError: nothing of it was taken.
        """
        from diag.record.journal import JournalError
        from diag.tui.desk import Desk
        from diag.tui.keeper import Keeper

        stamp = self.now().strftime("%Y%m%d-%H%M%S")
        path = self.request.log or self.logs / f"{circuit.id}-{stamp}.jsonl"
        desk = Desk(circuit, Keeper(path), self.now, by)
        error = ""
        try:
            desk.open_case(intake)
        except JournalError as fault:
            error = f"NOT ON DISK, kept in memory: {fault}"
        if not desk.session.state.events:
            raise DiagError(error or "the case could not be opened")
        self._desk = desk
        self.post_message(self.Weighed(desk.look(), error))

    @work(thread=True, exclusive=True, group="weigh", exit_on_error=False)
    def resume(self, path: Path) -> None:
        """Carries on with a log."""
        from diag.circuit.loading import load_circuit
        from diag.record.journal import read_journal
        from diag.tui.desk import Desk

        try:
            events = read_journal(path).events
            if not events:
                raise DiagError(f"{path} is no findings log")
            head: Any = events[0]
            circuit = load_circuit(head.circuit, self.request.overlays)
            desk = Desk.resumed(circuit, path, self.now, self.request.by)
            word = ""
            if circuit.content_hash != head.content_hash:
                word = (
                    f"the circuit has changed since this log was begun (version {head.version}): "
                    f"the odds are those of version {circuit.file.version}"
                )
            self._put_away()
            self._desk = desk
            self.post_message(self.Weighed(desk.look(), word))
        except DiagError as error:
            self.post_message(self.Weighed(None, str(error), False))

    def weigh(self, act: Callable[[], None]) -> None:
        """Runs one change of the case in a worker; a second one meanwhile is refused."""
        if self.busy:
            self._tell("still weighing the last entry; this one was not taken")
            self.bell()
            return
        self._set_busy(True)
        self._weigh(self.desk, act)

    @work(thread=True, exclusive=True, group="weigh", exit_on_error=False)
    def _weigh(self, desk: Desk, act: Callable[[], None]) -> None:
        count = len(desk.session.state.events)
        error = ""
        try:
            act()
        except DiagError as fault:
            error = str(fault)
        except Exception as fault:
            # Whatever it is, the person must hear of it and be able to go on.
            error = f"internal fault: {type(fault).__name__}: {fault}"
        taken = len(desk.session.state.events) > count
        if error:
            error = f"NOT ON DISK, kept in memory: {error}" if taken else f"NOT TAKEN: {error}"
        self.post_message(self.Weighed(desk.look(count), error, taken))

    # -- what comes back ------------------------------------------------------------------

    @on(Weighed)
    def _weighed(self, event: Weighed) -> None:
        self._set_busy(False)
        if event.look is None:
            self._refused(event.error)
            return
        said = " · ".join((*self._later, *event.look.told, *([event.error] if event.error else [])))
        self._later.clear()
        self._show(event.look, said)

    def _refused(self, error: str) -> None:
        screen = self.screen
        if isinstance(screen, ComplaintScreen):
            screen.refused(error)
        elif isinstance(screen, WaitingScreen):
            self.farewell = error
            self.exit(return_code=3)
        else:
            self._tell(f"NOT OPENED: {error}")

    def _show(self, look: Look, said: str) -> None:
        from diag.tui.screens.case import CaseScreen

        for screen in self.screen_stack:
            if isinstance(screen, CaseScreen):
                screen.show(look, said)
                while name_of_screen(self.screen) == CASES:
                    self.pop_screen()
                return
        case = CaseScreen(look)
        case.said = said
        self.switch_screen(case)

    def _set_busy(self, busy: bool) -> None:
        self.busy = busy
        for screen in self.screen_stack:
            if hasattr(screen, "busy_changed"):
                screen.busy_changed()

    def _tell(self, text: str) -> None:
        told = getattr(self.screen, "told", None)
        if told is not None:
            told(text)
        else:
            self.notify(text, severity="warning", markup=False)

    def tell_later(self, text: str) -> None:
        """A word for when the change that is being made has been drawn; for workers."""
        self._later.append(text)

    def sheets_of(self, circuit: Circuit, heated: bool) -> Sheets:
        """The layouts of a circuit, with or without heat; each is made once."""
        from diag.oilpath import DRAWN, Sheets

        key = (circuit.content_hash, heated)
        if key not in self._sheets:
            self._sheets[key] = Sheets(circuit, DRAWN | {"heat"} if heated else DRAWN)
        return self._sheets[key]

    # -- other screens --------------------------------------------------------------------

    def show_oil_path(self, look: Look, ref: str) -> None:
        """The oil path over the case, with the way of one cause."""
        from diag.tui.screens.oil import OilScreen

        self.push_screen(OilScreen(look, ref))

    def action_cases(self) -> None:
        from diag.tui.screens.cases import CasesScreen

        if not isinstance(self.screen, CasesScreen):
            folder = self.request.folder or (self.request.log or self.logs / "x").parent
            self.push_screen(CasesScreen(folder))

    def open_log(self, path: Path) -> None:
        """Opens another case in place of the one on the desk."""
        if self._desk is not None and self._desk.keeper is not None:
            keeper = self._desk.keeper
            if keeper.unsaved:
                self._tell("the case on the desk is not on disk yet; write it elsewhere first")
                return
            if keeper.path.absolute() == path.absolute():
                self.pop_screen()
                return
        if not self.busy:
            self._set_busy(True)
            self.resume(path)

    def action_new_case(self) -> None:
        if any(isinstance(screen, ComplaintScreen) for screen in self.screen_stack):
            return
        if self._desk is not None and self._desk.keeper and self._desk.keeper.unsaved:
            self._tell("the case on the desk is not on disk yet; write it elsewhere first")
            return
        self._put_away()
        self.request = Request(by=self.request.by, folder=self.request.folder)
        while len(self.screen_stack) > 2:
            self.pop_screen()
        self.switch_screen(ComplaintScreen(self.request))
        self._read_circuits()

    def _put_away(self) -> None:
        """Closes the case on the desk, if there is one."""
        if self._desk is not None:
            self.lost += self._desk.close()
            self._desk = None

    # -- everywhere -----------------------------------------------------------------------

    def action_help(self) -> None:
        from diag.tui.dialogs.reading import Reader, help_lines

        if not isinstance(self.screen, Reader):
            self.push_screen(
                Reader("ALL KEYS", help_lines(self.keycaps, name_of_screen(self.screen)))
            )

    def action_copy(self) -> None:
        words = self._words()
        if words:
            self.copy_to_clipboard(words)
            self._tell("sent to the clipboard; F8 writes it to a file")

    def action_copy_file(self) -> None:
        words = self._words()
        if not words:
            return
        stamp = self.now().strftime("%Y%m%d-%H%M%S")
        path = self.beside(f"{name_of_screen(self.screen)}-{stamp}.txt")
        try:
            path.parent.mkdir(parents=True, exist_ok=True)
            path.write_text(words + "\n", encoding="utf-8")
        except OSError as error:
            self._tell(f"NOT WRITTEN: {path}: {error.strerror}")
            return
        self._tell(f"written to {path}")

    def beside(self, name: str) -> Path:
        """A file beside the log of the case."""
        keeper = self._desk.keeper if self._desk is not None else None
        return keeper.path.with_name(f"{keeper.path.stem}-{name}") if keeper else self.logs / name

    def _words(self) -> str:
        as_text = getattr(self.screen, "as_text", None)
        return as_text() if as_text is not None else ""

    def action_next_theme(self) -> None:
        following = (
            NAMES[(NAMES.index(self.theme) + 1) % len(NAMES)] if self.theme in NAMES else LAMP
        )
        if following == TERMINAL and self.no_color:
            self._tell("terminal colours do not go together with NO_COLOR")
            following = LAMP
        self.theme = following

    def action_leave(self) -> None:
        unsaved = self._desk.keeper.unsaved if self._desk and self._desk.keeper else 0
        if self.busy:
            self._tell("still weighing the last entry; leave again in a moment")
        elif unsaved and not self.farewell:
            self.farewell = f"{unsaved} entries in memory only"
            self._tell(f"{unsaved} entries are in memory only: v writes them elsewhere; "
                       "leave again to lose them")  # fmt: skip
        else:
            self.farewell = ""
            self._put_away()
            self.exit()

    def get_system_commands(self, screen: Screen[Any]) -> Iterable[SystemCommand]:
        """Everything that a key can do here, by name."""
        seen = set()
        for act in acts_of(name_of_screen(screen)):
            if act.help in seen or "(" in act.id or act.id == "answer":
                continue
            seen.add(act.help)
            cap = self.keycaps.get(name_of(act), act.keycap)
            yield SystemCommand(act.help, f"key {cap}", self._command(screen, act.id))

    def _command(self, screen: Screen[Any], action: str) -> Callable[[], Any]:
        async def run() -> None:
            owner = screen if hasattr(screen, f"action_{action}") else self
            await self.run_action(action, owner)

        return run


def name_of_screen(screen: Screen[Any]) -> str:
    """Which acts of the registry a screen has."""
    names = {
        "CaseScreen": CASE,
        "ComplaintScreen": COMPLAINT,
        "OilScreen": OIL,
        "CasesScreen": CASES,
    }
    return names.get(type(screen).__name__, ANY)

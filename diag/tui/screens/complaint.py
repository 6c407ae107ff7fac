"""The complaint: what the crew wrote, what it may mean, whose engine it is."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

from textual import on, work
from textual.app import ComposeResult
from textual.containers import Horizontal, Vertical, VerticalScroll
from textual.screen import Screen
from textual.suggester import SuggestFromList
from textual.timer import Timer
from textual.widgets import Input, Label, Static, TextArea

from diag.tui.actions import COMPLAINT, bindings
from diag.tui.request import Request
from diag.tui.widgets.intake import Cycle, Proposals
from diag.tui.widgets.parts import Heading, KeyStrip, TopLine

if TYPE_CHECKING:
    from diag.circuit.model import Circuit
    from diag.complaint import Proposal

PAUSE = 0.2
"""Seconds without a key before the words are read."""


class ComplaintScreen(Screen[None]):
    """Takes a complaint down and begins a case with it.

    It is up before the circuits are read: what it asks first needs none of them.
    """

    BINDINGS = bindings(COMPLAINT)
    AUTO_FOCUS = "#words"

    def __init__(self, request: Request) -> None:
        super().__init__()
        self.request = request
        self.circuits: dict[str, Circuit] = {}
        self.worked_on: list[str] = list(request.worked_on)
        self._timer: Timer | None = None
        self._asked = 0
        self._warned = False

    def compose(self) -> ComposeResult:
        yield TopLine(id="top")
        with VerticalScroll(id="intake", can_focus=False):
            yield Heading("WHAT DID THE CREW REPORT", id="words-heading")
            with Vertical(classes="hung", id="words-frame"):
                yield TextArea(id="words", compact=True, tab_behavior="focus")
            yield Heading("WHAT IT MAY MEAN", id="proposals-heading")
            yield Proposals(id="proposals")
            yield Heading("WHICH CIRCUIT", id="circuit-heading")
            with Horizontal(classes="intake-line"):
                yield Cycle([], id="circuit")
                yield Label("   overlays ")
                yield Input(" ".join(map(str, self.request.overlays)), compact=True, id="overlays",
                            placeholder="files of the operator's own values")  # fmt: skip
            yield Heading("WHOSE", id="whose-heading")
            with Horizontal(classes="intake-line"):
                for name, label in (("engine", "engine "), ("aircraft", "  aircraft "),
                                    ("by", "  your name ")):  # fmt: skip
                    yield Label(label)
                    yield Input(getattr(self.request, name), compact=True, id=name)
            yield Heading("STATE NOW, AND WHAT WAS WORKED ON LAST", id="state-heading")
            with Horizontal(classes="intake-line"):
                yield Label("engine ")
                yield Cycle([], id="engine-state")
                yield Label("  other engine the same? ")
                yield Cycle([("no", "no"), ("yes", "yes")], id="both")
            with Horizontal(classes="intake-line"):
                yield Label("worked on ")
                yield Input(compact=True, id="worked", placeholder="component, Enter")
                yield Static(id="worked-list", markup=False)
            yield Heading("F2 BEGINS THE CASE", last=True, id="begin-heading")
        yield KeyStrip(COMPLAINT)

    def on_mount(self) -> None:
        self.query_one("#proposals").add_class("hung")
        self.query_one("#top", TopLine).show("A new case", "reading the circuits …")
        self.query_one("#words-heading", Heading).aside = "as they wrote it; it goes into the log"
        self.query_one("#proposals-heading", Heading).aside = "Space takes · ←→ point · Del drops"
        self._show_worked()

    # -- when the circuits are read -------------------------------------------------------

    def ready(self, circuits: Mapping[str, Circuit], chosen: str) -> None:
        """Takes the circuits that there are."""
        self.circuits = dict(circuits)
        choices = [(name, circuit.title) for name, circuit in circuits.items()]
        self.query_one("#circuit", Cycle).set_choices(choices, chosen)
        for text in self.request.findings:
            self.query_one(Proposals).add(text)
        self._circuit_changed()

    @property
    def circuit(self) -> Circuit | None:
        """The circuit that is chosen, once it is read."""
        return self.circuits.get(self.query_one("#circuit", Cycle).value)

    @on(Cycle.Turned, "#circuit")
    def _circuit_changed(self) -> None:
        circuit = self.circuit
        if circuit is None:
            return
        notice = f"version {circuit.file.version}, {len(circuit.components)} components"
        self.query_one("#top", TopLine).show("A new case", f"{circuit.id.replace('_', ' ')}")
        self.query_one("#circuit-heading", Heading).aside = notice
        states = [(s, s.replace("_", " ")) for s in circuit.engine_states
                  if s not in ("any", "stopped")]  # fmt: skip
        self.query_one("#engine-state", Cycle).set_choices(states, "cold")
        self.query_one("#worked", Input).suggester = SuggestFromList(
            [name.replace("_", " ") for name in circuit.components], case_sensitive=False
        )
        self.worked_on = [name for name in self.worked_on if name in circuit.components]
        self._show_worked()
        self._read_words()

    # -- the crew's words -----------------------------------------------------------------

    @on(TextArea.Changed, "#words")
    def _typed(self) -> None:
        if self._timer is not None:
            self._timer.stop()
        self._timer = self.set_timer(PAUSE, self._read_words)
        self._warned = False

    def _read_words(self) -> None:
        circuit = self.circuit
        if circuit is not None:
            self._asked += 1
            self._propose(circuit, self.query_one("#words", TextArea).text, self._asked)

    @work(thread=True, exclusive=True, group="words", exit_on_error=False)
    def _propose(self, circuit: Circuit, text: str, number: int) -> None:
        from diag.complaint import propose

        found = propose(circuit, text)
        self.app.call_from_thread(self._proposed, found, number)

    def _proposed(self, found: Sequence[Proposal], number: int) -> None:
        if number == self._asked:
            self.query_one(Proposals).propose(found)

    # -- recent work ----------------------------------------------------------------------

    @on(Input.Submitted, "#worked")
    def _worked(self, event: Input.Submitted) -> None:
        circuit = self.circuit
        name = event.value.strip().lower().replace(" ", "_").replace("-", "_")
        if circuit is None or not name:
            return
        if name not in circuit.components:
            near = [c for c in circuit.components if name in c]
            if len(near) != 1:
                self.query_one("#state-heading", Heading).aside = (
                    f"NOT TAKEN: no component {event.value!r}"
                    + (f"; {', '.join(near[:3])}?" if near else "")
                )
                return
            name = near[0]
        self.worked_on = [w for w in self.worked_on if w != name] + (
            [] if name in self.worked_on else [name]
        )
        event.input.value = ""
        self._show_worked()

    def _show_worked(self) -> None:
        listed = ", ".join(name.replace("_", " ") for name in self.worked_on)
        self.query_one("#worked-list", Static).update(f"  {listed or 'nothing'}")
        self.query_one("#state-heading", Heading).aside = "Enter adds, again takes away"

    # -- going on -------------------------------------------------------------------------

    def action_find_finding(self) -> None:
        circuit = self.circuit
        if circuit is not None:
            self._find(circuit)

    @work
    async def _find(self, circuit: Circuit) -> None:
        from diag.tui.flows import ask_any_finding

        given = await ask_any_finding(self.app, circuit)
        if given is not None:
            observable, answer = given
            self.query_one(Proposals).add(f"{observable.id}={answer.value}")

    def action_begin(self) -> None:
        circuit = self.circuit
        proposals = self.query_one(Proposals)
        heading = self.query_one("#begin-heading", Heading)
        if circuit is None:
            heading.aside = "the circuits are still being read"
            return
        if proposals.open and not self._warned:
            self._warned = True
            heading.aside = f"{proposals.open} not taken; F2 again begins without"
            self.app.bell()
            return
        self.app.begin(self._intake(), circuit, self._value("overlays").split(), self._value("by"))  # type: ignore[attr-defined]

    def _value(self, name: str) -> str:
        return self.query_one(f"#{name}", Input).value.strip()

    def _intake(self) -> Any:
        from diag.tui.desk import Intake

        return Intake(
            words=" ".join(self.query_one("#words", TextArea).text.split()),
            findings=tuple(self.query_one(Proposals).confirmed),
            engine=self._value("engine"),
            aircraft=self._value("aircraft"),
            state=self.query_one("#engine-state", Cycle).value,
            worked_on=tuple(self.worked_on),
            both_engines=self.query_one("#both", Cycle).value == "yes",
        )

    def refused(self, why: str) -> None:
        """Says why the case could not be begun."""
        self.query_one("#begin-heading", Heading).aside = f"NOT BEGUN: {why}"

    def as_text(self) -> str:
        """The words of the screen."""
        found = "\n".join(self.query_one(Proposals).confirmed)
        return f"{self.query_one('#words', TextArea).text}\n{found}"

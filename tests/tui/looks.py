"""A case with fixed figures, so that a picture of a screen changes when the screen does."""

from __future__ import annotations

from collections import defaultdict
from types import SimpleNamespace
from typing import Any

from diag.advice.steps import NO_REFERENCE, NextStep
from diag.circuit.model import UNLISTED, Circuit
from diag.oilpath import Marks, pins_of
from diag.record.events import Found, Opened, StateChanged
from diag.record.narrate import cause_title
from diag.session import fold
from diag.tui.app import DiagApp
from diag.tui.desk import CauseRow, Look
from diag.tui.screens.case import CaseScreen
from tests.tui.stage import NOW

CHANCES = {
    "pressure_pump.worn": (0.52, 0.31),
    "suction_line.drawing_air": (0.12, 0.19),
    "relief_valve.seat_debris": (0.08, 0.21),
    UNLISTED: (0.034, 0.03),
    "pressure_transmitter.drift_low": (0.02, 0.02),
}


def fixed_look(circuit: Circuit) -> Look:
    """A case in which figures are given and nothing is weighed."""
    head = Opened(
        at=NOW.replace(hour=10, minute=35), circuit=circuit.id, version="1.0",
        content_hash=circuit.content_hash, engine="E-412", aircraft="TB-7", by="Kim",
        complaint="Oil pressure low at hot idle, normal in the climb",
    )  # fmt: skip
    found = [
        Found(at=NOW, number=1, name="oil_pressure", point="hot_idle", value="52psi",
              complaint=True),
        Found(at=NOW, number=2, name="oil_pressure", point="high_power", value="81psi",
              complaint=True),
        StateChanged(at=NOW, number=3, engine="hot_stopped", opened=("cowl",)),
        Found(at=NOW, number=4, name="chip_look", value="none"),
    ]  # fmt: skip
    state = fold(circuit, [head, *[e for e in found if _fits(circuit, e)]])
    known = {ref: pair for ref, pair in CHANCES.items() if ref in (*circuit.modes, UNLISTED)}
    suspicion: dict[str, float] = defaultdict(float)
    for ref, (now, _) in known.items():
        suspicion[ref.partition(".")[0]] += now
    present = defaultdict(float, {ref: now for ref, (now, _) in known.items()})
    assessment: Any = SimpleNamespace(present=present)
    return Look(
        number=1,
        state=state,
        assessment=assessment,
        steps=_steps(circuit),
        held=(),
        causes=tuple(
            CauseRow(ref, cause_title(circuit, ref), now, before)
            for ref, (now, before) in known.items()
        ),
        coverage=0.9998,
        conflict=0.4,
        doubtful="",
        alarms=(),
        marks=Marks(suspicion, pins_of(state)),
        unsaved=0,
    )


def _fits(circuit: Circuit, event: Any) -> bool:
    if not isinstance(event, Found):
        return True
    key = f"{event.name}@{event.point}" if event.point else event.name
    return key in circuit.observables and (
        event.value.endswith("psi") or event.value in circuit.observables[key].outcomes
    )


def _steps(circuit: Circuit) -> tuple[NextStep, ...]:
    first = circuit.observables["direct_gauge@hot_idle"]
    cautions = tuple(circuit.cautions[code] for code in ("engine_run", "rotating", "hot_oil"))
    return (
        NextStep(
            first.id, "check", f"{first.record.title}, hot idle", 25, 38, 1.21, 0.0,
            ("engine running at idle", "open: Oil line disconnected and capped"), cautions,
            NO_REFERENCE,
        ),
        NextStep("filter_element", "check", circuit.observables["filter_element"].record.title,
                 15, 30, 0.64, 0.0, ("engine stopped",), (), NO_REFERENCE),
        NextStep("pressure_pump_replace", "rectification",
                 circuit.remedies["pressure_pump_replace"].record.title, 180, 18, 0.0, 0.52,
                 ("engine stopped and cold",), (), NO_REFERENCE),
        NextStep("escalate", "escalate", "Hand the case to engineering with what is known",
                 480, 0, 0.0, 0.0, (), (), NO_REFERENCE),
    )  # fmt: skip


class ShownApp(DiagApp):
    """An app that shows a given look."""

    shown: Look

    def start(self) -> None:
        self.push_screen(CaseScreen(self.shown))

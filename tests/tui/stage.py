"""A stage for the terminal screen: a fixed clock, logs in a folder of the test, keys that wait."""

from __future__ import annotations

import asyncio
from collections.abc import Awaitable, Callable, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime
from functools import cache
from pathlib import Path
from typing import Any

import pytest
from textual.pilot import Pilot

from diag.circuit.loading import load_circuit
from diag.circuit.model import Circuit
from diag.tui.app import DiagApp
from diag.tui.request import Request

NOW = datetime(2025, 3, 1, 12, 0, tzinfo=UTC)
PUMP_WEAR = (
    "oil_pressure@hot_idle=52psi",
    "oil_pressure@cold_idle=82psi",
    "oil_pressure@high_power=81psi",
)
"""What the crew reports in the example of the worn pump."""
PATIENCE = 20.0
"""Seconds until a test gives up waiting: machines are shared."""


@cache
def circuit_once(name: str, overlays: tuple[Path, ...] = ()) -> Circuit:
    return load_circuit(name, overlays)


def read_once(monkeypatch: pytest.MonkeyPatch) -> None:
    """Circuits are read once for all tests."""

    def load(name: str, overlays: Sequence[Path] = (), **_: Any) -> Circuit:
        return circuit_once(name.replace("-", "_"), tuple(overlays))

    monkeypatch.setattr("diag.circuit.loading.load_circuit", load)


def the_app(
    folder: Path,
    circuit: str = "relief_valve_turboprop",
    findings: Sequence[str] = PUMP_WEAR[:1],
    theme: str = "lamp",
    **more: Any,
) -> DiagApp:
    """An app that begins a case at once, or asks for a complaint when there are no findings."""
    request = Request(
        circuit=circuit if findings else "",
        findings=tuple(findings),
        log=folder / "case.jsonl",
        engine="E-412",
        aircraft="TB-7",
        by="Kim",
        folder=folder,
    )
    return DiagApp(more.pop("request", request), lambda: NOW, folder, theme=theme, **more)


@dataclass
class Stage:
    """An app that runs, and the keyboard in front of it."""

    app: DiagApp
    pilot: Pilot[None]

    async def until(self, true: Callable[[], bool]) -> None:
        """Waits until something holds."""
        async with asyncio.timeout(PATIENCE):
            while not true():
                await self.pilot.pause(0.01)
        await self.pilot.pause()

    async def settled(self) -> None:
        """Waits until what was entered has been weighed and drawn."""
        await self.until(lambda: not self.app.busy)

    async def press(self, *keys: str) -> None:
        """Presses keys and waits until they have had their effect."""
        await self.pilot.press(*keys)
        await self.pilot.pause()
        await self.settled()

    async def type(self, text: str) -> None:
        await self.press(*("space" if c == " " else c for c in text))

    def screen_is(self, name: str) -> bool:
        return type(self.app.screen).__name__ == name

    def look(self) -> Any:
        """What the case screen shows."""
        case = next(s for s in self.app.screen_stack if type(s).__name__ == "CaseScreen")
        return case.look  # type: ignore[attr-defined]

    def last(self) -> Any:
        """The last entry of the log."""
        return self.look().state.events[-1]

    def text(self, selector: str) -> str:
        """What a widget shows."""
        widget: Any = self.app.screen.query_one(selector)
        drawn = widget.render()
        return str(getattr(drawn, "plain", drawn))

    def said(self) -> str:
        return self.text("#said")


def play(
    app: DiagApp,
    course: Callable[[Stage], Awaitable[None]],
    size: tuple[int, int] = (80, 24),
) -> None:
    """Runs an app and a course of keys on it."""

    async def run() -> None:
        async with app.run_test(size=size) as pilot:
            stage = Stage(app, pilot)
            await stage.until(
                lambda: type(app.screen).__name__ in ("CaseScreen", "ComplaintScreen")
            )
            await stage.settled()
            await course(stage)

    asyncio.run(run())

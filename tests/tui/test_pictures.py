"""Pictures of every screen at 80x24 and 120x36, from fixed figures."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import pytest
from textual.pilot import Pilot
from textual.widgets import Input, TextArea

from diag.tui.request import Request
from diag.tui.screens.case import CaseScreen
from diag.tui.screens.complaint import ComplaintScreen
from diag.tui.screens.oil import OilScreen
from tests.tui.looks import ShownApp, fixed_look
from tests.tui.stage import NOW, circuit_once, the_app

SIZES = pytest.mark.parametrize("size", [(80, 24), (120, 36)], ids=["80x24", "120x36"])


def shown(circuit: str, theme: str = "lamp") -> ShownApp:
    app = ShownApp(Request(), lambda: NOW, Path("logs"), theme=theme)
    app.shown = fixed_look(circuit_once(circuit))
    return app


async def still(pilot: Pilot[None]) -> None:
    """Nothing blinks and nothing is under way."""
    for field in pilot.app.screen.query(Input):
        field.cursor_blink = False
    for area in pilot.app.screen.query(TextArea):
        area.cursor_blink = False
    await pilot.pause()


@SIZES
def test_case(snap_compare: Any, size: tuple[int, int], monkeypatch: Any) -> None:
    monkeypatch.setattr(CaseScreen, "_foretell", lambda self: None)
    assert snap_compare(shown("relief_valve_turboprop"), terminal_size=size, run_before=still)


def test_case_by_daylight(snap_compare: Any, monkeypatch: Any) -> None:
    monkeypatch.setattr(CaseScreen, "_foretell", lambda self: None)
    app = shown("full_flow_turbofan", "daylight")
    assert snap_compare(app, terminal_size=(80, 24), run_before=still)


@SIZES
@pytest.mark.parametrize("circuit", ["relief_valve_turboprop", "full_flow_turbofan"])
def test_oil_path(snap_compare: Any, size: tuple[int, int], circuit: str, monkeypatch: Any) -> None:
    monkeypatch.setattr(CaseScreen, "_foretell", lambda self: None)

    async def to_oil(pilot: Pilot[None]) -> None:
        await pilot.press("o")
        screen = pilot.app.screen
        assert isinstance(screen, OilScreen)
        while not screen.laid_out:
            await pilot.pause(0.02)
        await still(pilot)

    assert snap_compare(shown(circuit), terminal_size=size, run_before=to_oil)


@SIZES
def test_complaint(snap_compare: Any, size: tuple[int, int], tmp_path: Path) -> None:
    async def written(pilot: Pilot[None]) -> None:
        screen = pilot.app.screen
        while not (isinstance(screen, ComplaintScreen) and screen.circuit is not None):
            await pilot.pause(0.02)
            screen = pilot.app.screen
        screen.query_one("#words", TextArea).insert("Oil pressure low at hot idle, light on")
        proposals: Any = screen.query_one("#proposals")
        while not proposals.count:
            await pilot.pause(0.02)
        await still(pilot)

    app = the_app(tmp_path, findings=())
    assert snap_compare(app, terminal_size=size, run_before=written)


@pytest.mark.parametrize("key", ["s", "x", "question_mark"], ids=["state", "close", "help"])
def test_slips(snap_compare: Any, key: str, monkeypatch: Any) -> None:
    monkeypatch.setattr(CaseScreen, "_foretell", lambda self: None)

    async def opened(pilot: Pilot[None]) -> None:
        await pilot.press(key)
        await still(pilot)

    app = shown("relief_valve_turboprop")
    assert snap_compare(app, terminal_size=(80, 24), run_before=opened)

"""The complaint screen: words are read, findings confirmed one by one, the case begun."""

from __future__ import annotations

from pathlib import Path
from typing import Any

from diag.record.events import Found, Opened, StateChanged
from tests.tui.stage import Stage, play, the_app


def proposals(stage: Stage) -> Any:
    return stage.app.screen.query_one("#proposals")


async def written(stage: Stage, words: str) -> None:
    """The crew's words, typed, and what they may mean, read."""
    await stage.until(lambda: stage.app.screen.circuit is not None)  # type: ignore[attr-defined]
    screen: Any = stage.app.screen
    screen.query_one("#words").insert(words)
    await stage.until(lambda: proposals(stage).count > 0)


async def circuit_is(stage: Stage, name: str) -> None:
    screen: Any = stage.app.screen
    await stage.until(lambda: screen.circuit is not None)
    screen.query_one("#circuit").focus()
    while screen.circuit.id != name:
        await stage.press("right")


def test_words_become_findings_only_when_confirmed(tmp_path: Path) -> None:
    async def course(stage: Stage) -> None:
        await circuit_is(stage, "relief_valve_turboprop")
        await written(stage, "Oil pressure low at hot idle, normal in the climb")
        assert proposals(stage).confirmed == []
        await stage.until(lambda: proposals(stage).count == 2)
        proposals(stage).focus()
        await stage.press("space")
        assert proposals(stage).confirmed == ["oil_pressure@hot_idle=low"]
        await stage.press("f2")
        assert "1 not taken" in stage.text("#begin-heading")
        await stage.press("f2")
        await stage.until(lambda: stage.screen_is("CaseScreen"))
        events = stage.look().state.events
        head = events[0]
        assert isinstance(head, Opened)
        assert head.complaint == "Oil pressure low at hot idle, normal in the climb"
        found = [e for e in events if isinstance(e, Found)]
        assert [(f.name, f.point, f.value, f.complaint) for f in found] == [
            ("oil_pressure", "hot_idle", "low", True)
        ]

    play(the_app(tmp_path, findings=()), course)


def test_point_that_is_not_said_is_marked_and_can_be_changed(tmp_path: Path) -> None:
    async def course(stage: Stage) -> None:
        await circuit_is(stage, "relief_valve_turboprop")
        await written(stage, "oil temperature high")
        proposals(stage).focus()
        assert "assumed" in stage.text("#proposals")
        await stage.press("right")
        assert "assumed" not in stage.text("#proposals")
        await stage.press("space")
        assert proposals(stage).confirmed == ["oil_temperature@hot_idle=high"]
        await stage.press("left")
        assert proposals(stage).confirmed == ["oil_temperature@high_power=high"]
        await stage.press("delete")
        assert proposals(stage).confirmed == []
        assert proposals(stage).count == 0

    play(the_app(tmp_path, findings=()), course)


def test_identity_state_and_recent_work_go_into_the_log(tmp_path: Path) -> None:
    async def course(stage: Stage) -> None:
        await circuit_is(stage, "relief_valve_turboprop")
        screen: Any = stage.app.screen
        screen.query_one("#engine-state").focus()
        await stage.press("right")
        screen.query_one("#both").focus()
        await stage.press("space")
        screen.query_one("#worked").focus()
        await stage.type("relief val")
        await stage.press("enter")
        await stage.type("nonsense")
        await stage.press("enter")
        assert "NOT TAKEN" in stage.text("#state-heading")
        await stage.press("f2")
        await stage.until(lambda: stage.screen_is("CaseScreen"))
        head = stage.look().state.events[0]
        assert (head.engine, head.aircraft, head.by) == ("E-412", "TB-7", "Kim")
        assert head.worked_on == ("relief_valve",)
        assert head.both_engines
        changed = [e for e in stage.look().state.events if isinstance(e, StateChanged)]
        assert changed[0].engine == "hot_stopped"

    play(the_app(tmp_path, findings=()), course)


def test_finding_is_looked_up_by_hand(tmp_path: Path) -> None:
    async def course(stage: Stage) -> None:
        await circuit_is(stage, "full_flow_turbofan")
        await stage.press("f3")
        await stage.type("chip warn")
        await stage.press("enter", "2")
        assert proposals(stage).confirmed == ["chip_warning=on"]
        await stage.press("f2")
        await stage.until(lambda: stage.screen_is("CaseScreen"))
        assert stage.look().circuit.id == "full_flow_turbofan"
        assert stage.look().state.findings[0].value == "on"

    play(the_app(tmp_path, findings=()), course)


def test_overlay_that_cannot_be_read_is_told(tmp_path: Path) -> None:
    async def course(stage: Stage) -> None:
        await circuit_is(stage, "relief_valve_turboprop")
        screen: Any = stage.app.screen
        screen.query_one("#overlays").value = str(tmp_path / "none.yaml")
        await stage.press("f2")
        await stage.until(lambda: "NOT BEGUN" in stage.text("#begin-heading"))
        assert not (tmp_path / "case.jsonl").exists()

    play(the_app(tmp_path, findings=()), course)

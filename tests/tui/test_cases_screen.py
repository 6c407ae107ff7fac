"""Several cases: the list of a folder, opening one of them, a log that cannot be read."""

from __future__ import annotations

from pathlib import Path

from diag.record.events import Opened
from diag.record.journal import Journal
from diag.tui.request import Request
from tests.tui.stage import NOW, PUMP_WEAR, Stage, circuit_once, play, the_app


def another_case(folder: Path) -> Path:
    circuit = circuit_once("full_flow_turbofan")
    path = folder / "other.jsonl"
    head = Opened(
        at=NOW.replace(hour=9),
        circuit=circuit.id,
        version=circuit.file.version,
        content_hash=circuit.content_hash,
        engine="E-9",
    )
    Journal.create(path, head).close()
    return path


def test_list_tells_age_engine_cause_and_next_step(tmp_path: Path) -> None:
    another_case(tmp_path)
    (tmp_path / "broken.jsonl").write_text("{}\n")

    async def course(stage: Stage) -> None:
        await stage.press("f4")
        screen = stage.app.screen
        await stage.until(lambda: "…" not in screen.as_text().replace("…\n", ""))  # type: ignore[attr-defined]
        words = screen.as_text()  # type: ignore[attr-defined]
        assert "3 h 00  E-9" in words
        assert "broken.jsonl  UNREADABLE" in words
        await stage.until(lambda: words.count("next: ") == 2)
        first = stage.look().steps[0].title
        await stage.until(lambda: first in screen.as_text())  # type: ignore[attr-defined]
        await stage.press("r")
        await stage.press("escape")
        assert stage.screen_is("CaseScreen")

    play(the_app(tmp_path, findings=PUMP_WEAR), course)


def test_another_case_is_opened_and_the_first_one_let_go(tmp_path: Path) -> None:
    other = another_case(tmp_path)

    async def course(stage: Stage) -> None:
        first = stage.look()
        await stage.press("f4")
        await stage.until(lambda: stage.app.screen.query_one("#cases").option_count == 2)  # type: ignore[attr-defined]
        await stage.press("down", "enter")
        await stage.until(lambda: stage.screen_is("CaseScreen"))
        assert stage.look().state.opened.engine == "E-9"
        assert "E-9" in stage.text("#top")
        await stage.press("1")
        assert Journal.open(tmp_path / "case.jsonl").events == first.state.events

    play(the_app(tmp_path), course)
    assert other.exists()


def test_resume_carries_on_where_it_stopped(tmp_path: Path) -> None:
    async def begin(stage: Stage) -> None:
        await stage.press("1")
        await stage.pilot.press("f10")

    play(the_app(tmp_path), begin)

    async def course(stage: Stage) -> None:
        count = len(stage.look().state.events)
        assert count >= 3
        await stage.press("u")
        assert len(stage.look().state.events) > count

    request = Request(resume=tmp_path / "case.jsonl", by="Lee", folder=tmp_path)
    play(the_app(tmp_path, request=request), course)


def test_new_case_lets_the_present_one_go(tmp_path: Path) -> None:
    async def course(stage: Stage) -> None:
        await stage.press("f6")
        await stage.until(lambda: stage.screen_is("ComplaintScreen"))
        Journal.open(tmp_path / "case.jsonl").close()

    play(the_app(tmp_path), course)

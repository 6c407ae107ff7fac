"""What holds on every screen: one registry of keys, colours, copying, work that takes time."""

from __future__ import annotations

import time
from pathlib import Path
from typing import Any

import pytest

from diag.record.journal import read_journal
from diag.session import Session
from diag.tui.actions import ACTS, ANY, bindings, keycaps, keymap_from, name_of
from diag.tui.app import DiagApp
from diag.tui.desk import Desk
from diag.tui.dialogs.reading import help_lines
from diag.tui.screens.case import CaseScreen
from diag.tui.screens.cases import CasesScreen
from diag.tui.screens.complaint import ComplaintScreen
from diag.tui.screens.oil import OilScreen
from tests.tui.stage import PUMP_WEAR, Stage, play, the_app

SCREENS: dict[str, type[Any]] = {
    "case": CaseScreen,
    "complaint": ComplaintScreen,
    "oil": OilScreen,
    "cases": CasesScreen,
}


# -- one registry --------------------------------------------------------------------------------


@pytest.mark.parametrize("act", ACTS, ids=name_of)
def test_every_act_can_be_done_and_is_in_the_help(act: Any) -> None:
    owner = DiagApp if act.screen == ANY else SCREENS[act.screen]
    assert callable(getattr(owner, f"action_{act.id.partition('(')[0]}"))
    assert act.help in "\n".join(line.plain for line in help_lines(keycaps({}), "case"))


def test_names_are_unique_and_keys_of_one_screen_do_not_clash() -> None:
    names = [name_of(act) for act in ACTS]
    assert len(set(names)) == len(names)
    for screen in SCREENS:
        keys = [k for act in ACTS if act.screen in (screen, ANY) for k in act.key.split(",")]
        clashes = {k for k in keys if keys.count(k) > 1}
        assert not clashes, (screen, clashes)


def test_bindings_come_from_the_registry() -> None:
    ids = {binding.id for binding in bindings("case")}  # type: ignore[union-attr]
    assert {"case.undo", "case.answer_1", "case.answer_9"} <= ids


def test_keys_can_be_laid_otherwise(tmp_path: Path) -> None:
    keymap = keymap_from("# mine\ncase.undo = z\n\nany.help = f12  # far away\n")
    assert keymap == {"case.undo": "z", "any.help": "f12"}

    async def course(stage: Stage) -> None:
        await stage.press("1")
        count = len(stage.look().state.events)
        await stage.press("u")
        assert len(stage.look().state.events) == count
        await stage.press("z")
        assert len(stage.look().state.events) > count
        assert " z  undo" in stage.text("#strip")
        await stage.press("f12")
        words = stage.app.screen.as_text()  # type: ignore[attr-defined]
        assert " z   Take back the last thing recorded" in words

    play(the_app(tmp_path, keymap=keymap), course)


@pytest.mark.parametrize("line", ["case.fly = z", "undo z", "case.undo ="])
def test_keys_file_that_names_nothing_is_refused(line: str) -> None:
    with pytest.raises(ValueError, match="line 1"):
        keymap_from(line)


def test_palette_offers_what_keys_do(tmp_path: Path) -> None:
    async def course(stage: Stage) -> None:
        titles = {c.title for c in stage.app.get_system_commands(stage.app.screen)}
        assert "Take back the last thing recorded" in titles
        assert "Cases in this folder" in titles
        await stage.press("ctrl+p")
        await stage.type("why this")
        await stage.until(lambda: bool(stage.app.screen.query("OptionList")))
        await stage.pilot.pause(0.3)
        await stage.press("enter")
        await stage.until(lambda: stage.screen_is("Reader"))

    play(the_app(tmp_path), course)


# -- colours -------------------------------------------------------------------------------------


def test_colours_turn_round_lamp_daylight_terminal(tmp_path: Path) -> None:
    async def course(stage: Stage) -> None:
        seen = [stage.app.theme]
        for _ in range(3):
            await stage.press("f9")
            seen.append(stage.app.theme)
        assert seen == ["lamp", "daylight", "terminal", "lamp"]

    play(the_app(tmp_path), course)


def test_no_colour_refuses_terminal_colours(tmp_path: Path, monkeypatch: Any) -> None:
    monkeypatch.setenv("NO_COLOR", "1")

    async def course(stage: Stage) -> None:
        assert stage.app.theme == "lamp"
        await stage.press("f9", "f9")
        assert stage.app.theme == "lamp"
        assert "NO_COLOR" in stage.said()

    play(the_app(tmp_path, theme="terminal"), course)


def test_cautions_are_words_before_they_are_colours(tmp_path: Path) -> None:
    async def course(stage: Stage) -> None:
        case: Any = stage.app.screen
        number = next(n for n, step in enumerate(stage.look().steps) if step.cautions)
        await stage.press(*["right"] * number)
        shown = stage.text("#warnings")
        first = " ".join(case.step.cautions[0].split()[:4])
        assert f"▲ CAUTION  {first}" in shown

    play(the_app(tmp_path), course)


def test_hold_is_on_the_screen_whatever_step_is_on_the_table(tmp_path: Path) -> None:
    async def course(stage: Stage) -> None:
        assert "■ HOLD  Metal flakes" in stage.text("#warnings")
        await stage.press("right")
        assert "■ HOLD  Metal flakes" in stage.text("#warnings")
        assert "held by a rule" in stage.text("#rivals")
        await stage.press("w")
        assert " HOLD " in stage.app.screen.as_text()  # type: ignore[attr-defined]

    play(the_app(tmp_path, findings=("chip_look=flakes",)), course)


# -- copying -------------------------------------------------------------------------------------


def test_words_go_to_the_clipboard_and_to_a_file(tmp_path: Path) -> None:
    async def course(stage: Stage) -> None:
        await stage.press("f7")
        assert "sent to the clipboard" in stage.said()
        assert stage.look().steps[0].title in stage.app.clipboard
        await stage.press("f8")
        written = list(tmp_path.glob("case-case-*.txt"))
        assert len(written) == 1
        assert stage.look().causes[0].title in written[0].read_text()

    play(the_app(tmp_path), course)


# -- what takes time -----------------------------------------------------------------------------


@pytest.fixture
def held_engine(monkeypatch: pytest.MonkeyPatch) -> float:
    """An engine that takes two seconds for every change."""
    held, record = 2.0, Session.add

    def slowly(self: Session, event: Any) -> Any:
        time.sleep(held)
        return record(self, event)

    monkeypatch.setattr(Session, "add", slowly)
    return held


def test_screen_takes_keys_while_the_engine_is_held(tmp_path: Path, held_engine: float) -> None:
    async def course(stage: Stage) -> None:
        screen: Any = stage.app.screen
        await stage.pilot.press("right")
        start = time.perf_counter()
        await stage.pilot.press("1")
        assert stage.app.busy
        await stage.pilot.press("t")
        for key in "AMM-79":
            await stage.pilot.press(key)
        await stage.pilot.pause()
        typed = time.perf_counter() - start
        assert stage.app.busy, "the engine was done before the typing was"
        assert screen.query_one("#task-field").value == "AMM-79"
        assert typed < held_engine
        assert "weighing" in stage.text("#now-heading")
        await stage.pilot.press("escape", "2")
        assert "still weighing" in stage.said()
        await stage.settled()
        assert "weighing" not in stage.text("#now-heading")

    play(the_app(tmp_path), course)


def test_entry_that_is_not_on_disk_is_said_and_kept(tmp_path: Path) -> None:
    async def course(stage: Stage) -> None:
        # Somebody else writes into the log: it takes no more.
        with (tmp_path / "case.jsonl").open("a") as stream:
            stream.write("{}\n")
        count = len(stage.look().state.events)
        await stage.press("1")
        assert len(stage.look().state.events) > count
        assert "NOT ON DISK" in stage.said()
        assert "NOT ON DISK: " in stage.text("#top")
        await stage.press("f10")
        assert stage.app.is_running
        assert "leave again to lose" in stage.said()
        await stage.press("v")
        await stage.type(str(tmp_path / "b.jsonl"))
        await stage.press("enter")
        assert "NOT ON DISK" not in stage.text("#top")
        assert read_journal(tmp_path / "b.jsonl").events == stage.look().state.events

    play(the_app(tmp_path), course)


def test_fault_inside_is_told_and_the_screen_goes_on(tmp_path: Path, monkeypatch: Any) -> None:
    async def course(stage: Stage) -> None:
        def broken(self: Desk, *_: Any, **__: Any) -> None:
            raise ZeroDivisionError("one by nought")

        monkeypatch.setattr(Desk, "found", broken)
        await stage.press("1")
        assert "internal fault: ZeroDivisionError" in stage.said()
        monkeypatch.undo()
        await stage.press("1")
        assert not stage.app.busy

    play(the_app(tmp_path), course)


def test_leaving_lets_the_log_go(tmp_path: Path) -> None:
    async def course(stage: Stage) -> None:
        await stage.pilot.press("q")
        assert not stage.app.is_running

    app = the_app(tmp_path, findings=PUMP_WEAR)
    play(app, course)
    assert app.lost == 0

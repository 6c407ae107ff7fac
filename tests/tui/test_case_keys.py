"""Every key of the case screen does what the registry says of it."""

from __future__ import annotations

from pathlib import Path

import pytest

from diag.record.events import (
    Acknowledged,
    Closed,
    Doubted,
    Found,
    HandedOver,
    Noted,
    NotPossible,
    Rectified,
    StateChanged,
    Withdrawn,
)
from diag.record.journal import read_journal
from diag.record.narrate import cause_title
from tests.tui.stage import PUMP_WEAR, Stage, play, the_app


def test_answer_is_recorded_under_its_number(tmp_path: Path) -> None:
    async def course(stage: Stage) -> None:
        step = stage.look().steps[0]
        observable = stage.look().circuit.observables[step.id]
        await stage.press("2")
        found = [e for e in stage.look().state.events if isinstance(e, Found)]
        assert found[-1].value == observable.outcomes[1]
        assert not found[-1].complaint
        assert stage.look().steps[0].id != step.id
        on_disk = read_journal(tmp_path / "case.jsonl")
        assert on_disk.events == stage.look().state.events
        assert found[-1].by == "Kim"

    play(the_app(tmp_path), course)


def test_number_without_answer_is_refused(tmp_path: Path) -> None:
    async def course(stage: Stage) -> None:
        count = len(stage.look().state.events)
        await stage.press("9")
        assert "no answer 9" in stage.said()
        assert len(stage.look().state.events) == count

    play(the_app(tmp_path), course)


def test_reading_takes_the_unit_beside_the_field(tmp_path: Path) -> None:
    async def course(stage: Stage) -> None:
        await turn_to(stage, "oil_pressure@high_power")
        assert "psi" in stage.text("#unit-label")
        await stage.press("r")
        await stage.type("81")
        await stage.press("enter")
        assert stage.last().value == "81psi"
        await turn_to(stage, "oil_pressure@cold_idle")
        await stage.press("r")
        await stage.type("5.65bar")
        await stage.press("enter")
        assert stage.last().value == "5.65bar"

    play(the_app(tmp_path), course)


def test_reading_that_cannot_be_is_told_and_not_taken(tmp_path: Path) -> None:
    async def course(stage: Stage) -> None:
        await turn_to(stage, "oil_pressure@high_power")
        count = len(stage.look().state.events)
        await stage.press("r")
        await stage.type("900")
        await stage.press("enter")
        assert "NOT TAKEN" in stage.said()
        assert "0 to 250 psi" in stage.said()
        assert len(stage.look().state.events) == count
        await stage.press("escape")
        assert stage.app.focused is None

    play(the_app(tmp_path), course)


def test_task_goes_into_the_record(tmp_path: Path) -> None:
    async def course(stage: Stage) -> None:
        await stage.press("t")
        await stage.type("AMM 79-1")
        await stage.press("enter")
        assert "next answer" in stage.said()
        await stage.press("1")
        found = [e for e in stage.look().state.events if isinstance(e, Found)]
        assert found[-1].reference == "AMM 79-1"
        assert stage.app.screen.query_one("#task-field").value == ""  # type: ignore[attr-defined]

    play(the_app(tmp_path), course)


def test_arrows_turn_to_the_other_steps_and_back(tmp_path: Path) -> None:
    async def course(stage: Stage) -> None:
        first, second = (s.title for s in stage.look().steps[:2])
        assert first in stage.text("#step-title")
        await stage.press("right")
        assert second in stage.text("#step-title")
        assert "INSTEAD, 1 of" in stage.text("#now-heading")
        await stage.press("1")
        recorded = [e for e in stage.look().state.events if isinstance(e, Found)][-1]
        assert recorded.name in {s.partition("@")[0] for s in (second, recorded.name)}
        await stage.press("right", "left")
        assert "NOW" in stage.text("#now-heading")

    play(the_app(tmp_path), course)


def test_cannot_asks_why_and_turns_to_another_step(tmp_path: Path) -> None:
    async def course(stage: Stage) -> None:
        step = stage.look().steps[0].id
        await stage.press("c")
        assert stage.screen_is("Fields")
        await stage.type("no ladder")
        await stage.press("enter")
        entry = stage.last()
        assert isinstance(entry, NotPossible)
        assert (entry.step, entry.reason) == (step, "no ladder")
        assert step not in {s.id for s in stage.look().steps}

    play(the_app(tmp_path), course)


def test_escape_leaves_a_slip_without_effect(tmp_path: Path) -> None:
    async def course(stage: Stage) -> None:
        count = len(stage.look().state.events)
        for key in "cafshxndvwl":
            await stage.press(key)
            assert not stage.screen_is("CaseScreen"), key
            await stage.press("escape")
            assert stage.screen_is("CaseScreen"), key
        assert len(stage.look().state.events) == count

    play(the_app(tmp_path), course)


def test_undo_takes_the_last_entry_back(tmp_path: Path) -> None:
    async def course(stage: Stage) -> None:
        before = [(row.ref, round(row.chance, 9)) for row in stage.look().causes]
        await stage.press("1")
        await stage.press("u")
        assert isinstance(stage.last(), Withdrawn)
        assert [(row.ref, round(row.chance, 9)) for row in stage.look().causes] == before
        assert "taken back" in stage.text("#far")
        await stage.press("u")
        await stage.press("u")
        assert "nothing to take back" in stage.said()

    play(the_app(tmp_path), course)


def test_add_finds_a_finding_by_its_words(tmp_path: Path) -> None:
    async def course(stage: Stage) -> None:
        await stage.press("a")
        await stage.type("direct gauge hot")
        await stage.press("enter")
        assert stage.screen_is("AskFinding")
        await stage.press("r")
        await stage.type("52")
        await stage.press("enter")
        entry = [e for e in stage.look().state.events if isinstance(e, Found)][-1]
        assert (entry.name, entry.point, entry.value) == ("direct_gauge", "hot_idle", "52psi")

    play(the_app(tmp_path), course)


def test_add_by_number_with_a_task(tmp_path: Path) -> None:
    async def course(stage: Stage) -> None:
        await stage.press("a")
        await stage.type("chip look")
        await stage.press("down", "up", "enter")
        assert stage.screen_is("AskFinding")
        await stage.press("t")
        await stage.type("T-1")
        await stage.press("enter")
        await stage.press("1")
        entry = [e for e in stage.look().state.events if isinstance(e, Found)][-1]
        observable = stage.look().circuit.observables[entry.name]
        assert entry.value == observable.outcomes[0]
        assert entry.reference == "T-1"

    play(the_app(tmp_path), course)


def test_state_change_says_all_at_once(tmp_path: Path) -> None:
    async def course(stage: Stage) -> None:
        circuit = stage.look().circuit
        await stage.press("s")
        states = [s for s in circuit.engine_states if s not in ("any", "stopped")]
        await stage.press(str(states.index("hot_stopped") + 1), "a", "p")
        await stage.press("enter")
        changed = [e for e in stage.look().state.events if isinstance(e, StateChanged)][-1]
        assert changed.engine == "hot_stopped"
        assert changed.opened == (next(iter(circuit.openings)),)
        assert changed.people_clear is False
        assert "PEOPLE NEAR" in stage.text("#top")
        assert "hot stopped" in stage.text("#top")
        await stage.press("s", "enter")
        assert "nothing has changed" in stage.said()

    play(the_app(tmp_path), course)


def test_rectification_with_serials_and_task(tmp_path: Path) -> None:
    async def course(stage: Stage) -> None:
        await stage.press("f")
        await stage.type("pressure pump replace")
        await stage.press("enter")
        assert stage.screen_is("Fields")
        for text in ("PP-0412", "PP-0977", "T-9"):
            await stage.type(text)
            await stage.press("enter")
        done = [e for e in stage.look().state.events if isinstance(e, Rectified)][-1]
        assert (done.part_off, done.part_on, done.reference) == ("PP-0412", "PP-0977", "T-9")
        remedy = stage.look().circuit.remedies[done.rectification]
        assert stage.look().steps[0].id == remedy.record.verify
        assert stage.look().steps[0].title in stage.text("#step-title")

    play(the_app(tmp_path), course)


def test_hand_over_and_taken_over(tmp_path: Path) -> None:
    async def course(stage: Stage) -> None:
        await stage.press("h")
        await stage.press("enter", "enter")
        assert "NOT TAKEN: to whom" in stage.text("#slip-heading")
        await stage.type("night shift")
        await stage.press("enter", "enter")
        entry = stage.last()
        assert isinstance(entry, HandedOver)
        assert entry.to == "night shift"
        assert stage.look().steps[0].title in entry.summary
        await stage.press("k")
        assert isinstance(stage.last(), Acknowledged)

    play(the_app(tmp_path), course)


def test_note_and_doubt(tmp_path: Path) -> None:
    async def course(stage: Stage) -> None:
        await stage.press("n")
        await stage.type("rain")
        await stage.press("enter")
        assert isinstance(stage.last(), Noted)
        before = stage.look().causes[0].chance
        await stage.press("d", "1")
        await stage.press("ctrl+a", "delete")
        await stage.press("ctrl+k")
        await stage.type("0.3")
        await stage.press("enter")
        await stage.type("glare")
        await stage.press("enter")
        entry = stage.last()
        assert isinstance(entry, Doubted)
        assert (entry.trust, entry.reason) == (0.3, "glare")
        assert stage.look().causes[0].chance != before

    play(the_app(tmp_path), course)


def test_close_with_cause_and_reason_for_no_verification(tmp_path: Path) -> None:
    async def course(stage: Stage) -> None:
        await stage.press("x", "1")
        assert stage.screen_is("PickMany")
        await stage.press("enter")
        if stage.screen_is("PickMany"):
            assert "tick at least one" in stage.text("#slip-heading")
            await stage.press("1", "enter")
        rows = stage.app.screen.rows  # type: ignore[attr-defined]
        await stage.press(str(len(rows)))
        await stage.type("no run allowed")
        await stage.press("enter")
        entry = stage.last()
        assert isinstance(entry, Closed)
        assert entry.outcome == "cause_confirmed"
        assert entry.not_verified_because == "no run allowed"
        assert "closed" in stage.text("#step-title")
        assert cause_title(stage.look().circuit, entry.causes[0]) in stage.text("#step-question")
        count = len(stage.look().state.events)
        await stage.press("1", "u", "c", "a")
        assert len(stage.look().state.events) == count
        assert stage.screen_is("CaseScreen")

    play(the_app(tmp_path, findings=PUMP_WEAR), course)


def test_causes_are_chosen_and_explained(tmp_path: Path) -> None:
    async def course(stage: Stage) -> None:
        await stage.press("down")
        second = stage.look().causes[1]
        await stage.press("w")
        slip = stage.app.screen
        await stage.until(lambda: "weighing" not in slip.as_text())  # type: ignore[attr-defined]
        words = slip.as_text()  # type: ignore[attr-defined]
        assert f"Why it stands where it stands: {second.title}" in words
        assert "Instead" in words
        assert "If the answer is" in words
        assert "oil_pressure@hot_idle=52psi" in words
        await stage.press("down", "pagedown", "pageup", "up", "q")
        assert stage.screen_is("CaseScreen")

    play(the_app(tmp_path), course)


def test_log_is_read_in_full(tmp_path: Path) -> None:
    async def course(stage: Stage) -> None:
        await stage.press("l")
        words = stage.app.screen.as_text()  # type: ignore[attr-defined]
        assert "case opened on relief_valve_turboprop" in words
        assert "most likely now" in words

    play(the_app(tmp_path), course)


def test_save_writes_the_case_to_another_file(tmp_path: Path) -> None:
    async def course(stage: Stage) -> None:
        await stage.press("v")
        await stage.type(str(tmp_path / "copy.jsonl"))
        await stage.press("enter")
        assert "copy.jsonl" in stage.said()
        assert read_journal(tmp_path / "copy.jsonl").events == stage.look().state.events

    play(the_app(tmp_path), course)


async def turn_to(stage: Stage, step: str) -> None:
    """Turns to a step with the arrow key, as a person would."""
    ids = [s.id for s in stage.look().steps]
    case = stage.app.screen
    await stage.press(*["right"] * ids.index(step))
    assert case.step.id == step  # type: ignore[attr-defined]


@pytest.mark.parametrize("size", [(80, 24), (120, 36)])
def test_a_click_answers_too(tmp_path: Path, size: tuple[int, int]) -> None:
    async def course(stage: Stage) -> None:
        step = stage.look().steps[0]
        await stage.pilot.click("#answers", offset=(1, 0))
        await stage.settled()
        found = [e for e in stage.look().state.events if isinstance(e, Found)][-1]
        assert step.id.startswith(found.name)
        observable = stage.look().circuit.observables[step.id]
        assert found.value == observable.outcomes[0]

    play(the_app(tmp_path), course, size)

"""Rules change what counts and what may be done, and the log says which and why."""

from __future__ import annotations

from datetime import datetime, timedelta

import pytest

from diag.advice.steps import NO_REFERENCE
from diag.circuit.model import Circuit
from diag.record.events import NotPossible, Opened, RuleFired, StateChanged
from diag.session import Session, ranking

RUNNING = {"engine motored", "engine running at idle", "engine running at high power"}


def case(circuit: Circuit, now: datetime, **more: object) -> Session:
    session = Session(circuit)
    session.add(Opened.model_validate(
        {"at": now, "circuit": circuit.id, "version": "1", "content_hash": "0", **more}
    ))  # fmt: skip
    return session


def fired(session: Session) -> list[str]:
    return [e.rule for e in session.state.events if isinstance(e, RuleFired)]


def test_flakes_hold_every_engine_run(turboprop: Circuit, now: datetime) -> None:
    session = case(turboprop, now)
    session.find(now, "chip_warning", None, "on")
    assert any(RUNNING & set(step.needs) for step in session.assessment.steps)
    session.find(now, "chip_look", None, "flakes")
    assert not any(RUNNING & set(step.needs) for step in session.assessment.steps)
    held = [step for step in session.assessment.held if RUNNING & set(step.needs)]
    assert held
    assert all("Metal flakes" in " ".join(step.held) for step in held)
    assert session.assessment.steps[0].kind == "escalate"
    assert "engineering decides" in session.assessment.steps[0].note


def test_nothing_is_opened_on_a_running_engine(turboprop: Circuit, now: datetime) -> None:
    session = case(turboprop, now)
    session.find(now, "oil_pressure", "hot_idle", "52psi")
    session.add(StateChanged(at=now, engine="idle"))
    steps = session.assessment.steps
    assert not any("engine running at idle" in s.needs and "open" in str(s.needs) for s in steps)
    stopped = [s for s in steps if "engine stopped" in s.needs]
    assert stopped, "steps that stop the engine first stay possible"


def test_a_level_taken_too_late_does_not_count(turboprop: Circuit, now: datetime) -> None:
    session = case(turboprop, now)
    before = session.assessment.posterior.causes()
    session.find(now, "dipstick", None, "5l", minutes_after_stop=840)
    assert session.assessment.posterior.causes() == before
    assert fired(session) == ["level_too_late", "level_again"]
    first = session.assessment.steps[0]
    assert first.id == "dipstick"
    assert "inside the check window" in first.note
    session.find(now, "dipstick", None, "5l", minutes_after_stop=20)
    assert session.assessment.posterior.causes() != before


def test_minutes_after_stop_follow_from_the_engine_state(turboprop: Circuit, now: datetime) -> None:
    session = case(turboprop, now)
    session.add(StateChanged(at=now, engine="hot_stopped"))
    session.add(StateChanged(at=now + timedelta(hours=3), engine="cold"))
    session.find(now + timedelta(hours=14), "dipstick", None, "5l")
    assert session.state.taken[0].minutes_after_stop == 840
    assert "level_too_late" in fired(session)


def test_a_veto_turns_the_reading_on_its_instrument(turboprop: Circuit, now: datetime) -> None:
    session = case(turboprop, now)
    session.find(now, "oil_temperature", "high_power", "80degC")
    session.find(now + timedelta(seconds=5), "oil_temperature", "high_power", "240degC")
    assert "temperature_jumps_at_power" in fired(session)
    keys = {f.key for f in session.assessment.posterior.findings}
    assert keys == {"temperature_trend"}
    instrument = session.assessment.chance("temperature_bulb")
    assert instrument > session.assessment.chance("air_cooler")
    assert len(session.state.taken) == 2, "the log keeps what was read"


def test_both_engines_after_one_visit_point_at_the_visit(turboprop: Circuit, now: datetime) -> None:
    chances = []
    for both in (False, True):
        session = case(turboprop, now, both_engines=both)
        session.find(now, "oil_seen", None, "wet")
        chances.append(session.assessment.chance("filler_cap.unlatched"))
    assert chances[1] > 3 * chances[0]


def test_a_rule_is_recorded_once_with_its_grounds(turboprop: Circuit, now: datetime) -> None:
    session = case(turboprop, now)
    session.find(now, "chip_look", None, "flakes")
    session.find(now, "oil_seen", None, "dry")
    events = [e for e in session.state.events if isinstance(e, RuleFired)]
    assert [e.rule for e in events] == ["flakes_no_run", "flakes_escalate"]
    assert events[0].because == ("chip_look=flakes",)
    again = Session.replay(turboprop, session.state.events)
    assert again.state == session.state
    assert ranking(again.assessment) == ranking(session.assessment)


def test_conflict_proposes_the_cheapest_other_look(turboprop: Circuit, now: datetime) -> None:
    session = case(turboprop, now)
    for name, value in [
        ("oil_pressure", "78psi"),
        ("low_pressure_warning", "off"),
        ("direct_gauge", "50psi"),
    ]:
        session.find(now, name, "hot_idle", value)
    assert session.assessment.conflict_bits > 3.0
    assert session.assessment.doubtful is not None
    finding, left = session.assessment.doubtful
    assert finding.key == "direct_gauge@hot_idle"
    assert left < session.assessment.conflict_bits
    note = next(s.note for s in session.assessment.steps if s.note.startswith("The findings"))
    assert "direct_gauge@hot_idle" in note


def test_reasons_add_up_and_name_the_path(turboprop: Circuit, now: datetime) -> None:
    session = case(turboprop, now)
    session.find(now, "oil_pressure", "hot_idle", "52psi")
    session.find(now, "oil_pressure", "high_power", "81psi")
    session.find(now, "oil_seen", None, "dry")
    told = session.assessment.reasons("pressure_pump.worn")
    assert told[0].path[0] == "pressure_pump"
    assert told[0].path[-1] == "oil_gallery"
    assert "speaks for it" in told[0].sentence
    assert "by way of" in told[0].sentence
    after = session.assessment.posterior.probability("pressure_pump.worn")
    assert told[-1].weight.probability == pytest.approx(after)


def test_every_step_shown_defers_to_the_approved_data(turboprop: Circuit, now: datetime) -> None:
    session = case(turboprop, now)
    session.find(now, "oil_pressure", "hot_idle", "52psi")
    assert len(session.assessment.steps) > 40
    for step in (*session.assessment.steps, *session.assessment.held):
        assert step.reference == NO_REFERENCE


def test_when_nothing_is_left_the_case_is_escalated(turboprop: Circuit, now: datetime) -> None:
    session = case(turboprop, now)
    for step in [s.id for s in session.assessment.steps if s.kind != "escalate"]:
        session.add(NotPossible(at=now, step=step))
        if session.assessment.steps[0].kind == "escalate":
            break
    for _ in range(200):
        step = session.assessment.steps[0]
        if step.kind == "escalate":
            break
        session.add(NotPossible(at=now, step=step.id))
    assert session.assessment.steps[0].kind == "escalate"
    assert "hand the case to engineering" in session.assessment.steps[0].note

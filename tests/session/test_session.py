"""The session is a pure fold over events."""

from __future__ import annotations

from datetime import datetime

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from diag.circuit.model import Circuit
from diag.errors import DiagError, UnknownName, UsageError
from diag.record.events import (
    AnyEvent,
    Closed,
    Doubted,
    Noted,
    NotPossible,
    Opened,
    Rectified,
    StateChanged,
    Withdrawn,
)
from diag.session import CaseState, Session, fold, ranking


@pytest.fixture
def case(turboprop: Circuit, now: datetime) -> Session:
    session = Session(turboprop)
    session.add(
        Opened(
            at=now,
            circuit=turboprop.id,
            version=turboprop.file.version,
            content_hash=turboprop.content_hash,
        )
    )
    return session


def beliefs(session: Session) -> list[tuple[str, float]]:
    return session.assessment.posterior.causes()


def test_undo_gives_back_the_state_before(case: Session, now: datetime) -> None:
    case.find(now, "oil_pressure", "hot_idle", "52psi")
    before = beliefs(case)
    case.find(now, "pressure_trend", None, "drift")
    assert beliefs(case) != before
    case.undo(now)
    assert beliefs(case) == before
    assert len(case.state.events) == 4


def test_undo_of_a_rectification_reopens_the_old_world(case: Session, now: datetime) -> None:
    case.find(now, "oil_pressure", "hot_idle", "52psi")
    case.add(Rectified(at=now, rectification="pressure_pump_replace"))
    assert case.state.world
    assert case.state.unproven == ("oil_pressure@hot_idle",)
    case.undo(now)
    assert case.state.world == ()
    assert case.state.unproven == ()


def test_undo_skips_what_was_taken_back(case: Session, now: datetime) -> None:
    case.find(now, "oil_pressure", "hot_idle", "52psi")
    case.find(now, "pressure_trend", None, "drift")
    case.undo(now)
    case.undo(now)
    assert case.state.findings == ()
    assert case.undo(now) is None


def test_a_second_look_supersedes_the_first(case: Session, now: datetime) -> None:
    case.find(now, "oil_pressure", "hot_idle", "52psi")
    case.find(now, "oil_pressure", "hot_idle", "78psi")
    assert [f.value for f in case.state.findings] == ["78psi"]
    assert [t.superseded for t in case.state.taken] == [True, False]


def test_a_finding_after_a_rectification_does_not_supersede(case: Session, now: datetime) -> None:
    case.find(now, "oil_pressure", "hot_idle", "52psi")
    case.add(Rectified(at=now, rectification="pressure_pump_replace"))
    case.find(now, "oil_pressure", "hot_idle", "78psi")
    assert [f.value for f in case.state.findings] == ["52psi", "78psi"]


def test_a_good_verification_speaks_for_the_cause_removed(case: Session, now: datetime) -> None:
    case.find(now, "oil_pressure", "hot_idle", "52psi")
    before = case.assessment.posterior.probability("pressure_pump.worn")
    case.add(Rectified(at=now, rectification="pressure_pump_replace"))
    assert case.assessment.posterior.probability("pressure_pump.worn") == pytest.approx(before)
    case.find(now, "oil_pressure", "hot_idle", "78psi")
    assert case.assessment.posterior.probability("pressure_pump.worn") > 1.5 * before


def test_a_failed_verification_speaks_against_it(case: Session, now: datetime) -> None:
    case.find(now, "oil_pressure", "hot_idle", "52psi")
    before = case.assessment.posterior.probability("pressure_pump.worn")
    case.add(Rectified(at=now, rectification="pressure_pump_replace"))
    case.find(now, "oil_pressure", "hot_idle", "52psi")
    assert case.assessment.posterior.probability("pressure_pump.worn") < before / 3


def test_verification_comes_first_after_a_rectification(case: Session, now: datetime) -> None:
    case.find(now, "oil_pressure", "hot_idle", "52psi")
    case.add(Rectified(at=now, rectification="pressure_pump_replace"))
    step = case.assessment.steps[0]
    assert step.id == "oil_pressure@hot_idle"
    assert "engine running at idle" in step.needs
    assert step.cautions


def test_doubt_weakens_a_finding(case: Session, now: datetime) -> None:
    case.find(now, "oil_pressure", "hot_idle", "52psi")
    strong = 1.0 - case.assessment.posterior.nothing_wrong
    case.add(Doubted(at=now, target=1, trust=0.1))
    assert 1.0 - case.assessment.posterior.nothing_wrong < strong


def test_a_step_that_cannot_be_done_is_not_proposed_again(case: Session, now: datetime) -> None:
    case.find(now, "oil_pressure", "hot_idle", "52psi")
    first = case.assessment.steps[0].id
    case.add(NotPossible(at=now, step=first))
    assert first not in [step.id for step in case.assessment.steps]


def test_open_cowls_and_a_running_engine_are_paid_once(case: Session, now: datetime) -> None:
    case.find(now, "oil_pressure", "hot_idle", "52psi")
    minutes = {s.id: s.access_minutes for s in case.assessment.steps}
    case.add(StateChanged(at=now, opened=("cowl",)))
    after = {s.id: s.access_minutes for s in case.assessment.steps}
    assert minutes["walk_round"] - after["walk_round"] == 18


def test_worked_on_components_are_suspected_more(turboprop: Circuit, now: datetime) -> None:
    chances = []
    for worked_on in ((), ("relief_valve",)):
        session = Session(turboprop)
        session.add(Opened(at=now, circuit="c", version="1", content_hash="0", worked_on=worked_on))
        session.find(now, "oil_pressure", "hot_idle", "50psi")
        chances.append(session.assessment.posterior.probability("relief_valve.spring_weak"))
    assert chances[1] > 3 * chances[0]


@pytest.mark.parametrize(
    ("event", "words"),
    [
        (lambda at: Closed(at=at, outcome="cause_confirmed"), "needs the cause"),
        (lambda at: Closed(at=at, outcome="no_fault_found"), "verification finding, or the"),
        (
            lambda at: Closed(at=at, outcome="no_fault_found", verification=0),
            "not a finding of this case",
        ),
        (
            lambda at: Closed(at=at, outcome="cause_confirmed", causes=("pump.worn",)),
            "unknown cause",
        ),
        (lambda at: Withdrawn(at=at, target=0), "cannot be withdrawn"),
        (lambda at: Withdrawn(at=at, target=77), "cannot be withdrawn"),
        (lambda at: Doubted(at=at, target=0, trust=0.5), "not a finding"),
        (lambda at: NotPossible(at=at, step="dipstik"), "nearest: dipstick"),
        (lambda at: Rectified(at=at, rectification="pump_replace"), "unknown rectification"),
        (lambda at: StateChanged(at=at, engine="flying"), "unknown engine state"),
        (lambda at: StateChanged(at=at, opened=("cowls",)), "nearest: cowl"),
    ],
)
def test_events_that_do_not_fit_leave_the_case_alone(
    case: Session, now: datetime, event: object, words: str
) -> None:
    state = case.state
    with pytest.raises((UsageError, UnknownName), match=words):
        case.add(event(now))  # type: ignore[operator]
    assert case.state is state


def test_a_verification_from_before_the_repair_does_not_count(case: Session, now: datetime) -> None:
    case.find(now, "oil_pressure", "hot_idle", "52psi")
    case.add(Rectified(at=now, rectification="pressure_pump_replace"))
    with pytest.raises(UsageError, match="before the last rectification"):
        case.add(
            Closed(
                at=now, outcome="cause_confirmed", causes=("pressure_pump.worn",), verification=1
            )
        )


def test_nothing_is_added_to_a_closed_case(case: Session, now: datetime) -> None:
    case.add(Closed(at=now, outcome="no_fault_found", not_verified_because="ground time"))
    with pytest.raises(UsageError, match="closed"):
        case.add(Noted(at=now, text="late"))


def test_a_case_begins_with_its_opening(turboprop: Circuit, now: datetime) -> None:
    with pytest.raises(UsageError, match="begins"):
        Session(turboprop).add(Noted(at=now, text="early"))


def test_events_carry_the_standing_before_and_after(case: Session, now: datetime) -> None:
    first = case.find(now, "oil_pressure", "hot_idle", "52psi")
    second = case.find(now, "pressure_trend", None, "drift")
    assert first.after == second.before
    assert second.after == case.assessment.standing


def test_what_cannot_be_saved_stays_in_memory(turboprop: Circuit, now: datetime) -> None:
    class Full(DiagError):
        pass

    def save(event: AnyEvent) -> None:
        if event.number:
            raise Full("the disk is full")

    session = Session(turboprop, save)
    session.add(Opened(at=now, circuit="c", version="1", content_hash="0"))
    with pytest.raises(Full):
        session.find(now, "oil_pressure", "hot_idle", "52psi")
    assert len(session.state.findings) == 1


ACTIONS = st.sampled_from(
    [
        ("oil_pressure", "hot_idle", "52psi"),
        ("oil_pressure", "hot_idle", "low"),
        ("oil_pressure", "high_power", "81psi"),
        ("pressure_trend", None, "drift"),
        ("chip_warning", None, "on"),
        ("walk_round", None, "wet"),
        "undo",
        "fix",
        "open",
    ]
)


@settings(max_examples=12, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(actions=st.lists(ACTIONS, max_size=7))
def test_replaying_the_events_gives_the_same_case(
    turboprop: Circuit, now: datetime, actions: list[object]
) -> None:
    session = Session(turboprop)
    session.add(Opened(at=now, circuit="c", version="1", content_hash="0"))
    for action in actions:
        if action == "undo":
            session.undo(now)
        elif action == "fix":
            session.add(Rectified(at=now, rectification="pressure_pump_replace"))
        elif action == "open":
            session.add(StateChanged(at=now, opened=("cowl",)))
        else:
            name, point, value = action  # type: ignore[misc]
            session.find(now, name, point, value)
    again = Session.replay(turboprop, session.state.events)
    assert again.state == session.state
    assert fold(turboprop, session.state.events).taken == session.state.taken
    assert ranking(again.assessment) == ranking(session.assessment)
    assert isinstance(again.state, CaseState)

"""The record's bookkeeping agrees with the session's, and skimming with reading."""

from __future__ import annotations

from pathlib import Path

import pytest

from diag.errors import InputError
from diag.record.casefile import case_file, proof_of, reads_normal, why_not_confirmed
from diag.record.events import (
    Acknowledged,
    AnyEvent,
    Closed,
    Doubted,
    HandedOver,
    Rectified,
    StateChanged,
    Withdrawn,
)
from diag.record.journal import read_journal
from diag.record.skim import skim
from diag.session import fold
from tests.record.cases import (
    NAME,
    START,
    found,
    head,
    hostile_case,
    loaded,
    numbered,
    worked_case,
    written,
)


def tangled() -> list[AnyEvent]:
    """Findings repeated, withdrawn and doubted, around two rectifications, one of them undone."""
    return numbered(
        [
            head(after=None),
            found("oil_pressure", "52psi", "hot_idle", complaint=True),
            found("oil_pressure", "54psi", "hot_idle"),
            found("oil_look", "milky"),
            Doubted(at=START, target=3, trust=0.4),
            Doubted(at=START, target=2, trust=0.6),
            Withdrawn(at=START, target=3),
            Rectified(at=START, rectification="relief_valve_set_pressure"),
            found("oil_pressure", "53psi", "hot_idle"),
            Withdrawn(at=START, target=7),
            StateChanged(at=START, engine="hot_stopped", opened=("cowl", "filter_bowl")),
            StateChanged(at=START, closed=("cowl",)),
            Rectified(at=START, rectification="pressure_pump_replace"),
            found("oil_pressure", "78psi", "hot_idle"),
        ]
    )


def test_it_keeps_the_same_books_as_the_session() -> None:
    for events in (tangled(), worked_case(), worked_case(closed=False)):
        for count in range(1, len(events) + 1):
            state, case = fold(loaded(NAME), events[:count]), case_file(events[:count])
            assert {t.number for t in state.taken} == {f.number for f in case.found}
            assert {t.number for t in state.taken if t.superseded} == set(case.repeated)
            doubted = {t.number: t.finding.trust for t in state.taken if t.finding.trust < 1.0}
            assert doubted == dict(case.trust)
            assert [e.rectification for e in state.rectified] == [
                e.rectification for e in case.rectified
            ]
            assert state.place.opened == set(case.opened)
            assert (case.engine or "cold") == state.place.engine
            worlds = {(t.finding.world, case.after[t.number]) for t in state.taken}
            assert len(worlds) == len({w for w, _ in worlds}) == len({n for _, n in worlds})
            assert {e.step for e in case.not_possible} == state.not_possible


def test_a_repeat_after_a_rectification_takes_no_place() -> None:
    case = case_file(tangled())
    # The first rectification was undone, so its finding is in the world as found.
    assert dict(case.after) == {1: 0, 2: 0, 8: 0, 13: 1}
    assert dict(case.repeated) == {1: 2, 2: 8}


def test_the_verification_must_be_fresh_and_unremarkable() -> None:
    circuit, events = loaded(NAME), tangled()

    def closed(number: int | None, outcome: str = "cause_confirmed") -> str:
        end = Closed.model_validate(
            {
                "at": START, "outcome": outcome, "causes": ("pressure_pump.worn",),
                "verification": number, "not_verified_because": "" if number else "no time",
            }
        )  # fmt: skip
        return why_not_confirmed(circuit, case_file(numbered([*events, end])))

    assert closed(13) == ""
    assert closed(8) == "not verified"
    assert closed(None) == "not verified"
    assert closed(13, "handed_to_engineering") == "no cause confirmed"
    assert why_not_confirmed(circuit, case_file(events)) == "not closed"


def test_readings_are_judged_by_their_limits() -> None:
    circuit = loaded(NAME)
    assert reads_normal(circuit, found("oil_pressure", "78psi", "hot_idle"))
    assert reads_normal(circuit, found("oil_pressure", "5.4bar", "hot_idle"))
    assert not reads_normal(circuit, found("oil_pressure", "52psi", "hot_idle"))
    assert reads_normal(circuit, found("oil_pressure", "normal", "hot_idle"))
    for odd in (found("ouija_board", "yes"), found("oil_pressure", "purple", "hot_idle")):
        assert not reads_normal(circuit, odd)


def test_proof_is_the_finding_that_the_rectification_names() -> None:
    circuit, case = loaded(NAME), case_file(tangled())
    (work,) = case.rectified
    proof = proof_of(circuit, case, work)
    assert proof is not None
    assert proof.number == 13
    assert proof_of(circuit, case_file(tangled()[:-1]), work) is None


def test_hand_overs_wait_until_acknowledged() -> None:
    events = [head(), HandedOver(at=START, to="B"), HandedOver(at=START, to="C")]
    pending = case_file(numbered(events)).pending
    assert pending is not None
    assert pending.to == "C"
    assert case_file(numbered([*events, Acknowledged(at=START)])).pending is None


def test_a_case_begins_with_its_opening() -> None:
    for events in ([], [found("oil_look", "clear")]):
        with pytest.raises(InputError, match="does not begin"):
            case_file(events)


def test_skimming_gives_what_reading_gives(tmp_path: Path) -> None:
    for name, events in (("a", worked_case()), ("b", hostile_case()), ("c", tangled())):
        path = written(tmp_path / f"{name}.jsonl", events)
        assert skim(path).events == read_journal(path).events

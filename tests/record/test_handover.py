"""The hand-over page, and handing over and taking over as events of the log.

What it must carry is what ICAO COSCAP AC 020 asks of a task and shift hand-over: what is
open, what is removed, how far the work is, and what comes next, written down.
"""

from __future__ import annotations

import re
from datetime import timedelta

import pytest

from diag.errors import InputError, UsageError
from diag.record.casefile import case_file
from diag.record.events import Acknowledged, AnyEvent, StateChanged
from diag.record.handover import (
    SHOWN,
    acknowledged,
    handed_over,
    handover_page,
    ruled_out,
)
from tests.record.cases import (
    HOSTILE,
    NAME,
    START,
    found,
    head,
    hostile_case,
    loaded,
    numbered,
    worked_case,
)

LATER = START + timedelta(hours=9)


def page(events: list[AnyEvent], **more: object) -> str:
    made = handover_page(loaded(NAME), events, "The approved data governs.", **more)  # type: ignore[arg-type]
    return re.sub(r"\\(.)", r"\1", made)


def section(text: str, title: str) -> str:
    return text.split(f"## {title}\n")[1].split("\n## ")[0]


def test_one_page_says_what_the_next_shift_needs() -> None:
    circuit, events = loaded(NAME), worked_case(closed=False)[:-1]
    text = page(events, next_steps=["Run at hot idle, 25 min"], to="B. Fitter", at=LATER)
    assert text.splitlines()[0] == "# Hand-over: E-17, A-3"
    assert "2026-03-02 07:00+02:00, after entry 9 of the log. For B. Fitter." in text
    assert "The case is open." in text
    assert "Oil pressure gauge, hot idle: 52psi, entry 1" in section(text, "Complaint")
    state = section(text, "State of the engine")
    assert "Engine: cold; people clear" in state
    assert f"Open: {circuit.openings['cowl'].title}\n" in state
    remedy = circuit.remedies["pressure_pump_replace"].record.title
    assert f"{remedy} (off PP-0412, on PP-0977), entry 9" in state
    unfinished = section(text, "Not finished")
    assert f"Not verified: {remedy} (entry 9)." in unfinished
    assert "laboratory shut (entry 5)" in unfinished
    assert "milky" not in text
    assert "1. Run at hot idle, 25 min" in section(text, "To do next")
    assert "95 % Pressure pump" in section(text, "Suspected now")
    assert text.rstrip().endswith("The approved data governs.")


def test_what_was_ruled_out_names_its_evidence() -> None:
    ruled = section(page(worked_case(closed=False)), "Ruled out, and on what evidence")
    circuit = loaded(NAME)
    strip = circuit.observables["relief_valve_strip"].record
    trend = circuit.observables["pressure_trend"].record
    spring, leak = ruled.strip().splitlines()
    assert "spring weak" in spring
    assert "(now at most 0.3 %)" in spring
    assert f"{strip.title}: {strip.words.get('clear', 'clear')} (entry 7)" in spring
    assert "leaking" in leak
    assert "(now 0.4 %)" in leak
    assert f"{trend.title}: drift (entry 2)" in leak
    assert "Pressure pump" not in ruled


def test_exact_chances_name_evidence_that_the_log_does_not_show() -> None:
    events = worked_case(closed=False)
    ref = "feed_jets.blocked"
    chances = {
        e.number: {ref: 0.3 if e.number < 7 else 0.001, "unlisted.present": 0.2} for e in events
    }
    (gone,) = ruled_out(loaded(NAME), case_file(events), chances)
    assert (gone.ref, gone.chance, gone.exact) == (ref, 0.001, True)
    assert [text for text in gone.evidence if "(entry 7)" in text]


def test_it_stays_one_page() -> None:
    rows = [found("oil_look", "clear", remark=str(n)) for n in range(60)]
    moves = [StateChanged(at=START, opened=(f"panel_{n}",)) for n in range(60)]
    text = page(numbered([head(), *rows, *moves]), next_steps=[f"step {n}" for n in range(40)])
    assert len(text.splitlines()) < 66
    assert max(len(line) for line in text.splitlines()) < 400
    assert f"({60 - SHOWN} more in the log)" in text
    assert f"entry {60}" in text


def test_nothing_recorded_is_said_too() -> None:
    text = page(numbered([head(complaint="", after=None)]))
    for title in ("Found so far", "Ruled out, and on what evidence"):
        assert section(text, title).strip() == "- nothing"
    assert "nothing was weighed yet" in text
    assert "Engine: not stated" in text
    with pytest.raises(InputError):
        handover_page(None, [], "")


def test_text_stays_text() -> None:
    text = handover_page(loaded(NAME), hostile_case(), "", next_steps=[HOSTILE], to=HOSTILE)
    assert not re.search(r"(?<!\\)[`<]", text)
    assert not re.search(r"(?<!\\)\[a", text)
    assert not re.search(r"^\s*#+ (?!Hand-over|[A-Z])", text, re.MULTILINE)


def test_handing_over_and_taking_over() -> None:
    events = worked_case(closed=False)
    text = page(events)
    given = handed_over(text, " night shift ", LATER, "A. Fitter")
    assert (given.to, given.by, given.summary) == ("night shift", "A. Fitter", text)
    assert len(handed_over("x" * 9000, "b", LATER).summary) == 4000
    with pytest.raises(UsageError, match="name"):
        handed_over(text, "  ", LATER)
    with pytest.raises(UsageError, match="no hand-over waits"):
        acknowledged(events, "B. Fitter", LATER)
    waiting = numbered([*events, given])
    assert case_file(waiting).pending is not None
    assert "not acknowledged yet" in page(waiting)
    taken = acknowledged(waiting, " B. Fitter ", LATER)
    assert taken == Acknowledged(at=LATER, by="B. Fitter")
    with pytest.raises(UsageError, match="name"):
        acknowledged(waiting, " ", LATER)
    assert case_file(numbered([*waiting, taken])).pending is None
    with pytest.raises(UsageError, match="no hand-over waits"):
        acknowledged(numbered([*waiting, taken]), "C", LATER)

"""The example cases come out right: through the session, by its own asking, and in a terminal."""

from __future__ import annotations

import sys
from datetime import datetime
from pathlib import Path

import pexpect
import pytest

from diag.belief.evidence import parse_finding
from diag.circuit.loading import load_circuit
from diag.record.events import Closed, Found, NotPossible, Opened, Rectified
from diag.record.journal import read_journal
from diag.session import Session
from tests.examples import EXAMPLES, Example

IDS = [e.name for e in EXAMPLES]


def opened(session: Session, at: datetime) -> None:
    circuit = session.circuit
    session.add(
        Opened(
            at=at,
            circuit=circuit.id,
            version=circuit.file.version,
            content_hash=circuit.content_hash,
        )
    )


def found(session: Session, text: str, at: datetime, complaint: bool = False) -> None:
    finding = parse_finding(session.circuit, text)
    record = finding.observable.record
    session.add(
        Found(
            at=at,
            name=record.id,
            point=finding.observable.point,
            value=finding.value,
            complaint=complaint,
        )
    )


def test_five_cases_ship() -> None:
    assert len(EXAMPLES) == 5
    assert {e.circuit for e in EXAMPLES} == {"relief_valve_turboprop", "full_flow_turbofan"}


@pytest.mark.parametrize("case", EXAMPLES, ids=IDS)
def test_truth_ranks_first(case: Example, now: datetime) -> None:
    session = Session(load_circuit(case.circuit))
    opened(session, now)
    for text in case.complaint:
        found(session, text, now, complaint=True)
    for kind, what in case.steps():
        if kind == "add":
            found(session, what, now)
        else:
            session.add(Rectified(at=now, rectification=what))
    posterior = session.assessment.posterior
    assert set(posterior.hypotheses(1)[0][0]) == case.truth
    if len(case.truth) == 1:
        assert posterior.causes()[0][0] in case.truth
    for ref in case.excluded:
        assert posterior.probability(ref) < 0.02, ref
    assert posterior.coverage.value >= 0.9999


@pytest.mark.parametrize("case", EXAMPLES, ids=IDS)
def test_asked_by_the_bench_the_truth_is_fixed(case: Example, now: datetime) -> None:
    """Only what the bench asks for is answered; what the case does not know is not possible."""
    session = Session(load_circuit(case.circuit))
    opened(session, now)
    for text in case.complaint:
        found(session, text, now, complaint=True)
    answers = {text.split("=")[0]: text for kind, text in case.steps() if kind == "add"}
    repaired: list[str] = []
    asked = 0
    for _ in range(150):
        step = session.assessment.steps[0]
        if step.kind == "escalate":
            break
        if step.kind == "rectification":
            repaired.append(step.id)
            break
        if step.id in answers:
            asked += 1
            found(session, answers[step.id], now)
        else:
            session.add(NotPossible(at=now, step=step.id))
    fixed = {ref for name in repaired for ref in session.circuit.remedies[name].restores}
    assert fixed & case.truth, (repaired, asked)


@pytest.mark.parametrize("case", EXAMPLES, ids=IDS)
def test_case_in_a_terminal(case: Example, tmp_path: Path) -> None:
    log = tmp_path / "case.jsonl"
    arguments = ["-m", "diag", "isolate", case.circuit, "--plain", "--log", str(log)]
    child = pexpect.spawn(sys.executable, arguments, encoding="utf-8", timeout=30, echo=False)
    for line in case.lines:
        child.expect("> ")
        child.sendline(line)
    child.expect("The case is closed")
    child.expect(pexpect.EOF)
    child.close()
    assert child.exitstatus == 0
    replay = read_journal(log)
    assert not replay.problems
    closed = replay.events[-1]
    assert isinstance(closed, Closed)
    assert set(closed.causes) == case.truth
    proof = next(e for e in replay.events if e.number == closed.verification)
    assert isinstance(proof, Found)
    assert f"{proof.name}@{proof.point}" if proof.point else proof.name == case.verification

"""How long a step takes, against general-purpose libraries; cold start, memory, coverage.

Run alone; five minutes on a quiet machine, most of them spent waiting for the libraries:

    python -m pytest tests/benchmarks/test_step_speed.py -s

The bars are held against processor time, which other work on the machine leaves nearly alone;
the time by the clock, the same where nothing else runs, is printed beside it.
"""

from __future__ import annotations

import json
import math
import os
import signal
import statistics
import subprocess
import sys
import time
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pytest

from diag.belief.evidence import parse_finding
from diag.belief.exact import log_evidence
from diag.belief.hypotheses import Engine
from diag.circuit.loading import load_circuit
from diag.record.events import Rectified
from diag.session import Assessment, Session
from tests.benchmarks.rivals import PATIENCE, READY
from tests.benchmarks.subject import (
    NOW,
    PUMP_WEAR,
    Subject,
    find,
    findings_of,
    open_case,
    open_with,
)
from tests.examples import EXAMPLES, Example

ROOT = Path(__file__).resolve().parents[2]
TEN = 10
RUNS = 20
STEP_SECONDS = 0.060
TIMES_FASTER = {"pgmpy": 100.0, "pyagrum": 10.0}
LADDER = {"pgmpy": range(3, TEN + 2), "pyagrum": range(4, TEN + 2)}
"""Findings in the cut-down circuit, from a size that is no trouble upwards."""
WHOLE = {"pgmpy": (TEN + 1,), "pyagrum": (TEN + 1, 2)}
"""Findings on the whole circuit, every check valued."""
COLD_SECONDS = 1.5
RESIDENT_MB = 250.0
COVERED = 0.9999
SUM_BUDGET = 100_000_000
"""Numbers in the closed sum that a benchmark can afford."""


# -- one step ----------------------------------------------------------------------------


@dataclass(frozen=True)
class Step:
    """One finding added: seconds of the processor and by the clock, and the case after it."""

    busy: float
    clock: float
    session: Session


def measured(before: Session, added: str) -> Step:
    """Adds one finding; the posteriors and the value of every check are there when it ends."""
    session = Session.replay(before.circuit, before.state.events)
    assert session.assessment.steps  # as it stood on the screen when the answer came
    busy, clock = time.process_time(), time.perf_counter()
    find(session, added)
    assert session.assessment.marginals
    assert session.assessment.steps
    return Step(time.process_time() - busy, time.perf_counter() - clock, session)


def milliseconds(values: Sequence[float]) -> str:
    low, middle, high = min(values), statistics.median(values), max(values)
    return f"median {middle * 1e3:.1f} ms, min {low * 1e3:.1f}, max {high * 1e3:.1f}"


def load() -> str:
    """How busy the machine is, since other work slows every figure down."""
    return f"load {os.getloadavg()[0]:.1f} on {os.cpu_count()} cores"


def next_answers(session: Session) -> list[str]:
    """The case's own next findings, then the checks proposed, each with its likeliest answer."""
    answers = findings_of(PUMP_WEAR)[TEN : TEN + 2]
    told = {text.split("=")[0] for text in answers}
    for step in session.assessment.steps:
        if step.kind in ("check", "indication") and step.id not in told:
            observable = session.circuit.observables[step.id]
            likely = session.assessment.outlook.chances(observable).argmax()
            answers.append(f"{step.id}={observable.outcomes[likely]}")
    return answers[:RUNS]


def test_one_finding_added_to_ten(capsys: pytest.CaptureFixture[str]) -> None:
    circuit = load_circuit(PUMP_WEAR.circuit)
    before = open_with(circuit, findings_of(PUMP_WEAR)[:TEN])
    answers = next_answers(before)
    assert len(answers) == RUNS
    runs = [measured(before, answer) for answer in answers]
    busy = [run.busy for run in runs]
    counts = [len(run.session.assessment.posterior.weight) for run in runs]
    checks = len(circuit.observables) - TEN - 1
    with capsys.disabled():
        print(f"\n\nOne finding added to ten, {circuit.id}, {len(circuit.modes)} modes,")
        print(f"  {checks} checks valued, {min(counts)} to {max(counts)} hypotheses kept:")
        print(f"  processor {milliseconds(busy)} ({RUNS} different answers)")
        print(f"  clock     {milliseconds([run.clock for run in runs])} ({load()})")
    assert statistics.median(busy) <= STEP_SECONDS


# -- side by side ------------------------------------------------------------------------


@dataclass(frozen=True)
class Row:
    """One size of the comparison; `found` is None when the library did not finish."""

    library: str
    subject: Subject
    ours: float
    found: dict[str, Any] | None
    why: str

    @property
    def seconds(self) -> float:
        return statistics.median(self.found["seconds"]) if self.found else math.nan

    @property
    def ratio(self) -> float | None:
        """Times that diag is faster; at least, when patience ran out in the step; else None."""
        if self.found:
            return self.seconds / self.ours
        return PATIENCE / self.ours if self.why == "time" else None

    def __str__(self) -> str:
        took = f"{self.seconds * 1e3:.0f} ms" if self.found else f"no ({self.why})"
        mark = "" if self.found else ">"
        ratio = f"{mark}{self.ratio:.0f}x" if self.ratio else "-"
        ours = f"{self.ours * 1e3:.1f} ms"
        return f"{self.library:8} {took:>12} {ours:>9} {ratio:>8}  {self.subject}"


def compared(library: str, subject: Subject) -> Row:
    """The library's step and ours on the same circuit, side by side."""
    *before, added = subject.texts
    session = open_with(subject.circuit, before)
    runs = [measured(session, added) for _ in range(15)]
    found, why = rival(library, subject)
    # Before and after, so that other work on the machine slows both sides alike.
    runs += [measured(session, added) for _ in range(15)]
    if found:
        check_agreement(found, runs[0].session.assessment)
    ours = statistics.median(run.busy for run in runs)
    return Row(library, subject, ours, found, why)


def rival(library: str, subject: Subject) -> tuple[dict[str, Any] | None, str]:
    """The library's answer from a process of its own, or why there is none."""
    scope = "part" if subject.part else "whole"
    module = "tests.benchmarks.rivals"
    command = [sys.executable, "-m", module, library, str(subject.count), scope]
    settings = {**os.environ, "OMP_NUM_THREADS": "1", "OPENBLAS_NUM_THREADS": "1"}
    done = subprocess.run(command, cwd=ROOT, env=settings, capture_output=True, text=True)
    lines = done.stdout.splitlines()
    if done.returncode == 0:
        found: dict[str, Any] = json.loads(lines[-1])
        return found, ""
    if done.returncode == -signal.SIGXCPU:
        return None, "time" if READY in lines else "time to get ready"
    out_of_memory = ("bad_alloc", "MemoryError", "Unable to allocate", "OutOfMemory")
    assert any(word in done.stderr for word in out_of_memory), done.stderr[-2000:]
    return None, "memory"


def check_agreement(found: dict[str, Any], ours: Assessment) -> None:
    """Both say the same, as near as the stated coverage promises."""
    posterior, outlook = ours.posterior, ours.outlook
    missing = 1.0 - posterior.coverage.value + 1e-9
    for ref, value in found["modes"].items():
        assert ours.marginals[ref] == pytest.approx(value, abs=missing), ref
    # Predictions are made from the weightiest hypotheses only.
    missing += 1.0 - float(posterior.weight[: len(outlook.weight)].sum())
    for name, chances in found["chances"].items():
        observable = ours.circuit.observables[name]
        predicted = dict(zip(observable.outcomes, outlook.chances(observable), strict=True))
        assert predicted == pytest.approx(chances, abs=missing), name


def climb(library: str) -> Iterator[Row]:
    """The whole circuit, then ever larger parts of it until the library gives up."""
    for count in WHOLE[library]:
        yield compared(library, Subject(count, part=False))
    for count in LADDER[library]:
        row = compared(library, Subject(count, part=True))
        yield row
        if row.found is None:
            return


@pytest.mark.parametrize("library", list(TIMES_FASTER))
def test_against_general_purpose_libraries(
    library: str, capsys: pytest.CaptureFixture[str]
) -> None:
    """The bar is held against the largest part on which the library finishes."""
    rows = []
    with capsys.disabled():
        print(f"\n\n{'library':8} {'one step':>12} {'diag':>9} {'ratio':>8}  circuit ({load()})")
        for row in climb(library):
            print(row, flush=True)
            rows.append(row)
    largest = [row for row in rows if row.found][-1]
    assert largest.ratio is not None
    assert largest.ratio >= TIMES_FASTER[library]


# -- cold start and memory ---------------------------------------------------------------

SPAWN = """
import json, os, subprocess, sys, time
clock = time.perf_counter()
child = subprocess.Popen(sys.argv[1:], stdout=subprocess.DEVNULL)
_, status, used = os.wait4(child.pid, 0)
clock = time.perf_counter() - clock
print(json.dumps([used.ru_utime + used.ru_stime, clock, used.ru_maxrss / 1024, status]))
"""
"""Run by a small process: a child's peak begins with the memory of the one that spawned it."""


def test_rank_cold(capsys: pytest.CaptureFixture[str], tmp_path: Path) -> None:
    """Bytecode is there, as on any machine where diag ran before; nothing else is."""
    findings = findings_of(PUMP_WEAR)[:TEN]
    command = [sys.executable, "-m", "diag", "rank", PUMP_WEAR.circuit]
    command += [part for text in findings for part in ("--observe", text)]
    kept = {k: v for k, v in os.environ.items() if k != "PYTHONDONTWRITEBYTECODE"}
    settings = {**kept, "PYTHONPYCACHEPREFIX": str(tmp_path)}
    spawned(command, settings)
    busy, clock, peak = zip(*(spawned(command, settings) for _ in range(5)), strict=True)
    with capsys.disabled():
        print(f"\n\n`diag rank` with {TEN} findings, cold, the whole process:")
        print(f"  processor {milliseconds(busy)}")
        print(f"  clock     {milliseconds(clock)} ({load()})")
        print(f"  peak resident memory {max(peak):.0f} MB")
    assert statistics.median(busy) <= COLD_SECONDS
    assert max(peak) <= RESIDENT_MB


def spawned(command: list[str], settings: dict[str, str]) -> tuple[float, float, float]:
    """Seconds of the processor and by the clock, and peak resident megabytes of one process."""
    runner = [sys.executable, "-c", SPAWN, *command]
    done = subprocess.run(
        runner, cwd=ROOT, env=settings, capture_output=True, text=True, check=True
    )
    busy, clock, peak, status = json.loads(done.stdout)
    assert status == 0, done.stderr
    return busy, clock, peak


# -- coverage ----------------------------------------------------------------------------


def replayed(case: Example) -> list[tuple[str, float, str]]:
    """Per step of a case: what was added, the coverage after it, and how that is known."""
    session = open_case(load_circuit(case.circuit))
    found = []
    steps = [*(("add", text) for text in case.complaint), *case.steps()]
    for kind, what in steps:
        if kind == "add":
            find(session, what)
        else:
            session.add(Rectified(at=NOW, rectification=what))
        coverage = session.assessment.posterior.coverage
        found.append((what, coverage.value, coverage.method))
    return found


@pytest.mark.parametrize("case", EXAMPLES, ids=[e.name for e in EXAMPLES])
def test_coverage_of_the_cases(case: Example, capsys: pytest.CaptureFixture[str]) -> None:
    rows = replayed(case)
    what, least, method = min(rows, key=lambda row: row[1])
    _, last, last_method = rows[-1]
    with capsys.disabled():
        print(f"\n{case.name}: coverage {last:.7f} at the end ({last_method}), ", end="")
        print(f"least of {len(rows)} steps {least:.7f} ({method}) after {what}")
    assert last >= COVERED


@pytest.mark.parametrize("case", EXAMPLES, ids=[e.name for e in EXAMPLES])
def test_stated_coverage_is_true(case: Example, capsys: pytest.CaptureFixture[str]) -> None:
    """Wherever the closed sum is affordable at all, no more is claimed than was enumerated."""
    circuit, findings, checked = load_circuit(case.circuit), [], 0
    engine = Engine(circuit)
    for text in findings_of(case):
        findings.append(parse_finding(circuit, text))
        posterior = engine.posterior(findings)
        views: dict[Any, list[Any]] = {}
        for sight in posterior.sights:
            views.setdefault((sight.node, sight.world), []).append((sight.digit, sight.table))
        exact = log_evidence(engine.frame, engine.odds, views, SUM_BUDGET)
        if exact is None:
            break
        true, checked = math.exp(posterior.log_evidence - exact), checked + 1
        stated = posterior.coverage
        assert stated.value <= true + 1e-9, f"{text}: {stated} but {true:.9f}"
    with capsys.disabled():
        print(f"\n{case.name}: stated coverage true after each of the first {checked} findings")
    assert checked >= 2

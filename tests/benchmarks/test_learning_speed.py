"""How fast a fleet's logs are learned from: 10,000 of them in a minute on two cores."""

from __future__ import annotations

import time
from pathlib import Path

import numpy as np

from diag.circuit.loading import load_circuit
from diag.record.harvest import gather
from diag.record.learning import learn
from diag.record.lesson import overlay_text
from tests.record.fleet import Fleet

LOGS = 10_000
HOURS = 6e7
"""Flying hours in which somewhat more than so many cases arise."""
SECONDS = 60.0


def test_ten_thousand_logs_in_a_minute(tmp_path: Path) -> None:
    circuit = load_circuit("relief_valve_turboprop")
    fleet = Fleet(circuit, np.random.default_rng(1), asked=6)
    paths = fleet.logs(tmp_path / "logs", HOURS)[:LOGS]
    assert len(paths) == LOGS
    told: list[int] = []
    start = time.perf_counter()
    harvest = gather(paths, circuit, jobs=2, progress=told.append)
    gathered = time.perf_counter() - start
    learned = learn(circuit, harvest)
    text = overlay_text(learned, circuit, "learned")
    seconds = time.perf_counter() - start
    print(
        f"{LOGS} logs: read in {gathered:.1f} s, learned in {seconds:.1f} s, {len(text)} characters"
    )
    assert harvest.cases == sum(told) == LOGS
    assert seconds < SECONDS

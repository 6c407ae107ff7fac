"""Minutes of simulated cases on the shipped circuits: planner, greedy information, printed list.

Run with `python -m pytest tests/benchmarks/test_planner_cases.py`; it takes some minutes.
"""

from __future__ import annotations

import numpy as np
import pytest

from diag.circuit.loading import load_circuit
from tests.benchmarks.workshop import Printed, Shift, followed, greedy, planned

CASES = 40
STEPS = 15
SAVED = 0.30
"""Share of the printed list's minutes that the planner has to save."""
COMPLAINTS = (
    "oil_pressure@hot_idle=low",
    "oil_quantity@high_power=low",
    "oil_temperature@high_power=high",
    "chip_warning=on",
    "filter_dp_warning@high_power=on",
)


@pytest.mark.parametrize("name", ["relief_valve_turboprop", "full_flow_turbofan"])
def test_minutes_to_a_verified_fix(name: str, capsys: pytest.CaptureFixture[str]) -> None:
    shift, rows = Shift(load_circuit(name), COMPLAINTS), []
    for number in range(CASES):
        cases = [shift.case(number) for _ in range(3)]
        orders = (planned(STEPS), greedy, Printed(cases[2]))
        rows.append([followed(c, order) for c, order in zip(cases, orders, strict=True)])
    minutes = np.array(rows)
    mean, error = minutes.mean(axis=0), minutes.std(axis=0) / np.sqrt(CASES)
    with capsys.disabled():
        print(f"\n\n{name}: {CASES} cases, expected minutes to a verified fix")
        for label, value, spread in zip(
            ("planner", "greedy information", "printed list"), mean, error, strict=True
        ):
            print(f"  {label:20} {value:7.0f} +/- {spread:.0f}")
    assert mean[0] < mean[1]
    assert mean[0] <= (1.0 - SAVED) * mean[2]

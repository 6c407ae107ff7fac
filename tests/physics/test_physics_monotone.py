"""Properties that hold for every severity, whatever else is slightly off (Hypothesis)."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from diag.physics.faults import FAULTS
from diag.physics.solver import steady
from tests.physics.shipped import BOTH, FULL, RELIEF, physics

Case = tuple[str, str, float, float, str, int]
UP, DOWN = 1, -1
"""How a quantity may move as the severity goes from its first to its last value."""

PRESSURE = "gallery_pressure_psi"
HOT, HIGH, COLD = "hot_idle", "high_power", "cold_idle"
EITHER: list[Case] = [
    (HOT, "pump_slip", 1, 12, PRESSURE, DOWN),
    (COLD, "pump_slip", 1, 12, PRESSURE, DOWN),
    (HIGH, "pump_slip", 1, 12, PRESSURE, DOWN),
    (HOT, "pump_fill", 1, 0.3, PRESSURE, DOWN),
    (HOT, "pump_drive", 1, 0.2, PRESSURE, DOWN),
    (HOT, "oil_air", 0, 0.4, PRESSURE, DOWN),
    (HOT, "gallery_leak_mm2", 0, 30, PRESSURE, DOWN),
    (COLD, "gallery_leak_mm2", 0, 30, PRESSURE, DOWN),
    (HIGH, "gallery_leak_mm2", 0, 30, PRESSURE, DOWN),
    (HOT, "jet_blockage", 0, 0.8, PRESSURE, UP),
    (COLD, "jet_blockage", 0, 0.8, PRESSURE, UP),
    (HIGH, "jet_blockage", 0, 0.8, PRESSURE, UP),
    (HIGH, "jet_blockage.rear", 0, 0.8, "feed_flow_l_min.rear", DOWN),
    (HOT, "jet_open_mm2.front", 0, 15, PRESSURE, DOWN),
    (HOT, "filter_clog", 0, 0.99, PRESSURE, DOWN),
    (HIGH, "filter_clog", 0, 0.99, "filter_dp_psi", UP),
    (COLD, "filter_omitted", 0, 0.9, "filter_dp_psi", DOWN),
    (HIGH, "suction_blockage", 0, 0.97, PRESSURE, DOWN),
    (HOT, "relief_hold_mm2", 0, 20, PRESSURE, DOWN),
    (HIGH, "relief_stuck_shut", 0, 1, PRESSURE, UP),
    (COLD, "oil_viscosity_factor", 0.4, 3, PRESSURE, UP),
    (HIGH, "air_cooler_blockage", 0, 0.9, "oil_temperature_c", UP),
    (HIGH, "heat_factor", 0.5, 2.5, "scavenge_temperature_c", UP),
    (HOT, "scavenge_capacity.rear_chamber", 1, 0.1, "hiding_l.rear_chamber", UP),
    (HOT, "scavenge_capacity.rear_chamber", 1, 0.1, "tank_quantity_l", DOWN),
    (HIGH, "vent_blockage.front_chamber", 0, 0.95, "chamber_pressure_psi.front_chamber", UP),
    (HIGH, "seal_flow.rear_chamber", 1, 8, "breather_air_g_s", UP),
    (HIGH, "seal_flow.rear_chamber", 1, 8, "consumption_l_h", UP),
    (HIGH, "breather_separation", 1, 0.1, "consumption_l_h", UP),
    (HOT, "oil_loss_l", 0, 5, "tank_quantity_l", DOWN),
]  # fmt: skip
OWN: list[tuple[str, Case]] = [
    (RELIEF, (HOT, "relief_crack_psi", 0, -60, PRESSURE, DOWN)),
    (RELIEF, (COLD, "relief_slope_factor", 1, 0.05, PRESSURE, UP)),
    (RELIEF, (HIGH, "boost_slip", 1, 900, "torque_pressure_psi", DOWN)),
    (FULL, (HIGH, "fuel_cooler_fouling", 0, 0.9, "oil_temperature_c", UP)),
    (FULL, (HIGH, "thermostat_stuck", -1, 1, "oil_temperature_c", DOWN)),
]
CASES = [(circuit, case) for case in EITHER for circuit in BOTH] + OWN
HYDRAULIC = [(circuit, case) for circuit, case in CASES if case[4] == PRESSURE]

backgrounds = st.fixed_dictionaries(
    {
        "displacement_factor": st.floats(0.95, 1.05),
        "jet_area_factor": st.floats(0.95, 1.05),
        "cooler_factor": st.floats(0.8, 1.2),
        "pump_slip": st.floats(1.0, 3.0),
        "filter_clog": st.floats(0.0, 0.6),
        "oil_viscosity_factor": st.floats(0.8, 1.2),
        "seal_flow": st.floats(1.0, 2.0),
    }
)
days = st.fixed_dictionaries(
    {"ambient_c": st.floats(-20, 40), "fuel_c": st.floats(0, 55), "ambient_psi": st.floats(8, 14.7)}
)


def never_moves_back(
    circuit: str, case: Case, background: dict[str, float], day: dict[str, float],
    share: float, oil_c: float | None,
) -> None:  # fmt: skip
    """Asserts the case over the first `share` of its range."""
    point, fault, first, last, quantity, way = case
    others = {name: x for name, x in background.items() if name != fault}
    severity = np.linspace(first, first + share * (last - first), 7)
    states = steady(physics(circuit), point, {**others, fault: severity}, dict(day), oil_c)
    assert states.solved.all()
    values = states[quantity]
    slack = 1e-7 * np.maximum(np.abs(values[:-1]), 1.0)
    assert np.all(way * np.diff(values) >= -slack), values


@pytest.mark.parametrize(("circuit", "case"), CASES)
@settings(max_examples=4, deadline=None)
@given(background=backgrounds, day=days, share=st.floats(0.05, 0.6))
def test_a_worse_fault_never_moves_its_quantity_back(
    circuit: str, case: Case, background: dict[str, float], day: dict[str, float], share: float
) -> None:
    # In the full heat balance. At the far end of the range a fault cools or heats the oil so
    # much that its viscosity can win; the next test goes there at a given temperature.
    never_moves_back(circuit, case, background, day, share, None)


@pytest.mark.parametrize(("circuit", "case"), HYDRAULIC)
@settings(max_examples=4, deadline=None)
@given(background=backgrounds, day=days, oil_c=st.floats(-20, 150))
def test_at_a_given_temperature_pressure_never_moves_back_over_the_whole_range(
    circuit: str, case: Case, background: dict[str, float], day: dict[str, float], oil_c: float
) -> None:
    never_moves_back(circuit, case, background, day, 1.0, oil_c)


def test_every_fault_moves_something() -> None:
    # A name that changes no quantity at any point would be a dead parameter.
    for circuit in BOTH:
        parameters = physics(circuit)
        for name, fault in FAULTS.items():
            if fault.needs and getattr(parameters, fault.needs) is None:
                continue
            extreme = fault.least if fault.neutral == fault.most else min(fault.most, 5.0)
            with_fault = {name: [fault.neutral, extreme]}
            if name in ("relief_hold_mm2", "boost_slip"):
                with_fault[name] = [fault.neutral, 500.0]
            if name == "hours":
                with_fault["breather_separation"] = [0.5, 0.5]
            if name == "relief_crack_psi":
                with_fault[name] = [0.0, -400.0]
            if name in ("relief_slope_factor", "relief_stuck_shut", "relief_closing"):
                with_fault["relief_crack_psi"] = [-400.0 if circuit == FULL else 0.0] * 2
            if name in ("cooler_bypass_stuck", "air_cooler_blockage", "air_cooler_sludge"):
                with_fault["thermostat_stuck"] = [1.0, 1.0]
            moved = [
                bool(np.any(np.abs(np.diff(values)) > 1e-6))
                for point in ("static", HIGH)
                for values in steady(parameters, point, with_fault).quantities.values()
            ]
            assert any(moved), (circuit, name)

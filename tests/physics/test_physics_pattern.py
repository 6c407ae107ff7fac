"""What the gauge can see: the shipped circuits against the project's reference calculation.

The reference is an independent lumped calculation with general-purpose libraries and invented
parameters; its gallery pressures (psi, rounded) are the table below. Columns: idle with oil at
0, 40 and 90 degC, high power with oil at 100 degC.
"""

from __future__ import annotations

from functools import cache

import pytest

from tests.physics.shipped import FULL, RELIEF, value

CONDITIONS = (("hot_idle", 0.0), ("hot_idle", 40.0), ("hot_idle", 90.0), ("high_power", 100.0))
CASES: dict[str, dict[str, float]] = {
    "healthy": {},
    "filter 80 % clogged": {"filter_clog": 0.8},
    "jets 30 % blocked": {"jet_blockage": 0.3},
    "pump slip x4": {"pump_slip": 4.0},
    "pump fill 0.8": {"pump_fill": 0.8},
    "gallery leak 12 mm2": {"gallery_leak_mm2": 12.0},
    "relief held off seat 8 mm2": {"relief_hold_mm2": 8.0},
    "relief spring weak 78 to 55": {"relief_crack_psi": -23.0},
    "relief stuck shut": {"relief_stuck_shut": 1.0},
    "relief sticky, slope / 5": {"relief_slope_factor": 0.2},
}
TABLE: dict[str, dict[str, tuple[int, int, int, int]]] = {
    RELIEF: {
        "healthy": (82, 79, 78, 86),
        "filter 80 % clogged": (82, 79, 76, 86),
        "jets 30 % blocked": (85, 82, 81, 89),
        "pump slip x4": (82, 78, 52, 81),
        "pump fill 0.8": (80, 61, 48, 82),
        "gallery leak 12 mm2": (26, 20, 18, 44),
        "relief held off seat 8 mm2": (41, 28, 25, 65),
        "relief spring weak 78 to 55": (61, 58, 57, 65),
        "relief stuck shut": (160, 100, 79, 192),
        "relief sticky, slope / 5": (95, 84, 78, 108),
    },
    FULL: {
        "healthy": (129, 80, 69, 169),
        "filter 80 % clogged": (129, 80, 68, 166),
        "jets 30 % blocked": (231, 157, 133, 311),
        "pump slip x4": (128, 76, 59, 130),
        "pump fill 0.8": (91, 52, 45, 110),
        "gallery leak 12 mm2": (63, 40, 36, 88),
    },
}
ALIKE = 1
"""Rounded values of the table that differ by no more count as equal."""
ROWS = [(circuit, case) for circuit, table in TABLE.items() for case in table]
COLUMNS = [(circuit, column) for circuit in TABLE for column in range(4)]


@cache
def row(circuit: str, case: str, quantity: str = "gallery_pressure_psi") -> tuple[float, ...]:
    """One row of the table as the shipped parameters give it."""
    faults = dict(CASES[case])
    return tuple(
        value(circuit, point, quantity, faults, oil_c=celsius) for point, celsius in CONDITIONS
    )


@pytest.mark.parametrize(("circuit", "case"), ROWS)
def test_sign_against_the_healthy_engine(circuit: str, case: str) -> None:
    for column in range(4):
        known = TABLE[circuit][case][column] - TABLE[circuit]["healthy"][column]
        found = row(circuit, case)[column] - row(circuit, "healthy")[column]
        if abs(known) > ALIKE:
            assert found * known > 0, (column, known, found)
        else:
            assert abs(found) < 1.5, (column, known, found)


@pytest.mark.parametrize(("circuit", "case"), ROWS)
def test_order_over_the_operating_conditions(circuit: str, case: str) -> None:
    known, found = TABLE[circuit][case], row(circuit, case)
    for i in range(4):
        for j in range(4):
            if known[i] - known[j] > ALIKE:
                assert found[i] > found[j], (i, j, known, found)


@pytest.mark.parametrize(("circuit", "column"), COLUMNS)
def test_order_over_the_cases(circuit: str, column: int) -> None:
    table = TABLE[circuit]
    for higher in table:
        for lower in table:
            if table[higher][column] - table[lower][column] > ALIKE:
                found = row(circuit, higher)[column], row(circuit, lower)[column]
                assert found[0] > found[1], (higher, lower, found)


@pytest.mark.parametrize(("circuit", "case"), ROWS)
def test_size_of_every_entry(circuit: str, case: str) -> None:
    # Other parameters than the reference's: values agree within a sixth.
    assert row(circuit, case) == pytest.approx(TABLE[circuit][case], rel=1 / 6)


@pytest.mark.parametrize("circuit", [RELIEF, FULL])
def test_clogged_filter_opens_its_bypass_warm_and_a_healthy_one_does_so_cold(circuit: str) -> None:
    # Reference: drop 20 and 20 psi (relief valve), 23 and 29 psi (full flow), bypass open; at
    # 0 degC a healthy filter is already in bypass in both circuits.
    for quantity, at_least in (("filter_dp_psi", 20.0), ("filter_bypass_l_min", 1e-3)):
        clogged = row(circuit, "filter 80 % clogged", quantity)
        assert min(clogged[2:]) > at_least
        assert row(circuit, "healthy", quantity)[0] > at_least
        assert max(row(circuit, "healthy", quantity)[2:]) < at_least


def test_a_relief_valve_masks_mild_wear_at_high_power_and_hot_idle_shows_it() -> None:
    loss = [
        1 - worn / sound
        for worn, sound in zip(row(RELIEF, "pump slip x4"), row(RELIEF, "healthy"), strict=True)
    ]
    assert loss[0] < 0.01  # cold oil hides wear altogether
    assert loss[3] < 0.1
    assert loss[2] > 0.25


def test_held_relief_and_gallery_leak_look_alike() -> None:
    # Low everywhere and recovering with speed: only flow and component checks split them.
    for case in ("relief held off seat 8 mm2", "gallery leak 12 mm2"):
        sound, found = row(RELIEF, "healthy"), row(RELIEF, case)
        shares = [a / b for a, b in zip(found, sound, strict=True)]
        assert max(shares) < 0.8
        assert shares[3] > shares[2] + 0.2


def test_idle_to_high_ratio_is_a_feature_of_the_full_flow_circuit() -> None:
    sound, worn = row(FULL, "healthy"), row(FULL, "pump slip x4")
    blocked = row(FULL, "jets 30 % blocked")
    assert sound[3] / sound[2] == pytest.approx(169 / 69, rel=0.05)
    assert worn[3] / worn[2] < 0.95 * sound[3] / sound[2]
    assert blocked[3] / blocked[2] == pytest.approx(311 / 133, rel=0.05)


def test_fouled_fuel_cooler_and_failed_thermostat_together_are_far_worse_than_either() -> None:
    # Reference at high power with 40 degC fuel: 102 degC sound, 163 fouled by half with the air
    # cooler shut off, 92 with it, 131 with it 80 % blocked.
    def celsius(**faults: float) -> float:
        return value(FULL, "high_power", "oil_temperature_c", dict(faults), day={"fuel_c": 40.0})

    sound = celsius(thermostat_stuck=-1)
    alone = celsius(thermostat_stuck=-1, fuel_cooler_fouling=0.5)
    helped = celsius(thermostat_stuck=1, fuel_cooler_fouling=0.5)
    hindered = celsius(thermostat_stuck=1, fuel_cooler_fouling=0.5, air_cooler_blockage=0.8)
    assert sound == pytest.approx(102, abs=5)
    assert helped == pytest.approx(92, abs=8)
    assert helped < sound < hindered < alone
    assert alone - sound > 30
    assert celsius(fuel_cooler_fouling=0.5) - sound < 10

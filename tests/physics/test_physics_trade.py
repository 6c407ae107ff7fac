"""Facts of the trade that are physics, on the shipped circuits (common practice, no source)."""

from __future__ import annotations

import numpy as np
import pytest

from diag.physics.parameters import Physics
from diag.physics.solver import steady
from tests.physics.shipped import BOTH, FULL, RELIEF, physics, value

RUNNING = ("hot_idle", "high_power")


def with_torque(circuit: Physics, torque: float) -> Physics:
    """The circuit with another load at high power."""
    points = tuple(
        p.model_copy(update={"torque": torque}) if p.id == "high_power" else p
        for p in circuit.points
    )
    return circuit.model_copy(update={"points": points})


def test_relief_valve_is_off_its_seat_from_hot_idle_on() -> None:
    pressures = [value(RELIEF, point, "gallery_pressure_psi") for point in RUNNING]
    assert pressures[1] / pressures[0] < 1.15
    shares = [
        value(RELIEF, point, "spill_flow_l_min") / value(RELIEF, point, "pump_flow_l_min")
        for point in RUNNING
    ]
    assert 0 < shares[0] < shares[1]


def test_full_flow_circuit_spills_nothing_and_its_pressure_rises_with_speed() -> None:
    for point in (*RUNNING, "cold_idle"):
        assert value(FULL, point, "spill_flow_l_min") == 0.0
    assert value(FULL, "high_power", "gallery_pressure_psi") > 2 * value(
        FULL, "hot_idle", "gallery_pressure_psi"
    )


def test_for_the_same_jet_flow_the_full_flow_pump_moves_less_oil() -> None:
    full, relief = (
        value(circuit, "high_power", "pump_flow_l_min")
        / value(circuit, "high_power", "jet_flow_l_min")
        for circuit in (FULL, RELIEF)
    )
    assert full == pytest.approx(1.0)
    assert relief > 1.3


@pytest.mark.parametrize("circuit", BOTH)
@pytest.mark.parametrize("point", RUNNING)
def test_scavenge_capacity_keeps_the_chambers_dry(circuit: str, point: str) -> None:
    states = steady(physics(circuit), point)
    swept = sum(c.scavenge_cm3 * c.scavenge_rpm for c in physics(circuit).chambers)
    pump = physics(circuit).pump
    assert swept > 2 * pump.cm3_per_rev * pump.rpm
    for chamber in physics(circuit).chambers:
        assert float(states[f"hiding_l.{chamber.id}"][0]) < 0.1 * chamber.volume_l
    assert float(states["overflow_l_min"][0]) == 0.0


@pytest.mark.parametrize("circuit", BOTH)
@pytest.mark.parametrize("point", RUNNING)
def test_blocked_filter_feeds_through_its_bypass_after_the_switch_has_warned(
    circuit: str, point: str
) -> None:
    clog = np.linspace(0.0, 0.9999, 400)
    states = steady(physics(circuit), point, {"filter_clog": clog})
    warned = states["filter_dp_psi"] >= physics(circuit).filter.alert_psi
    opened = states["filter_bypass_l_min"] > 0
    assert 0 < np.argmax(warned) < np.argmax(opened)
    assert warned[-1]
    blocked, sound = states["jet_flow_l_min"][-1], states["jet_flow_l_min"][0]
    assert blocked > 0.9 * sound


def test_boost_pump_far_above_system_pressure_and_following_power() -> None:
    torques = np.array([0.2, 0.4, 0.6, 0.8, 1.0])
    pressures = np.array(
        [
            float(steady(with_torque(physics(RELIEF), t), "high_power")["torque_pressure_psi"][0])
            for t in torques
        ]
    )
    assert pressures / torques == pytest.approx(pressures[-1])
    assert 5 * value(RELIEF, "high_power", "gallery_pressure_psi") < pressures[-1] <= 600


def test_worn_boost_pump_reads_low_torque_with_engine_pressure_normal() -> None:
    states = steady(physics(RELIEF), "high_power", {"boost_slip": [1.0, 300.0]})
    assert states["torque_pressure_psi"][1] < 0.5 * states["torque_pressure_psi"][0]
    assert states["gallery_pressure_psi"][1] == pytest.approx(
        states["gallery_pressure_psi"][0], rel=1e-6
    )


def test_fuel_cooler_alone_holds_the_temperature_and_the_thermostat_brings_help() -> None:
    for point in RUNNING:
        assert value(FULL, point, "air_cooler_opening") == 0.0
        assert 55 < value(FULL, point, "oil_temperature_c") < 115
    hot_day = {"ambient_c": 40.0, "fuel_c": 60.0}
    fouled = {"fuel_cooler_fouling": 0.6}
    alone = {**fouled, "thermostat_stuck": -1.0}
    assert value(FULL, "high_power", "air_cooler_opening", dict(fouled), day=dict(hot_day)) > 0
    helped, left = (
        value(FULL, "high_power", "oil_temperature_c", dict(f), day=dict(hot_day))
        for f in (fouled, alone)
    )
    assert helped < 125
    assert left > helped + 40


def test_cooler_fault_shows_where_the_oil_leaves_the_coolers() -> None:
    faults = {"fuel_cooler_fouling": [0.0, 0.5], "thermostat_stuck": [-1.0, -1.0]}
    states = steady(physics(FULL), "high_power", faults)
    leaving, arriving = (
        float(states[name][1] - states[name][0])
        for name in ("oil_temperature_c", "scavenge_temperature_c")
    )
    assert leaving > arriving > 0


@pytest.mark.parametrize("circuit", BOTH)
def test_breather_that_no_longer_separates_costs_oil_without_a_wet_engine(circuit: str) -> None:
    faults = {"breather_separation": [1.0, 0.6], "hours": [2.0, 2.0]}
    states = steady(physics(circuit), "high_power", faults)
    sound, failed = states["consumption_l_h"]
    assert failed > 5 * sound
    assert states["leak_flow_l_min"].tolist() == [0.0, 0.0]
    lost = states["tank_quantity_l"][0] - states["tank_quantity_l"][1]
    assert lost == pytest.approx(2 * (failed - sound), rel=0.01)


@pytest.mark.parametrize("circuit", BOTH)
def test_blocked_vent_raises_chamber_pressure_and_slows_scavenging(circuit: str) -> None:
    states = steady(physics(circuit), "high_power", {"vent_blockage.rear_chamber": [0.0, 0.8]})
    for name in ("chamber_pressure_psi", "scavenge_load", "hiding_l"):
        sound, blocked = states[f"{name}.rear_chamber"]
        assert blocked > 1.2 * sound, name
    front = states["chamber_pressure_psi.front_chamber"]
    assert front[0] == pytest.approx(front[1])


def test_restricted_scavenge_screen_hides_oil_at_high_power_and_gives_it_back_at_idle() -> None:
    # Partial blockage: tank falls at high power and recovers at idle when the feed flow drops.
    faults = {"scavenge_restriction.rear_chamber": 0.8}
    gone = [
        value(FULL, point, "hiding_l.rear_chamber", dict(faults))
        - value(FULL, point, "hiding_l.rear_chamber")
        for point in ("high_power", "hot_idle")
    ]
    assert gone[0] > 1.5 * gone[1]


@pytest.mark.parametrize("circuit", BOTH)
def test_failed_scavenge_pump_hides_oil_and_heats_it(circuit: str) -> None:
    states = steady(physics(circuit), "high_power", {"scavenge_capacity.rear_chamber": [1.0, 0.0]})
    assert states["tank_quantity_l"][1] < states["tank_quantity_l"][0] - 1.0
    assert states["oil_temperature_c"][1] > states["oil_temperature_c"][0] + 3
    assert states["consumption_l_h"][1] > states["consumption_l_h"][0]


@pytest.mark.parametrize("circuit", BOTH)
def test_running_level_is_below_the_settled_one_and_falls_with_power(circuit: str) -> None:
    levels = [value(circuit, point, "tank_quantity_l") for point in ("static", *RUNNING)]
    assert levels[0] > levels[1] > levels[2]
    assert levels[0] == pytest.approx(physics(circuit).tank.filled_l)


def test_cold_oil_pulls_the_pump_inlet_down() -> None:
    # The relief valve returns most of the cold delivery to the inlet, so the circuit still runs.
    inlets = [value(RELIEF, "high_power", "pump_inlet_psi", oil_c=t) for t in (60, 0, -40)]
    assert inlets[0] > 0 > inlets[2]
    fillings = [value(RELIEF, "high_power", "pump_filling", oil_c=t) for t in (60, 0, -40)]
    assert fillings[2] < fillings[0]


@pytest.mark.parametrize("circuit", BOTH)
def test_blocked_suction_tells_at_altitude_and_high_power_first(circuit: str) -> None:
    faults = {"suction_blockage": 0.86}
    losses = [
        1
        - value(circuit, point, "pump_filling", dict(faults), day={"ambient_psi": ambient})
        / value(circuit, point, "pump_filling", day={"ambient_psi": ambient})
        for point, ambient in (("hot_idle", 14.7), ("high_power", 14.7), ("high_power", 6.0))
    ]
    assert losses[0] < losses[1] < losses[2]


def test_stuck_shut_cooler_bypass_gives_a_cold_pressure_surge() -> None:
    cold = {"thermostat_stuck": 1.0, "heat_factor": 0.0}  # just started, metal still cold
    shut = {**cold, "cooler_bypass_stuck": -1.0}
    free, surge = (
        value(RELIEF, "hot_idle", "return_psi", dict(f), oil_c=-20.0) for f in (cold, shut)
    )
    assert surge > 1.5 * free


def test_cold_start_relief_opens_only_in_the_cold() -> None:
    assert value(FULL, "hot_idle", "spill_flow_l_min", oil_c=-40.0) > 0
    assert value(FULL, "hot_idle", "spill_flow_l_min", oil_c=0.0) == 0.0


@pytest.mark.parametrize("circuit", BOTH)
def test_stopped_engine_and_sheared_drive_have_no_pressure(circuit: str) -> None:
    assert value(circuit, "static", "gallery_pressure_psi") == 0.0
    for point in RUNNING:
        assert value(circuit, point, "gallery_pressure_psi", {"pump_drive": 0.0}) < 1e-6


def test_starved_bearing_runs_hot_behind_a_sound_gauge() -> None:
    states = steady(physics(RELIEF), "high_power", {"jet_blockage.rear": [0.0, 0.6]})
    assert abs(states["gallery_pressure_psi"][1] - states["gallery_pressure_psi"][0]) < 4
    rise = states["feed_temperature_c.rear"]
    assert rise[1] > rise[0] + 15
    assert states["feed_flow_l_min.rear"][1] < 0.5 * states["feed_flow_l_min.rear"][0]


def test_worn_transfer_seal_starves_the_rear_with_the_gallery_near_normal() -> None:
    states = steady(physics(RELIEF), "high_power", {"jet_open_mm2.rear": [0.0, 4.0]})
    assert states["gallery_pressure_psi"][1] > 0.9 * states["gallery_pressure_psi"][0]
    assert states["feed_flow_l_min.rear"][1] < 0.98 * states["feed_flow_l_min.rear"][0]

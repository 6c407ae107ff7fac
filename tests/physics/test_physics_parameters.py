"""Parameters as YAML: what is refused, where, and that every number carries its basis."""

from __future__ import annotations

import re

import numpy as np
import pytest

from diag.circuit.records import Based
from diag.errors import InputError, UnknownName, UsageError
from diag.physics.faults import DAY, FAULTS, severities
from diag.physics.loading import read_physics, review_physics
from tests.physics.shipped import BOTH, FULL, RELIEF, physics, raw

BASIS = re.compile(r"^(computed|common practice|judgement|from memory|published: .+)$")


def changed(circuit: str, old: str, new: str) -> bytes:
    """The shipped file with one piece of text replaced."""
    text = raw(circuit).decode()
    assert text.count(old) >= 1, old
    return text.replace(old, new, 1).encode()


def line_of(text: bytes, piece: str) -> int:
    """The line, from 1, on which a piece of text stands first."""
    return text.decode().split(piece)[0].count("\n") + 1


@pytest.mark.parametrize("circuit", BOTH)
def test_shipped_parameters_have_no_problems(circuit: str) -> None:
    found, faults = review_physics(raw(circuit), "physics.yaml")
    assert faults == []
    assert found is not None
    assert found.circuit == circuit
    assert [p.id for p in found.points] == [
        "static", "motoring", "cold_idle", "hot_idle", "high_power",
    ]  # fmt: skip


@pytest.mark.parametrize("circuit", BOTH)
def test_every_number_carries_its_basis(circuit: str) -> None:
    found = physics(circuit)
    records = [value for _, value in found if isinstance(value, Based)]
    records += [r for _, value in found if isinstance(value, tuple) for r in value]
    assert len(records) > 20
    for record in records:
        assert isinstance(record, Based)
        assert BASIS.match(record.basis), record
        assert record.where.line > 0


def test_topologies() -> None:
    assert physics(RELIEF).topology == "relief_valve"
    assert physics(FULL).topology == "full_flow"


@pytest.mark.parametrize(
    ("circuit", "old", "new", "message", "path"),
    [
        (RELIEF, "bore_mm: 19", "bore_mm: -19", "out of range", "suction.bore_mm"),
        (RELIEF, "crack_psi: 77.5", "crack_psi: -3", "out of range", "relief.crack_psi"),
        (RELIEF, "hysteresis_psi: 4.0", "hysteresis_psi: 90", "could never seat", "relief"),
        (FULL, "alert_psi: 15", "alert_psi: 25", "before the bypass opens", "filter"),
        (FULL, "full_c: 120", "full_c: 90", "full_c must lie above opens_c", "air_cooler"),
        (FULL, "cst_100: 5.0", "cst_100: 50.0", "viscosity must fall", "oil"),
        (FULL, "voidage: 0.7", "voidage: 1.4", "out of range", "filter.voidage"),
        (FULL, "heat_share: 0.30", "heat_share: 0.35", "add up to 1", "feeds"),
        (FULL, "chamber: rear_chamber", "chamber: aft_chamber", "no such chamber", "feeds.1"),
        (RELIEF, "cm3_per_rev: 7.0", "cm3_per_rev: 70", "does not exceed", "chambers"),
        (RELIEF, "filled_l: 7.8", "filled_l: 3.0", "running tank would be low", "tank.filled_l"),
        (RELIEF, "speed: 0, oil_c: 20", "speed: 0", "give oil_c", "points.0"),
        (RELIEF, "oil_c: 40", "oil_c: 400", "outside the range", "points.2.oil_c"),
        (RELIEF, "senses: gallery", "senses: tank", "not one of the words", "relief.senses"),
        (RELIEF, "id: rear,", "id: gears,", "stands twice", "feeds.3.id"),
        (RELIEF, "rpm: 3300", "rmp: 3300", "unknown key", "pump.rmp"),
        (RELIEF, "crack_psi: 77.5", "crack_psi: 900", "stays shut", "relief.crack_psi"),
        (FULL, "crack_psi: 420", "crack_psi: 120", "spills at high_power", "relief.crack_psi"),
        (RELIEF, "bore_mm: 19", "bore_mm: 2", "cannot feed the pump", "suction"),
        (RELIEF, "scavenge_cm3: 4.5", "scavenge_cm3: 0.4", "keep the chamber dry", "chambers.1"),
        (FULL, "grain_um: 10.2", "grain_um: 4.0", "clean filter warns", "filter.alert_psi"),
        (RELIEF, "ua_w_k: 150", "ua_w_k: 1", "leaves the range", "points"),
    ],
)
def test_bad_parameters_are_problems_with_file_line_and_path(
    circuit: str, old: str, new: str, message: str, path: str
) -> None:
    text = changed(circuit, old, new)
    _, faults = review_physics(text, "physics.yaml")
    hits = [fault for fault in faults if message in fault.message]
    assert hits, [str(fault) for fault in faults]
    assert hits[0].path.startswith(path)
    assert hits[0].where.file == "physics.yaml"
    parent = path.split(".")[0]
    first = line_of(text, f"\n{parent}:") + 1
    assert first <= hits[0].where.line <= first + 16


def test_a_relief_valve_circuit_without_a_relief_valve() -> None:
    text = raw(FULL).decode().replace("topology: full_flow", "topology: relief_valve")
    before, after = text.split("\nrelief:\n")
    without = before + "\n" + after.split("\n\n", 1)[1]
    _, faults = review_physics(without.encode(), "physics.yaml")
    # The mode that needs the valve is told too.
    assert [fault.path for fault in faults] == ["relief", "severities.cold_start_relief.leaking"]


def test_all_faults_of_a_file_come_at_once() -> None:
    text = changed(RELIEF, "bore_mm: 19", "bore_mm: -19")
    text = text.replace(b"alert_psi: 15", b"alert_psi: 35")
    with pytest.raises(InputError) as caught:
        read_physics(text, "physics.yaml")
    assert len(caught.value.problems) == 2


def test_missing_basis_is_a_problem() -> None:
    text = changed(RELIEF, "basis: judgement\n", "")
    _, faults = review_physics(text, "physics.yaml")
    assert any(fault.path.endswith("basis") for fault in faults)


# Severities


def test_every_fault_name_is_neutral_within_its_range() -> None:
    for fault in (*FAULTS.values(), *DAY.values()):
        assert fault.least <= fault.neutral <= fault.most


def test_unknown_fault_names_the_nearest() -> None:
    with pytest.raises(UnknownName, match="pump_slip"):
        severities({"pump_slp": 2.0})


def test_unknown_place_and_wrong_place() -> None:
    with pytest.raises(UnknownName, match="rear"):
        severities({"jet_blockage.raer": 0.2}, feeds=("front", "rear"))
    with pytest.raises(UnknownName):
        severities({"pump_slip.rear": 2.0}, feeds=("rear",))


@pytest.mark.parametrize("value", [-0.1, 1.0, float("nan"), [0.2, 5.0]])
def test_severity_outside_its_range(value: float) -> None:
    with pytest.raises(UsageError, match=r"0 to 0\.99"):
        severities({"jet_blockage": value})


def test_severities_of_different_length() -> None:
    with pytest.raises(UsageError, match="length"):
        severities({"pump_slip": [1, 2, 3], "pump_fill": [1, 0.9]})


@pytest.mark.parametrize("bad", [np.zeros((2, 2)), np.zeros(0)])
def test_severities_are_numbers_or_rows(bad: np.ndarray) -> None:
    with pytest.raises(UsageError, match="row of numbers"):
        severities({"filter_clog": bad})


def test_whole_and_single_place_join() -> None:
    found = severities(
        {"jet_blockage": 0.5, "jet_blockage.rear": 0.2, "jet_open_mm2.rear": [1.0, 2.0]},
        feeds=("front", "rear"),
    )
    assert found.at("jet_blockage", ("front", "rear"))[:, 0] == pytest.approx([0.5, 0.6])
    assert found.at("jet_open_mm2", ("front", "rear")).tolist() == [[0, 0], [1, 2]]

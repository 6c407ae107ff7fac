"""The shipped circuits hold what they promise and agree with the physics of their oil."""

from __future__ import annotations

import bisect
import re

import pytest

from diag.belief.hypotheses import Engine
from diag.belief.network import circuit_tables, to_pgmpy
from diag.circuit.loading import circuit_names, load_circuit
from diag.circuit.model import UNLISTED, Circuit

CIRCUITS = ("full_flow_turbofan", "relief_valve_turboprop")


@pytest.fixture(scope="module", params=CIRCUITS)
def circuit(request: pytest.FixtureRequest) -> Circuit:
    return load_circuit(request.param)


def test_two_circuits_ship() -> None:
    assert circuit_names() == list(CIRCUITS)


def test_circuits_are_complete(circuit: Circuit) -> None:
    checks = {o.record.id for o in circuit.observables.values() if o.record.kind == "check"}
    inspections = checks & {node.split("@")[0] for node in circuit.nodes}
    conditions = {node.split("@")[0] for node in circuit.nodes} - inspections
    assert len(circuit.components) >= 28
    assert len(circuit.modes) >= 60
    assert len(conditions) >= 20
    assert len(checks) >= 45
    assert len(circuit.remedies) >= 25


def test_ids_that_scripts_rely_on(circuit: Circuit) -> None:
    names = {o.record.id for o in circuit.observables.values() if o.record.kind == "indication"}
    assert names >= {
        "oil_pressure", "oil_temperature", "oil_quantity",
        "low_pressure_warning", "filter_dp_warning", "chip_warning",
    }  # fmt: skip
    points = {"static", "motoring", "cold_idle", "hot_idle", "high_power"}
    assert points <= set(circuit.file.points)


def test_every_mode_bears_on_something(circuit: Circuit) -> None:
    seen = {ref for node in circuit.nodes.values() for ref in node.effects}
    seen |= {ref for ref, mode in circuit.modes.items() if mode.record.signal}
    assert set(circuit.modes) - seen == set()


def test_every_condition_can_be_observed(circuit: Circuit) -> None:
    looked_at = {observable.node for observable in circuit.observables.values()}
    # At these points an engine is watched by its gauges at other points only.
    assert {node for node in circuit.nodes if node not in looked_at} == set()


def test_every_mode_can_be_rectified(circuit: Circuit) -> None:
    restored = {ref for remedy in circuit.remedies.values() for ref in remedy.restores}
    assert set(circuit.modes) - restored == set()


def test_the_unlisted_cause_raises_every_condition(circuit: Circuit) -> None:
    inspections = {o.record.id for o in circuit.observables.values()}
    for name, node in circuit.nodes.items():
        if name.split("@")[0] not in inspections:
            abnormal = set(node.record.states) - {node.record.normal}
            assert set(node.effects[UNLISTED].gives) == abnormal, name


def test_the_network_is_proper(circuit: Circuit) -> None:
    network = to_pgmpy(circuit_tables(Engine(circuit)))
    assert network.check_model()
    assert max(len(network.get_parents(node)) for node in network.nodes) <= 5


# Gallery pressure in psi at idle with oil at 40 degC, idle at 90 degC, high power at 100 degC,
# from the lumped model of the two circuits (computed; invented parameters). One row per fault:
# every mode named shows as that row reads on the circuit's own limits.
ROWS = [
    # relief-valve circuit
    ("relief_valve_turboprop", "healthy", [], (79, 78, 86)),
    ("relief_valve_turboprop", "filter 80 % clogged", ["pressure_filter.loaded"], (79, 76, 86)),
    (
        "relief_valve_turboprop",
        "jets 30 % blocked",
        ["feed_jets.blocked", "last_chance_screens.blocked"],
        (82, 81, 89),
    ),
    ("relief_valve_turboprop", "pump slip x4", ["pressure_pump.worn"], (78, 52, 81)),
    (
        "relief_valve_turboprop",
        "pump fill 0.8",
        ["suction_line.drawing_air", "suction_filter.screen_blocked"],
        (61, 48, 82),
    ),
    (
        "relief_valve_turboprop",
        "gallery leak or jet missing",
        ["oil_gallery.external_leak", "oil_gallery.internal_leak", "feed_jets.jet_missing"],
        (20, 18, 44),
    ),
    ("relief_valve_turboprop", "relief held off seat", ["relief_valve.seat_debris"], (28, 25, 65)),
    ("relief_valve_turboprop", "relief spring weak", ["relief_valve.spring_weak"], (58, 57, 65)),
    ("relief_valve_turboprop", "relief stuck shut", ["relief_valve.stuck_shut"], (100, 79, 192)),
    ("relief_valve_turboprop", "relief sticky", ["relief_valve.sticky"], (84, 78, 108)),
    # full-flow circuit
    ("full_flow_turbofan", "healthy", [], (80, 69, 169)),
    ("full_flow_turbofan", "filter 80 % clogged", ["pressure_filter.loaded"], (80, 68, 166)),
    (
        "full_flow_turbofan",
        "jets 30 % blocked",
        ["feed_jets.blocked", "last_chance_screens.blocked"],
        (157, 133, 311),
    ),
    ("full_flow_turbofan", "pump slip x4", ["pressure_pump.worn"], (76, 59, 130)),
    (
        "full_flow_turbofan",
        "pump fill 0.8",
        ["suction_line.drawing_air", "suction_filter.screen_blocked"],
        (52, 45, 110),
    ),
    (
        "full_flow_turbofan",
        "gallery leak or jet missing",
        ["lower_gallery.external_leak", "upper_gallery.external_leak", "feed_jets.jet_missing"],
        (40, 36, 88),
    ),
]
POINTS = ("cold_idle", "hot_idle", "high_power")


def likeliest(circuit: Circuit, mode: str | None, node: str) -> str:
    """The state that one mode alone most probably gives a condition."""
    record = circuit.nodes[node].record
    effect = circuit.nodes[node].effects.get(mode or "")
    gives = dict(effect.gives) if effect else {}
    gives[record.normal] = 1.0 - sum(gives.values())
    return max(gives, key=gives.__getitem__)


@pytest.mark.parametrize(
    ("name", "row", "modes", "psi"), ROWS, ids=[f"{r[0].split('_')[0]}: {r[1]}" for r in ROWS]
)
def test_gauge_agrees_with_the_lumped_model(
    name: str, row: str, modes: list[str], psi: tuple[int, int, int]
) -> None:
    circuit = load_circuit(name)
    for point, reading in zip(POINTS, psi, strict=True):
        cuts = circuit.observables[f"oil_pressure@{point}"].cuts
        states = circuit.nodes[f"gallery_pressure@{point}"].record.states
        computed = states[bisect.bisect(cuts, reading)]
        # Low and very low are told apart by the warning's set point, which severity can cross.
        wanted = {"low", "very_low"} if computed.endswith("low") else {computed}
        for mode in modes or [None]:
            assert likeliest(circuit, mode, f"gallery_pressure@{point}") in wanted, (mode, point)


@pytest.mark.parametrize("name", CIRCUITS)
def test_a_clogged_filter_shows_in_its_pressure_drop(name: str) -> None:
    circuit = load_circuit(name)
    for point in ("hot_idle", "high_power"):
        state = likeliest(circuit, "pressure_filter.loaded", f"filter_pressure_drop@{point}")
        assert state == "high"


def test_every_number_says_where_it_comes_from(circuit: Circuit) -> None:
    words = re.compile(r"^(computed|common practice|judgement|from memory|published: .+)$")
    based = [mode.rate for mode in circuit.modes.values()]
    based += [effect for node in circuit.nodes.values() for effect in node.effects.values()]
    based += [o.record for o in circuit.observables.values()]
    based += [remedy.record for remedy in circuit.remedies.values()]
    assert len(based) > 500
    for record in based:
        assert words.match(record.basis), record.where


# What a step needs or touches, and the cautions of which at least one must stand there
# (common practice, no source).
RUNNING = {"idle", "high_power"}
HAZARDS = {
    "hot_stopped": {"hot_oil"},
    "motoring": {"rotating"},
    "filter_bowl": {"residual_pressure", "hot_oil", "skin"},
    "line_ends": {"residual_pressure", "hot_oil", "skin"},
    "drain_plugs": {"hot_oil"},
    "screen_ports": {"hot_oil", "residual_pressure"},
    "chip_port": {"hot_oil", "electrical"},
}
WORDS = {
    "harness|wiring|connector|signal|bulb resistance": {"electrical"},
    "fuel": {"fire", "hot_oil"},
    "module|gear set|replace the tank$": {"lifting"},
}


def test_no_hazard_without_its_caution(circuit: Circuit) -> None:
    steps = [o.record for o in circuit.observables.values() if o.record.kind == "check"]
    steps += [remedy.record for remedy in circuit.remedies.values()]
    for step in steps:
        cautions = set(step.cautions)
        if step.needs.engine in RUNNING:
            assert {"engine_run", "rotating", "blast"} <= cautions, step.id
        for name in (step.needs.engine, *step.needs.opens):
            if name in HAZARDS:
                assert HAZARDS[name] & cautions, (step.id, name)
        for pattern, wanted in WORDS.items():
            if re.search(pattern, step.title.lower()) and step.needs.engine != "any":
                assert wanted & cautions, (step.id, pattern)

"""The circuit as a graph, and the structure it must have."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from itertools import pairwise

import networkx
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from diag.circuit import graph as graphs
from diag.circuit.graph import CHECKS, oil_graph, path_of, structure_problems
from diag.circuit.model import UNLISTED, Circuit
from diag.circuit.records import Condition, Effect, Line
from tests.circuit.conftest import Root
from tests.support import circuit as made_circuit
from tests.support import mode

CIRCUIT = "circuits/small/circuit.yaml"
CONDITIONS = "circuits/small/conditions.yaml"


def test_components_are_nodes_and_lines_are_edges(root: Root) -> None:
    circuit = root.load()
    graph = oil_graph(circuit)
    assert isinstance(graph, networkx.MultiDiGraph)
    assert list(graph) == list(circuit.components)
    assert graph.nodes["oil_breather"]["role"] == "vent"
    assert graph.nodes["oil_breather"]["where"] == circuit.components["oil_breather"].where
    edges = {
        (s, t, carries): where for s, t, carries, where in graph.edges(keys=True, data="where")
    }
    assert edges == {(x.source, x.target, x.carries): x.where for x in circuit.lines}
    assert ("main_bearing", "oil_pump", "drive") in edges


def test_two_media_between_the_same_components_are_two_edges(root: Root) -> None:
    line = "- {source: main_bearing, target: main_chamber, carries: heat}\n"
    root.edit(CIRCUIT, "exposure:\n", f"  {line}exposure:\n")
    graph = oil_graph(root.load())
    assert set(graph["main_bearing"]["main_chamber"]) == {"scavenge", "heat"}


def test_a_sound_circuit_passes_every_check(root: Root) -> None:
    circuit = root.load()
    graph = oil_graph(circuit)
    assert structure_problems(circuit) == []
    assert [list(check(circuit, graph)) for check in CHECKS] == [[] for _ in CHECKS]


# Per fault: what is put for what in the circuit, the component it is told at, and the words.
FAULTS: dict[str, tuple[str, str, str, str]] = {
    "a bearing without a supply": (
        "{source: pressure_filter, target: main_bearing, carries: supply}",
        "{source: pressure_filter, target: main_bearing, carries: heat}",
        "main_bearing", "no oil is supplied",
    ),
    "a supply round the filter": (
        "{source: filter_bypass, target: main_bearing, carries: bypass}",
        "{source: oil_pump, target: main_bearing, carries: supply}\n"
        "  - {source: filter_bypass, target: main_bearing, carries: bypass}",
        "main_bearing", "passed no filter",
    ),
    "a filter on the suction side only": (
        "{source: oil_tank, target: oil_pump, carries: supply}\n"
        "  - {source: oil_pump, target: pressure_filter, carries: supply}",
        "{source: oil_tank, target: pressure_filter, carries: supply}\n"
        "  - {source: pressure_filter, target: oil_pump, carries: supply}\n"
        "  - {source: oil_pump, target: main_bearing, carries: supply}",
        "main_bearing", "passed no filter",
    ),
    "a chamber without a scavenge pump": (
        "{source: main_chamber, target: return_pump, carries: scavenge}",
        "{source: main_bearing, target: return_pump, carries: scavenge}",
        "main_chamber", "not scavenged",
    ),
    "a chamber whose oil is only spilt": (
        "{source: return_pump, target: oil_tank, carries: scavenge}",
        "{source: return_pump, target: oil_tank, carries: spill}",
        "main_chamber", "not scavenged",
    ),
    "a chamber without a vent": (
        "{source: main_chamber, target: oil_breather, carries: vent}",
        "{source: main_bearing, target: oil_breather, carries: vent}",
        "main_chamber", "not vented",
    ),
    "a vent that ends before the breather": (
        "{source: main_chamber, target: oil_breather, carries: vent}",
        "{source: main_chamber, target: return_pump, carries: vent}\n"
        "  - {source: return_pump, target: oil_breather, carries: heat}",
        "main_chamber", "not vented",
    ),
    "an instrument that taps nothing": (
        "{source: pressure_filter, target: oil_gauge, carries: sense}",
        "{source: oil_gauge, target: pressure_filter, carries: sense}",
        "oil_gauge", "taps no oil line",
    ),
    "a component left out": (
        "  - {source: pressure_filter, target: oil_gauge, carries: sense}\n", "",
        "oil_gauge", "no line leads to or from",
    ),
}  # fmt: skip


@pytest.mark.parametrize(("old", "new", "name", "message"), FAULTS.values(), ids=FAULTS.keys())
def test_a_fault_of_structure_is_told_at_its_component(
    root: Root, old: str, new: str, name: str, message: str
) -> None:
    root.edit(CIRCUIT, old, new)
    told = [p for p in root.problems() if message in p.message]
    assert [(root.named(p), p.path, p.value) for p in told] == [
        (CIRCUIT, f"components.{name}", name)
    ]
    where = (told[0].where.line, told[0].where.column)
    assert where == root.place(CIRCUIT, f"- {{id: {name},", "{")
    assert told[0].accepted


def test_a_return_that_does_not_reach_the_tank_is_told(root: Root) -> None:
    root.edit(
        CIRCUIT,
        "{source: return_pump, target: oil_tank, carries: scavenge}",
        "{source: oil_tank, target: return_pump, carries: scavenge}",
    )
    messages = [p.message for p in root.problems()]
    assert "no oil comes back to a tank" in messages
    assert "it is not scavenged" in messages


def test_oil_lost_on_a_branch_is_told_at_its_end(root: Root) -> None:
    root.edit(
        CIRCUIT, "exposure:\n",
        "  - {source: pressure_filter, target: oil_breather, carries: supply}\nexposure:\n",
    )  # fmt: skip
    problem = root.problem()
    assert problem.path == "components.oil_breather"
    assert "does not come back" in problem.message


def test_a_circuit_without_a_tank_or_a_supply_is_told(root: Root) -> None:
    root.edit(
        CIRCUIT, "source: oil_tank, target: oil_pump", "source: return_pump, target: oil_pump"
    )
    assert "no oil leaves the tank" in {p.message for p in root.problems()}
    root.edit("kinds/tank.yaml", "role: tank", "role: line")
    assert "the circuit has no tank" in {p.message for p in root.problems()}


def test_a_wire_carries_the_tap_on_to_a_second_instrument(root: Root) -> None:
    root.edit(
        CIRCUIT, "lines:\n",
        "  - {id: second_gauge, kind: gauge}\nlines:\n"
        "  - {source: oil_gauge, target: second_gauge, carries: signal}\n",
    )  # fmt: skip
    assert root.load().components["second_gauge"].role == "instrument"


def test_lines_twice_and_lines_to_themselves_are_told(root: Root) -> None:
    root.edit(
        CIRCUIT, "exposure:\n",
        "  - {source: main_chamber, target: oil_breather, carries: vent}  # again\n"
        "  - {source: oil_pump, target: oil_pump, carries: spill}\nexposure:\n",
    )  # fmt: skip
    twice, itself = root.problems()
    assert twice.path == "lines.11"
    assert twice.where.line == root.place(CIRCUIT, "# again")[0]
    assert f"first at {root.path / CIRCUIT}:" in twice.message
    assert (itself.path, itself.value) == ("lines.12.target", "oil_pump")


def test_one_misspelt_end_is_not_told_as_broken_paths(root: Root) -> None:
    root.edit(CIRCUIT, "target: main_bearing, carries: supply", "target: bearing, carries: supply")
    assert root.problem().path == "lines.4.target"


def test_a_boost_pump_after_the_filter_needs_no_filter_of_its_own(root: Root) -> None:
    root.edit(
        CIRCUIT,
        "{source: pressure_filter, target: main_bearing, carries: supply}",
        "{source: pressure_filter, target: boost_pump, carries: supply}\n"
        "  - {source: boost_pump, target: main_bearing, carries: supply}",
    )
    root.edit(CIRCUIT, "lines:\n", "  - {id: boost_pump, kind: bypass}\nlines:\n")
    root.edit("kinds/bypass.yaml", "role: valve", "role: pump")
    assert root.load().components["boost_pump"].role == "pump"


# -- links --------------------------------------------------------------------------------


def test_an_effect_that_no_line_carries_is_told_at_the_link(root: Root) -> None:
    links = "circuits/small/links.yaml"
    root.edit(links, "chamber_oil: {excess: 0.8}", "gallery_pressure@hot_idle: {low: 0.1}")
    problem = root.problem()
    assert root.named(problem) == links
    place = root.place(links, "gallery_pressure@hot_idle")
    assert (problem.where.line, problem.where.column) == place
    assert "return_pump.worn" in problem.message
    assert "gallery_pressure" in problem.message
    assert "supply, bypass" in problem.message
    assert problem.accepted == "lines that join return_pump to pressure_filter or filter_bypass"


def test_an_effect_of_a_kind_is_told_in_the_kind(root: Root) -> None:
    root.edit("kinds/breather.yaml", "chamber_oil: {excess", "gallery_pressure: {low")
    problem = root.problem()
    assert root.named(problem) == "kinds/breather.yaml"
    assert "oil_breather.blocked" in problem.message


def test_more_media_carry_it(root: Root) -> None:
    # The breather is joined to the filter by vent and scavenge lines, through the bearing.
    root.edit("kinds/breather.yaml", "chamber_oil: {excess", "gallery_pressure: {low")
    root.edit("shared/conditions.yaml", "[supply, bypass]", "[supply, vent, scavenge]")
    circuit = root.load()
    way = path_of(circuit, oil_graph(circuit), "oil_breather.blocked", "gallery_pressure@hot_idle")
    assert way == ["oil_breather", "main_chamber", "main_bearing", "pressure_filter"]


def test_paths_run_against_the_lines_too(root: Root) -> None:
    circuit = root.load()
    graph = oil_graph(circuit)
    node = "gallery_pressure@hot_idle"
    assert path_of(circuit, graph, "oil_tank.low", node) == [
        "oil_tank", "oil_pump", "pressure_filter",
    ]  # fmt: skip
    assert path_of(circuit, graph, "pressure_filter.loaded", node) == ["pressure_filter"]
    assert path_of(circuit, graph, "return_pump.worn", "chamber_oil") == [
        "return_pump", "main_chamber",
    ]  # fmt: skip
    # Between the filter and the bypass valve, the nearer of two places counts.
    assert path_of(circuit, graph, "filter_bypass.stuck", node) == ["filter_bypass"]


def test_no_path_where_there_is_none_and_none_from_the_unlisted_cause(root: Root) -> None:
    circuit = root.load()
    graph = oil_graph(circuit)
    assert path_of(circuit, graph, "oil_breather.blocked", "gallery_pressure@hot_idle") == []
    assert path_of(circuit, graph, UNLISTED, "chamber_oil") == []
    # The sound of the tank holds nowhere in particular: it is reached from everywhere.
    assert path_of(circuit, graph, "oil_breather.blocked", "tank_sound") == ["oil_breather"]
    assert path_of(circuit, graph, "oil_pump.worn", "oil_pump_strip") == ["oil_pump"]


def test_an_effect_at_several_points_is_told_once(root: Root) -> None:
    circuit = root.load()
    graph = oil_graph(circuit)
    graph.remove_edge("oil_pump", "pressure_filter")
    graph.remove_edge("oil_pump", "filter_bypass")
    told = [p.path for p in graphs.links_are_carried(circuit, graph)]
    # Of the worn pump two effects, one for each point; of the sheared pump one for both.
    assert sorted(told) == [
        "oil_pump.sheared.gallery_pressure",
        "oil_pump.worn.gallery_pressure",
        "oil_pump.worn.gallery_pressure",
        "oil_tank.low.gallery_pressure",
    ]


# -- against rules written out another way ------------------------------------------------

ROLES = ("tank", "pump", "filter", "bearing", "line")
MEDIA = ("supply", "scavenge", "vent")
Spec = tuple[tuple[str, ...], tuple[tuple[int, int, str], ...], tuple[str, ...], tuple[int, ...]]


@st.composite
def specs(draw: st.DrawFn) -> Spec:
    """Roles, lines, the media that carry a condition, and the components it holds at."""
    roles = tuple(draw(st.lists(st.sampled_from(ROLES), min_size=2, max_size=6)))
    one = st.integers(0, len(roles) - 1)
    lines = draw(st.sets(st.tuples(one, one, st.sampled_from(MEDIA)), max_size=10))
    carried_by = tuple(sorted(draw(st.sets(st.sampled_from(MEDIA), max_size=3))))
    at = tuple(sorted(draw(st.sets(one, max_size=2))))
    return roles, tuple(sorted(line for line in lines if line[0] != line[1])), carried_by, at


def built(spec: Spec) -> Circuit:
    roles, lines, carried_by, at = spec
    names = [f"c{i}" for i in range(len(roles))]
    effects = {f"{name}.worn": {"bad": 0.5} for name in names}
    circuit = made_circuit(
        [mode(name, "worn", 0.1) for name in names],
        {"state": (("good", "bad"), "good", {}, effects)},
    )
    node = circuit.nodes["state"]
    record: Condition = node.record.model_copy(
        update={"carried_by": carried_by, "at": tuple(names[i] for i in at)}
    )
    gives = {UNLISTED: Effect(gives={"bad": 0.1}, basis="judgement"), **node.effects}
    drawn = tuple(Line(source=names[s], target=names[t], carries=m) for s, t, m in lines)
    return replace(
        circuit,
        file=circuit.file.model_copy(update={"lines": drawn}),
        components={
            name: replace(circuit.components[name], role=role)
            for name, role in zip(names, roles, strict=True)
        },
        nodes={"state": replace(node, record=record, effects=gives)},
    )


@given(specs())
@settings(max_examples=150, deadline=None)
def test_links_carried_against_union_find(spec: Spec) -> None:
    roles, lines, carried_by, at = spec
    circuit = built(spec)
    leader = list(range(len(roles)))

    def root_of(i: int) -> int:
        return i if leader[i] == i else root_of(leader[i])

    for s, t, medium in lines:
        if not carried_by or medium in carried_by:
            leader[root_of(s)] = root_of(t)
    lost = {f"c{i}.worn" for i in range(len(roles)) if at and root_of(i) not in map(root_of, at)}
    graph = oil_graph(circuit)
    told = {p.path.removesuffix(".state") for p in graphs.links_are_carried(circuit, graph)}
    assert told == lost
    for ref in circuit.modes:
        way = path_of(circuit, graph, ref, "state")
        assert (way == []) == (ref in lost)
        for a, b in pairwise(way):
            used = {m for s, t, m in graph.edges(keys=True) if {s, t} == {a, b}}
            assert used & set(carried_by or MEDIA)


@st.composite
def supplies(draw: st.DrawFn) -> Spec:
    """Supply lines alone, from a tank (component 0) to a bearing (the last)."""
    inner = st.sampled_from(("pump", "filter", "line"))
    roles = ("tank", *draw(st.lists(inner, min_size=1, max_size=4)), "bearing")
    one = st.integers(0, len(roles) - 1)
    lines = draw(st.sets(st.tuples(one, one), min_size=len(roles) - 1, max_size=10))
    chain = set(pairwise(range(len(roles)))) if draw(st.booleans()) else set()
    supply = sorted({(s, t) for s, t in lines | chain if s != t})
    return roles, tuple((s, t, "supply") for s, t in supply), (), ()


@given(specs() | supplies())
@settings(max_examples=300, deadline=None)
def test_filtered_supply_against_all_walks(spec: Spec) -> None:
    """Every walk from a tank is followed with what it has passed: a pump, a filter since then."""
    roles, lines, _, _ = spec
    circuit = built(spec)
    following: dict[int, list[int]] = {i: [] for i in range(len(roles))}
    for s, t, medium in lines:
        if medium == "supply":
            following[s].append(t)
    fed, dirty = _walk(roles, following)
    told = list(graphs.consumers_fed(circuit, oil_graph(circuit)))
    bearings = {i for i, role in enumerate(roles) if role == "bearing"}
    assert {p.value for p in told if "no oil is supplied" in p.message} == {
        f"c{i}" for i in bearings - fed
    }
    assert {p.value for p in told if "no filter" in p.message} == {
        f"c{i}" for i in bearings & dirty
    }


def _walk(roles: Sequence[str], following: dict[int, list[int]]) -> tuple[set[int], set[int]]:
    """Components that supply reaches, and those it reaches without having passed a filter."""
    fed, dirty = set(), set()
    seen = {(i, False, False) for i, role in enumerate(roles) if role == "tank"}
    open_ = list(seen)
    while open_:
        here, pumped, clean = open_.pop()
        fed.add(here)
        if not clean:
            dirty.add(here)
        # What a filter did before the first pump no longer counts after it.
        first_pump = roles[here] == "pump" and not pumped
        pumped = pumped or first_pump
        clean = (clean and not first_pump) or roles[here] == "filter"
        for other in following[here]:
            if (state := (other, pumped, clean)) not in seen:
                seen.add(state)
                open_.append(state)
    return fed, dirty

"""The circuit as a graph of typed lines, and what must hold in it.

Components are nodes; a line is an edge from its source to its target, keyed by what it
carries. networkx is imported inside the functions: it takes a fifth of a second, and not
every use of a circuit looks at its lines.
"""

from __future__ import annotations

from collections.abc import Callable, Collection, Iterable, Iterator
from typing import TYPE_CHECKING, Any, TypeAlias

from diag.circuit.faults import nearest
from diag.circuit.model import UNLISTED, Circuit, Node
from diag.circuit.records import Line, Medium
from diag.errors import Origin, Problem

if TYPE_CHECKING:
    from networkx import MultiDiGraph

Check: TypeAlias = Callable[[Circuit, "MultiDiGraph"], Iterable[Problem]]

OIL: frozenset[Medium] = frozenset({"supply", "scavenge", "bypass", "spill"})
"""Lines that oil runs along; vent lines carry air, with oil only as a mist."""
FLUID: frozenset[Medium] = OIL | {"vent"}
"""Lines that an instrument may tap: a chamber's air pressure tells of the oil in it."""
RETURN: frozenset[Medium] = frozenset({"scavenge", "bypass"})
"""Lines from a chamber back to a tank: scavenge, and bypass round a cooler or filter in it."""


def oil_graph(circuit: Circuit) -> MultiDiGraph:
    """The graph of a circuit.

    Nodes are component ids with `role` ("" where the kind is not known) and `where`; edges
    are keyed by the medium and carry `where`. Lines to nowhere are left out.
    """
    from networkx import MultiDiGraph

    graph = MultiDiGraph()
    for use in circuit.file.components:
        component = circuit.components.get(use.id)
        graph.add_node(use.id, role=component.role if component else "", where=use.where)
    for line in circuit.lines:
        if line.source in graph and line.target in graph:
            graph.add_edge(line.source, line.target, key=line.carries, where=line.where)
    return graph


def structure_problems(circuit: Circuit, whole: bool = True) -> list[Problem]:
    """What is wrong with the way the circuit is joined up.

    While a line leads to no component, a component has no kind, or lines are known to be
    missing (not `whole`), only the ends of the lines are checked: the cause is one misspelt
    word, and every path that it breaks would be reported too.
    """
    graph = oil_graph(circuit)
    broken = list(lines_join_components(circuit, graph))
    kinds_known = all(use.id in circuit.components for use in circuit.file.components)
    if broken or not whole or not kinds_known:
        return broken
    return [problem for check in CHECKS for problem in check(circuit, graph)]


def path_of(circuit: Circuit, graph: MultiDiGraph, ref: str, node_id: str) -> list[str]:
    """The shortest way along which a mode reaches a condition, as component ids.

    Both ends are included; a mode of a component where the condition holds gives that
    component alone. Empty where no way exists, and for the unlisted cause, which has no place.
    The rule is that of `links_are_carried`.

    Raises:
        KeyError: no such mode or node in the circuit.
    """
    from networkx import single_source_shortest_path

    node = circuit.nodes[node_id]
    if ref == UNLISTED:
        return []
    source = circuit.modes[ref].component
    if not node.record.at:
        return [source]
    ways = single_source_shortest_path(_passable(graph, node.record.carried_by), source)
    reached = [ways[name] for name in node.record.at if name in ways]
    return min(reached, key=len, default=[])


# -- the checks ---------------------------------------------------------------------------


def lines_join_components(circuit: Circuit, graph: MultiDiGraph) -> Iterator[Problem]:
    """Both ends of every line are components of the circuit, and no line stands twice."""
    first: dict[tuple[str, str, str], Line] = {}
    for number, line in enumerate(circuit.lines):
        path = f"lines.{number}"
        for end, name in (("source", line.source), ("target", line.target)):
            if name not in graph:
                message, accepted = "no such component", nearest(name, graph)
                yield Problem(line.where, f"{path}.{end}", message, name, accepted)
        if line.source == line.target:
            message, accepted = "a line joins two components", "another target"
            yield Problem(line.where, f"{path}.target", message, line.target, accepted)
        key = (line.source, line.target, line.carries)
        if key in first:
            message = f"line stands twice, first at {first[key].where}"
            yield Problem(line.where, path, message, " ".join(key))
        first.setdefault(key, line)


def components_connected(circuit: Circuit, graph: MultiDiGraph) -> Iterator[Problem]:
    """Every component has at least one line."""
    for name in graph:
        if not graph.degree(name):
            yield _at(graph, name, "no line leads to or from this component", "a line")


def consumers_fed(circuit: Circuit, graph: MultiDiGraph) -> Iterator[Problem]:
    """Every bearing and gear is fed from a tank, and only with oil that a filter has cleaned.

    After the first pump, every supply path must pass a filter: a screen on the suction side
    protects the pump, not the bearings. The bypass of a filter is drawn as bypass lines and
    is no supply path. Oil fed without any pump must pass a filter anywhere.
    """
    tanks, filters, pumps = (set(_of_role(circuit, r)) for r in ("tank", "filter", "pump"))
    fed = _reached(graph, tanks, {"supply"})
    unpumped = _reached(graph, tanks, {"supply"}, stop=pumps)
    first_pumps = unpumped & pumps
    dirty = _reached(graph, first_pumps, {"supply"}, stop=filters)
    dirty |= _reached(graph, tanks, {"supply"}, stop=pumps | filters) - pumps
    for name in _of_role(circuit, "bearing", "gear"):
        if name not in fed:
            accepted = "supply lines that lead here from a tank"
            yield _at(graph, name, "no oil is supplied to it", accepted)
        elif name in dirty:
            accepted = "a filter, or its bypass, between the pump and it"
            yield _at(graph, name, "oil that passed no filter is supplied to it", accepted)


def chambers_drained(circuit: Circuit, graph: MultiDiGraph) -> Iterator[Problem]:
    """Every chamber is scavenged back to a tank and vented to a vent."""
    tanks, vents = (set(_of_role(circuit, role)) for role in ("tank", "vent"))
    for name in _of_role(circuit, "chamber"):
        starts = _next(graph, name, {"scavenge"})
        if not _reached(graph, starts, RETURN) & tanks:
            accepted = "scavenge lines that lead from it to a tank"
            yield _at(graph, name, "it is not scavenged", accepted)
        if not _reached(graph, _next(graph, name, {"vent"}), {"vent"}) & vents:
            accepted = "vent lines that lead from it to a vent"
            yield _at(graph, name, "it is not vented", accepted)


def instruments_tap(circuit: Circuit, graph: MultiDiGraph) -> Iterator[Problem]:
    """Every instrument sits in an oil or vent line, or is led to one by sense and signal lines."""
    wet = {name for line in graph.edges(keys=True) if line[2] in FLUID for name in line[:2]}
    tapped = _reached(graph, wet, {"sense", "signal"})
    for name in _of_role(circuit, "instrument", "detector"):
        if name not in tapped:
            accepted = "a sense or signal line from a component that carries oil"
            yield _at(graph, name, "it taps no oil line", accepted)


def circuit_closes(circuit: Circuit, graph: MultiDiGraph) -> Iterator[Problem]:
    """Oil that leaves a tank by supply comes back to a tank by scavenge, from everywhere."""
    tanks = set(_of_role(circuit, "tank"))
    if not tanks:
        yield Problem(circuit.file.where, "components", "the circuit has no tank", "", "a tank")
        return
    supplied = _reached(graph, tanks, {"supply"})
    if supplied <= tanks:
        where, accepted = circuit.file.where, "a supply line from a tank"
        yield Problem(where, "lines", "no oil leaves the tank", "", accepted)
    returning = _reached(graph, tanks, OIL, back=True)
    ends = {s for s, t, carries in graph.edges(keys=True) if t in tanks and carries in RETURN}
    if not ends and not supplied <= tanks:
        where, accepted = circuit.file.where, "a scavenge line to a tank"
        yield Problem(where, "lines", "no oil comes back to a tank", "", accepted)
        return
    for name in graph:
        if name in supplied and name not in returning:
            accepted = "lines that lead from it back to a tank"
            yield _at(graph, name, "oil that is supplied to it does not come back", accepted)


def links_are_carried(circuit: Circuit, graph: MultiDiGraph) -> Iterator[Problem]:
    """Every effect of a mode on a condition has lines that can carry it.

    An effect is carried when some component where the condition holds (`at`) can be reached
    from the mode's component along lines of the media in the condition's `carried_by` (any
    line when it is empty). Lines are passed in both directions: pressure, heat and shortage
    of oil act upstream as well as down. A condition that holds nowhere in particular is
    reached from everywhere, and so is any condition by the unlisted cause.
    """
    islands: dict[tuple[Medium, ...], dict[str, int]] = {}
    modes = circuit.modes
    told: set[tuple[str, str, Origin]] = set()
    for node in circuit.nodes.values():
        record = node.record
        if record.carried_by not in islands:
            islands[record.carried_by] = _islands(_passable(graph, record.carried_by))
        island = islands[record.carried_by]
        reached_by = {island[name] for name in record.at if name in island}
        for ref, effect in node.effects.items() if record.at else ():
            if ref == UNLISTED or island[modes[ref].component] in reached_by:
                continue
            if (key := (ref, record.id, effect.where)) not in told:
                told.add(key)
                yield _not_carried(node, ref, modes[ref].component, effect.where)


CHECKS: tuple[Check, ...] = (
    lines_join_components,
    components_connected,
    consumers_fed,
    chambers_drained,
    instruments_tap,
    circuit_closes,
    links_are_carried,
)
"""All that is checked of a circuit's structure; each may be called on its own."""


# -- paths --------------------------------------------------------------------------------


def _not_carried(node: Node, ref: str, component: str, where: Origin) -> Problem:
    record = node.record
    media = ", ".join(record.carried_by) or "any medium"
    message = f"no line carries the effect of {ref} on {record.id}; looked along {media}"
    accepted = f"lines that join {component} to {' or '.join(record.at)}"
    return Problem(where, f"{ref}.{record.id}", message, "", accepted)


def _at(graph: MultiDiGraph, name: str, message: str, accepted: str) -> Problem:
    return Problem(graph.nodes[name]["where"], f"components.{name}", message, name, accepted)


def _of_role(circuit: Circuit, *roles: str) -> list[str]:
    """Ids of the components of these roles, in the order of the circuit."""
    return [component.id for component in circuit.components.values() if component.role in roles]


def _reached(
    graph: MultiDiGraph,
    starts: Iterable[str],
    media: Collection[str],
    stop: Collection[str] = (),
    back: bool = False,
) -> set[str]:
    """Components reached from `starts` along lines of these media, the starts included.

    Those in `stop` are reached but not passed, except where the way starts there; `back`
    goes against the lines.
    """
    found = set(starts)
    open_ = list(found)
    while open_:
        for name in _next(graph, open_.pop(), media, back):
            if name not in found:
                found.add(name)
                if name not in stop:
                    open_.append(name)
    return found


def _next(
    graph: MultiDiGraph, name: str, media: Collection[str], back: bool = False
) -> Iterator[str]:
    lines: Any = graph.pred[name] if back else graph.succ[name]
    return (other for other, keys in lines.items() if not keys.keys().isdisjoint(media))


def _passable(graph: MultiDiGraph, media: Collection[str]) -> Any:
    """The undirected graph of the lines that carry one of `media` (all when there are none)."""
    from networkx import Graph

    found = Graph()
    found.add_nodes_from(graph)
    found.add_edges_from(
        (s, t) for s, t, key in graph.edges(keys=True) if not media or key in media
    )
    return found


def _islands(passable: Any) -> dict[str, int]:
    """Per component the number of the island of joined components it belongs to."""
    from networkx import connected_components

    return {name: i for i, group in enumerate(connected_components(passable)) for name in group}

"""What each mode of a circuit does: its effects on conditions and on the odds of other modes."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass, replace
from graphlib import CycleError, TopologicalSorter
from itertools import pairwise

from diag.circuit.faults import Faults
from diag.circuit.model import UNLISTED, Component, Mode, Node
from diag.circuit.records import Check, Condition, Effect, Kind, LinksFile, Overlay
from diag.errors import Origin


def node_ids(record: Condition) -> list[str]:
    """Ids of a condition's nodes, one for each of its points."""
    return [f"{record.id}@{point}" for point in record.points] or [record.id]


def modes_of(ref: str) -> str:
    """The tables in which the mode `COMPONENT.MODE` would have to stand."""
    return f"components component:{ref.partition('.')[0]}"


class EffectTable:
    """Effects on the nodes of a circuit; what is laid later replaces what was there.

    Attributes:
        effects: node id to mode reference to effect.
    """

    def __init__(
        self,
        records: Mapping[str, Condition],
        shared: Mapping[str, Condition],
        points: Iterable[str],
        faults: Faults,
    ) -> None:
        self.records = records
        self.shared = shared
        self.points = frozenset(points)
        self.faults = faults
        self.effects: dict[str, dict[str, Effect]] = {}
        for record in records.values():
            own = {UNLISTED: _unlisted(record)} if record.unlisted else {}
            self.effects |= {name: dict(own) for name in node_ids(record)}

    def nodes(self) -> dict[str, Node]:
        """All conditions at all their points."""
        return {
            name: Node(name, record, name.partition("@")[2] or None, self.effects[name])
            for record in self.records.values()
            for name in node_ids(record)
        }

    def lay_kind(self, component: Component, kind: Kind) -> None:
        """Lays the effects that a kind gives its modes.

        Kinds are shared, so conditions and points that this circuit does not tell apart are
        passed over; names that no circuit could have are problems.
        """
        for mode in component.modes:
            for place, effect in mode.record.shows.items():
                self._lay_own(mode, place, effect)
        for check in kind.checks:
            self._lay_inspection(component, kind, check)

    def _lay_own(self, mode: Mode, place: str, effect: Effect) -> None:
        path, at = f"{mode.record.id}.shows.{place}", ("shows", place)
        where = mode.record.where
        name, _, point = place.partition("@")
        record = self.records.get(name)
        if record is None:
            if name not in self.shared:
                self._missing(where, path, "shared condition", name, self.shared, at)
        elif not point or point in record.points:
            self._lay(mode.ref, place, effect, path)
        elif not record.points or point not in self._points_of(name):
            self._missing(where, path, f"point of {name}", point, record.points, at)

    def _points_of(self, name: str) -> frozenset[str]:
        """Points that some circuit may tell this condition apart at."""
        return self.points.union(self.shared[name].points if name in self.shared else ())

    def _lay_inspection(self, component: Component, kind: Kind, check: Check) -> None:
        name = f"{component.id}_{check.id}"
        present, known = {m.ref for m in component.modes}, [m.id for m in kind.modes]
        for mode, chance in check.sees.items():
            ref, path = f"{component.id}.{mode}", f"{check.id}.sees.{mode}"
            if mode not in known:
                what, kept, at = f"mode of {kind.id}", f"kind:{component.kind}", ("sees", mode)
                self.faults.dangling(check.where, path, what, mode, known, kept, at)
            elif name in self.effects and ref in present:
                effect = Effect(where=check.where, basis=check.basis, gives={"found": chance})
                self.effects[name][ref] = effect

    def lay_links(self, table: LinksFile | Overlay, modes: Mapping[str, Mode]) -> None:
        """Lays the links of a file; every name in it must be one of this circuit."""
        for ref, places in table.links.items():
            if ref not in modes:
                what, path, at = "mode in this circuit", f"links.{ref}", ("links", ref)
                self.faults.dangling(table.where, path, what, ref, modes, modes_of(ref), at)
                continue
            for place, effect in places.items():
                self._lay_link(table.where, ref, place, effect)

    def _lay_link(self, where: Origin, ref: str, place: str, effect: Effect) -> None:
        path, at = f"links.{ref}.{place}", ("links", ref, place)
        name, _, point = place.partition("@")
        record = self.records.get(name)
        if record is None:
            self._missing(where, path, "condition", name, self.records, at)
        elif point and point not in record.points:
            self._missing(where, path, f"point of {name}", point, record.points, at)
        else:
            self._lay(ref, place, effect, path)

    def _missing(
        self,
        where: Origin,
        path: str,
        what: str,
        name: str,
        known: Iterable[str],
        at: tuple[str, ...],
    ) -> None:
        self.faults.dangling(where, path, what, name, known, "conditions use points", at)

    def _lay(self, ref: str, place: str, effect: Effect, path: str) -> None:
        record = self.records[place.partition("@")[0]]
        abnormal = [state for state in record.states if state != record.normal]
        for state in effect.gives:
            if state not in abnormal:
                what = f"abnormal state of {record.id}"
                where, at = f"{path}.{state}", (state,)
                self.faults.dangling(effect.where, where, what, state, abnormal, "", at)
                return
        for target in [place] if "@" in place else node_ids(record):
            self.effects[target][ref] = effect


def _unlisted(record: Condition) -> Effect:
    # A condition that a cause not listed cannot touch has no chances to give.
    return Effect.model_construct(
        where=record.where, basis=record.basis, note="", gives=record.unlisted
    )


@dataclass(frozen=True, slots=True)
class Promotion:
    """One mode raising (or lowering) the odds of another by a factor."""

    source: str
    target: str
    factor: float
    where: Origin


def with_promotions(
    components: Mapping[str, Component],
    kinds: Mapping[str, Kind],
    links: Iterable[LinksFile],
    faults: Faults,
) -> dict[str, Component]:
    """The components with the promotions of kinds and links merged, as far as they run.

    Promotions must not run in a circle, from component to component: a network of causes
    has no cycles, and the modes of one component exclude each other anyway.
    """
    modes = {m.ref: m for c in components.values() for m in c.modes}
    found: dict[tuple[str, str], Promotion] = {}
    for promotion in _of_kinds(modes, components, kinds, faults):
        found[promotion.source, promotion.target] = promotion
    for table in links:
        for promotion in _of_links(table, modes, faults):
            found[promotion.source, promotion.target] = promotion
    for circle in circles(found.values()):
        path = f"promotes.{circle[0].source}.{circle[0].target}"
        faults.note(circle[0].where, path, f"causes run in a circle: {_chain(circle)}")
    return {name: _promoting(component, found.values()) for name, component in components.items()}


def _of_kinds(
    modes: Mapping[str, Mode],
    components: Mapping[str, Component],
    kinds: Mapping[str, Kind],
    faults: Faults,
) -> Iterator[Promotion]:
    for ref, mode in modes.items():
        for target, factor in mode.record.promotes.items():
            owner, _, name = target.partition(".")
            path, at = f"{mode.record.id}.promotes.{target}", ("promotes", target)
            where = mode.record.where
            if target in modes:
                yield Promotion(ref, target, factor, faults.locate(where, at))
            elif owner in components:
                known = [m.id for m in kinds[components[owner].kind].modes]
                if name not in known:
                    faults.dangling(
                        where, path, f"mode of {owner}", name, known, modes_of(target), at
                    )


def _of_links(table: LinksFile, modes: Mapping[str, Mode], faults: Faults) -> Iterator[Promotion]:
    for ref, targets in table.promotes.items():
        for target, factor in targets.items():
            at = ("promotes", ref, target)[: 3 if ref in modes else 2]
            missing = next((name for name in (ref, target) if name not in modes), None)
            if missing is None:
                yield Promotion(ref, target, factor, faults.locate(table.where, at))
            else:
                path, what = ".".join(at), "mode in this circuit"
                faults.dangling(table.where, path, what, missing, modes, modes_of(missing), at)


def _promoting(component: Component, promotions: Iterable[Promotion]) -> Component:
    given = list(promotions)
    if not given and not any(m.record.promotes for m in component.modes):
        return component
    modes = []
    for mode in component.modes:
        promotes = {p.target: p.factor for p in given if p.source == mode.ref}
        record = mode.record.model_copy(update={"promotes": promotes})
        modes.append(replace(mode, record=record))
    return replace(component, modes=tuple(modes))


def circles(promotions: Iterable[Promotion]) -> Iterator[list[Promotion]]:
    """Promotions that lead from a component back to it, one circle after the other."""
    steps: dict[tuple[str, str], Promotion] = {}
    for promotion in promotions:
        steps.setdefault((_owner(promotion.source), _owner(promotion.target)), promotion)
    while circle := _circle(steps):
        yield [steps[pair] for pair in circle]
        # Without its last step this circle is broken, and the next one shows.
        del steps[circle[-1]]


def _circle(steps: Iterable[tuple[str, str]]) -> list[tuple[str, str]]:
    sorter: TopologicalSorter[str] = TopologicalSorter()
    for source, target in steps:
        sorter.add(target, source)
    try:
        sorter.prepare()
    except CycleError as error:
        ring = error.args[1]
        return list(pairwise(ring))
    return []


def _owner(ref: str) -> str:
    return ref.partition(".")[0]


def _chain(circle: Iterable[Promotion]) -> str:
    """`a.worn -> b.stuck -> a.worn`; a comma where another mode of a component goes on."""
    text, last = "", ""
    for step in circle:
        text += f" -> {step.target}" if step.source == last else f", {step.source} -> {step.target}"
        last = step.target
    return text.removeprefix(", ")

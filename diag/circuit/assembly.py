"""Lays kinds, shared vocabulary and overlays into one circuit, checking every name."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any, TypeAlias

from diag.circuit.causes import EffectTable, with_promotions
from diag.circuit.faults import Faults
from diag.circuit.model import (
    UNLISTED,
    Circuit,
    Component,
    Mode,
    Node,
    Observable,
    Remedy,
    mode_probability,
)
from diag.circuit.overlays import Overlays
from diag.circuit.records import (
    CautionsFile,
    Check,
    CircuitFile,
    ComponentUse,
    Condition,
    ConditionsFile,
    Indication,
    Kind,
    LinksFile,
    ModeRecord,
    ObservationsFile,
    Overlay,
    Rate,
    Record,
    Rectification,
    SharedConditionsFile,
    SourcesFile,
    Step,
)
from diag.circuit.references import REFERENCE_CHECKS, Named
from diag.circuit.rule_checks import rules_known
from diag.circuit.rules import Rule, RulesFile, named_places
from diag.errors import Origin

Observation: TypeAlias = Indication | Check


@dataclass(slots=True)
class Parts:
    """All that was read for one circuit, beside its head."""

    links: list[LinksFile]
    observations: list[ObservationsFile]
    shared_conditions: SharedConditionsFile | None
    shared_checks: ObservationsFile | None
    cautions: CautionsFile | None
    sources: SourcesFile | None
    overlays: list[Overlay]
    shared_rules: list[RulesFile] = field(default_factory=list)
    rules: list[RulesFile] = field(default_factory=list)
    kinds: dict[str, Kind] = field(default_factory=dict)

    def records(self) -> Iterator[Record]:
        """Every file, as its record."""
        files = (self.shared_conditions, self.shared_checks, self.cautions, self.sources)
        yield from (file for file in files if file is not None)
        yield from (*self.links, *self.observations, *self.overlays, *self.kinds.values())
        yield from (*self.shared_rules, *self.rules)


class Assembly:
    """Builds a `Circuit`; every fault it meets lands in `faults`."""

    def __init__(
        self,
        head: CircuitFile,
        conditions: ConditionsFile,
        parts: Parts,
        content_hash: str,
        faults: Faults,
    ) -> None:
        self.conditions_file = conditions
        self.parts = parts
        self.content_hash = content_hash
        self.faults = faults
        self.overlays = Overlays(parts.overlays, head.id, faults)
        self.head = self.overlays.head(head)
        shared = parts.shared_conditions
        self.shared = {c.id: c for c in shared.conditions} if shared else {}
        self.declared = {use.id for use in head.components}
        doubtful = (use.id for use in head.components if f"kind:{use.kind}" in faults.unsure)
        faults.unsure |= {f"component:{name}" for name in doubtful}

    def circuit(self) -> Circuit:
        """The circuit as far as it could be built; usable only without problems."""
        self._unique_ids()
        components = self._components()
        records = self._conditions()
        observations = self._observations(components, records)
        nodes = self._nodes(components, records)
        observables = self._observables(observations, nodes)
        remedies = self._remedies(components, observables)
        cautions, sources = self.parts.cautions, self.parts.sources
        circuit = Circuit(
            file=self.head,
            components=components,
            nodes=nodes,
            observables=observables,
            remedies=remedies,
            cautions={c.id: c.text for c in cautions.cautions} if cautions else {},
            sources=sources.sources if sources else {},
            overlays=tuple(o.overlay for o in self.overlays.given),
            content_hash=self.content_hash,
            rules=self._rules(observables),
        )
        self._check_references(circuit, observations)
        return circuit

    def _unique_ids(self) -> None:
        head, parts = self.head, self.parts
        for table in (head.components, head.openings, head.engine_states, self._own_conditions()):
            self.faults.unique(table)
        self.faults.unique(parts.shared_conditions.conditions if parts.shared_conditions else ())
        self.faults.unique(parts.cautions.cautions if parts.cautions else ())
        for kind in parts.kinds.values():
            self.faults.unique((*kind.modes, *kind.checks, *kind.rectifications))

    def _own_conditions(self) -> tuple[Any, ...]:
        return (*self.conditions_file.use, *self.conditions_file.conditions)

    def _check_references(self, circuit: Circuit, observations: Sequence[Observation]) -> None:
        steps: list[Step] = [*observations, *(r.record for r in circuit.remedies.values())]
        read = [self.conditions_file, *self.parts.records()]
        for check in REFERENCE_CHECKS:
            check(Named(circuit, steps, read), self.faults)
        rules_known(circuit, self.faults)

    def _rules(self, observables: Mapping[str, Observable]) -> tuple[Rule, ...]:
        """The circuit's own rules, and the shared ones whose observations it has."""
        shared = [rule for file in self.parts.shared_rules for rule in file.rules]
        own = [rule for file in self.parts.rules for rule in file.rules]
        kept = [r for r in shared if all(place in observables for place in named_places(r))]
        self.faults.unique((*own, *shared))
        return (*kept, *own)

    # -- components and modes ---------------------------------------------------------

    def _components(self) -> dict[str, Component]:
        found = {}
        for use in self.head.components:
            if kind := self.parts.kinds.get(use.kind):
                self._check_use(use, kind)
                modes = tuple(self._mode(use, m) for m in kind.modes if m.id not in use.omit)
                title = use.title or kind.title
                found[use.id] = Component(use.id, use.kind, title, kind.role, modes, use.where)
        modes_known = [m.ref for c in found.values() for m in c.modes]
        self.overlays.check_names("rates", modes_known, "components")
        return with_promotions(found, self.parts.kinds, self.parts.links, self.faults)

    def _check_use(self, use: ComponentUse, kind: Kind) -> None:
        if use.id == UNLISTED.partition(".")[0]:
            message = "this id stands for causes the circuit does not list"
            self.faults.note(use.where, f"{use.id}.id", message, ("id",), use.id, "another id")
        modes = {m.id for m in kind.modes}
        parts = modes | {x.id for x in kind.checks} | {x.id for x in kind.rectifications}
        what, kept = f"mode, check or rectification of {kind.id}", f"kind:{use.kind}"
        self.faults.expect(use.where, use.id, "omit", use.omit, what, parts, kept)
        what = f"mode of {kind.id}"
        self.faults.expect(use.where, use.id, "rates", use.rates, what, modes, kept)

    def _mode(self, use: ComponentUse, record: ModeRecord) -> Mode:
        ref = f"{use.id}.{record.id}"
        rate = self.overlays.rate(use.rates.get(record.id, record.rate), ref)
        events = self.head.exposure.events
        if rate.event is not None and rate.event not in events:
            what, path = "event in the circuit's exposure", f"{ref}.rate.event"
            self.faults.dangling(rate.where, path, what, rate.event, events, "exposure", ("event",))
        return Mode(ref, use.id, record.title, record, rate, self._probability(rate, ref))

    def _probability(self, rate: Rate, ref: str) -> float:
        chance = mode_probability(rate, self.head.exposure)
        if chance < 0.5:
            return chance
        message = "this rate and the exposure make a fault likelier than not"
        self.faults.note(rate.where, ref, message, (), round(chance, 3), "a prior below 0.5")
        return 0.5

    # -- conditions -------------------------------------------------------------------

    def _conditions(self) -> dict[str, Condition]:
        found: dict[str, Condition] = {}
        for use in self.conditions_file.use:
            base = self.shared.get(use.id)
            if base is None:
                path, known = f"use.{use.id}", self.shared
                self.faults.dangling(
                    use.where, path, "shared condition", use.id, known, "conditions", ("id",)
                )
                continue
            update = {"points": use.points or base.points, "at": use.at}
            found[use.id] = base.model_copy(update=update)
            self._check_condition(found[use.id], use.where)
        for condition in self.conditions_file.conditions:
            found[condition.id] = condition
            self._check_condition(condition, condition.where)
        return found

    def _check_condition(self, condition: Condition, where: Origin) -> None:
        name, points, at = condition.id, condition.points, condition.at
        known = self.head.points
        self.faults.expect(where, name, "points", points, "operating point", known, "points")
        self.faults.expect(where, name, "at", at, "component", self.declared, "components")

    # -- observations -----------------------------------------------------------------

    def _observations(
        self, components: Mapping[str, Component], records: dict[str, Condition]
    ) -> list[Observation]:
        found: list[Observation] = []
        for file in self.parts.observations:
            found += [*file.indications, *file.checks]
        found += self._shared_observations({o.id for o in found}, records)
        for use in self.head.components:
            if use.id in components:
                found += self._kind_checks(use, self.parts.kinds[use.kind], records)
        self.faults.unique(found)
        for table, cls in (("checks", Check), ("indications", Indication)):
            self.overlays.check_names(table, {o.id for o in found if isinstance(o, cls)}, table)
        return [self.overlays.changed(o, f"{o.kind}s", o.id) for o in found]

    def _shared_observations(
        self, taken: set[str], records: Mapping[str, Condition]
    ) -> Iterator[Observation]:
        """Shared observations of conditions that the circuit has, unless it has its own."""
        file = self.parts.shared_checks
        shared: list[Observation] = [*file.indications, *file.checks] if file else []
        self.faults.unique(shared)
        known = {o.id for o in shared}
        omitted: set[str] = set()
        for own in self.parts.observations:
            omitted |= set(own.omit)
            where, what = own.where, "shared check"
            self.faults.expect(where, "checks", "omit", own.omit, what, known, "checks")
        for observation in shared:
            subject = (observation.reads or "").split("@")[0]
            if subject in records and observation.id not in taken | omitted:
                yield observation

    def _kind_checks(
        self, use: ComponentUse, kind: Kind, records: dict[str, Condition]
    ) -> Iterator[Observation]:
        for check in kind.checks:
            subject = (check.reads or "").split("@")[0]
            passed_over = subject in self.shared and subject not in records
            if check.id in use.omit or passed_over:
                continue
            name = f"{use.id}_{check.id}"
            update: dict[str, Any] = {"id": name, "title": _titled(check, use)}
            if check.sees:
                if name in records:
                    path, message = f"{kind.id}.{check.id}", "a condition has the id of this check"
                    self.faults.note(check.where, path, message, ("id",), name, "a new id")
                records[name] = _inspection(name, check, use)
                update |= {"reads": name, "sees": {}}
            yield check.model_copy(update=update)

    # -- nodes ------------------------------------------------------------------------

    def _nodes(
        self, components: Mapping[str, Component], records: Mapping[str, Condition]
    ) -> dict[str, Node]:
        table = EffectTable(records, self.shared, self.head.points, self.faults)
        modes = {m.ref: m for c in components.values() for m in c.modes}
        for component in components.values():
            table.lay_kind(component, self.parts.kinds[component.kind])
        files: list[LinksFile | Overlay] = [*self.parts.links, *self.overlays.given]
        for file in files:
            table.lay_links(file, modes)
        return table.nodes()

    # -- observables and remedies -----------------------------------------------------

    def _observables(
        self, observations: Sequence[Observation], nodes: Mapping[str, Node]
    ) -> dict[str, Observable]:
        found: dict[str, Observable] = {}
        for record in observations:
            where, through, known = record.where, record.through, self.declared
            self.faults.expect(
                where, record.id, "through", through, "component", known, "components"
            )
            for point in record.points or (None,):
                if made := self._observable(record, point, nodes):
                    found[made.id] = made
                else:
                    # Its own problem is told; a rectification proved by it has no other.
                    self.faults.unsure.add(f"{record.kind}s")
        return found

    def _observable(
        self, record: Observation, point: str | None, nodes: Mapping[str, Node]
    ) -> Observable | None:
        reads = record.reads or record.id
        target = reads if "@" in reads or point is None else f"{reads}@{point}"
        node = nodes.get(target) or nodes.get(reads)
        if node is None:
            path, what = f"{record.id}.reads", "condition at this point"
            at = ("reads",)
            self.faults.dangling(record.where, path, what, target, nodes, "conditions use", at)
            return None
        outcomes = self._outcomes(record, node)
        if outcomes is None or not self._scale_fits(record, point, node):
            return None
        normal = next(o for o, states in outcomes.items() if node.record.normal in states)
        words = list(outcomes)
        reports = tuple(
            next(i for i, word in enumerate(words) if state in outcomes[word])
            for state in node.record.states
        )
        name = f"{record.id}@{point}" if point else record.id
        through = record.through
        return Observable(name, record, point, node.id, tuple(words), normal, reports, through)

    def _outcomes(self, record: Observation, node: Node) -> dict[str, tuple[str, ...]] | None:
        states = node.record.states
        outcomes = record.outcomes or {s: (s,) for s in states}
        reported = [s for reports in outcomes.values() for s in reports]
        path = f"{record.id}.outcomes"
        if sorted(reported) != sorted(states):
            message = "every state of the condition belongs to exactly one outcome"
            value, accepted = ", ".join(reported), ", ".join(states)
            self.faults.note(record.where, path, message, ("outcomes",), value, accepted)
            return None
        self.faults.expect(record.where, record.id, "words", record.words, "outcome", outcomes)
        return outcomes

    def _scale_fits(self, record: Observation, point: str | None, node: Node) -> bool:
        if record.scale is None:
            return True
        limits, key = record.scale.limits, point or "any"
        cuts = limits.get(key, limits.get("any"))
        need = len(node.record.states) - 1
        if cuts is not None and len(cuts) == need:
            return True
        path, at = f"{record.id}.scale.limits.{key}", ("limits", key if key in limits else "any")
        value = list(cuts) if cuts is not None else ""
        message, accepted = "not the limits between the states", f"{need} numbers, rising"
        self.faults.note(record.scale.where, path, message, at, value, accepted)
        return False

    def _remedies(
        self, components: Mapping[str, Component], observables: Mapping[str, Observable]
    ) -> dict[str, Remedy]:
        found: dict[str, Remedy] = {}
        for use in self.head.components:
            if use.id not in components:
                continue
            for record in self.parts.kinds[use.kind].rectifications:
                if record.id in use.omit:
                    continue
                if made := self._remedy(record, use, components[use.id], observables):
                    found[made.id] = made
        self.overlays.check_names("rectifications", found, "rectifications")
        return found

    def _remedy(
        self,
        record: Rectification,
        use: ComponentUse,
        component: Component,
        observables: Mapping[str, Observable],
    ) -> Remedy | None:
        name = f"{use.id}_{record.id}"
        update = {"id": name, "title": _titled(record, use)}
        own = self.overlays.changed(record.model_copy(update=update), "rectifications", name)
        known = [m.id for m in self.parts.kinds[use.kind].modes]
        where, what, kept = own.where, f"mode of {use.kind}", f"kind:{use.kind}"
        self.faults.expect(where, record.id, "restores", own.restores, what, known, kept)
        present = {m.ref for m in component.modes}
        restores = tuple(r for m in own.restores if (r := f"{use.id}.{m}") in present)
        if not restores:
            return None
        if own.verify not in observables:
            path, what, at = f"{record.id}.verify", "observation in this circuit", ("verify",)
            tables = "checks indications conditions use"
            self.faults.dangling(own.where, path, what, own.verify, observables, tables, at)
        return Remedy(name, own, use.id, restores)


def _inspection(name: str, check: Check, use: ComponentUse) -> Condition:
    """The condition that an inspection of own modes looks at: found or clear."""
    return Condition(
        where=check.where, id=name, title=check.title, basis=check.basis, at=(use.id,),
        states=("clear", "found"), normal="clear", leak={}, unlisted={},
    )  # fmt: skip


def _titled(step: Step, use: ComponentUse) -> str:
    """The kind's words, with the instance's own title where it has one."""
    if not use.title:
        return step.title
    return f"{use.title}: {step.title[0].lower()}{step.title[1:]}"

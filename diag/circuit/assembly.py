"""Lays kinds, shared vocabulary and overlays into one circuit, checking every name."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from difflib import get_close_matches
from typing import Any, TypeAlias, TypeVar

from pydantic import ValidationError

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
from diag.circuit.reading import brief, dotted
from diag.circuit.records import (
    Based,
    CautionsFile,
    Check,
    CircuitFile,
    ComponentUse,
    Condition,
    ConditionsFile,
    Effect,
    Indication,
    Kind,
    LinksFile,
    ObservationsFile,
    Overlay,
    Record,
    Rectification,
    SharedConditionsFile,
    SourcesFile,
    Step,
)
from diag.errors import Origin, Problem

R = TypeVar("R", bound=Record)
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
    kinds: dict[str, Kind] = field(default_factory=dict)


class Assembly:
    """Builds a `Circuit`; every fault lands in `problems`."""

    def __init__(
        self, head: CircuitFile, conditions: ConditionsFile, parts: Parts, content_hash: str
    ) -> None:
        self.head = head
        self.conditions_file = conditions
        self.parts = parts
        self.content_hash = content_hash
        self.problems: list[Problem] = []
        shared = parts.shared_conditions
        self.shared = {c.id: c for c in shared.conditions} if shared else {}

    def circuit(self) -> Circuit:
        """The circuit as far as it could be built; usable only without problems."""
        self._unique((c.id, c.where) for c in self.head.components)
        self.head = self._overlaid_head()
        components = self._components()
        records = self._conditions(components)
        observations = self._observations(components, records)
        nodes = self._nodes(components, records)
        observables = self._observables(observations, nodes, components)
        remedies = self._remedies(components, observables)
        self._check_cautions([*observations, *(r.record for r in remedies.values())])
        self._check_sources(components, nodes)
        return Circuit(
            file=self.head,
            components=components,
            nodes=nodes,
            observables=observables,
            remedies=remedies,
            cautions=self._caution_texts(),
            sources=self.parts.sources.sources if self.parts.sources else {},
            overlays=tuple(o.overlay for o in self.parts.overlays),
            content_hash=self.content_hash,
        )

    # -- problems ---------------------------------------------------------------------

    def fault(self, where: Origin, path: str, message: str, known: Iterable[str] = ()) -> None:
        """Notes a problem; `known` names are narrowed to the nearest."""
        names = list(known)
        value = path.rsplit(".", 1)[-1]
        near = get_close_matches(value, names, n=3, cutoff=0.5) or names[:8]
        self.problems.append(Problem(where, path, message, accepted=", ".join(near)))

    def _unique(self, ids: Iterable[tuple[str, Origin]]) -> None:
        seen: dict[str, Origin] = {}
        for name, where in ids:
            if name in seen:
                self.fault(where, name, f"id {name} stands twice, first at {seen[name]}")
            seen.setdefault(name, where)

    # -- overlays ---------------------------------------------------------------------

    def _changes(self, table: str, name: str) -> list[tuple[Overlay, Mapping[str, Any]]]:
        found = []
        for overlay in self.parts.overlays:
            if overlay.circuit not in (None, self.head.id):
                continue
            changes: Mapping[str, Any] = getattr(overlay, table)
            if name in changes:
                found.append((overlay, changes[name]))
        return found

    def _changed(self, record: R, table: str, name: str) -> R:
        """`record` with the overlays' fields laid over it, checked anew."""
        for overlay, fields in self._changes(table, name):
            record = self._revised(record, fields, overlay, f"{table}.{name}")
        return record

    def _revised(self, record: R, fields: Mapping[str, Any], overlay: Overlay, path: str) -> R:
        old = record.model_dump(exclude={"kind"})
        merged = _merged(old, fields)
        if isinstance(record, Based):
            merged["basis"] = fields.get("basis", overlay.basis)
        where = getattr(fields, "origin", overlay.where)
        try:
            return type(record).model_validate({**merged, "where": record.where})
        except ValidationError as error:
            for fault in error.errors(include_url=False):
                place = f"{path}.{dotted(fault['loc'])}"
                message = str(fault["msg"]).removeprefix("Value error, ")
                self.problems.append(Problem(where, place, message, brief(fault["input"])))
            return record

    def _overlaid_head(self) -> CircuitFile:
        head = self.head
        states = tuple(self._changed(s, "engine_states", s.id) for s in head.engine_states)
        openings = tuple(self._changed(o, "openings", o.id) for o in head.openings)
        update: dict[str, Any] = {"engine_states": states, "openings": openings}
        for name in ("costs", "exposure", "unlisted"):
            record = getattr(head, name)
            for overlay in self.parts.overlays:
                if overlay.circuit in (None, head.id) and (fields := getattr(overlay, name)):
                    record = self._revised(record, fields, overlay, name)
            update[name] = record
        self._check_overlay_ids("engine_states", {s.id for s in states})
        self._check_overlay_ids("openings", {o.id for o in openings})
        return head.model_copy(update=update)

    def _check_overlay_ids(self, table: str, known: Iterable[str]) -> None:
        names = set(known)
        for overlay in self.parts.overlays:
            if overlay.circuit not in (None, self.head.id):
                continue
            for name, fields in getattr(overlay, table).items():
                if name not in names:
                    where = getattr(fields, "origin", overlay.where)
                    self.fault(where, f"{table}.{name}", f"no {name} in this circuit", names)

    # -- components and modes ---------------------------------------------------------

    def _components(self) -> dict[str, Component]:
        found = {}
        for use in self.head.components:
            kind = self.parts.kinds.get(use.kind)
            if kind is None:
                continue
            self._check_use(use, kind)
            modes = tuple(self._mode(use, m) for m in kind.modes if m.id not in use.omit)
            title = use.title or kind.title
            found[use.id] = Component(use.id, kind.id, title, kind.role, modes, use.where)
        modes_known = [m.ref for c in found.values() for m in c.modes]
        self._check_overlay_ids("rates", modes_known)
        self._check_overlay_ids("links", modes_known)
        return found

    def _check_use(self, use: ComponentUse, kind: Kind) -> None:
        self._unique((x.id, x.where) for x in (*kind.modes, *kind.checks, *kind.rectifications))
        modes = {m.id for m in kind.modes}
        parts = modes | {x.id for x in (*kind.checks, *kind.rectifications)}
        for name in use.omit:
            if name not in parts:
                self.fault(use.where, f"{use.id}.omit.{name}", f"{kind.id} has no {name}", parts)
        for name in use.rates:
            if name not in modes:
                self.fault(use.where, f"{use.id}.rates.{name}", f"{kind.id} has no {name}", modes)

    def _mode(self, use: ComponentUse, record: Any) -> Mode:
        ref = f"{use.id}.{record.id}"
        rate = use.rates.get(record.id, record.rate)
        for overlay, fields in self._changes("rates", ref):
            kept = {} if {"per_event", "per_million_hours"} & set(fields) else rate.model_dump()
            rate = self._revised(rate.model_copy(update={}), _replace(kept, fields), overlay, ref)
        if rate.event is not None and rate.event not in self.head.exposure.events:
            known = self.head.exposure.events
            self.fault(rate.where, rate.event, "the circuit's exposure has no such event", known)
        return Mode(ref, use.id, record.title, record, rate, self._probability(rate, ref))

    def _probability(self, rate: Any, ref: str) -> float:
        chance = mode_probability(rate, self.head.exposure)
        if chance >= 0.5:
            self.fault(rate.where, ref, f"prior {chance:.3g} is too high to be a rate of failure")
            return 0.5
        return chance

    # -- conditions -------------------------------------------------------------------

    def _conditions(self, components: Mapping[str, Component]) -> dict[str, Condition]:
        found: dict[str, Condition] = {}
        own = self.conditions_file
        self._unique((c.id, c.where) for c in (*own.use, *own.conditions))
        for use in own.use:
            base = self.shared.get(use.id)
            if base is None:
                self.fault(use.where, f"use.{use.id}", f"no shared condition {use.id}", self.shared)
                continue
            update = {"points": use.points or base.points, "at": use.at}
            found[use.id] = base.model_copy(update=update)
        found |= {c.id: c for c in own.conditions}
        for condition in found.values():
            self._check_condition(condition, components)
        return found

    def _check_condition(self, condition: Condition, components: Mapping[str, Component]) -> None:
        for point in condition.points:
            if point not in self.head.points:
                path = f"{condition.id}.points.{point}"
                self.fault(condition.where, path, "unknown operating point", self.head.points)
        for name in condition.at:
            if name not in components:
                path = f"{condition.id}.at.{name}"
                self.fault(condition.where, path, f"no component {name}", components)

    # -- observations -----------------------------------------------------------------

    def _observations(
        self, components: Mapping[str, Component], records: dict[str, Condition]
    ) -> list[Observation]:
        found = [o for f in self.parts.observations for o in (*f.indications, *f.checks)]
        taken = {o.id for o in found}
        omitted = {name for f in self.parts.observations for name in f.omit}
        shared = self.parts.shared_checks
        for check in (*shared.indications, *shared.checks) if shared else ():
            subject = (check.reads or "").split("@")[0]
            if subject in records and check.id not in taken | omitted:
                found.append(check)
        for use in self.head.components:
            found += self._kind_checks(use, components, records)
        self._unique((o.id, o.where) for o in found)
        for table, cls in (("checks", Check), ("indications", Indication)):
            self._check_overlay_ids(table, {o.id for o in found if isinstance(o, cls)})
        return [self._changed(o, f"{o.kind}s", o.id) for o in found]

    def _kind_checks(
        self,
        use: ComponentUse,
        components: Mapping[str, Component],
        records: dict[str, Condition],
    ) -> list[Observation]:
        kind = self.parts.kinds.get(use.kind)
        if kind is None or use.id not in components:
            return []
        found: list[Observation] = []
        for check in kind.checks:
            subject = (check.reads or "").split("@")[0]
            missing = check.reads is not None and subject not in records
            if check.id in use.omit or (missing and subject in self.shared):
                continue
            name = f"{use.id}_{check.id}"
            update: dict[str, Any] = {"id": name, "title": _titled(check, use, kind)}
            if check.sees:
                records[name] = self._inspection(name, check, use)
                update |= {"reads": name}
            found.append(check.model_copy(update=update))
        return found

    def _inspection(self, name: str, check: Check, use: ComponentUse) -> Condition:
        """The condition that an inspection of own modes looks at: found or clear."""
        return Condition(
            where=check.where, id=name, title=check.title, basis=check.basis, at=(use.id,),
            states=("clear", "found"), normal="clear", leak={}, unlisted={},
        )  # fmt: skip

    # -- nodes ------------------------------------------------------------------------

    def _nodes(
        self, components: Mapping[str, Component], records: Mapping[str, Condition]
    ) -> dict[str, Node]:
        effects: dict[str, dict[str, Effect]] = {}
        for record in records.values():
            for name in _node_ids(record):
                effects[name] = {}
                unlisted = Effect.model_construct(
                    where=record.where, basis=record.basis, note="", gives=record.unlisted
                )
                if record.unlisted:
                    effects[name][UNLISTED] = unlisted
        for component in components.values():
            self._own_effects(component, records, effects)
        for tables in (self.parts.links, self.parts.overlays):
            for table in tables:
                self._link_effects(table, components, records, effects)
        return {
            name: Node(name, record, name.partition("@")[2] or None, effects[name])
            for record in records.values()
            for name in _node_ids(record)
        }

    def _own_effects(
        self,
        component: Component,
        records: Mapping[str, Condition],
        effects: dict[str, dict[str, Effect]],
    ) -> None:
        for mode in component.modes:
            for place, effect in mode.record.shows.items():
                if place.split("@")[0] in records:
                    self._add(mode.ref, place, effect, records, effects)
                elif place.split("@")[0] not in self.shared:
                    self.fault(effect.where, place, "no such shared condition", self.shared)
        kind = self.parts.kinds[component.kind]
        known = {m.id: m for m in kind.modes}
        for check in kind.checks:
            for mode_id, chance in check.sees.items():
                ref = f"{component.id}.{mode_id}"
                if mode_id not in known:
                    self.fault(check.where, f"sees.{mode_id}", "no such mode", known)
                elif f"{component.id}_{check.id}" in records and any(
                    m.ref == ref for m in component.modes
                ):
                    gives = {"found": chance}
                    effect = Effect(where=check.where, basis=check.basis, gives=gives)
                    effects[f"{component.id}_{check.id}"][ref] = effect

    def _link_effects(
        self,
        table: LinksFile | Overlay,
        components: Mapping[str, Component],
        records: Mapping[str, Condition],
        effects: dict[str, dict[str, Effect]],
    ) -> None:
        modes = {m.ref for c in components.values() for m in c.modes}
        for ref, places in table.links.items():
            for place, effect in places.items():
                if ref not in modes:
                    self.fault(effect.where, ref, "no such mode in this circuit", modes)
                    break
                self._add(ref, place, effect, records, effects)

    def _add(
        self,
        ref: str,
        place: str,
        effect: Effect,
        records: Mapping[str, Condition],
        effects: dict[str, dict[str, Effect]],
    ) -> None:
        name, _, point = place.partition("@")
        record = records.get(name)
        if record is None:
            self.fault(effect.where, f"{ref}.{place}", f"no condition {name}", records)
            return
        for state in effect.gives:
            if state not in record.states or state == record.normal:
                known = [s for s in record.states if s != record.normal]
                self.fault(effect.where, f"{ref}.{place}.{state}", "no abnormal state", known)
                return
        targets = [place] if point else _node_ids(record)
        for target in targets:
            if target in effects:
                effects[target][ref] = effect
            elif name not in self.shared or point not in self.head.points:
                known = _node_ids(record)
                self.fault(effect.where, f"{ref}.{place}", f"{name} has no such point", known)

    # -- observables and remedies -----------------------------------------------------

    def _observables(
        self,
        observations: Sequence[Observation],
        nodes: Mapping[str, Node],
        components: Mapping[str, Component],
    ) -> dict[str, Observable]:
        found: dict[str, Observable] = {}
        for record in observations:
            for name in record.through:
                if name not in components:
                    path = f"{record.id}.through.{name}"
                    self.fault(record.where, path, f"no component {name}", components)
            for point in record.points or (None,):
                if made := self._observable(record, point, nodes):
                    found[made.id] = made
        return found

    def _observable(
        self, record: Observation, point: str | None, nodes: Mapping[str, Node]
    ) -> Observable | None:
        reads = record.reads or record.id
        target = reads if "@" in reads or point is None else f"{reads}@{point}"
        node = nodes.get(target) or nodes.get(reads)
        path = f"{record.id}.reads.{target}"
        if node is None:
            self.fault(record.where, path, "no such condition at this point", nodes)
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
        outcomes = record.outcomes or {s: (s,) for s in node.record.states}
        reported = [s for states in outcomes.values() for s in states]
        path = f"{record.id}.outcomes"
        if sorted(reported) != sorted(node.record.states):
            message = "every state of the condition belongs to exactly one outcome"
            self.fault(record.where, path, message, node.record.states)
            return None
        for word in record.words:
            if word not in outcomes:
                self.fault(record.where, f"{record.id}.words.{word}", "no such outcome", outcomes)
        return outcomes

    def _scale_fits(self, record: Observation, point: str | None, node: Node) -> bool:
        if record.scale is None:
            return True
        cuts = record.scale.limits.get(point or "any", record.scale.limits.get("any"))
        need = len(node.record.states) - 1
        if cuts is None or len(cuts) != need:
            path = f"{record.id}.scale.limits.{point or 'any'}"
            self.fault(record.scale.where, path, f"needs {need} limits between the states")
            return False
        return True

    def _remedies(
        self, components: Mapping[str, Component], observables: Mapping[str, Observable]
    ) -> dict[str, Remedy]:
        found: dict[str, Remedy] = {}
        for use in self.head.components:
            kind = self.parts.kinds.get(use.kind)
            for record in kind.rectifications if kind else ():
                if record.id in use.omit or use.id not in components:
                    continue
                if made := self._remedy(record, use, kind, components, observables):
                    found[made.id] = made
        self._check_overlay_ids("rectifications", found)
        return found

    def _remedy(
        self,
        record: Rectification,
        use: ComponentUse,
        kind: Kind | None,
        components: Mapping[str, Component],
        observables: Mapping[str, Observable],
    ) -> Remedy | None:
        assert kind is not None
        known = {m.id for m in kind.modes}
        for mode in record.restores:
            if mode not in known:
                self.fault(record.where, f"{record.id}.restores.{mode}", "no such mode", known)
        present = {m.ref for m in components[use.id].modes}
        restores = tuple(r for m in record.restores if (r := f"{use.id}.{m}") in present)
        if not restores:
            return None
        if record.verify not in observables:
            path = f"{record.id}.verify.{record.verify}"
            self.fault(record.where, path, "no such observation in this circuit", observables)
        name = f"{use.id}_{record.id}"
        update = {"id": name, "title": _titled(record, use, kind)}
        own = self._changed(record.model_copy(update=update), "rectifications", name)
        return Remedy(name, own, use.id, restores)

    # -- cautions and sources ---------------------------------------------------------

    def _caution_texts(self) -> dict[str, str]:
        file = self.parts.cautions
        return {c.id: c.text for c in file.cautions} if file else {}

    def _check_cautions(self, steps: Iterable[Step]) -> None:
        known = self._caution_texts()
        openings = {o.id for o in self.head.openings}
        for step in steps:
            for code in step.cautions:
                if code not in known:
                    self.fault(step.where, f"{step.id}.cautions.{code}", "no such caution", known)
            for name in step.needs.opens:
                if name not in openings:
                    path = f"{step.id}.needs.opens.{name}"
                    self.fault(step.where, path, "no such opening", openings)

    def _check_sources(
        self, components: Mapping[str, Component], nodes: Mapping[str, Node]
    ) -> None:
        known = self.parts.sources.sources if self.parts.sources else {}
        based: list[Based] = [m.rate for c in components.values() for m in c.modes]
        based += [effect for node in nodes.values() for effect in node.effects.values()]
        for record in based:
            if not record.basis.startswith("published:"):
                continue
            for name in record.basis.removeprefix("published:").split(","):
                if name.strip() not in known:
                    self.fault(record.where, f"basis.{name.strip()}", "no such source", known)


def _node_ids(record: Condition) -> list[str]:
    return [f"{record.id}@{point}" for point in record.points] or [record.id]


def _titled(step: Step, use: ComponentUse, kind: Kind) -> str:
    """The kind's words, with the instance's own title where it has one."""
    if not use.title:
        return step.title
    return f"{use.title}: {step.title[0].lower()}{step.title[1:]}"


def _merged(old: Mapping[str, Any], new: Mapping[str, Any]) -> dict[str, Any]:
    """`new` laid over `old`, mappings merged key by key."""
    both = dict(old)
    for key, value in new.items():
        inner = both.get(key)
        if isinstance(inner, Mapping) and isinstance(value, Mapping):
            both[key] = _merged(inner, value)
        else:
            both[key] = value
    return both


def _replace(old: Mapping[str, Any], new: Mapping[str, Any]) -> dict[str, Any]:
    """A rate given anew drops the fields of the old kind of rate."""
    cleared = {"per_million_hours": None, "per_event": None, "event": None}
    return {**(old or cleared), **new}

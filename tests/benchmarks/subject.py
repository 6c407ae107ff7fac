"""What the speed tests work on: one finding added to a case of the larger shipped circuit."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from datetime import UTC, datetime
from functools import cached_property

import numpy as np

from diag.belief.evidence import Finding, parse_finding
from diag.belief.frame import Frame
from diag.circuit.loading import load_circuit
from diag.circuit.model import Circuit, Observable
from diag.record.events import Opened
from diag.session import Session
from tests.examples import EXAMPLES, Example

NOW = datetime(2026, 3, 1, 3, 0, tzinfo=UTC)
PUMP_WEAR = next(e for e in EXAMPLES if e.name == "pump_wear")


def findings_of(case: Example) -> list[str]:
    """Findings before the first rectification, in their order."""
    found = list(case.complaint)
    for kind, what in case.steps():
        if kind == "fixed":
            break
        found.append(what)
    return found


def open_case(circuit: Circuit) -> Session:
    """A session with nothing found yet."""
    session = Session(circuit)
    session.add(
        Opened(
            at=NOW,
            circuit=circuit.id,
            version=circuit.file.version,
            content_hash=circuit.content_hash,
        )
    )
    return session


def open_with(circuit: Circuit, findings: Sequence[str]) -> Session:
    """A session in which these findings were taken already, in their order."""
    session = open_case(circuit)
    for text in findings:
        find(session, text)
    return session


def find(session: Session, text: str) -> None:
    """Adds the finding written as `NAME@POINT=VALUE`."""
    finding = parse_finding(session.circuit, text)
    record = finding.observable.record
    session.find(NOW, record.id, finding.observable.point, finding.value)


@dataclass(frozen=True)
class Subject:
    """A circuit with findings, the last of which is the one that is added.

    Attributes:
        count: findings, the added one among them.
        part: only the conditions that the findings read, the components that bear on those,
            and the checks that read them; otherwise the whole circuit.
    """

    count: int
    part: bool

    @cached_property
    def whole(self) -> Circuit:
        return load_circuit(PUMP_WEAR.circuit)

    @property
    def texts(self) -> list[str]:
        return findings_of(PUMP_WEAR)[: self.count]

    @cached_property
    def circuit(self) -> Circuit:
        findings = [parse_finding(self.whole, text) for text in self.texts]
        return part_of(self.whole, findings) if self.part else self.whole

    @cached_property
    def findings(self) -> list[Finding]:
        return [parse_finding(self.circuit, text) for text in self.texts]

    @property
    def checks(self) -> list[Observable]:
        """Findings that could be taken next."""
        taken = {f.key for f in self.findings}
        return [o for o in self.circuit.observables.values() if o.id not in taken]

    def __str__(self) -> str:
        scope = "what the findings bear on" if self.part else "whole circuit"
        size = f"{len(self.circuit.components)} components, {len(self.circuit.nodes)} conditions"
        return f"{scope}: {self.count} findings, {len(self.checks)} checks, {size}"


def part_of(circuit: Circuit, findings: Sequence[Finding]) -> Circuit:
    """The circuit cut down to what the findings bear on."""
    frame = Frame(circuit)
    nodes = {f.observable.node for f in findings}
    through = [name for f in findings for name in f.observable.through]
    modes = np.flatnonzero(frame.bearing_on(nodes, through)[:-1])
    kept = {frame.refs[m].split(".")[0] for m in modes}
    return replace(
        circuit,
        components={k: v for k, v in circuit.components.items() if k in kept},
        nodes={k: v for k, v in circuit.nodes.items() if k in nodes},
        observables={
            k: v
            for k, v in circuit.observables.items()
            if v.node in nodes and kept.issuperset(v.through)
        },
        remedies={},
        rules=(),
    )

"""A circuit with its kinds laid in: what the graph, the network and the session work on."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass

from diag.circuit.records import (
    Check,
    CircuitFile,
    Condition,
    Effect,
    EngineState,
    Exposure,
    Indication,
    Line,
    ModeRecord,
    Opening,
    Rate,
    Rectification,
)
from diag.circuit.rules import Rule
from diag.errors import Origin, UnknownName

UNLISTED = "unlisted.present"
"""The pseudo-mode that stands for every cause the circuit does not list."""


@dataclass(frozen=True, slots=True)
class Mode:
    """One way one component of this circuit fails."""

    ref: str
    """`COMPONENT.MODE`."""
    component: str
    title: str
    record: ModeRecord
    rate: Rate
    probability: float
    """P(present) from rate and exposure, before any finding."""

    @property
    def odds(self) -> float:
        """Prior odds of the mode against its absence."""
        return self.probability / (1.0 - self.probability)


@dataclass(frozen=True, slots=True)
class Component:
    """A component with the modes that this circuit gives it."""

    id: str
    kind: str
    title: str
    role: str
    modes: tuple[Mode, ...]
    where: Origin


@dataclass(frozen=True, slots=True)
class Node:
    """One condition at one operating point, with every cause that bears on it."""

    id: str
    """`CONDITION@POINT`, or `CONDITION` where it has no point."""
    record: Condition
    point: str | None
    effects: Mapping[str, Effect]
    """Mode reference to what that mode alone does."""

    @property
    def normal(self) -> int:
        """Index of the normal state."""
        return self.record.states.index(self.record.normal)


@dataclass(frozen=True, slots=True)
class Observable:
    """An indication or check at one operating point: a finding that can be taken."""

    id: str
    """`NAME@POINT`, or `NAME` where it has no point."""
    record: Indication | Check
    point: str | None
    node: str
    """Id of the node it reads."""
    outcomes: tuple[str, ...]
    """Words a finding may take, the unremarkable one among them."""
    normal: str
    reports: tuple[int, ...]
    """Per state of the node, the index of the outcome that reports it."""
    through: tuple[str, ...]

    @property
    def cuts(self) -> tuple[float, ...]:
        """The limits between the states, in the unit of the scale.

        Raises:
            KeyError: when the observation has no number at this point.
        """
        assert self.record.scale is not None
        limits = self.record.scale.limits
        return limits[self.point] if self.point in limits else limits["any"]


@dataclass(frozen=True, slots=True)
class Remedy:
    """A rectification on one component of this circuit."""

    id: str
    record: Rectification
    component: str
    restores: tuple[str, ...]
    """Mode references."""


@dataclass(frozen=True, slots=True)
class Circuit:
    """Everything known of one engine type's oil circuit."""

    file: CircuitFile
    components: Mapping[str, Component]
    nodes: Mapping[str, Node]
    observables: Mapping[str, Observable]
    remedies: Mapping[str, Remedy]
    cautions: Mapping[str, str]
    sources: Mapping[str, str]
    overlays: tuple[str, ...]
    content_hash: str
    """SHA-256 over all that was read, overlays included."""
    rules: tuple[Rule, ...] = ()

    def __repr__(self) -> str:
        return f"<Circuit {self.id} {self.file.version}>"

    @property
    def id(self) -> str:
        return self.file.id

    @property
    def title(self) -> str:
        return self.file.title

    @property
    def lines(self) -> tuple[Line, ...]:
        return self.file.lines

    @property
    def exposure(self) -> Exposure:
        return self.file.exposure

    @property
    def modes(self) -> dict[str, Mode]:
        """All modes by reference, in the order of the components."""
        return {m.ref: m for c in self.components.values() for m in c.modes}

    @property
    def openings(self) -> dict[str, Opening]:
        return {opening.id: opening for opening in self.file.openings}

    @property
    def engine_states(self) -> dict[str, EngineState]:
        return {state.id: state for state in self.file.engine_states}

    def observable(self, name: str, point: str | None) -> Observable:
        """The finding called `name`, at `point` where it has points.

        Raises:
            UnknownName: with the nearest names.
        """
        key = f"{name}@{point}" if point else name
        if key in self.observables:
            return self.observables[key]
        raise UnknownName("finding", key, self.observables)


def mode_probability(rate: Rate, exposure: Exposure) -> float:
    """P(a mode arose during the exposure): Poisson for hours, Bernoulli per event."""
    if rate.per_million_hours is not None:
        return -math.expm1(-rate.per_million_hours * 1e-6 * exposure.hours)
    assert rate.per_event is not None
    assert rate.event is not None
    events = exposure.events.get(rate.event, 0.0)
    if rate.per_event == 1.0:
        return float(events > 0.0)
    return -math.expm1(math.log1p(-rate.per_event) * events)

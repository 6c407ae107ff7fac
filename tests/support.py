"""Small circuits made in memory, so that a test states all that it depends on."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

from diag.circuit.model import UNLISTED, Circuit, Component, Mode, Node, Observable
from diag.circuit.records import (
    Check,
    CircuitFile,
    ComponentUse,
    Condition,
    Costs,
    Effect,
    Exposure,
    ModeRecord,
    Rate,
    Signal,
    Unlisted,
)
from diag.errors import Origin

J = "judgement"
Chances = Mapping[str, float]


def rate() -> Rate:
    return Rate(per_million_hours=1.0, basis=J)


def mode(
    component: str,
    name: str,
    probability: float,
    signal: Signal | None = None,
    promotes: Mapping[str, float] | None = None,
) -> Mode:
    record = ModeRecord(
        id=name, title=name, rate=rate(), signal=signal, promotes=dict(promotes or {})
    )
    return Mode(f"{component}.{name}", component, name, record, rate(), probability)


def circuit(
    modes: Sequence[Mode],
    nodes: Mapping[str, tuple[Sequence[str], str, Chances, Mapping[str, Chances]]],
    checks: Mapping[str, tuple[str, float, float]] | None = None,
    through: Mapping[str, Sequence[str]] | None = None,
    unlisted: float = 0.0,
) -> Circuit:
    """A circuit from modes, nodes (states, normal, leak, effects) and checks.

    A check is (node, detects, false alarm); `through` names its instrument components.
    """
    names = list(dict.fromkeys(m.component for m in modes))
    components = {
        name: Component(
            name, name, name, "valve", tuple(m for m in modes if m.component == name), Origin()
        )
        for name in names
    }
    made = {name: _node(name, *spec) for name, spec in nodes.items()}
    observables = {
        name: _observable(name, made[node], detects, alarm, tuple((through or {}).get(name, ())))
        for name, (node, detects, alarm) in (checks or {}).items()
    }
    head = CircuitFile(
        id="tiny",
        title="Tiny",
        version="1",
        basis=J,
        points=("hot_idle",),
        components=tuple(ComponentUse(id=name, kind=name) for name in names),
        lines=(),
        exposure=Exposure(hours=1, basis=J),
        unlisted=Unlisted(share=unlisted, basis=J),
        costs=Costs(escalate_minutes=100, basis=J),
        engine_states=(),
        openings=(),
    )
    return Circuit(head, components, made, observables, {}, {}, {}, (), "0" * 64)


def _node(
    name: str, states: Sequence[str], normal: str, leak: Chances, effects: Mapping[str, Chances]
) -> Node:
    record = Condition(
        id=name, title=name, states=tuple(states), normal=normal, leak=dict(leak),
        unlisted={}, basis=J,
    )  # fmt: skip
    return Node(name, record, None, {m: Effect(gives=dict(g), basis=J) for m, g in effects.items()})


def _observable(
    name: str, node: Node, detects: float, alarm: float, through: tuple[str, ...]
) -> Observable:
    check = Check(
        id=name, title=name, minutes=5, reads=node.id, detects=detects, false_alarm=alarm, basis=J
    )
    states = node.record.states
    normal = node.record.normal
    reports = tuple(range(len(states)))
    return Observable(name, check, None, node.id, tuple(states), normal, reports, through)


__all__ = ["UNLISTED", "circuit", "mode", "rate"]

"""Why a cause stands where it stands, in sentences, with the way its effect takes."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from diag.belief.evidence import Finding
from diag.belief.explain import Weight, ledger
from diag.belief.hypotheses import Engine
from diag.circuit.graph import oil_graph, path_of
from diag.circuit.model import Circuit

TELLING = 0.5
"""Decibans below which a finding says next to nothing. Judgement."""


@dataclass(frozen=True, slots=True)
class Reason:
    """One finding for or against one cause.

    Attributes:
        sentence: what it says, in words.
        path: components along which the effect runs from the cause to what was looked at;
            empty where the cause does not reach it.
    """

    weight: Weight
    sentence: str
    path: tuple[str, ...]


def reasons(engine: Engine, findings: Sequence[Finding], ref: str) -> list[Reason]:
    """Findings for and against `ref`, in the order in which they were taken.

    Their decibans add up to the change in the cause's log-odds.
    """
    circuit = engine.circuit
    graph = oil_graph(circuit)
    found = []
    for weight in ledger(engine, findings, ref):
        node = weight.finding.observable.node
        known = ref in circuit.modes and ref in circuit.nodes[node].effects
        path = tuple(path_of(circuit, graph, ref, node)) if known else ()
        found.append(Reason(weight, _sentence(circuit, weight, ref, path), path))
    return found


def _sentence(circuit: Circuit, weight: Weight, ref: str, path: Sequence[str]) -> str:
    finding = weight.finding
    side = "speaks for it" if weight.decibans > 0 else "speaks against it"
    if abs(weight.decibans) < TELLING:
        side = "says little about it"
    told = f"{finding} {side} ({weight.decibans:+.1f} db)"
    effect = circuit.nodes[finding.observable.node].effects.get(ref)
    if effect is not None and path:
        does = ", ".join(f"{s.replace('_', ' ')} in {p:.0%}" for s, p in effect.gives.items())
        way = " > ".join(circuit.components[name].title for name in path)
        return f"{told}: alone it would give {does}; by way of {way}"
    if any(ref.partition(".")[0] == name for name in finding.observable.through):
        return f"{told}: it is an instrument that this reading came through"
    return told if effect is not None else f"{told}: it does not touch what was looked at"

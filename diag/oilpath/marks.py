"""What a drawing shows on top of the circuit: suspicion, findings and the way of a cause."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field

from diag.belief.evidence import outcome_of
from diag.circuit.graph import oil_graph, path_of
from diag.circuit.model import UNLISTED, Circuit
from diag.session import CaseState

LEVELS = (0.01, 0.05, 0.2, 0.5)
"""Suspicion from which a part is shaded one step darker. Judgement."""
SHADES = ("", "░", "▒", "▓", "█")
"""The shades as they are marked where there is no colour."""


@dataclass(frozen=True, slots=True)
class Pin:
    """A finding where it was taken."""

    component: str
    number: int
    """Of its entry in the findings log."""
    text: str
    unremarkable: bool
    standing: bool = True
    """Neither superseded nor taken before a rectification."""


@dataclass(frozen=True, slots=True)
class Marks:
    """What is drawn on the parts.

    Attributes:
        suspicion: component to the probability that one of its modes is present.
        pins: findings where they were taken.
        way: components along which the chosen cause takes effect, from the cause onwards.
        cause: the chosen cause in words.
        causes: the likely causes in words with their probabilities, for a drawing that
            stands by itself.
    """

    suspicion: Mapping[str, float] = field(default_factory=dict)
    pins: tuple[Pin, ...] = ()
    way: tuple[str, ...] = ()
    cause: str = ""
    causes: tuple[tuple[str, float], ...] = ()

    def of(self, members: Iterable[str]) -> float:
        """Suspicion that falls on any of some components, at most 1."""
        return min(1.0, sum(self.suspicion.get(name, 0.0) for name in members))

    def pinned(self, members: Iterable[str]) -> list[Pin]:
        """The pins on any of some components, in the order of the log."""
        names = set(members)
        return [pin for pin in self.pins if pin.component in names]


def level(chance: float) -> int:
    """The shade of a suspicion, 0 to 4."""
    return sum(chance >= limit for limit in LEVELS)


def suspicions(present: Mapping[str, float]) -> dict[str, float]:
    """Component to suspicion, from the probabilities of its modes (one mode at a time)."""
    found: dict[str, float] = {}
    for ref, chance in present.items():
        name = ref.partition(".")[0]
        found[name] = min(1.0, found.get(name, 0.0) + chance)
    return found


def pins_of(state: CaseState) -> tuple[Pin, ...]:
    """The findings of a case, each at the first place where what it looks at holds."""
    found = []
    for taken in state.taken:
        finding = taken.finding
        places = state.circuit.nodes[finding.observable.node].record.at
        if places:
            usual = outcome_of(finding) == finding.observable.normal
            standing = not taken.superseded and finding.world == state.world
            found.append(Pin(places[0], taken.number, str(finding), usual, standing))
    return tuple(found)


def way_of(circuit: Circuit, ref: str, state: CaseState) -> tuple[str, ...]:
    """Components along which a cause reaches what the findings looked at.

    The longest of its ways to findings that it bears on; without such a finding the component
    itself. Empty for the unlisted cause, which has no place.
    """
    if ref == UNLISTED or ref not in circuit.modes:
        return ()
    graph = oil_graph(circuit)
    ways: list[list[str]] = [[circuit.modes[ref].component]]
    for taken in state.taken:
        node = taken.finding.observable.node
        if ref in circuit.nodes[node].effects:
            way = path_of(circuit, graph, ref, node)
            ways.append([*way, *_instruments(way, taken.finding.observable.through)])
    longest = max(ways, key=len)
    return tuple(longest)


def _instruments(way: Sequence[str], through: Sequence[str]) -> list[str]:
    return [name for name in through if name not in way] if way else []

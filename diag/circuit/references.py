"""Checks that every name a circuit refers to exists, once the circuit is put together.

Each check takes what is named and notes what is missing; `REFERENCE_CHECKS` holds them all.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from graphlib import CycleError, TopologicalSorter
from typing import Any

from diag.circuit.faults import Faults
from diag.circuit.model import Circuit
from diag.circuit.records import Based, EngineState, Observation, Opening, Overlay, Record, Step

At = tuple[str | int, ...]


@dataclass(frozen=True, slots=True)
class Named:
    """What holds names: the circuit, its steps, and every file as it was read."""

    circuit: Circuit
    steps: Sequence[Step]
    files: Sequence[Record]


def cautions_known(named: Named, faults: Faults) -> None:
    """Every caution has its text."""
    known, file = named.circuit.cautions, named.circuit.file
    holders: tuple[Step | Opening | EngineState, ...] = (
        *named.steps,
        *file.openings,
        *file.engine_states,
    )
    for holder in holders:
        where, names = holder.where, holder.cautions
        faults.expect(where, holder.id, "cautions", names, "caution", known, "cautions")


def openings_known(named: Named, faults: Faults) -> None:
    """Every opening that a step needs, or that another lies inside, is one of the circuit."""
    known = named.circuit.openings
    for step in named.steps:
        names = step.needs.opens
        faults.expect(step.where, step.id, "needs.opens", names, "opening", known, "openings")
    for opening in known.values():
        where, names = opening.where, opening.inside
        faults.expect(where, opening.id, "inside", names, "opening", known, "openings")


def openings_nest(named: Named, faults: Faults) -> None:
    """No opening lies inside itself."""
    openings = named.circuit.openings
    try:
        TopologicalSorter({o.id: o.inside for o in openings.values()}).prepare()
    except CycleError as error:
        ring: list[str] = error.args[1]
        first = next(openings[name] for name in ring if name in openings)
        message = f"openings lie inside each other: {' in '.join(reversed(ring))}"
        faults.note(first.where, f"openings.{first.id}.inside", message, ("inside",))


def engine_states_known(named: Named, faults: Faults) -> None:
    """The circuit says what it takes to reach every engine state that is needed."""
    known = named.circuit.engine_states
    asked: list[tuple[Step | Opening, At, str]] = []
    asked += [(step, ("needs", "engine"), step.needs.engine) for step in named.steps]
    asked += [(opening, ("needs",), opening.needs) for opening in named.circuit.openings.values()]
    for record, at, name in asked:
        if name != "any" and name not in known:
            path, what = f"{record.id}.needs", "engine state in this circuit"
            faults.dangling(record.where, path, what, name, known, "engine_states", at)


def points_known(named: Named, faults: Faults) -> None:
    """Observations and their limits are at operating points of the circuit."""
    known = named.circuit.file.points
    for step in named.steps:
        if isinstance(step, Observation):
            where, what = step.where, "operating point"
            faults.expect(where, step.id, "points", step.points, what, known, "points")
            limits = step.scale.limits if step.scale else {}
            faults.expect(where, step.id, "scale.limits", limits, what, ("any", *known), "points")


def sources_known(named: Named, faults: Faults) -> None:
    """Every published source that a basis names is in the list of sources."""
    known = named.circuit.sources
    for file in (named.circuit.file, *named.files, *_overlaid(named)):
        for record, basis in _bases(file):
            for name in _sources(basis):
                if name not in known:
                    where, at = record.where, ("basis",)
                    faults.dangling(where, "basis", "source", name, known, "sources", at)


def _overlaid(named: Named) -> Iterator[Based]:
    """Steps and rates as overlays have changed them, with the basis they have there."""
    overlays = {file.where.file: file.basis for file in named.files if isinstance(file, Overlay)}
    for record in (*named.steps, *(mode.rate for mode in named.circuit.modes.values())):
        if overlays.get(record.where.file, record.basis) != record.basis:
            yield record


def _sources(basis: str) -> list[str]:
    if not basis.startswith("published:"):
        return []
    return [name.strip() for name in basis.removeprefix("published:").split(",")]


def _bases(record: Record, inherited: str = "") -> Iterator[tuple[Record, str]]:
    """A record and those inside it with their basis, except where it is only inherited."""
    fields = vars(record)
    basis = fields.get("basis", inherited)
    if basis != inherited:
        yield record, basis
    for value in fields.values():
        for inner in _records_in(value):
            yield from _bases(inner, basis)


def _records_in(value: Any) -> Iterator[Record]:
    if isinstance(value, Record):
        yield value
    elif isinstance(value, tuple | dict):
        for inner in value.values() if isinstance(value, dict) else value:
            if isinstance(inner, str | float):
                # Ids and numbers: the rest of the table is of the same kind.
                return
            yield from _records_in(inner)


REFERENCE_CHECKS: tuple[Callable[[Named, Faults], None], ...] = (
    cautions_known,
    openings_known,
    openings_nest,
    engine_states_known,
    points_known,
    sources_known,
)

"""Gathers what is wrong with a circuit, so that all of it is told at once."""

from __future__ import annotations

from collections.abc import Callable, Collection, Iterable, Mapping
from dataclasses import dataclass, field
from difflib import get_close_matches
from typing import Protocol

from diag.circuit.reading import brief
from diag.errors import Origin, Problem

Locate = Callable[[Origin, tuple[str | int, ...]], Origin]
"""From the place of a record and a path inside it to the place of that value."""


class Identified(Protocol):
    """Anything with an id and a place in a file."""

    @property
    def id(self) -> str: ...

    @property
    def where(self) -> Origin: ...


def _record_itself(where: Origin, path: tuple[str | int, ...]) -> Origin:
    return where


@dataclass(slots=True)
class Faults:
    """The problems found so far while a circuit is put together."""

    problems: list[Problem] = field(default_factory=list)
    unsure: set[str] = field(default_factory=set)
    """Tables that may lack entries because part of a file could not be read. A name missing
    from them is not reported: it may well stand in the part that was not read."""
    locate: Locate = _record_itself

    def note(
        self,
        record: Origin,
        path: str,
        message: str,
        at: tuple[str | int, ...] = (),
        value: object = "",
        accepted: str = "",
    ) -> None:
        """Notes a problem with the value at `at` inside the record that stands at `record`."""
        shown = "" if value == "" else brief(value)
        where = self.locate(record, at)
        self.problems.append(Problem(where, path, message, shown, accepted))

    def dangling(
        self,
        record: Origin,
        path: str,
        what: str,
        name: str,
        known: Iterable[str],
        tables: str = "",
        at: tuple[str | int, ...] = (),
    ) -> None:
        """Notes that `name` is not among the `known` names of some tables; says the nearest."""
        if self.unsure.isdisjoint(tables.split()):
            accepted = nearest(name, known)
            self.note(record, path, f"no such {what}", at, name, accepted)

    def expect(
        self,
        record: Origin,
        owner: str,
        field_: str,
        names: Collection[str],
        what: str,
        known: Collection[str],
        tables: str = "",
    ) -> None:
        """Notes each of `names`, the list or the keys in a field of a record, not in `known`."""
        for number, name in enumerate(names):
            if name not in known:
                at = (*field_.split("."), name if isinstance(names, Mapping) else number)
                self.dangling(record, f"{owner}.{field_}.{name}", what, name, known, tables, at)

    def unique(self, records: Iterable[Identified]) -> None:
        """Notes every id that stands twice."""
        seen: dict[str, Origin] = {}
        for record in records:
            if record.id in seen:
                message = f"id stands twice, first at {seen[record.id]}"
                self.note(record.where, record.id, message, ("id",), record.id, "a new id")
            seen.setdefault(record.id, record.where)


def nearest(name: str, known: Iterable[str]) -> str:
    """The names closest to `name`, or the first few where none comes close."""
    names = sorted(known)
    return ", ".join(get_close_matches(name, names, n=3, cutoff=0.5) or names[:8])

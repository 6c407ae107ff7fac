"""An operator's own values laid over the records of a circuit, by id.

Every changed record is checked anew as a whole. It then counts as standing in the overlay:
a problem with it is reported there, and its numbers carry the overlay's basis.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping, Sequence
from typing import Any, TypeVar

from pydantic import ValidationError

from diag.circuit.faults import Faults
from diag.circuit.reading import dotted, wording
from diag.circuit.records import CircuitFile, Overlay, Rate, Record

R = TypeVar("R", bound=Record)
Path = tuple[str | int, ...]
_RATE_KINDS = frozenset({"per_million_hours", "per_event"})


class Overlays:
    """The overlays that apply to one circuit, in the order they were given; later ones win."""

    def __init__(self, given: Sequence[Overlay], circuit: str, faults: Faults) -> None:
        self.given = [o for o in given if o.circuit in (None, circuit)]
        self.faults = faults

    def changed(self, record: R, table: str, name: str) -> R:
        """`record` with the fields laid over it that the overlays' `table` has for `name`."""
        for overlay, fields in self._entries(table, name):
            record = self._revised(record, fields, overlay, (table, name))
        return record

    def rate(self, rate: Rate, ref: str) -> Rate:
        """The rate of a mode; one given per hour replaces one per event, and the reverse."""
        for overlay, fields in self._entries("rates", ref):
            given = dict(fields)
            if _RATE_KINDS & set(given):
                given = {"per_million_hours": None, "per_event": None, "event": None, **given}
            rate = self._revised(rate, given, overlay, ("rates", ref))
        return rate

    def head(self, head: CircuitFile) -> CircuitFile:
        """The circuit's own file with its states, openings and costs changed."""
        update: dict[str, Any] = {
            table: tuple(self.changed(record, table, record.id) for record in getattr(head, table))
            for table in ("engine_states", "openings")
        }
        for table, records in update.items():
            self.check_names(table, [record.id for record in records], table)
        for name in ("costs", "exposure", "unlisted"):
            record = getattr(head, name)
            for overlay in self.given:
                if fields := getattr(overlay, name):
                    record = self._revised(record, fields, overlay, (name,))
            update[name] = record
        return head.model_copy(update=update)

    def check_names(self, table: str, known: Iterable[str], source: str) -> None:
        """Notes the ids in `table` that the circuit lacks; `source` holds the circuit's own."""
        names = set(known)
        for overlay in self.given:
            for name in getattr(overlay, table):
                if name not in names:
                    what, path = f"id in the {table} of this circuit", f"{table}.{name}"
                    tables, at = f"{source} component:{name.partition('.')[0]}", (table, name)
                    self.faults.dangling(overlay.where, path, what, name, names, tables, at)

    def _entries(self, table: str, name: str) -> Iterator[tuple[Overlay, Mapping[str, Any]]]:
        for overlay in self.given:
            changes: Mapping[str, Mapping[str, Any]] = getattr(overlay, table)
            if name in changes:
                yield overlay, changes[name]

    def _revised(self, record: R, fields: Mapping[str, Any], overlay: Overlay, at: Path) -> R:
        model = type(record)
        if "id" in fields:
            path, message = (*at, "id"), "an overlay cannot change an id"
            self.faults.note(overlay.where, dotted(path), message, path, fields["id"])
            return record
        merged = self._merged(_fields(record), fields, overlay, at)
        try:
            return model.model_validate(merged, context={"basis": overlay.basis})
        except ValidationError as error:
            for fault in error.errors(include_url=False):
                message, shown, accepted = wording(model, fault)
                path = (*at, *fault["loc"])
                value = fault["input"] if shown else ""
                self.faults.note(overlay.where, dotted(path), message, path, value, accepted)
            return record

    def _merged(
        self, old: Mapping[str, Any], new: Mapping[str, Any], overlay: Overlay, at: Path
    ) -> dict[str, Any]:
        """`new` laid over `old`, mappings merged key by key."""
        both = dict(old)
        if "basis" in old:
            both["basis"] = overlay.basis
        for key, value in new.items():
            inner = both.get(key)
            if isinstance(inner, Mapping) and isinstance(value, Mapping):
                both[key] = self._merged(inner, value, overlay, (*at, key))
            elif key == "where":
                self.faults.note(overlay.where, dotted((*at, key)), "unknown key", (*at, key))
            else:
                both[key] = value
        if "where" in old:
            both["where"] = self.faults.locate(overlay.where, at)
        return both


def _fields(record: Record) -> dict[str, Any]:
    """The fields of a record as a mapping, those of records inside it included."""
    return {
        name: _fields(value) if isinstance(value, Record) else value
        for name, value in vars(record).items()
    }

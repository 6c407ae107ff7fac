"""The steps of a case as one flat table, for other systems: comma-separated values (RFC 4180).

Times are ISO 8601 with their zone. Text that a spreadsheet would run as a formula is led in by
an apostrophe; readings keep their sign.
"""

from __future__ import annotations

import csv
import io
import re
from collections.abc import Callable, Iterator, Mapping, Sequence
from typing import Any

from diag.record.casefile import CaseFile, case_file
from diag.record.events import (
    Acknowledged,
    AnyEvent,
    Closed,
    Doubted,
    Found,
    HandedOver,
    Noted,
    NotPossible,
    Opened,
    Rectified,
    RuleFired,
    StateChanged,
    Withdrawn,
)

COLUMNS = (
    "log", "circuit", "version", "engine", "aircraft", "number", "at", "by", "event", "name",
    "point", "value", "complaint", "reference", "remark", "part_off", "part_on", "counts",
    "top_cause", "top_probability",
)  # fmt: skip
_RUNS = re.compile(r"^[=+\-@\t\r]")
_READING = re.compile(r"^[-+]?\d+(?:\.\d+)?(?:[eE][-+]?\d+)? ?[A-Za-z%°/]*$")


def steps_csv(cases: Sequence[tuple[str, Sequence[AnyEvent]]]) -> str:
    """One row for each event of each case; lines end as RFC 4180 asks, with CR LF.

    Args:
        cases: the name of each log and its events.

    Raises:
        InputError: events that are no case.
    """
    out = io.StringIO()
    writer = csv.DictWriter(out, COLUMNS, lineterminator="\r\n")
    writer.writeheader()
    for log, events in cases:
        writer.writerows(_rows(log, case_file(events)))
    return out.getvalue()


def _rows(log: str, case: CaseFile) -> Iterator[dict[str, str]]:
    head = case.head
    for event in case.events:
        top = event.after.causes[0] if event.after and event.after.causes else ("", None)
        row = {
            "log": log,
            "circuit": head.circuit,
            "version": head.version,
            "engine": head.engine,
            "aircraft": head.aircraft,
            "number": str(event.number),
            "at": event.at.isoformat(),
            "by": event.by,
            "event": event.event,
            "counts": "no" if event.number in case.gone or event.number in case.repeated else "yes",
            "top_cause": top[0],
            "top_probability": "" if top[1] is None else f"{top[1]:.6g}",
            **_own(event),
        }
        yield {column: _plain(row.get(column, "")) for column in COLUMNS}


def _own(event: AnyEvent) -> dict[str, str]:
    """What a kind of event has of its own."""
    return _OWN[type(event)](event)


def _opened(event: Opened) -> dict[str, str]:
    return {"remark": event.complaint}


def _found(event: Found) -> dict[str, str]:
    return {
        "name": event.name,
        "point": event.point or "",
        "value": event.value,
        "complaint": "yes" if event.complaint else "no",
        "reference": event.reference,
        "remark": event.remark,
    }


def _rectified(event: Rectified) -> dict[str, str]:
    return {
        "name": event.rectification,
        "part_off": event.part_off,
        "part_on": event.part_on,
        "reference": event.reference,
        "remark": event.remark,
    }


def _closed(event: Closed) -> dict[str, str]:
    proof = event.verification
    told = f"verified by {proof}" if proof is not None else event.not_verified_because
    return {"name": " ".join(event.causes), "value": event.outcome, "remark": told}


def _state_changed(event: StateChanged) -> dict[str, str]:
    moved = [*(f"open {name}" for name in event.opened), *(f"shut {name}" for name in event.closed)]
    if event.people_clear is not None:
        moved.append("people clear" if event.people_clear else "people near")
    return {"name": event.engine or "", "value": "; ".join(moved)}


_OWN: Mapping[type, Callable[[Any], dict[str, str]]] = {
    Opened: _opened,
    Found: _found,
    Rectified: _rectified,
    Closed: _closed,
    StateChanged: _state_changed,
    Withdrawn: lambda e: {"value": str(e.target), "remark": e.reason},
    Doubted: lambda e: {"name": str(e.target), "value": f"{e.trust:g}", "remark": e.reason},
    NotPossible: lambda e: {"name": e.step, "remark": e.reason},
    RuleFired: lambda e: {"name": e.rule, "value": e.kind, "remark": "; ".join(e.because)},
    HandedOver: lambda e: {"name": e.to, "remark": e.summary},
    Acknowledged: lambda e: {},
    Noted: lambda e: {"remark": e.text},
}


def _plain(text: str) -> str:
    return f"'{text}" if _RUNS.match(text) and not _READING.match(text) else text

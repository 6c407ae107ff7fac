"""Cases written by hand, so that a test states what stands in the log."""

from __future__ import annotations

from collections.abc import Iterable
from datetime import UTC, datetime, timedelta, timezone
from functools import cache
from pathlib import Path
from typing import Any

from diag.circuit.loading import load_circuit
from diag.record.events import (
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
    Standing,
    StateChanged,
    Withdrawn,
)
from diag.record.journal import Journal

NAME = "relief_valve_turboprop"
START = datetime(2026, 3, 1, 22, 0, tzinfo=timezone(timedelta(hours=2)))
HOSTILE = "<script>alert('x')</script> & \"<b>\" | *not bold* [a](http://x.example) `code`"
loaded = cache(load_circuit)


def standing(**chances: float) -> Standing:
    """Causes by name, a double underscore for the point between component and mode."""
    rows = sorted(chances.items(), key=lambda row: -row[1])
    return Standing(causes=tuple((ref.replace("__", "."), p) for ref, p in rows))


def head(**more: Any) -> Opened:
    circuit = loaded(NAME)
    given: dict[str, Any] = {
        "at": START,
        "by": "A. Fitter",
        "circuit": NAME,
        "version": circuit.file.version,
        "content_hash": circuit.content_hash,
        "engine": "E-17",
        "aircraft": "A-3",
        "complaint": "pressure low at hot idle",
        "after": standing(nothing_found=0.97, supply_lines__external_leak=0.01),
    }
    return Opened(**{**given, **more})


def numbered(events: Iterable[AnyEvent]) -> list[AnyEvent]:
    """Events with their numbers, five minutes apart where they begin at the same time."""
    return [
        event.model_copy(update={"number": n, "at": event.at + timedelta(minutes=5 * n)})
        for n, event in enumerate(events)
    ]


def found(name: str, value: str, point: str | None = None, **more: Any) -> Found:
    return Found(at=START, by="A. Fitter", name=name, point=point, value=value, **more)


PUMP, SPRING, LEAK = (
    "pressure_pump__worn",
    "relief_valve__spring_weak",
    "supply_lines__external_leak",
)


def worked_case(closed: bool = True, **more: Any) -> list[AnyEvent]:
    """A case with something of everything; entry 9 is the rectification, 10 its proof."""
    a = standing(**{SPRING: 0.4, PUMP: 0.3, LEAK: 0.2})
    b = standing(**{PUMP: 0.7, SPRING: 0.2, LEAK: 0.01})
    c = standing(**{PUMP: 0.95, LEAK: 0.004, "unlisted__present": 0.003})
    events: list[AnyEvent] = [
        head(**more),
        found("oil_pressure", "52psi", "hot_idle", complaint=True, after=a),
        found("pressure_trend", "drift", before=a, after=b, reference="72-00-11", remark="twice"),
        found("oil_look", "milky", before=b, after=b),
        Withdrawn(at=START, target=3, reason="wrong bottle", before=b, after=b),
        NotPossible(at=START, step="oil_spectrum", reason="laboratory shut", before=b, after=b),
        StateChanged(at=START, engine="cold", opened=("cowl", "line_ends"), before=b, after=b),
        found("relief_valve_strip", "clear", before=b, after=c),
        StateChanged(at=START, closed=("line_ends",), people_clear=True, before=c, after=c),
        Rectified(
            at=START, by="B. Fitter", rectification="pressure_pump_replace", part_off="PP-0412",
            part_on="PP-0977", reference="72-00-30", before=c, after=c,
        ),
        found("oil_pressure", "78psi", "hot_idle", before=c, after=c),
    ]  # fmt: skip
    if closed:
        events.append(
            Closed(
                at=START,
                outcome="cause_confirmed",
                causes=("pressure_pump.worn",),
                verification=10,
            )
        )
    later = more.get("at", START) - START
    moved = [e.model_copy(update={"at": e.at + later}) for e in events[1:]]
    return numbered([events[0], *moved])


def hostile_case() -> list[AnyEvent]:
    """A case whose every free text tries to be more than text."""
    return numbered(
        [
            head(engine=HOSTILE, aircraft=HOSTILE, complaint=HOSTILE, by=HOSTILE),
            found("oil_pressure", "52psi", "hot_idle", remark=HOSTILE, reference=HOSTILE),
            found(HOSTILE, HOSTILE),
            Doubted(at=START, target=1, trust=0.5, reason=HOSTILE),
            NotPossible(at=START, step=HOSTILE, reason=HOSTILE),
            StateChanged(at=START, engine=HOSTILE, opened=(HOSTILE,)),
            RuleFired(at=START, rule=HOSTILE, kind=HOSTILE, because=(HOSTILE,), text=HOSTILE),
            Rectified(at=START, rectification=HOSTILE, part_off=HOSTILE, part_on=HOSTILE),
            Noted(at=START, text=HOSTILE, after=Standing(causes=((HOSTILE, 0.5),))),
            HandedOver(at=START, to=HOSTILE, summary=HOSTILE),
            Closed(at=START, outcome="handed_to_engineering", not_verified_because=HOSTILE),
        ]
    )


def written(path: Path, events: Iterable[AnyEvent]) -> Path:
    """A log of the events."""
    first, *rest = events
    assert isinstance(first, Opened)
    with Journal.create(path, first) as journal:
        for event in rest:
            journal.append(event)
    return path


__all__ = ["HOSTILE", "NAME", "START", "UTC", "head", "hostile_case", "loaded", "worked_case"]

"""A findings log in words, for the person who takes it over."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from diag.circuit.model import UNLISTED, Circuit
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

NOTHING = "nothing_found"
"""How a standing names the case in which no cause is present."""
OUTCOMES = {
    "cause_confirmed": "cause confirmed",
    "no_fault_found": "no fault found",
    "handed_to_engineering": "handed to engineering",
}
"""How a case may end, in words."""


def cause_title(circuit: Circuit | None, ref: str) -> str:
    """A cause in words: component, then what is wrong with it."""
    if ref == UNLISTED:
        return "a cause that this circuit does not list"
    if ref == NOTHING:
        return "nothing found wrong"
    if circuit is None or ref not in circuit.modes:
        return ref.replace(".", ": ").replace("_", " ")
    mode = circuit.modes[ref]
    return f"{circuit.components[mode.component].title}: {mode.title[0].lower()}{mode.title[1:]}"


def percent(chance: float) -> str:
    """A probability for the eye: no false digits, never 0 % or 100 %."""
    if chance < 0.001:
        return "<0.1 %"
    if chance > 0.999:
        return ">99.9 %"
    digits = 1 if chance < 0.1 or chance > 0.99 else 0
    return f"{100 * chance:.{digits}f} %"


def event_line(circuit: Circuit | None, event: AnyEvent) -> str:
    """One event in one line, without its number and time."""
    return _LINES[type(event)](circuit, event)


def narrate(circuit: Circuit | None, events: Sequence[AnyEvent]) -> Iterator[str]:
    """A whole log in lines: who, when, what, and how the top cause moved."""
    gone = {e.target for e in events if isinstance(e, Withdrawn)}
    for event in events:
        when = event.at.isoformat(sep=" ", timespec="minutes")
        by = f" {event.by}" if event.by else ""
        struck = "  [withdrawn]" if event.number in gone else ""
        yield f"{event.number:>3}  {when}{by}  {event_line(circuit, event)}{struck}"
        if event.after and event.after.causes and event.before != event.after:
            ref, chance = event.after.causes[0]
            yield f"       most likely now: {cause_title(circuit, ref)}, {percent(chance)}"


@dataclass(frozen=True, slots=True)
class Summary:
    """A log in one row."""

    circuit: str
    engine: str
    aircraft: str
    opened: str
    state: str
    top_cause: str
    probability: float


def summary(events: Sequence[AnyEvent]) -> Summary:
    """What a list of cases shows of one; `events` begin with the opening."""
    head, last = events[0], events[-1]
    assert isinstance(head, Opened)
    closed = next((e for e in events if isinstance(e, Closed)), None)
    standing = next((e.after for e in reversed(events) if e.after and e.after.causes), None)
    top = standing.causes[0] if standing else ("", 0.0)
    if closed:
        state = f"closed, {OUTCOMES[closed.outcome]}"
    else:
        state = f"handed over to {last.to}" if isinstance(last, HandedOver) else "open"
    opened = head.at.isoformat(sep=" ", timespec="minutes")
    return Summary(head.circuit, head.engine, head.aircraft, opened, state, top[0], top[1])


def _opened(circuit: Circuit | None, event: Opened) -> str:
    who = ", ".join(part for part in (event.engine, event.aircraft) if part)
    words = f": {event.complaint}" if event.complaint else ""
    identity = f" ({who})" if who else ""
    return f"case opened on {event.circuit} {event.version}{identity}{words}"


def _found(circuit: Circuit | None, event: Found) -> str:
    name = f"{event.name}@{event.point}" if event.point else event.name
    kind = "reported" if event.complaint else "found"
    task = f" (task {event.reference})" if event.reference else ""
    remark = f" — {event.remark}" if event.remark else ""
    return f"{kind} {name} = {event.value}{task}{remark}"


def _because(text: str) -> str:
    return f": {text}" if text else ""


def _withdrawn(circuit: Circuit | None, event: Withdrawn) -> str:
    return f"entry {event.target} withdrawn{_because(event.reason)}"


def _doubted(circuit: Circuit | None, event: Doubted) -> str:
    return f"entry {event.target} trusted only to {event.trust:g}{_because(event.reason)}"


def _not_possible(circuit: Circuit | None, event: NotPossible) -> str:
    return f"not possible: {event.step}{_because(event.reason)}"


def _state_changed(circuit: Circuit | None, event: StateChanged) -> str:
    parts = [f"engine {event.engine.replace('_', ' ')}"] if event.engine else []
    parts += [f"opened {name}" for name in event.opened]
    parts += [f"closed {name}" for name in event.closed]
    if event.people_clear is not None:
        parts.append("people clear" if event.people_clear else "people near the engine")
    return ", ".join(parts)


def _rectified(circuit: Circuit | None, event: Rectified) -> str:
    known = circuit.remedies.get(event.rectification) if circuit else None
    title = known.record.title if known else event.rectification
    parts = [f"part off {event.part_off}"] if event.part_off else []
    parts += [f"part on {event.part_on}"] if event.part_on else []
    parts += [f"task {event.reference}"] if event.reference else []
    listed = f" ({', '.join(parts)})" if parts else ""
    return f"rectified: {title}{listed}"


def _rule_fired(circuit: Circuit | None, event: RuleFired) -> str:
    return f"{event.kind.replace('_', ' ')}: {event.text or event.rule}"


def _handed_over(circuit: Circuit | None, event: HandedOver) -> str:
    return f"handed over to {event.to}{_because(event.summary)}"


def _acknowledged(circuit: Circuit | None, event: Acknowledged) -> str:
    return "hand-over read and taken over"


def _noted(circuit: Circuit | None, event: Noted) -> str:
    return f"note: {event.text}"


def _closed(circuit: Circuit | None, event: Closed) -> str:
    causes = "; ".join(cause_title(circuit, ref) for ref in event.causes)
    proof = (
        f"verified by entry {event.verification}"
        if event.verification is not None
        else f"not verified: {event.not_verified_because}"
    )
    return f"closed, {OUTCOMES[event.outcome]}{_because(causes)}; {proof}"


_LINES: Mapping[type, Callable[[Circuit | None, Any], str]] = {
    Opened: _opened,
    Found: _found,
    Withdrawn: _withdrawn,
    Doubted: _doubted,
    NotPossible: _not_possible,
    StateChanged: _state_changed,
    Rectified: _rectified,
    RuleFired: _rule_fired,
    HandedOver: _handed_over,
    Acknowledged: _acknowledged,
    Noted: _noted,
    Closed: _closed,
}

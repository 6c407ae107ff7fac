"""The hand-over: one page for the person who takes the case on.

What is open, what is removed, what state the engine is in, what was ruled out and on what
evidence, and what to do next. The next steps come from the caller, since only the session can
weigh them. Handing over and taking over are events of the log.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import datetime
from itertools import pairwise

from diag.circuit.model import UNLISTED, Circuit
from diag.errors import UsageError
from diag.record.casefile import CaseFile, case_file
from diag.record.events import Acknowledged, AnyEvent, Found, HandedOver, Rectified, StateChanged
from diag.record.narrate import NOTHING, cause_title, event_line
from diag.record.rendering import rendered
from diag.record.report import (
    observable_of,
    open_items,
    opening_title,
    result_of,
    state_of,
    status_of,
    titled,
    work_title,
)

SUSPECTED = 0.05
"""Probability that a cause must once have had to be worth ruling out. Judgement."""
RULED_OUT = 0.02
"""Probability below which a cause counts as ruled out. Judgement."""
WEAKENED = 0.7
"""Factor on a probability from which a finding counts as speaking against it. Judgement."""
SHOWN = 6
"""Entries of each list on the page; the log holds them all."""
SUMMARY = 4000
"""Characters that a hand-over event takes."""


@dataclass(frozen=True, slots=True)
class RuledOut:
    """A cause that was suspected once and is not any more.

    Attributes:
        chance: probability now; at most so much where it is not `exact`.
        evidence: the events that spoke most against it, in words.
    """

    ref: str
    peak: float
    chance: float
    exact: bool
    evidence: tuple[str, ...]


def handover_page(
    circuit: Circuit | None,
    events: Sequence[AnyEvent],
    notice: str,
    next_steps: Sequence[str] = (),
    chances: Mapping[int, Mapping[str, float]] | None = None,
    to: str = "",
    at: datetime | None = None,
) -> str:
    """The page in Markdown, which also reads as plain text.

    Args:
        next_steps: what the session proposes, the first first, in words.
        chances: number of each event to the probability of every cause after it; without
            them, the first causes that the log recorded have to do.
        to: who takes over; empty while that is open.
        at: when the page is made; the time of the last entry where not given.

    Raises:
        InputError: the events are no case.
    """
    case = case_file(events)
    values = {
        **_state(circuit, case),
        **_evidence_so_far(circuit, case, chances or {}),
        "to": to or (case.pending.to if case.pending else ""),
        "at": at or case.events[-1].at,
        "next_steps": list(next_steps)[:SHOWN],
        "notice": notice,
    }
    return rendered("handover.md.j2", values)


def _state(circuit: Circuit | None, case: CaseFile) -> dict[str, object]:
    """Where the work and the engine stand."""
    return {
        "head": case.head,
        "title": circuit.title if circuit else case.head.circuit,
        "state": state_of(case),
        "last": case.events[-1].number,
        "engine": (case.engine or "not stated").replace("_", " "),
        "people": _people(case),
        "opened": _first([opening_title(circuit, name) for name in case.opened]),
        "works": _first([_work(circuit, event) for event in case.rectified], last=True),
        "items": _first(open_items(circuit, case)),
        "rules": _first(list(dict.fromkeys(e.text or e.rule for e in case.fired)), last=True),
    }


def _evidence_so_far(
    circuit: Circuit | None, case: CaseFile, chances: Mapping[int, Mapping[str, float]]
) -> dict[str, object]:
    """What was found and what it means."""
    standing = case.standing
    asked = [_finding(circuit, case, f) for f in case.found if not f.complaint]
    return {
        "causes": [(cause_title(circuit, r), p) for r, p in (standing.causes if standing else ())],
        "ruled_out": [
            (cause_title(circuit, r.ref), r, "; ".join(r.evidence))
            for r in ruled_out(circuit, case, chances)[:SHOWN]
        ],
        "reported": _first([_finding(circuit, case, f) for f in case.complaint]),
        "found": _first(asked, last=True),
    }


def _first(items: list[str], last: bool = False) -> list[str]:
    """As many as fit on the page, and how many more the log holds."""
    if len(items) <= SHOWN:
        return items
    kept = items[-SHOWN:] if last else items[:SHOWN]
    more = f"({len(items) - SHOWN} more in the log)"
    return [more, *kept] if last else [*kept, more]


def _people(case: CaseFile) -> str:
    said = [e.people_clear for e in case.live if isinstance(e, StateChanged)]
    known = [word for word in said if word is not None]
    return "" if not known else "people clear" if known[-1] else "people near the engine"


def _work(circuit: Circuit | None, event: Rectified) -> str:
    parts = [f"off {event.part_off}"] if event.part_off else []
    parts += [f"on {event.part_on}"] if event.part_on else []
    shown = f" ({', '.join(parts)})" if parts else ""
    return f"{work_title(circuit, event)}{shown}, entry {event.number}"


def _finding(circuit: Circuit | None, case: CaseFile, found: Found) -> str:
    observable = observable_of(circuit, found)
    status = status_of(case, found)
    counted = f" ({status})" if status else ""
    what = f"{titled(observable, found)}: {result_of(observable, found)}"
    return f"{what}{counted}, entry {found.number}"


def ruled_out(
    circuit: Circuit | None, case: CaseFile, chances: Mapping[int, Mapping[str, float]]
) -> list[RuledOut]:
    """Causes once suspected that no longer are, those once most suspected first.

    Args:
        chances: as for `handover_page`.
    """
    told = [(event, known) for event in case.events if (known := _known(event, chances))]
    if not told:
        return []
    peaks: dict[str, float] = {}
    for _, known in told:
        for ref, chance in known.items():
            peaks[ref] = max(peaks.get(ref, 0.0), chance)
    found = [
        RuledOut(ref, peak, now, ref in told[-1][1], _against(circuit, told, ref))
        for ref, peak in peaks.items()
        if ref not in (NOTHING, UNLISTED)
        and peak >= SUSPECTED
        and (now := at_most(told[-1][1], ref)) < RULED_OUT
    ]
    return sorted(found, key=lambda r: (-r.peak, r.ref))


def _known(event: AnyEvent, chances: Mapping[int, Mapping[str, float]]) -> Mapping[str, float]:
    """What is known of the causes after an event."""
    recorded = event.after.causes if event.after else ()
    return chances.get(event.number) or dict(recorded)


def at_most(known: Mapping[str, float], ref: str) -> float:
    """Probability of a cause; where it is not among those known, the least of them."""
    return known.get(ref, min(known.values(), default=1.0))


def _against(
    circuit: Circuit | None,
    told: Sequence[tuple[AnyEvent, Mapping[str, float]]],
    ref: str,
    most: int = 2,
) -> tuple[str, ...]:
    """The events after which a cause stood lower by the largest factors, in their order."""
    falls: list[tuple[float, AnyEvent]] = []
    for (_, before), (event, after) in pairwise(told):
        ratio = at_most(after, ref) / max(at_most(before, ref), 1e-300)
        if ref in before and ratio < WEAKENED:
            falls.append((ratio, event))
    falls.sort(key=lambda fall: fall[0])
    chosen = sorted((event for _, event in falls[:most]), key=lambda event: event.number)
    return tuple(_evidence(circuit, event) for event in chosen)


def _evidence(circuit: Circuit | None, event: AnyEvent) -> str:
    if not isinstance(event, Found):
        return f"{event_line(circuit, event)} (entry {event.number})"
    observable = observable_of(circuit, event)
    return f"{titled(observable, event)}: {result_of(observable, event)} (entry {event.number})"


def handed_over(page: str, to: str, at: datetime, by: str = "") -> HandedOver:
    """The event that records a hand-over with its page.

    Raises:
        UsageError: nobody to hand over to.
    """
    if not to.strip():
        raise UsageError("a hand-over needs the name of the person who takes over")
    # The page is for reading; what it was made of stands in the log in full.
    summary = page if len(page) <= SUMMARY else page[: SUMMARY - 1] + "…"
    return HandedOver(at=at, by=by, to=to.strip(), summary=summary)


def acknowledged(events: Sequence[AnyEvent], by: str, at: datetime) -> Acknowledged:
    """The event by which a person takes the case over.

    Raises:
        UsageError: no name, or no hand-over that waits to be acknowledged.
        InputError: the events are no case.
    """
    if not by.strip():
        raise UsageError("taking over needs the name of the person who does")
    if case_file(events).pending is None:
        raise UsageError("no hand-over waits to be acknowledged")
    return Acknowledged(at=at, by=by.strip())

"""The report of a case: what a log says, for the file, the inspector and the engineer.

As Markdown, and as one HTML page that carries all it needs, prints, and runs nothing. The page
ends with the fields that 14 CFR 43.9 asks of a maintenance record, empty, for a licensed person
to complete; the report itself approves nothing.
"""

from __future__ import annotations

import re
from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass
from datetime import datetime

from diag.circuit.model import Circuit, Observable, Remedy
from diag.errors import UsageError
from diag.record.casefile import CaseFile, case_file, key_of, proof_of, unproven
from diag.record.events import (
    AnyEvent,
    Found,
    NotPossible,
    Opened,
    Rectified,
    RuleFired,
    StateChanged,
)
from diag.record.narrate import OUTCOMES, cause_title, narrate
from diag.record.plot import legend, series_of, standings_plot, steps_of
from diag.record.rendering import rendered

NOT_A_RELEASE = (
    "This report is no maintenance release, no return to service and no approved data. It records "
    "what was found and done; the work counts only when an authorised person has completed and "
    "signed the record under the rules that apply."
)
FIELDS = (
    "Description of the work performed, or reference to data acceptable to the authority",
    "Date of completion of the work",
    "Name of the person who performed the work, if other than the person who approves it",
    "Signature of the person who approves the work",
    "Certificate number",
    "Kind of certificate held",
)
"""What a record of maintenance holds under 14 CFR 43.9(a)."""
NONE_RECORDED = "none recorded"
_PICTURE = re.compile(r"\s*<svg[\s>].*</svg>\s*", re.DOTALL | re.IGNORECASE)
_FOREIGN = re.compile(
    r"<\s*(?:script|foreignobject|iframe|image|a)\b|\bon\w+\s*=|\bhref|@import|url\(", re.I
)


@dataclass(frozen=True, slots=True)
class Row:
    """One look in the order in which it was taken."""

    number: int
    at: datetime
    by: str
    what: str
    result: str
    reference: str
    remark: str
    status: str
    """Empty where it counts as it stands."""
    top: str
    """The likeliest cause after it."""
    chance: float | None


@dataclass(frozen=True, slots=True)
class Work:
    """One rectification."""

    number: int
    at: datetime
    by: str
    what: str
    part_off: str
    part_on: str
    reference: str
    remark: str
    verified: str
    """What proves it, or that nothing does."""


def report(
    form: str,
    circuit: Circuit | None,
    events: Iterable[AnyEvent],
    notice: str,
    picture: str = "",
    warnings: Sequence[str] = (),
) -> str:
    """The report of a case.

    Args:
        form: `md` or `html`.
        circuit: for titles and cautions; a case stays readable without it.
        notice: the sentence on approved data.
        picture: the oil path with its suspicion, one SVG element of our own making.
        warnings: what is wrong with the log or its circuit, shown at the top.

    Raises:
        UsageError: another form, or a picture that is not one plain SVG element.
        InputError: the events are no case.
    """
    if form not in ("md", "html"):
        raise UsageError(f"{form!r} is no form of report; use md or html")
    if picture and (not _PICTURE.fullmatch(picture) or _FOREIGN.search(picture)):
        raise UsageError("the picture must be one SVG element that loads and runs nothing")
    case = case_file(events)
    return rendered(f"report.{form}.j2", _values(circuit, case, notice, picture, warnings))


def _values(
    circuit: Circuit | None, case: CaseFile, notice: str, picture: str, warnings: Sequence[str]
) -> dict[str, object]:
    head, series = case.head, series_of(circuit, case.events)
    return {
        "head": head,
        "title": circuit.title if circuit else head.circuit,
        "state": state_of(case),
        "notice": notice,
        "warnings": [*warnings, *_circuit_warnings(circuit, head)],
        "reported": [_look(circuit, case, f) for f in case.complaint],
        "looks": [_look(circuit, case, f) for f in _asked(case)],
        "works": list(_works(circuit, case)),
        "closed": case.closed,
        "causes": [cause_title(circuit, ref) for ref in case.closed.causes] if case.closed else [],
        "outcome": OUTCOMES[case.closed.outcome] if case.closed else "",
        "proof": _proof(circuit, case),
        "open_items": open_items(circuit, case),
        "cautions": cautions(circuit, case),
        "rules": [(e, ", ".join(e.because)) for e in case.fired],
        "plot": standings_plot(circuit, case.events),
        "picture": picture,
        "legend": legend(series),
        "series": series,
        "step_numbers": [e.number for e in steps_of(case.events)],
        "story": list(narrate(circuit, case.events)),
        "fields": FIELDS,
        "not_a_release": NOT_A_RELEASE,
        "nothing": NONE_RECORDED,
    }


def _circuit_warnings(circuit: Circuit | None, head: Opened) -> Iterator[str]:
    if circuit is None:
        yield f"The circuit {head.circuit} is not at hand; names stand as they were recorded."
    elif circuit.content_hash != head.content_hash:
        yield (
            f"Titles and cautions are those of {circuit.id} {circuit.file.version}; the case was "
            f"made on version {head.version} with other content."
        )


def state_of(case: CaseFile) -> str:
    """Where the case stands, in a few words."""
    if case.closed is not None:
        return f"closed: {OUTCOMES[case.closed.outcome]}"
    if case.pending is not None:
        return f"handed over to {case.pending.to}, not acknowledged yet"
    return "open"


def _asked(case: CaseFile) -> list[Found]:
    """Findings after the report, the withdrawn ones too: a record hides nothing."""
    return [e for e in case.events if isinstance(e, Found) and not e.complaint]


def _look(circuit: Circuit | None, case: CaseFile, found: Found) -> Row:
    standing = found.after.causes if found.after else ()
    observable = observable_of(circuit, found)
    return Row(
        number=found.number,
        at=found.at,
        by=found.by,
        what=titled(observable, found),
        result=result_of(observable, found),
        reference=found.reference,
        remark=found.remark,
        status=status_of(case, found),
        top=cause_title(circuit, standing[0][0]) if standing else "",
        chance=standing[0][1] if standing else None,
    )


def observable_of(circuit: Circuit | None, found: Found) -> Observable | None:
    """What a finding looked at, where the circuit knows it."""
    return circuit.observables.get(key_of(found)) if circuit else None


def titled(observable: Observable | None, found: Found) -> str:
    """What was looked at, with its point."""
    title = observable.record.title if observable else found.name.replace("_", " ")
    return f"{title}, {found.point.replace('_', ' ')}" if found.point else title


def result_of(observable: Observable | None, found: Found) -> str:
    """The answer as it reads to a person; a reading stays as it was given."""
    if observable is None or found.value not in observable.outcomes:
        return found.value
    return observable.record.words.get(found.value, found.value.replace("_", " "))


def status_of(case: CaseFile, found: Found) -> str:
    """Why a finding counts for less than it says; empty where it counts in full."""
    if found.number in case.gone:
        return f"withdrawn by entry {case.gone[found.number]}"
    if found.number in case.repeated:
        return f"repeated by entry {case.repeated[found.number]}"
    if found.number in case.trust:
        return f"trusted only to {case.trust[found.number]:g}"
    return ""


def _works(circuit: Circuit | None, case: CaseFile) -> Iterator[Work]:
    for event in case.rectified:
        proof = proof_of(circuit, case, event)
        yield Work(
            number=event.number,
            at=event.at,
            by=event.by,
            what=work_title(circuit, event),
            part_off=event.part_off,
            part_on=event.part_on,
            reference=event.reference,
            remark=event.remark,
            verified=f"by entry {proof.number}" if proof else "not verified",
        )


def remedy_of(circuit: Circuit | None, event: Rectified) -> Remedy | None:
    """The rectification, where the circuit knows it."""
    return circuit.remedies.get(event.rectification) if circuit else None


def work_title(circuit: Circuit | None, event: Rectified) -> str:
    """A rectification in words."""
    remedy = remedy_of(circuit, event)
    return remedy.record.title if remedy else event.rectification.replace("_", " ")


def _proof(circuit: Circuit | None, case: CaseFile) -> str:
    """What verified the fix, in words; empty when the case is open."""
    if case.closed is None:
        return ""
    if case.proof is None:
        return f"Not verified: {case.closed.not_verified_because or 'no reason recorded'}"
    observable = observable_of(circuit, case.proof)
    shown = f"{titled(observable, case.proof)}: {result_of(observable, case.proof)}"
    return f"Verified by entry {case.proof.number}: {shown}"


def open_items(circuit: Circuit | None, case: CaseFile) -> list[str]:
    """What the next person must know is not finished."""
    items = [] if case.closed else ["The case is not closed."]
    if case.pending is not None:
        items.append(f"The hand-over to {case.pending.to} is not acknowledged.")
    for event in unproven(circuit, case):
        items.append(f"Not verified: {work_title(circuit, event)} (entry {event.number}).")
    items += [f"Still open: {opening_title(circuit, name)}." for name in case.opened]
    for step in case.not_possible:
        why = f": {step.reason}" if step.reason else ""
        items.append(f"Could not be done: {step_title(circuit, step)}{why} (entry {step.number}).")
    items += [f"Entry {n} is trusted only to {trust:g}." for n, trust in case.trust.items()]
    return items


def opening_title(circuit: Circuit | None, name: str) -> str:
    """An opening in words."""
    known = circuit.openings.get(name) if circuit else None
    return known.title if known else name.replace("_", " ")


def step_title(circuit: Circuit | None, event: NotPossible) -> str:
    """A check or rectification in words."""
    if circuit is not None and event.step in circuit.observables:
        return circuit.observables[event.step].record.title
    if circuit is not None and event.step in circuit.remedies:
        return circuit.remedies[event.step].record.title
    return event.step.replace("_", " ")


def cautions(circuit: Circuit | None, case: CaseFile) -> list[str]:
    """The cautions of every step taken, and those that rules raised, each once."""
    found: dict[str, None] = {}
    for event in case.live:
        if isinstance(event, RuleFired):
            found[event.text or event.rule] = None
        elif circuit is not None and isinstance(event, Found | Rectified | StateChanged):
            found |= dict.fromkeys(circuit.cautions[c] for c in _codes(circuit, event))
    return list(found)


def _codes(circuit: Circuit, event: Found | Rectified | StateChanged) -> list[str]:
    if isinstance(event, StateChanged):
        states = [circuit.engine_states.get(event.engine or "")]
        openings = [circuit.openings.get(name) for name in event.opened]
        return [code for thing in (*states, *openings) if thing for code in thing.cautions]
    if isinstance(event, Rectified):
        remedy = circuit.remedies.get(event.rectification)
        return list(remedy.record.cautions) if remedy else []
    observable = circuit.observables.get(key_of(event))
    return list(observable.record.cautions) if observable else []

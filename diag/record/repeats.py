"""Repeat defects: earlier closed cases of the same engine with the same complaint.

The complaint is back although the case was closed: either the fix did not hold, or the cause
was another one, or it is a new fault. `prior_factors` gives that as evidence.
"""

from __future__ import annotations

import os
from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from datetime import datetime, timedelta
from pathlib import Path

from diag.belief.evidence import outcome_table
from diag.belief.frame import Frame, state_chances
from diag.circuit.model import UNLISTED, Circuit
from diag.errors import DiagError, UsageError
from diag.record.casefile import CaseFile, case_file, key_of, reads_normal
from diag.record.events import AnyEvent, Opened
from diag.record.journal import read_journal

DAYS = 30.0
"""Days within which the same complaint counts as the same defect. Common practice, no source."""
HOURS_A_DAY = 8.0
"""Flying hours of an engine in a day, where nobody says better. Judgement."""


@dataclass(frozen=True, slots=True)
class Repeat:
    """An earlier case with an overlapping complaint.

    Attributes:
        shared: findings, by name, that both reports have.
        fixes: rectifications done then, in their order.
        proof: finding that verified it, `NAME@POINT`, or empty.
        proof_normal: whether that finding was unremarkable; None where the circuit cannot tell.
        days: from its closing to the present opening.
        flights: the same in flights of the engine, where both cases count them.
    """

    log: str
    closed: datetime
    days: float
    flights: int | None
    shared: tuple[str, ...]
    outcome: str
    causes: tuple[str, ...]
    fixes: tuple[str, ...]
    proof: str
    proof_normal: bool | None

    @property
    def verified(self) -> bool:
        """Whether a finding showed that the fix worked, as far as can be told."""
        return bool(self.proof) and self.proof_normal is not False


@dataclass(frozen=True, slots=True)
class Searched:
    """What a folder holds of one defect; `unreadable` are logs that could not be looked into."""

    repeats: tuple[Repeat, ...]
    unreadable: tuple[str, ...]


def find_repeats(
    folder: str | os.PathLike[str],
    head: Opened,
    complaint: Iterable[str],
    circuit: Circuit | None = None,
    days: float = DAYS,
    flights: int | None = None,
) -> Searched:
    """Closed cases of the same engine with an overlapping complaint, the latest first.

    Args:
        folder: findings logs, `*.jsonl`.
        head: the opening of the present case; its own log is passed over.
        complaint: names of the present report's findings, without their points.
        circuit: tells whether a verification was unremarkable.
        days: how far back the closing may lie.
        flights: how many flights back it may lie; a case within either bound counts.

    Raises:
        UsageError: the folder is none, the engine has no name, or a bound is negative.
    """
    place = Path(folder)
    if not place.is_dir():
        raise UsageError(f"{folder}: not a folder")
    if not head.engine.strip():
        raise UsageError("the case names no engine, so no earlier case can be told to be its own")
    if not days >= 0.0 or (flights is not None and flights < 0):
        raise UsageError("days and flights must not be negative")
    names, found, unreadable = set(complaint), [], []
    for path in sorted(place.glob("*.jsonl")):
        try:
            case = _case(path)
        except DiagError as error:
            unreadable.append(f"{path.name}: {str(error).splitlines()[0]}")
            continue
        repeat = _repeat(path, case, head, names, circuit)
        if repeat and _recent(repeat, days, flights):
            found.append(repeat)
    found.sort(key=lambda repeat: repeat.closed, reverse=True)
    return Searched(tuple(found), tuple(unreadable))


def _case(path: Path) -> CaseFile:
    """A log, with or without problems of its own: verifying it is another job."""
    return case_file(read_journal(path).events)


def _repeat(
    path: Path, case: CaseFile, head: Opened, names: set[str], circuit: Circuit | None
) -> Repeat | None:
    closed, shared = case.closed, {f.name for f in case.complaint} & names
    same = _plain(case.head.engine) == _plain(head.engine)
    earlier = closed is not None and closed.at <= head.at and case.head.at != head.at
    if closed is None or not (same and earlier and shared):
        return None
    counted = case.head.flights is not None and head.flights is not None
    proof = case.proof
    return Repeat(
        log=path.name,
        closed=closed.at,
        days=(head.at - closed.at) / timedelta(days=1),
        flights=(head.flights or 0) - (case.head.flights or 0) if counted else None,
        shared=tuple(sorted(shared)),
        outcome=closed.outcome,
        causes=closed.causes,
        fixes=tuple(event.rectification for event in case.rectified),
        proof=key_of(proof) if proof else "",
        proof_normal=reads_normal(circuit, proof) if proof and circuit else None,
    )


def _plain(engine: str) -> str:
    """An identity as it is compared: letters and digits, whatever their case."""
    return "".join(c for c in engine.casefold() if c.isalnum())


def _recent(repeat: Repeat, days: float, flights: int | None) -> bool:
    by_flights = flights is not None and repeat.flights is not None and repeat.flights <= flights
    return repeat.days <= days or by_flights


def same_swaps(
    repeats: Iterable[Repeat], rectifications: Iterable[str]
) -> Iterator[tuple[Repeat, str]]:
    """Rectifications, done or proposed now, that an earlier case had already.

    Doing the same swap again is the commonest way of not finding the cause.
    """
    wanted = list(dict.fromkeys(rectifications))
    for repeat in repeats:
        for name in wanted:
            if name in repeat.fixes:
                yield repeat, name


def swaps_of(events: Sequence[AnyEvent]) -> tuple[str, ...]:
    """Rectifications that count in a case, by name."""
    return tuple(event.rectification for event in case_file(events).rectified)


def prior_factors(
    circuit: Circuit, repeat: Repeat, hours: float | None = None
) -> Mapping[str, float]:
    """What the earlier fix not holding says of each cause: factors on its prior odds.

    With `f` the share of the exposure that lies after the fix, a cause is there now because it
    arose since (`f`), or because it was there before (`1 - f`), survived the rectifications
    done (each removes what it restores with its own chance of success), and let the
    verification read unremarkable. So its factor is

        f + (1 - f) · Π (1 - success) · P(verification unremarkable | the cause alone)

    taken relative to an engine on which nothing was done. Without a verification the last
    term is 1: nothing then speaks against a cause that was left alone. What the complaint
    itself says is not in it; the findings of the present case bring that.

    Args:
        hours: flying hours since the fix; from its days where not given.
    """
    flown = repeat.days * HOURS_A_DAY if hours is None else hours
    since = min(max(flown / circuit.exposure.hours, 0.0), 1.0)
    passed = _passes(circuit, repeat) if repeat.verified else {}
    kept = dict.fromkeys((*circuit.modes, UNLISTED), 1.0)
    for name in repeat.fixes:
        remedy = circuit.remedies.get(name)
        for ref in remedy.restores if remedy else ():
            kept[ref] *= 1.0 - (remedy.record.success if remedy else 0.0)
    return {ref: since + (1.0 - since) * kept[ref] * passed.get(ref, 1.0) for ref in kept}


def _passes(circuit: Circuit, repeat: Repeat) -> dict[str, float]:
    """P(the verification reads unremarkable | each cause alone), against none being there."""
    observable = circuit.observables.get(repeat.proof)
    if observable is None:
        return {}
    frame = Frame(circuit)
    side = frame.sides[observable.node]
    columns = frame.leak * frame.cumulative
    states = state_chances(columns[:, side.down], columns[:, side.up], side.normal)
    passed = frame.through(observable)
    silent = outcome_table(observable)[:, observable.outcomes.index(observable.normal)]
    chance = (states * (passed.matrices @ silent)[passed.digit]).sum(axis=1)
    return {ref: float(chance[i] / chance[-1]) for i, ref in enumerate(frame.refs)}

"""Steps a person could take now, with their minutes, needs, cautions and worth.

This is the first, short-sighted choice: expected information about the hypotheses per
minute (the selection ratio of Gorry & Barnett 1968), minutes counted with the access that is
not open yet and the engine state that is not reached yet. A rectification is proposed once
its cause is likely enough.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, replace
from datetime import datetime

from diag.belief.outlook import Outlook
from diag.circuit.model import Circuit, Observable, Remedy
from diag.circuit.records import Needs, Step

NOTICE = (
    "Decision support only: the approved maintenance data, local rules and licensed judgement "
    "govern every step. It never releases an aircraft."
)
NO_REFERENCE = "approved maintenance data: record the task you followed"
LIKELY_ENOUGH = 0.85
"""Probability of its causes from which a rectification is proposed. Judgement."""
WORTH_A_LOOK = 0.005
"""Bits below which a check is not worth asking for. Judgement."""

_MEETS = {
    "any": {"cold", "hot_stopped", "motoring", "idle", "high_power"},
    "stopped": {"cold", "hot_stopped"},
}
_RUNNING = {"static": "stopped", "motoring": "motoring", "high_power": "high_power"}


@dataclass(frozen=True, slots=True)
class Place:
    """Where the work stands: engine state and what is open."""

    engine: str = "cold"
    opened: frozenset[str] = frozenset()
    since: datetime | None = None
    """When the engine reached this state, where that is known."""
    people_near: bool = False


@dataclass(frozen=True, slots=True)
class NextStep:
    """One step with what it costs from here and what it would tell."""

    id: str
    kind: str
    """`indication`, `check`, `rectification`, `close` or `escalate`."""
    title: str
    minutes: float
    """Of the step itself."""
    access_minutes: float
    """To reach the engine state and open what it needs, and to close again."""
    information_bits: float
    probability: float
    """For a rectification: that one of the causes it removes is present; otherwise 0."""
    needs: tuple[str, ...]
    cautions: tuple[str, ...]
    reference: str
    held: tuple[str, ...] = ()
    """Why it may not be done now; empty where it may."""
    note: str = ""
    """Why it is asked again, where a rule asks for it."""

    @property
    def expected_minutes(self) -> float:
        """Minutes from here until the step is done and closed up again."""
        return self.minutes + self.access_minutes

    @property
    def worth(self) -> float:
        """Bits per minute."""
        return self.information_bits / max(self.expected_minutes, 0.5)


def needs_of(observable: Observable, recalled: bool) -> Needs:
    """What taking the finding needs; a recalled indication needs nothing.

    Args:
        observable: the indication or check.
        recalled: an indication may still be taken from the report or the recorded data.
    """
    needs = observable.record.needs
    # Nobody recalls what the gauge showed on motoring: that is looked at.
    looked_at = not recalled or observable.point == "motoring"
    if observable.record.kind == "indication" and looked_at and observable.point:
        return needs.model_copy(update={"engine": _RUNNING.get(observable.point, "idle")})
    if needs.engine == "idle" and observable.point == "high_power":
        return needs.model_copy(update={"engine": "high_power"})
    return needs


def meets(needed: str, state: str) -> bool:
    """Whether a step that needs one engine state can be done in another."""
    return state in _MEETS.get(needed, {needed})


def access_minutes(circuit: Circuit, needs: Needs, place: Place) -> float:
    """Minutes to reach the state and openings from `place`, closing up included."""
    total = 0.0
    if not meets(needs.engine, place.engine):
        states = circuit.engine_states
        total += states[needs.engine].reach_minutes + states[place.engine].leave_minutes
    for name in wanted_openings(circuit, needs, place):
        opening = circuit.openings[name]
        total += opening.open_minutes + opening.close_minutes
    return total


def wanted_openings(circuit: Circuit, needs: Needs, place: Place) -> list[str]:
    """Openings still to be made, outer ones first."""
    found: list[str] = []

    def add(name: str) -> None:
        for outer in circuit.openings[name].inside:
            add(outer)
        if name not in place.opened and name not in found:
            found.append(name)

    for name in needs.opens:
        add(name)
    return found


def needs_in_words(circuit: Circuit, needs: Needs, place: Place) -> tuple[str, ...]:
    """State and access as a person reads them."""
    words = {
        "stopped": "engine stopped", "cold": "engine stopped and cold",
        "hot_stopped": "engine stopped, oil still warm", "motoring": "engine motored",
        "idle": "engine running at idle", "high_power": "engine running at high power",
    }  # fmt: skip
    found = [words[needs.engine]] if needs.engine != "any" else []
    if needs.after_minutes:
        found.append(f"at least {needs.after_minutes:g} min after stop")
    if needs.within_minutes:
        found.append(f"within {needs.within_minutes:g} min of stop")
    found += [f"open: {circuit.openings[n].title}" for n in wanted_openings(circuit, needs, place)]
    return tuple(found)


def reference_line(step: Step) -> str:
    """The operator's own task where an overlay gives it, else the request to record one."""
    return step.reference or NO_REFERENCE


def check_step(
    circuit: Circuit, observable: Observable, bits: float, place: Place, recalled: bool
) -> NextStep:
    """An indication or check as a step."""
    record, needs = observable.record, needs_of(observable, recalled)
    running = needs.engine in ("motoring", "idle", "high_power")
    codes = record.cautions
    if running and not codes:
        codes = ("engine_run", "rotating", "blast")
    return NextStep(
        id=observable.id,
        kind=record.kind,
        title=titled(observable),
        minutes=record.minutes,
        access_minutes=access_minutes(circuit, needs, place),
        information_bits=float(bits),
        probability=0.0,
        needs=needs_in_words(circuit, needs, place),
        cautions=tuple(circuit.cautions[code] for code in codes),
        reference=reference_line(record),
    )


def titled(observable: Observable) -> str:
    """The title, with the operating point where there is one."""
    if observable.point is None:
        return observable.record.title
    return f"{observable.record.title}, {observable.point.replace('_', ' ')}"


def remedy_step(circuit: Circuit, remedy: Remedy, probability: float, place: Place) -> NextStep:
    """A rectification as a step."""
    record = remedy.record
    return NextStep(
        id=remedy.id,
        kind="rectification",
        title=record.title,
        minutes=record.minutes,
        access_minutes=access_minutes(circuit, record.needs, place),
        information_bits=0.0,
        probability=probability,
        needs=needs_in_words(circuit, record.needs, place),
        cautions=tuple(circuit.cautions[code] for code in record.cautions),
        reference=reference_line(record),
    )


def escalation(circuit: Circuit) -> NextStep:
    """Handing the case to engineering, which is always possible."""
    return NextStep(
        id="escalate",
        kind="escalate",
        title="Hand the case to engineering with what is known",
        minutes=circuit.file.costs.escalate_minutes,
        access_minutes=0.0,
        information_bits=0.0,
        probability=0.0,
        needs=(),
        cautions=(),
        reference=NO_REFERENCE,
    )


def closing(probability: float) -> NextStep:
    """Closing the case once a rectification has been verified."""
    return NextStep(
        id="close",
        kind="close",
        title="Close the case: the rectification is verified",
        minutes=0.0,
        access_minutes=0.0,
        information_bits=0.0,
        probability=probability,
        needs=(),
        cautions=(),
        reference=NO_REFERENCE,
    )


def checks_by_worth(
    circuit: Circuit, outlook: Outlook, place: Place, done: Iterable[str], recalled: bool
) -> list[NextStep]:
    """Every check that is possible now, the most bits per minute first, ties by name."""
    skipped = set(done)
    wanted = [o for o in circuit.observables.values() if o.id not in skipped]
    bits = outlook.information(wanted)
    steps = [
        check_step(circuit, observable, value, place, recalled)
        for observable, value in zip(wanted, bits.tolist(), strict=True)
    ]
    # Bits are rounded so that equal checks stay equal on every machine.
    return sorted(steps, key=lambda s: (-round(s.worth, 9), s.id))


def remedies_by_chance(
    circuit: Circuit, marginals: Mapping[str, float], place: Place, done: Iterable[str]
) -> list[NextStep]:
    """Rectifications by the probability that one of their causes is present."""
    skipped = set(done)
    steps = [
        remedy_step(circuit, remedy, min(sum(marginals[r] for r in remedy.restores), 1.0), place)
        for remedy in circuit.remedies.values()
        if remedy.id not in skipped
    ]
    return sorted(steps, key=lambda s: (-round(s.probability, 9), s.expected_minutes, s.id))


def next_steps(
    circuit: Circuit,
    outlook: Outlook,
    marginals: Mapping[str, float],
    place: Place,
    done: Iterable[str] = (),
    verify: Iterable[str] = (),
    recalled: bool = True,
    sound: float = 0.0,
) -> list[NextStep]:
    """The steps in the order in which they are proposed.

    Args:
        circuit: the circuit.
        outlook: predictions from the present posterior.
        marginals: probability that each mode is present now.
        place: engine state and openings.
        done: findings taken and steps not possible.
        verify: findings that would prove a rectification done; they come first.
        recalled: indications may be taken from the report or the recorded data.
        sound: after verified rectifications, the probability that no cause is left; else 0.
    """
    done, verify = set(done), list(verify)
    checks = checks_by_worth(circuit, outlook, place, done, recalled)
    remedies = remedies_by_chance(circuit, marginals, place, done)
    proof = [
        replace(step, note="it shows whether the rectification worked")
        for name in verify
        for step in checks
        if step.id == name
    ]
    likely = [step for step in remedies if step.probability >= LIKELY_ENOUGH]
    telling = [s for s in checks if s.information_bits >= WORTH_A_LOOK and s.id not in verify]
    rest = [s for s in remedies if s not in likely and s.probability >= 1.0 - LIKELY_ENOUGH]
    end = [closing(sound)] if sound >= LIKELY_ENOUGH else []
    return [*proof, *end, *likely, *telling, *rest, escalation(circuit)]


__all__ = [
    "NOTICE",
    "NextStep",
    "Place",
    "escalation",
    "needs_of",
    "next_steps",
    "wanted_openings",
]

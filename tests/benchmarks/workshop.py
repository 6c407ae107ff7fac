"""Simulated cases: a drawn truth answers by the circuit's own tables, and minutes are counted.

The truth is drawn from the posterior of the complaint, which is the prior given that complaint.
Every order meets the same truth: draws depend on the case, what is looked at and how many
rectifications were made, and on nothing else.
"""

from __future__ import annotations

import zlib
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from functools import cached_property

import numpy as np

from diag.advice.plan.draft import Lookout, comes_back, ground_of, mending, wants_of
from diag.advice.plan.ground import Stand, Wants
from diag.advice.plan.problem import Array, Mask
from diag.advice.planner import Budget, Situation, plan
from diag.advice.rules import judge_findings
from diag.advice.steps import needs_of, next_steps
from diag.belief.evidence import outcome_of, parse_finding
from diag.belief.hypotheses import Engine
from diag.circuit.model import Circuit, Observable, Remedy
from diag.record.events import Found, Rectified, StateChanged
from diag.session import Assessment, CaseState, advance, rule_view
from tests.benchmarks.subject import NOW, open_case

LONGEST = 60
"""Steps after which a case is handed on, whatever the order says."""


@dataclass
class Case:
    """One case on the bench: what is true, what is known, and the minutes so far."""

    circuit: Circuit
    engine: Engine
    complaint: str
    seed: int
    minutes: float = 0.0
    mended: int = 0
    log: list[str] = field(default_factory=list)

    def __post_init__(self) -> None:
        self.ground, self.stand = ground_of(self.circuit), Stand("cold")
        self.state: CaseState = open_case(self.circuit).state
        self._tell(parse_finding(self.circuit, self.complaint).observable, self.complaint)
        start = self.posterior
        row = int(
            self._chance("truth").choice(len(start.weight), p=start.weight / start.weight.sum())
        )
        self.truth = frozenset(m for m in start.modes[row].tolist() if m != start.frame.none)
        self.start = start

    def _chance(self, *words: object) -> np.random.Generator:
        return np.random.default_rng([self.seed, zlib.crc32(repr(words).encode())])

    def _tell(self, observable: Observable, text: str) -> None:
        name, value = observable.record.id, text.partition("=")[2]
        event = Found(at=NOW, name=name, point=observable.point, value=value)
        self.state = advance(self.state, event)
        self.posterior = self.engine.posterior(self.state.findings)

    @property
    def assessment(self) -> Assessment:
        return Assessment(self.posterior, self.state, judge_findings(rule_view(self.state)))

    def _go(self, wants: Wants, minutes: float) -> None:
        way, there = self.ground.go(self.stand, wants)
        self.minutes += way + minutes
        opened = tuple(there.opened - self.stand.opened)
        closed = tuple(self.stand.opened - there.opened)
        engine = there.engine if there.engine != self.stand.engine else None
        if opened or closed or engine:
            event = StateChanged(at=NOW, engine=engine, opened=opened, closed=closed)
            self.state = advance(self.state, event)
        self.stand = there

    def look(self, observable: Observable, recalled: bool | None = None) -> str:
        """Makes a check; its outcome."""
        recalled = not self.state.world if recalled is None else recalled
        self._go(wants_of(needs_of(observable, recalled)), observable.record.minutes)
        outcome = self._shown(observable)
        self._tell(observable, f"{observable.id}={outcome}")
        self.log.append(f"{observable.id}={outcome}")
        return outcome

    def _shown(self, observable: Observable) -> str:
        modes = np.array([sorted(self.truth) or [self.start.frame.none]], dtype=np.int64)
        view = Lookout(self.start, modes, np.ones(1))
        chances = view.states(observable.node)[0]
        if not self.mended:
            for sight in self.start.sights:
                if sight.node == observable.node:
                    chances = chances * sight.table[sight.digit[modes].sum(axis=1)][0]
        state = self._draw(chances, "state", observable.node)
        table = view.looks_through(observable)[0][state]
        return observable.outcomes[self._draw(table, "shown", observable.id)]

    def _draw(self, chances: Array, *words: object) -> int:
        chance = self._chance(*words, self.mended).random()
        return int(np.searchsorted(np.cumsum(chances) / chances.sum(), chance))

    def mend(self, remedy: Remedy) -> bool:
        """Makes a rectification and its verification; whether that was passed."""
        record, refs = remedy.record, self.start.frame.refs
        self._go(wants_of(record.needs), record.minutes + record.parts_minutes)
        hit = {m for m in self.truth if refs[m] in remedy.restores}
        if not hit:
            self.minutes += self.circuit.file.costs.wrong_removal_minutes
        if self._chance("success", remedy.id, self.mended).random() < record.success:
            self.truth -= hit
        self.mended += 1
        self.log.append(remedy.id)
        self.state = advance(self.state, Rectified(at=NOW, rectification=remedy.id))
        proof = self.circuit.observables[record.verify]
        return self.look(proof, recalled=False) == proof.normal

    def end(self, close: bool) -> float:
        """Minutes of the whole case once it is closed or handed on."""
        refs, mend = self.start.frame.refs, mending(self.circuit)
        self.minutes += self.ground.leave(self.stand)
        self.minutes += sum(mend.get(refs[m], 0.0) for m in self.truth)
        if not close:
            self.minutes += self.circuit.file.costs.escalate_minutes
        elif self.truth:
            self.minutes += comes_back(self.circuit)
        self.log.append("close" if close else "escalate")
        return self.minutes


Order = Callable[[Case], tuple[str, str]]


def followed(case: Case, order: Order) -> float:
    """Minutes of a case worked through in an order."""
    for _ in range(LONGEST):
        kind, name = order(case)
        if kind in ("close", "escalate"):
            return case.end(kind == "close")
        if kind == "rectification":
            case.mend(case.circuit.remedies[name])
        else:
            case.look(case.circuit.observables[name])
    return case.end(close=False)


def planned(steps: int) -> Order:
    """The planner with a budget in steps."""

    def order(case: Case) -> tuple[str, str]:
        state = case.state
        situation = Situation(
            case.circuit,
            case.posterior,
            state.world,
            state.place,
            frozenset(state.done),
            recalled=not state.world,
        )
        chosen = plan(situation, Budget(steps)).chosen
        return chosen.kind, chosen.id

    return order


def greedy(case: Case) -> tuple[str, str]:
    """Bits per minute, as the bench proposes without a planner."""
    a, state = case.assessment, case.state
    steps = next_steps(
        case.circuit,
        a.outlook,
        a.present,
        state.place,
        state.done,
        state.unproven,
        recalled=not state.world,
        sound=a.sound,
    )
    return steps[0].kind, steps[0].id


class Printed:
    """The list a careful author prints for a complaint: causes that are likely and cheap to
    look for first; each is looked for with its most telling check per minute, and rectified
    when that is positive; at the end of the list the case is handed on."""

    LEAST = 0.01
    """Chance of a cause from which it is on the list."""

    def __init__(self, case: Case) -> None:
        self.rows = self._rows(case)
        self.at = 0
        self.proving = False

    def _rows(self, case: Case) -> list[tuple[float, Remedy, Observable, frozenset[str]]]:
        start = case.start
        view = Lookout(start, start.modes[:300], start.weight[:300])
        rows = []
        for remedy in case.circuit.remedies.values():
            modes = [start.frame.index[r] for r in remedy.restores]
            there = np.isin(view.modes, modes).any(axis=1)
            chance = float(view.weight[there].sum())
            if chance >= self.LEAST:
                _rate, look, positive = self._best(case, view, there)
                minutes = _minutes(case, look) + chance * remedy.record.minutes
                rows.append((-chance / minutes, remedy, look, positive))
        return sorted(rows, key=lambda row: (row[0], row[1].id))

    def _best(
        self, case: Case, view: Lookout, there: Mask
    ) -> tuple[float, Observable, frozenset[str]]:
        found = []
        for look in case.circuit.observables.values():
            if look.id in case.state.done:
                continue
            answers = (view.states(look.node)[:, :, None] * view.looks_through(look)).sum(axis=1)
            joint = np.array([view.weight[side] @ answers[side] for side in (~there, there)])
            joint /= joint.sum()
            outer = joint.sum(axis=1, keepdims=True) * joint.sum(axis=0, keepdims=True)
            bits = float((joint * np.log2(np.maximum(joint, 1e-300) / outer)).sum())
            given = joint / joint.sum(axis=1, keepdims=True)
            more = given[1] > given[0]
            words = frozenset(
                o for o, m in zip(look.outcomes, more, strict=True) if m and o != look.normal
            )
            if words:
                found.append((bits / _minutes(case, look), look.id, look, words))
        rate, _, look, words = max(found, key=lambda f: f[:2])
        return rate, look, words

    def __call__(self, case: Case) -> tuple[str, str]:
        if case.mended and not case.state.unproven:
            last = case.posterior.findings[-1]
            if outcome_of(last) == last.observable.normal and self.proving:
                return "close", "close"
        self.proving = False
        while self.at < len(self.rows):
            _, remedy, look, positive = self.rows[self.at]
            known = [outcome_of(f) for f in case.posterior.findings if f.key == look.id]
            if not known:
                return "check", look.id
            self.at += 1
            if known[-1] in positive:
                self.proving = True
                return "rectification", remedy.id
        return "escalate", "escalate"


def _minutes(case: Case, look: Observable) -> float:
    wants = wants_of(needs_of(look, recalled=True))
    return case.ground.go(case.stand, wants)[0] + max(look.record.minutes, 0.5)


@dataclass(frozen=True)
class Shift:
    """Cases of one circuit, worked through by several orders."""

    circuit: Circuit
    complaints: Sequence[str]

    @cached_property
    def engine(self) -> Engine:
        return Engine(self.circuit)

    def case(self, number: int) -> Case:
        """One case, the same whenever it is asked for."""
        complaint = self.complaints[number % len(self.complaints)]
        return Case(self.circuit, self.engine, complaint, number)

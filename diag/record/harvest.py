"""From closed logs to what can be learned of them: one `Case` for each log that counts.

What counts, and why:

- *Confirmed and verified cases only* (`why_not_confirmed`): "replaced" is not "was faulty".
- A log counts once, however it is named and however often it was copied.
- The truth of a case is what its closing names; everything else listed was sound. A cause is
  gone after the last rectification that removes it. Between the first and the last such
  rectification nobody knows whether it was there, so nothing is learned from that stretch.
- A finding of the report was noted *because* it was abnormal, and unremarkable indications
  leave no line: it is evidence of its condition, but says nothing of how reliable the
  indication is. Findings asked for later count in full: which one was asked for depended on
  what the log records, so those not asked for are missing at random.
- The verification was repeated until it came out well, so it proves the fix and nothing else.
- A finding that is doubted, or that a rule sets aside, counts for nothing here.
"""

from __future__ import annotations

import os
from collections import Counter
from collections.abc import Callable, Iterable, Iterator, Sequence
from dataclasses import dataclass, field
from typing import NamedTuple

from diag.belief.evidence import make_finding, state_likelihood
from diag.circuit.model import Circuit, Observable
from diag.errors import DiagError, InputError
from diag.record.casefile import CaseFile, case_file, key_of, why_not_confirmed
from diag.record.events import Found
from diag.record.skim import skim

IDENTITY = 16
"""Hexadecimal digits kept of a case's identity: 64 bits tell millions of cases apart."""
CHUNK = 250
"""Logs read in one task; sending the circuit along costs about as much as reading ten."""


class Look(NamedTuple):
    """One answer to a check, in words."""

    observable: str
    outcome: str
    faulty: tuple[str, ...]
    """Modes present in the instruments it came through."""
    counts: bool
    """Whether it says something of the check's reliability; see the head of this module."""


class Scene(NamedTuple):
    """One condition of one engine while the causes that bear on it stayed the same."""

    node: str
    causes: tuple[str, ...]
    looks: tuple[Look, ...]
    numbers: tuple[float, ...]
    """Per state, how likely the readings given as numbers are; the largest is 1."""


class Case(NamedTuple):
    """What one closed case says."""

    identity: str
    """Hash of the first line: copies share it, and so does a copy that was carried on."""
    causes: tuple[str, ...]
    arisen: tuple[str, ...]
    """Causes that count for their rate: not promoted by another cause of the case, and not on
    a component that was more likely than usual, having been worked on."""
    complained: tuple[str, ...]
    """Conditions that the report speaks of."""
    scenes: tuple[Scene, ...]


class LeftOut(NamedTuple):
    """A log that counts for nothing, and why."""

    log: str
    reason: str


@dataclass(slots=True)
class Harvest:
    """Everything gathered from a number of logs, each case once.

    Attributes:
        scenes: how often each scene was met.
        arisen: how often each cause arose.
    """

    cases: int = 0
    known: set[str] = field(default_factory=set)
    left_out: list[LeftOut] = field(default_factory=list)
    scenes: Counter[Scene] = field(default_factory=Counter)
    arisen: Counter[str] = field(default_factory=Counter)
    complained: set[str] = field(default_factory=set)
    counted: list[str] = field(default_factory=list)
    """Identities of the cases counted, shortened, in the order in which they came."""

    def take(self, log: str, case: Case) -> None:
        """Adds one case, unless it was counted before."""
        identity = case.identity[:IDENTITY]
        if identity in self.known:
            self.left_out.append(LeftOut(log, "counted already"))
            return
        self.known.add(identity)
        self.counted.append(identity)
        self.cases += 1
        self.scenes.update(case.scenes)
        self.arisen.update(case.arisen)
        self.complained.update(case.complained)


def gather(
    logs: Sequence[str | os.PathLike[str]],
    circuit: Circuit,
    counted: Iterable[str] = (),
    jobs: int = 1,
    progress: Callable[[int], None] = lambda count: None,
) -> Harvest:
    """Reads the logs, in several processes where `jobs` says so.

    The reading runs through joblib, so that inside
    `joblib.parallel_config(backend="dask")` it runs on that cluster.

    Args:
        counted: shortened identities of cases that an overlay holds already.
        jobs: processes; -1 for one on every core.
        progress: called with the number of logs read since it was last called.
    """
    from joblib import Parallel, delayed

    harvest = Harvest(known=set(counted))
    names = [os.fspath(log) for log in logs]
    chunks = [names[at : at + CHUNK] for at in range(0, len(names), CHUNK)]
    # Starting processes takes longer than reading one chunk.
    read = Parallel(n_jobs=jobs if len(chunks) > 1 else 1, return_as="generator")(
        delayed(read_cases)(chunk, circuit) for chunk in chunks
    )
    for chunk, cases in zip(chunks, read, strict=True):
        for name, case in zip(chunk, cases, strict=True):
            if isinstance(case, Case):
                harvest.take(name, case)
            else:
                harvest.left_out.append(case)
        progress(len(chunk))
    return harvest


def read_cases(logs: Iterable[str], circuit: Circuit) -> list[Case | LeftOut]:
    """Reads some logs; one that cannot be used never stops the others."""
    reader = _Reader(circuit)
    return [reader.read(log) for log in logs]


class _Reader:
    """Turns logs into cases; remembers how readings were understood."""

    def __init__(self, circuit: Circuit) -> None:
        self.circuit = circuit
        self.modes = circuit.modes
        self.rules = {rule.id: rule for rule in circuit.rules}
        self._understood: dict[tuple[str, str], str | tuple[float, ...]] = {}

    def read(self, log: str) -> Case | LeftOut:
        try:
            sound = skim(log)
            case = case_file(sound.events)
            if case.head.circuit != self.circuit.id:
                return LeftOut(log, "another circuit")
            if reason := why_not_confirmed(self.circuit, case):
                return LeftOut(log, reason)
            return self._case(case, sound.identity)
        except InputError as error:
            return LeftOut(log, f"unsound: {error}")
        except DiagError as error:
            return LeftOut(log, f"does not fit this circuit: {error}")
        except (AttributeError, TypeError, ValueError):
            return LeftOut(log, "unsound: its fields are not those of a case")

    def _case(self, case: CaseFile, identity: str) -> Case:
        assert case.closed is not None
        truth = tuple(sorted(set(case.closed.causes)))
        nodes = {self.circuit.observable(f.name, f.point).node for f in case.complaint}
        return Case(
            identity,
            truth,
            tuple(ref for ref in truth if self._arose(ref, truth, case)),
            tuple(sorted(nodes)),
            tuple(self._scenes(case, truth)),
        )

    def _arose(self, ref: str, truth: Sequence[str], case: CaseFile) -> bool:
        promoted = any(self.modes[o].record.promotes.get(ref, 1.0) > 1.0 for o in truth)
        raised = {
            name
            for event in case.fired
            if (rule := self.rules.get(event.rule))
            for name in rule.raises
        }
        return not promoted and self.modes[ref].component not in raised.union(case.head.worked_on)

    def _mute(self, case: CaseFile) -> set[int]:
        """Findings that were doubted, set aside by a rule, or chosen for how they came out."""
        mute = set(case.trust)
        if case.proof is not None:
            mute |= _takes(case, key_of(case.proof), len(case.rectified))
        for event in case.fired:
            rule = self.rules.get(event.rule)
            if rule and rule.finding:
                done = sum(r.number < event.number for r in case.rectified)
                takes = _takes(case, rule.finding, done)
                mute |= {number for number in takes if number < event.number}
        return mute

    def _scenes(self, case: CaseFile, truth: Sequence[str]) -> Iterator[Scene]:
        spans = {ref: self._span(case, ref) for ref in truth}
        seen: dict[tuple[str, tuple[str, ...]], dict[str, tuple[Found, Observable]]] = {}
        present: dict[int, tuple[str, ...]] = {}
        mute = self._mute(case)
        for found in case.found:
            if found.number in mute:
                continue
            done = case.after[found.number]
            if any(first <= done < last for first, last in spans.values()):
                continue
            there = tuple(ref for ref in truth if done < spans[ref][0])
            observable = self.circuit.observable(found.name, found.point)
            node = self.circuit.nodes[observable.node]
            causes = tuple(ref for ref in there if ref in node.effects)
            # A repeat with the same tool on the same state is no second proof: the last counts.
            seen.setdefault((node.id, causes), {})[observable.id] = (found, observable)
            present[found.number] = there
        for (name, causes), takes in seen.items():
            yield self._scene(name, causes, takes.values(), present)

    def _span(self, case: CaseFile, ref: str) -> tuple[int, int]:
        """Rectifications done before a cause may be gone, and before it is gone for certain."""
        remedies = self.circuit.remedies
        at = [
            n
            for n, event in enumerate(case.rectified, start=1)
            if event.rectification in remedies and ref in remedies[event.rectification].restores
        ]
        return at[0], at[-1]

    def _scene(
        self,
        node: str,
        causes: tuple[str, ...],
        takes: Iterable[tuple[Found, Observable]],
        present: dict[int, tuple[str, ...]],
    ) -> Scene:
        looks: list[Look] = []
        numbers = [1.0] * len(self.circuit.nodes[node].record.states)
        for found, observable in takes:
            there = present[found.number]
            faulty = tuple(ref for ref in there if ref.split(".")[0] in observable.through)
            said = self._said(observable, found.value)
            if isinstance(said, str):
                looks.append(Look(observable.id, said, faulty, not found.complaint))
            elif not faulty:
                # A number through a failed instrument says next to nothing of the condition.
                numbers = [a * b for a, b in zip(numbers, said, strict=True)]
        return Scene(node, causes, tuple(sorted(looks)), _coarse(numbers))

    def _said(self, observable: Observable, value: str) -> str | tuple[float, ...]:
        """The outcome word, or how likely the number is in each state."""
        key = (observable.id, value)
        if key not in self._understood:
            finding = make_finding(observable, value)
            if finding.value in observable.outcomes:
                self._understood[key] = finding.value
            else:
                chances = state_likelihood(finding)
                self._understood[key] = tuple((chances / chances.max()).tolist())
        return self._understood[key]


def _takes(case: CaseFile, key: str, done: int) -> set[int]:
    """Findings of one observation after so many rectifications."""
    return {f.number for f in case.found if key_of(f) == key and case.after[f.number] == done}


def _coarse(numbers: Sequence[float]) -> tuple[float, ...]:
    """Scaled to a largest of 1 and rounded, so that like readings make like scenes."""
    top = max(max(numbers), 1e-300)
    return tuple(max(round(n / top, 3), 0.001) for n in numbers)

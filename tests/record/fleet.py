"""A fleet whose truth is known: closed logs drawn from a circuit, without the session.

Faults arise at the circuit's own rates times a factor; each changes the conditions as its
effects say, and every answer errs as its check says. A log exists only where an indication
reads abnormal; its report holds those indications, and checks drawn without looking at the
truth follow. Lines are chained here with hashlib and json alone, as the journal documents.
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

import numpy as np

from diag.circuit.model import Circuit, Observable
from diag.circuit.records import Effect

Answers = list[tuple[Observable, str]]
START = datetime(2025, 1, 6, 8, 0, tzinfo=UTC)


def write_log(path: Path, lines: Sequence[Mapping[str, Any]]) -> Path:
    """A log with a sound chain over `lines`, numbered here."""
    raw, before = b"", "0" * 64
    for number, line in enumerate(lines):
        body = {**line, "number": number, "hash_before": before}
        made = canonical({**body, "hash": digest(canonical(body))}) + b"\n"
        before = digest(made)
        raw += made
    path.write_bytes(raw)
    return path


def canonical(data: Mapping[str, Any]) -> bytes:
    return json.dumps(
        data, sort_keys=True, separators=(",", ":"), ensure_ascii=False, allow_nan=False
    ).encode()


def digest(content: bytes) -> str:
    return hashlib.sha256(content).hexdigest()


@dataclass
class Fleet:
    """Draws cases.

    Attributes:
        factors: per mode, how many times its shipped rate it really has.
        checks: per check id, its real (detects, false_alarm) where they differ.
        gives: per (mode, node), its real effect where it differs.
        asked: checks taken in each case, drawn at random.
        always: checks taken in every case.
    """

    circuit: Circuit
    rng: np.random.Generator
    factors: Mapping[str, float] = field(default_factory=dict)
    checks: Mapping[str, tuple[float, float]] = field(default_factory=dict)
    gives: Mapping[tuple[str, str], Mapping[str, float]] = field(default_factory=dict)
    asked: int = 6
    always: Sequence[str] = ()

    def __post_init__(self) -> None:
        observables = self.circuit.observables.values()
        self.indications = [o for o in observables if o.record.kind == "indication"]
        self.others = [
            o for o in observables if o.record.kind == "check" and o.id not in self.always
        ]
        self.remedy = {ref: r.id for r in self.circuit.remedies.values() for ref in r.restores}

    def faults(self, hours: float) -> list[str]:
        """Faults that arise in so many hours, in random order."""
        exposure, found = self.circuit.exposure, []
        for ref, mode in self.circuit.modes.items():
            factor, rate = self.factors.get(ref, 1.0), mode.rate
            if rate.per_million_hours is not None:
                mean = rate.per_million_hours * 1e-6 * hours
            else:
                events = exposure.events[rate.event or ""] * hours / exposure.hours
                mean = (rate.per_event or 0.0) * events
            found += [ref] * int(self.rng.poisson(mean * factor))
        self.rng.shuffle(found)
        return found

    def state(self, node: str, truth: Sequence[str]) -> int:
        """A true state: the highest level of each side, down against up."""
        found = self.circuit.nodes[node]
        states, normal = found.record.states, found.normal
        reached = [0, 0]
        for chances in (found.record.leak, *self._effects(node, truth)):
            for side, names in enumerate((states[:normal][::-1], states[normal + 1 :])):
                draw, level = self.rng.random(), 0
                for k, name in enumerate(names, start=1):
                    p = chances.get(name, 0.0)
                    level = k if 0.0 <= draw < p else level
                    draw -= p
                reached[side] = max(reached[side], level)
        return normal + reached[1] - reached[0]

    def _effects(self, node: str, truth: Sequence[str]) -> list[Mapping[str, float]]:
        effects: Mapping[str, Effect] = self.circuit.nodes[node].effects
        return [self.gives.get((r, node), effects[r].gives) for r in truth if r in effects]

    def answer(self, observable: Observable, state: int, truth: Sequence[str]) -> str:
        """What is reported of a true state."""
        node = self.circuit.nodes[observable.node]
        for ref in truth:
            mode = self.circuit.modes[ref]
            signal = mode.record.signal
            if mode.component in observable.through and signal is not None:
                top, draw = len(node.record.states) - 1, self.rng.random()
                shown = {"lowest": 0, "normal": node.normal, "highest": top}
                ways = [
                    (signal.shift_down, max(state - 1, 0)),
                    (signal.shift_up, min(state + 1, top)),
                ]
                ways += [(p, shown[word]) for word, p in signal.shows.items()]
                for p, other in ways:
                    if 0.0 <= draw < p:
                        state = other
                    draw -= p
        usual = (observable.record.detects, observable.record.false_alarm)
        detects, alarm = self.checks.get(observable.record.id, usual)
        right = observable.outcomes[observable.reports[state]]
        if right != observable.normal:
            return right if self.rng.random() < detects else observable.normal
        others = [o for o in observable.outcomes if o != observable.normal]
        return str(self.rng.choice(others)) if self.rng.random() < alarm else right

    def case(self, truth: Sequence[str]) -> tuple[Answers, Answers]:
        """The report (empty when nobody would complain) and what checks then say."""
        states: dict[str, int] = {}

        def look(observable: Observable) -> tuple[Observable, str]:
            node = observable.node
            if node not in states:
                states[node] = self.state(node, truth)
            return observable, self.answer(observable, states[node], truth)

        report = [seen for o in self.indications if (seen := look(o))[1] != o.normal]
        if not report:
            return [], []
        chosen = self.rng.choice(len(self.others), min(self.asked, len(self.others)), replace=False)
        wanted = [self.circuit.observables[name] for name in self.always]
        return report, [look(o) for o in (*wanted, *(self.others[int(i)] for i in chosen))]

    def log(self, path: Path, serial: int, truth: Sequence[str]) -> bool:
        """Writes one closed log; False when there would have been no complaint."""
        report, asked = self.case(truth)
        if not report:
            return False
        at = START + timedelta(hours=serial)
        circuit = self.circuit
        head = {
            "event": "opened", "log_format": 1, "circuit": circuit.id,
            "version": circuit.file.version, "content_hash": circuit.content_hash,
            "overlays": [], "engine": f"E{serial}", "aircraft": "", "complaint": "",
            "worked_on": [], "by": "",
        }  # fmt: skip
        lines: list[dict[str, Any]] = [head]
        lines += [{**found(o, value), "complaint": True} for o, value in report]
        lines += [{**found(o, value), "complaint": False} for o, value in asked]
        for ref in truth:
            lines.append({"event": "rectified", "rectification": self.remedy[ref], "by": ""})
        verify = circuit.observables[circuit.remedies[self.remedy[truth[0]]].record.verify]
        lines.append({**found(verify, verify.normal), "complaint": False})
        lines.append(
            {"event": "closed", "outcome": "cause_confirmed", "causes": list(truth), "by": "",
             "verification": len(lines) - 1, "not_verified_because": ""}
        )  # fmt: skip
        for minute, line in enumerate(lines):
            line["at"] = (at + timedelta(minutes=minute)).isoformat()
        write_log(path, lines)
        return True

    def logs(self, folder: Path, hours: float) -> list[Path]:
        """The logs of so many hours."""
        folder.mkdir(parents=True, exist_ok=True)
        paths = []
        for serial, ref in enumerate(self.faults(hours)):
            path = folder / f"{serial:06d}.jsonl"
            if self.log(path, serial, [ref]):
                paths.append(path)
        return paths


def found(observable: Observable, value: str) -> dict[str, Any]:
    """A finding as a line."""
    line = {"event": "found", "name": observable.record.id, "value": value, "by": ""}
    return {**line, "point": observable.point} if observable.point else line

"""What was learned, written as an overlay that a person can review and a circuit can load.

Every number carries its counts, prior and posterior in its note. The cases counted are listed
in comments at the end, so that none is counted again on top of this overlay. The circuit
itself is never touched.
"""

from __future__ import annotations

import math
import os
import re
from collections.abc import Iterable, Iterator, Sequence
from pathlib import Path
from typing import Any

from diag.circuit.model import Circuit
from diag.errors import InputError, UsageError
from diag.record.learning import Learned, Number

_PER_LINE = 5
_COUNTED = re.compile(r"^# counted:((?: [0-9a-f]{16})+)$", re.MULTILINE)


def overlay_text(learned: Learned, circuit: Circuit, name: str) -> str:
    """The overlay as YAML.

    Raises:
        UsageError: `name` is not a lower-case word with underscores.
    """
    import yaml

    if not re.fullmatch(r"[a-z][a-z0-9_]{0,59}", name):
        raise UsageError(f"{name!r} cannot name an overlay; use a lower-case word with underscores")
    body = yaml.safe_dump(overlay_data(learned, circuit, name), sort_keys=False, width=100)
    return "\n".join([*_head(learned), body.rstrip("\n"), *_counted_lines(learned.counted), ""])


def overlay_data(learned: Learned, circuit: Circuit, name: str) -> dict[str, Any]:
    """The overlay as plain data, as `load_circuit(overlays=…)` takes it."""
    data: dict[str, Any] = {"overlay": name, "circuit": circuit.id, "basis": "computed"}
    kinds = {o.record.id: f"{o.record.kind}s" for o in circuit.observables.values()}
    links: dict[tuple[str, str], list[Number]] = {}
    for number in sorted(learned.numbers, key=lambda n: (n.kind, n.name, n.item)):
        if number.kind == "link":
            ref, _, node = number.name.partition(" -> ")
            links.setdefault((ref, node), []).append(number)
            continue
        table = "rates" if number.kind == "rate" else kinds[number.name]
        entry = data.setdefault(table, {}).setdefault(number.name, {})
        entry[number.item] = _short(number.after)
        if number.item == "per_event":
            entry["event"] = circuit.modes[number.name].rate.event
        entry["note"] = "; ".join(filter(None, (entry.get("note"), number.note)))
    for (ref, node), numbers in links.items():
        data.setdefault("links", {}).setdefault(ref, {})[node] = _link(circuit, ref, node, numbers)
    return data


def _link(circuit: Circuit, ref: str, node: str, numbers: Sequence[Number]) -> dict[str, Any]:
    """The whole effect: what was learned laid over what was there."""
    gives = dict(circuit.nodes[node].effects[ref].gives)
    gives |= {number.item: number.after for number in numbers}
    # Each side of a condition is learned by itself, a record holds both in one whole.
    total = max(sum(gives.values()), 1.0)
    note = "; ".join(number.note for number in numbers)
    return {"gives": {state: _floored(p / total) for state, p in gives.items()}, "note": note}


def _floored(chance: float) -> float:
    """Nine places, never rounded up: the chances of an effect may not exceed 1 together."""
    return math.floor(chance * 1e9) / 1e9


def _short(value: float) -> float:
    """Six digits: more would be false."""
    return float(f"{value:.6g}")


def _head(learned: Learned) -> Iterator[str]:
    hours = f"{learned.hours:.6g} flying hours"
    given = "as given" if learned.hours_given else "set so that only proportions are learned"
    yield f"# Learned from {learned.cases} closed, confirmed and verified cases, {hours}, {given}."
    yield "# Review it before use; the notes give counts, prior and posterior of every number."


def _counted_lines(identities: Sequence[str]) -> Iterator[str]:
    for at in range(0, len(identities), _PER_LINE):
        row = identities[at : at + _PER_LINE]
        yield f"# counted: {' '.join(row)}"


def counted_in(overlays: Iterable[str | os.PathLike[str]]) -> set[str]:
    """Identities, shortened, of the cases that some overlays were learned from.

    Raises:
        InputError: an overlay cannot be read.
    """
    found: set[str] = set()
    for path in overlays:
        try:
            text = Path(path).read_text(encoding="utf-8")
        except (OSError, UnicodeDecodeError) as error:
            reason = getattr(error, "strerror", None) or "not UTF-8 text"
            raise InputError(f"the overlay {path} cannot be read: {reason}") from None
        for line in _COUNTED.findall(text):
            found.update(line.split())
    return found

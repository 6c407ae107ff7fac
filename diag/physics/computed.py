"""The computed links of a circuit as a file, and the comparison of such a file with itself anew."""

from __future__ import annotations

import re
from collections.abc import Iterator, Mapping

import numpy as np

from diag.circuit.model import Circuit
from diag.circuit.records import LinksFile
from diag.physics.derivation import SAMPLES, SEED, Chances, Derived

FILE = "links_computed.yaml"
TELLING = 0.01
"""Chance from which an abnormal state is written; where a kind guesses one, any is."""
_SURE = 0.999
"""Largest chance written: samples of a model never show that a state is certain."""
_CLOSE = 0.0015
"""Difference that rounding and another machine's arithmetic may make."""
_MADE_WITH = re.compile(r"^# Made with (\d+) samples, seed (\d+)\.$", re.MULTILINE)

Table = Mapping[str, Mapping[str, Mapping[str, float]]]
"""Mode reference to node id to chances of abnormal states."""


def links_table(circuit: Circuit, derived: Derived) -> dict[str, dict[str, dict[str, float]]]:
    """The chances worth writing, rounded as they are written."""
    found: dict[str, dict[str, dict[str, float]]] = {}
    for ref, nodes in derived.modes.items():
        places = {
            name: gives
            for name, known in nodes.items()
            if (gives := _gives(circuit, ref, name, known))
        }
        found[ref] = places
    return found


def _gives(circuit: Circuit, ref: str, name: str, known: Chances) -> dict[str, float]:
    record = circuit.nodes[name].record
    abnormal = {
        state: float(share)
        for state, share in zip(record.states, known.shares, strict=True)
        if state != record.normal
    }
    scale = min(1.0, _SURE / max(sum(abnormal.values()), 1e-9))
    told = {state: round(share * scale, 3) for state, share in abnormal.items()}
    guessed = _guessed(circuit, ref, name)
    if max(told.values()) < TELLING and not guessed:
        return {}
    kept = {state: share for state, share in told.items() if share}
    return kept or dict.fromkeys(guessed, 0.0)


def _guessed(circuit: Circuit, ref: str, name: str) -> tuple[str, ...]:
    """The abnormal states that the kind of the component guesses for this condition."""
    shows = circuit.modes[ref].record.shows
    effect = shows.get(name) or shows.get(name.partition("@")[0])
    return tuple(effect.gives) if effect else ()


def links_text(circuit: Circuit, derived: Derived) -> str:
    """The file of computed links; the same derivation always gives the same text."""
    lines = [
        f"# Written by `diag circuit derive {circuit.id}` from physics.yaml; change that instead.",
        f"# Made with {derived.samples} samples, seed {derived.seed}.",
        *_healthy_lines(circuit, derived),
        "basis: computed",
        "links:",
    ]
    for ref, places in links_table(circuit, derived).items():
        if places:
            lines.append(f"  {ref}:")
        for name, gives in places.items():
            chances = ", ".join(f"{state}: {share:g}" for state, share in gives.items())
            error = float(np.max(derived.modes[ref][name].errors))
            note = f'note: "{derived.samples} samples, standard error {error:.1g}"'
            lines.append(f"    {name}: {{{chances}, {note}}}")
    return "\n".join(lines) + "\n"


def _healthy_lines(circuit: Circuit, derived: Derived) -> Iterator[str]:
    """Where a sound engine does not read normal, as comments."""
    for name, known in derived.healthy.items():
        abnormal = 1.0 - float(known.shares[circuit.nodes[name].normal])
        if abnormal:
            yield f"# A sound engine is not normal on {name} in {abnormal:.2g} of the samples."


def made_with(text: str) -> tuple[int, int]:
    """Samples and seed of a stored file, or the usual ones."""
    found = _MADE_WITH.search(text)
    return (int(found[1]), int(found[2])) if found else (SAMPLES, SEED)


def differences(stored: LinksFile | None, circuit: Circuit, derived: Derived) -> list[str]:
    """What in the stored links no longer follows from the circuit; empty when all does."""
    fresh = links_table(circuit, derived)
    kept: dict[str, dict[str, dict[str, float]]] = {}
    for ref, places in (stored.links if stored else {}).items():
        kept[ref] = {name: dict(effect.gives) for name, effect in places.items()}
    return [*_changed(kept, fresh), *_unwritten(kept, fresh)]


def _changed(kept: Table, fresh: Table) -> Iterator[str]:
    """Chances that stand in the file and differ from what the circuit gives."""
    for ref, places in kept.items():
        for name, gives in places.items():
            now = fresh.get(ref, {}).get(name, {})
            for state in dict.fromkeys((*gives, *now)):
                was, new = gives.get(state), now.get(state, 0.0)
                if abs((was or 0.0) - new) > _CLOSE:
                    yield f"{ref} {name} {state}: {was or 0.0:g} stored, {new:g} computed"


def _unwritten(kept: Table, fresh: Table) -> Iterator[str]:
    """Chances that the circuit gives and the file lacks."""
    for ref, places in fresh.items():
        for name, gives in places.items():
            if name not in kept.get(ref, {}) and max(gives.values()) > TELLING + _CLOSE:
                shown = ", ".join(f"{state} {share:g}" for state, share in gives.items())
                yield f"{ref} {name}: not stored, {shown} computed"
